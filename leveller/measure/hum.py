"""Mains hum: 50 or 60 Hz and its harmonics, found in the quiet places of a track.

The speech bands are too wide to tell hum from rumble, so this reads a few dozen seconds once more, after it is known
where nobody speaks, and costs the ordinary run nothing.

Method: spectra of 1 s pieces (Hann window, lines 1 Hz apart at any rate); per line the median over the pieces, which a
steady tone passes whole and a word or a knock does not. A harmonic counts where it stands out from the median of the
lines round it; mains drift by a part in a thousand and more, so the search widens with the harmonic's number. Whether
the mains have 50 or 60 Hz is settled by the harmonics that belong to one of them only (not 300 and 600 Hz).
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from leveller.audio import AudioSource, track_seconds
from leveller.units import power_to_db

MAINS_HZ = (50, 60)
HIGHEST_HZ = 600
DRIFT = 0.004  # of the frequency; grids hold 0.2 to 0.4 % in ordinary operation (from memory)
STANDS_OUT_DB = 10.0  # a line over the median of its surroundings; noise reaches 4 dB with 20 pieces (measured)
LONE_DB = 20.0  # the fundamental alone must stand out by this much
AROUND_HZ = 12
LEAST_PIECES = 4

Spectrum = npt.NDArray[np.float64]


@dataclass(frozen=True)
class Hum:
    """Mains hum in one track."""

    mains_hz: int  # 50 | 60
    level_dbfs: float  # RMS of all harmonics together
    lines: tuple[tuple[float, float, float], ...]  # (Hz, RMS in dBFS, dB over the lines around), ascending


def read_hum(track: AudioSource, rate_hz: int, starts_s: Sequence[float]) -> Hum | None:
    """Hum of a track from 1 s pieces at session times, or None where there is none or too few pieces.

    Parameters
    ----------
    track : a session's track
    rate_hz : int
        of the session
    starts_s : sequence of float
        where quiet seconds begin

    Raises
    ------
    InputError
        where the file has become unreadable.
    """
    source_hz = track.source_rate_hz
    window = np.hanning(source_hz + 1)[:-1]
    scale = 2.0 / (source_hz * float(np.sum(window**2)))
    powers = []
    for second in track_seconds(track, rate_hz, sorted(starts_s)):
        one = second.mean(axis=1, dtype=np.float64)
        lines = np.fft.rfft((one - one.mean()) * window)[: HIGHEST_HZ + 2 * AROUND_HZ]
        powers.append((lines.real**2 + lines.imag**2) * scale)
    return hum_in(np.median(powers, axis=0)) if len(powers) >= LEAST_PIECES else None


def hum_in(power: Spectrum) -> Hum | None:
    """Hum in a spectrum with lines of 1 Hz, shape=(lines,), mean squares with full scale 1; None without any.

    Raises
    ------
    ValueError
        when the spectrum ends below `HIGHEST_HZ` + `AROUND_HZ`.
    """
    if len(power) <= HIGHEST_HZ + AROUND_HZ:
        raise ValueError(f"spectrum of {len(power)} lines, expected more than {HIGHEST_HZ + AROUND_HZ}")
    found = {mains: _harmonics(power, mains) for mains in MAINS_HZ}
    mains = max(MAINS_HZ, key=lambda hz: sum(over for at, _, over in found[hz] if not _of_both(at)))
    own = [line for line in found[mains] if not _of_both(line[0])]
    lone = len(own) == 1 and own[0][0] < 1.5 * mains and own[0][2] > LONE_DB
    if len(own) < 2 and not lone:
        return None
    level = float(power_to_db(sum(10 ** (level_db / 10) for _, level_db, _ in found[mains])))
    return Hum(mains, level, tuple(found[mains]))


def _harmonics(power: Spectrum, mains_hz: int) -> list[tuple[float, float, float]]:
    """The harmonics that stand out, as (Hz, dBFS, dB over the lines around)."""
    out = []
    for centre in range(mains_hz, HIGHEST_HZ + 1, mains_hz):
        reach = 1 + round(DRIFT * centre)
        near = power[centre - reach : centre + reach + 1]
        around = power[max(centre - AROUND_HZ, 5) : centre + AROUND_HZ + 1]
        usual = max(float(np.median(around)), 1e-30)
        at = centre - reach + int(near.argmax())
        over_db = float(power_to_db(float(power[at]) / usual))
        if over_db > STANDS_OUT_DB:
            line = float(power[at - 1 : at + 2].sum())
            out.append((float(at), float(power_to_db(line)), over_db))
    return out


def _of_both(hz: float) -> bool:
    """Whether a harmonic belongs to 50 and to 60 Hz."""
    return abs(hz - 300 * round(hz / 300)) <= 1 + DRIFT * hz
