"""leveller.spots: what stands out in a finished cut, with the reason in words, the strongest first."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
import soundfile as sf

from leveller import pipeline
from leveller.spots import MOST_OF_A_KIND, Spot, spots_to_hear, strongest

RATE_HZ = 16_000
SECONDS = 60
EDGE_S = 0.1  # the limiter's release, the blocks of a hop
WINDOW_S = 3.0  # of short-term loudness, EBU Tech 3341


def noise(*, seed: int = 1, level: float = 0.05) -> np.ndarray:
    """A minute of even noise, which has no peak to limit."""
    return np.clip(np.random.default_rng(seed).normal(size=SECONDS * RATE_HZ), -3, 3) * level


def part(signal: np.ndarray, from_s: float, to_s: float) -> np.ndarray:
    """A stretch of it, to write into."""
    return signal[round(from_s * RATE_HZ) : round(to_s * RATE_HZ)]


def found(tmp_path: Path, signal: np.ndarray, *, subtype: str = "PCM_24", delivery: str = "r128") -> tuple[Spot, ...]:
    """The spots of a cut."""
    sf.write(tmp_path / "cut.wav", signal, RATE_HZ, subtype=subtype)
    return spots_to_hear(pipeline.finish(tmp_path / "cut.wav", out=tmp_path / "f", delivery=delivery))


def test_an_even_cut_has_none(tmp_path: Path) -> None:
    """Where nothing stands out nothing is listed."""
    assert found(tmp_path, noise()) == ()


def test_a_long_silence(tmp_path: Path) -> None:
    """Four seconds of nothing are one silence of their length, and not also a quiet stretch; one second is none."""
    signal = noise()
    part(signal, 20, 24)[:] = 0
    part(signal, 40, 41)[:] = 0
    (spot,) = found(tmp_path, signal)
    assert (spot.kind, spot.track, spot.from_s, spot.to_s) == (
        "silence", "", pytest.approx(20, abs=EDGE_S), pytest.approx(24, abs=EDGE_S))
    assert spot.reason == f"under -63 LUFS for {spot.to_s - spot.from_s:.1f} s"
    assert spot.sentence == f"mix: silence, {spot.reason}"


@pytest.mark.parametrize(("gain_db", "kind", "words"), [(7.0, "loud", "over"), (-12.0, "quiet", "under")])
def test_a_stretch_off_the_target(tmp_path: Path, gain_db: float, kind: str, words: str) -> None:
    """Six seconds far over or under the target are one place that lies over them, with how far in words."""
    signal = noise()
    part(signal, 30, 36)[:] *= 10 ** (gain_db / 20)
    (spot,) = found(tmp_path, signal)
    assert (spot.kind, spot.track) == (kind, "")
    assert 30 - WINDOW_S < spot.from_s < 31
    assert 35 < spot.to_s < 36 + WINDOW_S
    off_lu = float(spot.reason.split("up to ")[1].split(" LU")[0])
    assert f"LU {words} the target" in spot.reason
    assert off_lu == pytest.approx(abs(gain_db), abs=3)  # the stretch itself moves the programme's loudness


def test_a_limiter_at_work(tmp_path: Path) -> None:
    """A knock that is limited by more than 3 dB is named with how much."""
    signal = noise()
    part(signal, 12, 12.02)[:] = 0.9
    spots = found(tmp_path, signal, delivery="podcast-mono")
    assert [(spot.kind, spot.track) for spot in spots] == [("limiter", "")]
    assert 11.9 < spots[0].from_s < 12 < spots[0].to_s < 12.6
    assert float(spots[0].reason.split("up to ")[1].split(" dB")[0]) > 3


def test_full_scale_of_a_given_file(tmp_path: Path) -> None:
    """Clipping is named with file and duration; floats over full scale have lost nothing and are no place to hear."""
    signal = noise()
    part(signal, 5, 5.05)[:] = 1.0
    (spot, *_) = [spot for spot in found(tmp_path, signal) if spot.kind == "full scale"]
    assert (spot.track, spot.from_s) == ("cut", pytest.approx(5.0, abs=0.011))
    assert spot.reason == "maybe clipped, for 0.05 s in all"
    assert spot.sentence == f"cut: full scale, {spot.reason}"
    (tmp_path / "float").mkdir()
    part(signal, 5, 5.05)[:] = 1.5
    assert not [spot for spot in found(tmp_path / "float", signal, subtype="FLOAT") if spot.kind == "full scale"]


def test_a_silent_cut(tmp_path: Path) -> None:
    """Silence throughout is one silence, and no quiet stretch."""
    spots = found(tmp_path, np.zeros(SECONDS * RATE_HZ))
    assert [(spot.kind, spot.from_s, spot.to_s) for spot in spots] == [("silence", 0.0, SECONDS)]


def test_strongest_first_and_so_many_of_a_kind() -> None:
    """The page lists a few of each kind, in the same order."""
    spots = [Spot(i, i + 1, kind, "", "", 9 - i / 10) for i in range(12) for kind in ("loud", "quiet")]
    kept = strongest(spots)
    assert kept == tuple(spots[: 2 * MOST_OF_A_KIND])


def test_order_is_by_weight(tmp_path: Path) -> None:
    """What passes its limit by most comes first."""
    signal = noise()
    part(signal, 10, 14)[:] = 0
    part(signal, 30, 40)[:] = 0
    spots = found(tmp_path, signal)
    assert [round(spot.from_s) for spot in spots if spot.kind == "silence"] == [30, 10]
    assert [spot.weight for spot in spots] == sorted((spot.weight for spot in spots), reverse=True)
