"""leveller.render.remeter: the reading of a limited programme, as if all of it had been measured again."""

from __future__ import annotations

import numpy as np
import pytest

from leveller.measure.loudness import LoudnessMeter
from leveller.measure.peaks import TruePeakMeter, peak_cell_frames
from leveller.render.limiter import apply_nodes, find_make_up
from leveller.render.remeter import MEMORY_CELLS, Remeter, Unlimited, touched_hops
from leveller.settings import Limiter

FLOAT32_DB = float(20 * np.log10(1 + 4 * np.finfo(np.float32).eps))
SECONDS = 7.3


def clicking(rate_hz: int, channels: int, *, clicks_s: tuple[float, ...]) -> np.ndarray:
    """Noise with loud clicks at some times, so that the limiter works there and nowhere else."""
    random = np.random.default_rng(5)
    signal = random.normal(0, 0.02, (round(SECONDS * rate_hz), channels))
    for at_s in clicks_s:
        signal[round(at_s * rate_hz)] += 0.9
    return (signal[:, 0] if channels == 1 else signal).astype(np.float32)


@pytest.mark.parametrize("rate_hz", [8000, 11025, 44100, 48000, 96000])
@pytest.mark.parametrize("channels", [1, 2])
@pytest.mark.parametrize("clicks_s", [(), (0.0, 7.29), (0.02, 2.999, 3.0, 5.5)])
def test_reads_what_full_meters_read(rate_hz: int, channels: int, clicks_s: tuple[float, ...]) -> None:
    """Loudness cells and true peak are those of meters that hear every delivered sample, at any block size."""
    signal = clicking(rate_hz, channels, clicks_s=clicks_s)
    loudness, peaks = LoudnessMeter(rate_hz, channels), TruePeakMeter(rate_hz, channels, frames=len(signal))
    loudness.push(signal)
    peaks.push(signal)
    width = peak_cell_frames(rate_hz)
    before = Unlimited(loudness.cells(), peaks.cells())
    make_up = find_make_up(before.cells, before.peak_cells, target_lufs=-20.0, ceiling_dbtp=-1.0, settings=Limiter(),
                           cell_s=width / rate_hz)
    assert bool(make_up.nodes_db.any()) == bool(clicks_s)
    out = apply_nodes(signal, make_up.nodes_db, first_frame=0, cell_frames=width, make_up_db=make_up.make_up_db)
    heard, seen = LoudnessMeter(rate_hz, channels), TruePeakMeter(rate_hz, channels, frames=len(signal))
    heard.push(out)
    seen.push(out)
    for block in (997, rate_hz * 2, len(out)):
        meter = Remeter(before, make_up.nodes_db, make_up.make_up_db, rate_hz, channels)
        for start in range(0, len(out), block):
            meter.push(out[start : start + block])
        reading = meter.loudness()
        np.testing.assert_allclose(reading.cells, heard.cells(), rtol=2e-6)
        assert reading.integrated_lufs == pytest.approx(heard.result().integrated_lufs, abs=1e-5)
        peak_dbtp, peak_s = meter.true_peak()
        assert peak_dbtp == pytest.approx(seen.result().true_peak_dbtp, abs=FLOAT32_DB)
        assert peak_s == seen.result().true_peak_s


def test_silence_reads_silence() -> None:
    """A programme of zeros has no peak and no loudness."""
    meter = Remeter(Unlimited(np.zeros(100), np.zeros(1000, np.float32)), np.zeros(1001, np.float32), 0.0, 48_000, 1)
    meter.push(np.zeros(48_000, np.float32))
    assert meter.loudness().integrated_lufs == -np.inf
    assert meter.true_peak() == (-np.inf, 0.0)


def test_only_the_limiters_surroundings_are_touched() -> None:
    """One node at work touches its hops and those that the K-weighting remembers it for."""
    nodes = np.zeros(1001, np.float32)
    nodes[500] = -1.0
    assert np.flatnonzero(touched_hops(nodes, 100, 0.001)).tolist() == list(range(49, 51 + MEMORY_CELLS))
    assert not touched_hops(np.zeros(1001, np.float32), 100, 0.001).any()
