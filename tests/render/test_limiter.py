"""The limiter keeps the ceiling as libebur128 reads it, works nowhere else, and the make-up gain meets the target."""

from __future__ import annotations

import math

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from loudness_reference import libebur128, noise_bursts, speech
from parity import blocks

from leveller.measure.loudness import LoudnessMeter
from leveller.measure.peaks import TruePeakMeter, peak_cell_frames
from leveller.render import limiter
from leveller.settings import Limiter

RATES_HZ = (44_100, 48_000, 96_000)
CEILING_DBTP = -1.0
OVER_DB = 0.001  # a choice of ours: a tenth of the last digit in which peaks are printed
TARGET_BAND_LU = 0.05  # prediction against libebur128's reading; half of what a delivery may miss its target by
DEFAULT = Limiter()
CELL_S = 0.001


def measured(signal: np.ndarray, rate_hz: int) -> tuple[np.ndarray, np.ndarray]:
    """10 ms cells and peak cells."""
    channels = 1 if signal.ndim == 1 else signal.shape[1]
    loudness, peaks = LoudnessMeter(rate_hz, channels), TruePeakMeter(rate_hz, channels, frames=len(signal))
    loudness.push(signal)
    peaks.push(signal)
    return loudness.cells(), peaks.cells()


def nodes_of(
    peak_cells: np.ndarray, make_up_db: float = 0.0, how: Limiter = DEFAULT, cell_s: float = CELL_S
) -> np.ndarray:
    return limiter.limiter_nodes_db(
        peak_cells, make_up_db=make_up_db, ceiling_dbtp=CEILING_DBTP, settings=how, cell_s=cell_s)


def limited(
    signal: np.ndarray, rate_hz: int, make_up_db: float, how: Limiter = DEFAULT
) -> tuple[np.ndarray, np.ndarray]:
    """The limited signal and the limiter's nodes."""
    signal = np.asarray(signal, np.float32)
    width = peak_cell_frames(rate_hz)
    nodes = nodes_of(measured(signal, rate_hz)[1], make_up_db, how, width / rate_hz)
    out = limiter.apply_nodes(signal, nodes, first_frame=0, cell_frames=width, make_up_db=make_up_db)
    return out, nodes


