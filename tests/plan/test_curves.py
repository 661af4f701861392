"""leveller.plan.curves: static curves and the smoother, against the published formulas."""

from __future__ import annotations

import math

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from leveller.plan.curves import compressor_gain_db, expander_gain_db, one_pole

EXACT_DB = 1e-9  # float64 of levels up to 100 dB
COMMON_PRACTICE = (  # common practice, no source: what a ratio does to a level over the threshold
    (2.0, 4.0, 2.0), (3.0, 6.0, 2.0), (1.0, 7.0, 7.0), (math.inf, 12.0, 0.0))
GONE = 1 - 1 / math.e  # of a step after one time constant: JAES 60(6), 2012, section 1.3

LEVEL = st.floats(-80, 20)
THRESHOLD = st.floats(-40, 10)
RATIO = st.floats(1, 50)
KNEE = st.floats(0.01, 24)


def published_compressor(x: float, t: float, r: float, w: float) -> float:
    """Output level of Giannoulis, Massberg, Reiss, JAES 60(6), 2012, equation 4."""
    if 2 * (x - t) < -w:
        return x
    if 2 * abs(x - t) <= w:
        return x + (1 / r - 1) * (x - t + w / 2) ** 2 / (2 * w)
    return t + (x - t) / r


def mirrored_expander(x: float, t: float, r: float, w: float) -> float:
    """The same curve mirrored: below the threshold a fall of 1 dB becomes one of r dB; section 1.1 of the same."""
    if 2 * (x - t) > w:
        return x
    if 2 * abs(x - t) <= w:
        return x + (1 - r) * (x - t - w / 2) ** 2 / (2 * w)
    return t + (x - t) * r


@given(x=LEVEL, t=THRESHOLD, r=RATIO, w=KNEE)
@settings(max_examples=300, deadline=None, derandomize=True)
def test_the_compressor_is_the_published_one(x: float, t: float, r: float, w: float) -> None:
    """Below, inside and above the knee: input plus gain is the published output."""
    found = x + compressor_gain_db(np.array([x]), threshold_db=t, ratio=r, knee_db=w)[0]
    assert found == pytest.approx(published_compressor(x, t, r, w), abs=EXACT_DB)


@given(t=THRESHOLD, r=RATIO, w=KNEE, part=st.floats(-0.5, 0.5))
@settings(max_examples=100, deadline=None, derandomize=True)
def test_inside_the_knee_of_both_curves(t: float, r: float, w: float, part: float) -> None:
    """Points drawn inside the knee alone lie on the published parabola, of compressor and expander."""
    x = t + part * w
    found = compressor_gain_db(np.array([x]), threshold_db=t, ratio=r, knee_db=w)[0]
    assert x + found == pytest.approx(published_compressor(x, t, r, w), abs=EXACT_DB)
    found = expander_gain_db(np.array([x]), threshold_db=t, ratio=r, knee_db=w, range_db=1e6)[0]
    assert x + found == pytest.approx(mirrored_expander(x, t, r, w), abs=1e-7)


@given(t=THRESHOLD, r=RATIO, w=KNEE)
@settings(max_examples=100, deadline=None, derandomize=True)
def test_at_the_threshold_the_knee_takes_an_eighth(t: float, r: float, w: float) -> None:
    """Gain reduction at T is (1 - 1/R) W / 8: the published formula at x = T."""
    found = compressor_gain_db(np.array([t]), threshold_db=t, ratio=r, knee_db=w)[0]
    assert -found == pytest.approx((1 - 1 / r) * w / 8, abs=EXACT_DB)


@pytest.mark.parametrize(("ratio", "over_db", "left_db"), COMMON_PRACTICE)
def test_ratios_do_what_their_names_say(ratio: float, over_db: float, left_db: float) -> None:
    """2:1 turns 4 dB over into 2 over, 3:1 turns 6 into 2, 1:1 does nothing, a limiter leaves nothing over."""
    gain = compressor_gain_db(np.array([-20 + over_db]), threshold_db=-20, ratio=ratio, knee_db=0)[0]
    assert over_db + gain == pytest.approx(left_db, abs=EXACT_DB)


@given(x=LEVEL, t=THRESHOLD, w=st.just(0.0) | KNEE)
@settings(max_examples=100, deadline=None, derandomize=True)
def test_a_limiter_is_the_limit_of_growing_ratios(x: float, t: float, w: float) -> None:
    """An infinite ratio is the published curve with 1/R = 0; the output never passes the threshold."""
    gain = compressor_gain_db(np.array([x]), threshold_db=t, ratio=math.inf, knee_db=w)[0]
    assert x + gain <= t + EXACT_DB
    near = compressor_gain_db(np.array([x]), threshold_db=t, ratio=1e12, knee_db=w)[0]
    assert gain == pytest.approx(near, abs=1e-7)


@given(x=LEVEL, t=THRESHOLD, r=RATIO, w=KNEE, most=st.floats(0, 60))
@settings(max_examples=300, deadline=None, derandomize=True)
def test_the_expander_is_mirrored_down_to_its_range(x: float, t: float, r: float, w: float, most: float) -> None:
    """Input plus gain is the mirrored curve, and the gain ends at -range."""
    gain = expander_gain_db(np.array([x]), threshold_db=t, ratio=r, knee_db=w, range_db=most)[0]
    assert gain == pytest.approx(max(mirrored_expander(x, t, r, w) - x, -most), abs=1e-7)


@given(t=THRESHOLD, r=RATIO, w=st.just(0.0) | KNEE)
@settings(max_examples=50, deadline=None, derandomize=True)
def test_curves_are_continuous_and_never_rise(t: float, r: float, w: float) -> None:
    """Gains are never above 0, a compressor's falls and an expander's rises with level, without a jump."""
    level = np.linspace(t - 30, t + 30, 6001)
    down = compressor_gain_db(level, threshold_db=t, ratio=r, knee_db=w)
    up = expander_gain_db(level, threshold_db=t, ratio=r, knee_db=w, range_db=18)
    assert max(down.max(), up.max()) <= 0
    assert (np.diff(down) <= EXACT_DB).all()
    assert (np.diff(up) >= -EXACT_DB).all()
    assert max(np.abs(np.diff(down)).max(), np.abs(np.diff(up)).max()) <= r * 0.01 + EXACT_DB


@pytest.mark.parametrize("time_s", [0.01, 0.15, 2.0])
def test_a_time_constant_is_1_less_1_over_e(time_s: float) -> None:
    """After `time_s` of steps a one-pole smoother has gone 1 - 1/e of the way (JAES 60(6), 2012)."""
    step_s = time_s / 50
    state = 0.0
    for _ in range(50):
        state = 1 + one_pole(time_s, step_s) * (state - 1)
    assert state == pytest.approx(GONE, abs=1e-9)


def test_no_time_is_at_once() -> None:
    """A time constant of 0 follows without delay."""
    assert one_pole(0.0, 0.01) == 0.0