def hot_signals(rate_hz: int, seed: int) -> dict[str, np.ndarray]:
    """2.5 s each of what is hard on a limiter, at levels that jump by up to 40 dB every 20 ms."""
    rng = np.random.default_rng(seed)
    n = rate_hz * 5 // 2
    at = np.arange(n)
    level = np.repeat(10 ** (rng.uniform(-30, 10, n // (rate_hz // 50) + 1) / 20), rate_hz // 50)[:n]
    return {
        "noise bursts": 0.3 * level * rng.standard_normal(n),
        "square": level * np.sign(np.sin(2 * np.pi * rng.uniform(50, 3000) * at / rate_hz + 0.1)),
        "quarter of the rate, 45 degrees": 1.41 * level * np.sin(np.pi / 2 * at + np.pi / 4),
        "near half the rate": level * np.sin(0.98 * np.pi * at + 0.3),
        "clicks": 3 * (rng.random(n) < 0.003) * rng.standard_normal(n),
    }


# ---- the ceiling ------------------------------------------------------------------------------------------------

@pytest.mark.parametrize("how", [DEFAULT, Limiter(lookahead_s=0.001, release_s=0.01), Limiter(lookahead_s=0.02)],
                         ids=["default", "shortest", "longest"])
@pytest.mark.parametrize("rate_hz", [8000, *RATES_HZ])
def test_ceiling_holds(rate_hz: int, how: Limiter) -> None:
    """libebur128 reads no hot signal over the ceiling by more than 0.001 dB, nor much under it."""
    for seed in (1, 2):
        for name, signal in hot_signals(rate_hz, seed).items():
            out, nodes = limited(signal, rate_hz, 9.0, how)
            assert nodes.min() < -6.0, name
            over = libebur128(out, rate_hz).true_peak_dbtp - CEILING_DBTP
            assert -0.3 < over <= OVER_DB, (name, seed)


@pytest.mark.parametrize("level_db", [-20.0, -3.0, 0.0, 6.0, 12.0])
def test_static_curve(level_db: float) -> None:
    """A steady tone comes out as the limiter curve says (JAES 60(6), 2012, R to infinity): y = min(x, T)."""
    tone = 10 ** (level_db / 20) * np.sin(2 * np.pi * 1000 / 48_000 * np.arange(48_000) + 0.05)
    out, _ = limited(tone, 48_000, 0.0)
    below = limiter.CEILING_MARGIN_DB_S / DEFAULT.lookahead_s
    assert libebur128(out, 48_000).true_peak_dbtp == pytest.approx(min(level_db, CEILING_DBTP), abs=below + 0.002)


# ---- the gain ---------------------------------------------------------------------------------------------------

peak_lists = st.lists(st.one_of(st.just(0.0), st.floats(0.0, 0.8), st.floats(0.8, 8.0)), max_size=300)


@settings(max_examples=80, deadline=None)
@given(peak_lists, st.floats(-12, 20), st.floats(0.001, 0.02), st.floats(0.01, 1.0))
def test_gain_covers_every_cell(peaks: list[float], make_up_db: float, lookahead_s: float, release_s: float) -> None:
    """Gain is never positive, never too little for a cell or its neighbours, and 0 where no peak is near."""
    cells = np.array(peaks, np.float32)
    how = Limiter(lookahead_s=lookahead_s, release_s=release_s)
    nodes = nodes_of(cells, make_up_db, how)
    assert nodes.shape == (len(peaks) + 1,)
    assert (nodes <= 0.0).all()
    allowed = 10 ** ((CEILING_DBTP - make_up_db) / 20)
    for index in np.flatnonzero(cells > allowed):
        need_db = 20 * math.log10(cells[index] / allowed)
        assert nodes[max(0, index - 1) : index + 3].max() <= -need_db + 1e-5
    if not (cells > allowed * 10 ** (-limiter.CEILING_MARGIN_DB_S / lookahead_s / 20)).any():
        assert not nodes.any()


def test_one_peak_is_covered_with_its_neighbours() -> None:
    """A peak's two nodes and one more on either side have its whole reduction; nothing happens a look-ahead earlier."""
    cells = np.zeros(1000, np.float32)
    cells[500] = 10 ** (5.0 / 20)
    nodes = nodes_of(cells)
    foot = -6.0 - limiter.CEILING_MARGIN_DB_S / DEFAULT.lookahead_s
    assert nodes[499:503] == pytest.approx([foot] * 4, abs=1e-5)
    assert nodes[503] > foot
    assert not nodes[:494].any()


def test_attack_is_a_ramp() -> None:
    """Before a peak the gain falls by equal steps in dB over the look-ahead, and starts no earlier."""
    cells = np.zeros(200, np.float32)
    cells[100] = 4.0
    nodes = nodes_of(cells).astype(np.float64)
    steps = np.diff(nodes[:100])
    falling = np.flatnonzero(steps < -1e-6)
    assert len(falling) == 6  # 5 ms of look-ahead is five cells, and its mean spans six nodes
    assert steps[falling] == pytest.approx(np.full(6, nodes[99] / 6), abs=1e-5)


def test_release_is_exponential_in_db() -> None:
    """After a peak the reduction in dB falls to 1/e within the release time, and ends."""
    cells = np.zeros(3000, np.float32)
    cells[100] = 4.0
    nodes = nodes_of(cells).astype(np.float64)
    assert nodes[400] / nodes[300] == pytest.approx(math.exp(-1), rel=1e-3)
    assert not nodes[1300:].any()


def test_long_programmes_are_worked_in_pieces_without_seams() -> None:
    """Gain is the same wherever the inner pieces of work fall: shifting a programme shifts its gain."""
    rng = np.random.default_rng(5)
    cells = (rng.random(20_000) ** 8 * 3).astype(np.float32)
    plain = nodes_of(cells)
    for shift in (1, 1000, 4095):
        moved = nodes_of(np.concatenate([np.zeros(shift, np.float32), cells]))[shift:]
        assert moved == pytest.approx(plain, abs=1e-5)
    assert (plain < 0).mean() > 0.2


def test_no_reduction_where_none_is_needed() -> None:
    """Speech under the ceiling passes as it is, times the make-up gain."""
    signal = speech(48_000)
    out, nodes = limited(signal, 48_000, 4.0)
    assert not nodes.any()
    assert np.array_equal(out, signal * np.float32(10 ** (4.0 / 20)))


def test_channels_are_linked() -> None:
    """A peak on one channel turns both down alike, so the picture does not move."""
    signal = noise_bursts(48_000, 2, 2)
    signal[:, 1] *= np.float32(0.125)
    out, nodes = limited(signal, 48_000, 12.0)
    assert nodes.min() < -3.0
    assert np.allclose(out[:, 1] * signal[:, 0], out[:, 0] * signal[:, 1], rtol=1e-5, atol=1e-12)


@pytest.mark.parametrize("channels", [None, 2])
@pytest.mark.parametrize("rate_hz", [44_100, 48_000])
def test_block_size_never_changes_the_sound(rate_hz: int, channels: int | None) -> None:
    """Blocks of any size give the same bits, at rest and at work."""
    signal = noise_bursts(rate_hz, 3.03, channels or 1)
    signal[rate_hz // 2 : rate_hz * 5 // 2] *= np.float32(0.01)
    signal = signal if channels else signal[:, 0]
    whole, nodes = limited(signal, rate_hz, 12.0)
    width = peak_cell_frames(rate_hz)
    assert nodes.any()
    assert not nodes.all()
    for sizes in (7, 997, 48_000, [1, 20_000, 17]):
        pieces, at = [], 0
        for block in blocks(signal, sizes):
            pieces.append(limiter.apply_nodes(block, nodes, first_frame=at, cell_frames=width, make_up_db=12.0))
            at += len(block)
        assert np.concatenate(pieces).tobytes() == whole.tobytes()
    assert whole.dtype == np.float32


def test_gain_between_nodes_is_linear() -> None:
    """Between two nodes the gain itself is a straight line; after the last node it holds."""
    nodes = np.array([0.0, 20 * math.log10(0.5), 20 * math.log10(0.25)], np.float32)
    out = limiter.apply_nodes(np.ones(14, np.float32), nodes, first_frame=0, cell_frames=4, make_up_db=0.0)
    expected = [1, 0.875, 0.75, 0.625, 0.5, 0.4375, 0.375, 0.3125] + [0.25] * 6
    assert out == pytest.approx(expected, abs=1e-6)
    assert limiter.apply_nodes(out[:0], nodes, first_frame=3, cell_frames=4, make_up_db=0.0).shape == (0,)


# ---- make-up gain -----------------------------------------------------------------------------------------------

def made_up(signal: np.ndarray, rate_hz: int, target_lufs: float) -> tuple[limiter.MakeUp, np.ndarray]:
    cells, peak_cells = measured(signal, rate_hz)
    width = peak_cell_frames(rate_hz)
    found = limiter.find_make_up(
        cells, peak_cells, target_lufs=target_lufs, ceiling_dbtp=CEILING_DBTP, settings=DEFAULT, cell_s=width / rate_hz)
    out = limiter.apply_nodes(
        signal, found.nodes_db, first_frame=0, cell_frames=width, make_up_db=found.make_up_db)
    return found, out


@pytest.mark.parametrize("rate_hz", RATES_HZ)
@pytest.mark.parametrize(("names", "target_lufs", "least_db", "most_db"), [
    (("woman_en", "man_it"), -23.0, 0.0, 0.0),
    (("woman_en", "man_it"), -14.0, 0.5, 6.5),
    (("man_reader", "woman_fr"), -17.5, 0.5, 6.5),
    (("synthetic_low",), -17.5, 2.0, 6.5),
    (("man_commands",), -17.0, 2.0, 6.5),
])
def test_target_is_met(
    names: tuple[str, ...], target_lufs: float, least_db: float, most_db: float, rate_hz: int
) -> None:
    """With up to 6 dB of limiting, libebur128 reads the target within 0.05 LU and nothing over the ceiling."""
    found, out = made_up(speech(rate_hz, names), rate_hz, target_lufs)
    reading = libebur128(out, rate_hz)
    assert found.reason == ""
    assert found.expected_lufs == pytest.approx(target_lufs, abs=limiter.WITHIN_LU)
    assert reading.integrated_lufs == pytest.approx(target_lufs, abs=TARGET_BAND_LU)
    assert reading.true_peak_dbtp <= CEILING_DBTP + OVER_DB
    assert least_db <= -found.nodes_db.min() <= most_db


def test_silence_has_no_make_up() -> None:
    """A silent programme keeps its level, and the reason says so."""
    found, out = made_up(np.zeros(48_000 * 2, np.float32), 48_000, -19.0)
    assert (found.make_up_db, found.expected_lufs) == (0.0, -math.inf)
    assert found.reason == "no sound over the -70 LUFS gate: -19 LUFS is more than 40 dB away"
    assert not found.nodes_db.any()
    assert not out.any()


def test_near_silence_keeps_its_level() -> None:
    """A programme 46 dB under its target is not amplified."""
    found, _ = made_up((0.0008 * noise_bursts(48_000, 4)[:, 0] * 5).astype(np.float32), 48_000, -19.0)
    assert found.make_up_db == 0.0
    assert found.reason.startswith("only -6")
    assert found.reason.endswith("LUFS: -19 LUFS is more than 40 dB away")


def test_peaks_can_keep_the_target_out_of_reach() -> None:
    """Clicks in near silence cannot be made loud under the ceiling: the reason says so, and the ceiling holds."""
    signal = np.zeros(48_000 * 5, np.float32)
    signal[::4800] = 0.5
    found, out = made_up(signal, 48_000, -10.0)
    assert found.reason.startswith("peaks: under -1 dBTP the mix does not reach -10 LUFS")
    assert found.expected_lufs < -10.0
    assert libebur128(out, 48_000).true_peak_dbtp <= CEILING_DBTP + OVER_DB


@settings(max_examples=25, deadline=None)
@given(st.integers(0, 2**31), st.floats(-30, -14))
def test_make_up_meets_its_own_prediction(seed: int, target_lufs: float) -> None:
    """Whatever the cells, the answer is within 0.002 LU of the target or says why not; a limiter at rest adds none."""
    rng = np.random.default_rng(seed)
    cells = 10 ** rng.uniform(-4, -2.5, 300)
    peak_cells = np.sqrt(np.repeat(cells, 10)) * rng.uniform(1.5, 6, 3000)
    found = limiter.find_make_up(
        cells, peak_cells, target_lufs=target_lufs, ceiling_dbtp=CEILING_DBTP, settings=DEFAULT, cell_s=CELL_S)
    assert found.reason or found.expected_lufs == pytest.approx(target_lufs, abs=limiter.WITHIN_LU)
    if not found.nodes_db.any():
        plain = limiter.integrated_lufs(cells) + found.make_up_db
        assert plain == pytest.approx(found.expected_lufs, abs=1e-9)


@pytest.mark.parametrize("rate_hz", [11_025, 44_100, 48_000])
def test_limited_cells_are_those_of_the_limited_sound(rate_hz: int) -> None:
    """Cells times the gain's mean square are what a meter reads off the limited signal, within 0.02 LU overall."""
    signal = noise_bursts(rate_hz, 6)[:, 0]
    cells, peak_cells = measured(signal, rate_hz)
    width = peak_cell_frames(rate_hz)
    nodes = nodes_of(peak_cells, 8.0, cell_s=width / rate_hz)
    out = limiter.apply_nodes(signal, nodes, first_frame=0, cell_frames=width, make_up_db=8.0)
    predicted = limiter.limited_cells(cells, nodes, cell_s=width / rate_hz, make_up_db=8.0)
    actual, _ = measured(out, rate_hz)
    assert predicted.shape == cells.shape
    assert limiter.integrated_lufs(predicted) == pytest.approx(limiter.integrated_lufs(actual), abs=0.02)
    assert np.median(np.abs(10 * np.log10(predicted / actual))) < 0.1


def test_limited_cells_take_the_mean_square_of_a_ramp() -> None:
    """One 1 ms ramp from 1 to 1/2 in a 10 ms cell, then 1/2 held: mean squares 7/12 and 1/4, worked by hand."""
    half_db = 20 * math.log10(0.5)
    nodes = np.array([0.0] * 10 + [half_db] * 21, np.float32)
    cells = limiter.limited_cells(np.array([1.0, 1.0, 4.0]), nodes, cell_s=0.001)
    assert cells == pytest.approx([(9 + 7 / 12) / 10, 0.25, 1.0], rel=1e-6)


# ---- summary ----------------------------------------------------------------------------------------------------

def test_summary() -> None:
    """The most reduction, its time, the time at work and the heavy share are counted from the nodes."""
    nodes = np.zeros(1000, np.float32)
    nodes[100:200], nodes[150], nodes[500:600] = -2.0, -7.0, -4.0
    assert limiter.summarise(nodes, cell_s=0.001) == limiter.LimiterSummary(7.0, 0.15, 0.2, 0.101)
    at_rest = limiter.LimiterSummary(0.0, 0.0, 0.0, 0.0)
    assert limiter.summarise(np.zeros(1, np.float32), cell_s=0.001) == at_rest
