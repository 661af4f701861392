"""The slow ride: one hand on one fader, following a voice that leans back and comes forward.

Method: own speech in pieces of `CELL_S`; the level of a moment is the mean of the pieces round it under a Gaussian
window, both ways in time, drawn towards the voice's overall level where there is little speech. Pieces far from the
voice's usual level (laughter, whispers) do not count: a whisper stays a whisper. Only a part of the deviation is
taken out, so that phrases keep their weight. The gain then moves within `rate_db_s`, and stands still in pauses in
which the microphone is open: there only room tone would be heard to move.
"""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

from leveller import settings as settings_
from leveller.plan.stretches import stretches
from leveller.units import HOPS_PER_S, Bools

CELL_S = 0.25
STRENGTH = 0.65
PRIOR_CELLS = 2.0  # as much as half a second of speech at the usual level
LOUDEST_DB = 6.0  # the louder a piece the more it counts, up to so much over where the voice shall lie
UNUSUAL_DB = 9.0  # pieces further from the moment's level are laughter or whispers

Grid = npt.NDArray[np.float32]
_CELL = round(CELL_S * HOPS_PER_S)


def ride_nodes_db(level_db: Grid, counted: Bools, still: Bools, *, settings: settings_.Ride) -> Grid:
    """Gain of one voice at hop edges, shape=(hops + 1,).

    Parameters
    ----------
    level_db : shape=(hops,)
        K-weighted level after the trim, against where the voice shall lie.
    counted : shape=(hops,)
        Own speech that may be listened to.
    still : shape=(hops,)
        Open, but the voice is silent: the gain must not move.
    """
    hops = len(level_db)
    if not settings.enabled or np.count_nonzero(counted) < 2 * _CELL:
        return np.zeros(hops + 1, np.float32)
    power, weight = _cells(level_db, counted)
    wanted = -STRENGTH * _smoothed(power, weight, settings.window_s)
    wanted = _within_rate(np.clip(wanted, -settings.range_db, settings.range_db), settings.rate_db_s * CELL_S)
    at = np.clip((np.arange(hops + 1) - _CELL / 2) / _CELL, 0, len(wanted) - 1)
    return np.asarray(_standing(np.interp(at, np.arange(len(wanted)), wanted), still, settings.rate_db_s), np.float32)


def _cells(level_db: Grid, counted: Bools) -> tuple[Grid, Grid]:
    """Level of each piece in dB and its weight (share of it that is speech)."""
    cells = -(-len(level_db) // _CELL)
    power = np.zeros(cells * _CELL, np.float32)
    power[: len(level_db)] = np.where(counted, 10 ** (level_db / 10), 0)
    count = np.zeros(cells * _CELL, np.float32)
    count[: len(level_db)] = counted
    total, heard = power.reshape(cells, _CELL).sum(axis=1), count.reshape(cells, _CELL).sum(axis=1)
    level = 10 * np.log10(np.maximum(total, 1e-12) / np.maximum(heard, 1))
    return np.asarray(np.where(heard > 0, level, 0), np.float32), np.asarray(heard / _CELL, np.float32)


def _smoothed(level: Grid, weight: Grid, window_s: float) -> Grid:
    """Deviation of each moment from the usual level; two rounds, the second without unusual pieces."""
    sigma = window_s / CELL_S / 4
    reach = int(np.ceil(3 * sigma))
    kernel = np.exp(-0.5 * (np.arange(-reach, reach + 1) / sigma) ** 2)
    usual: npt.NDArray[np.float64] = np.full(len(level), float(np.average(level, weights=weight)))
    for _ in range(2):
        heard = weight * (np.abs(level - usual) < UNUSUAL_DB) * 10 ** (np.minimum(level, LOUDEST_DB) / 20)
        top = np.convolve(level * heard, kernel, "full")[reach : reach + len(level)]
        bottom = np.convolve(heard, kernel, "full")[reach : reach + len(level)]
        usual = top / (bottom + PRIOR_CELLS)
    mean = np.average(usual, weights=weight)
    return np.asarray(usual - mean, np.float32)


def _within_rate(wanted: Grid, step_db: float) -> Grid:
    """The curve nearest to the wanted one whose steps stay within bounds: mean of its upper and lower envelope."""
    values = wanted.astype(np.float64)
    return np.asarray((_upper_envelope(values, step_db) - _upper_envelope(-values, step_db)) / 2, np.float32)


def _upper_envelope(values: npt.NDArray[np.float64], step: float) -> npt.NDArray[np.float64]:
    """The lowest curve that is nowhere under the values and whose steps stay within bounds either way."""
    rise = np.arange(len(values)) * step
    fall = rise[::-1]
    from_left = np.maximum.accumulate(values + rise) - rise
    from_right = np.maximum.accumulate((values + fall)[::-1])[::-1] - fall
    return np.asarray(np.maximum(from_left, from_right))


def _standing(curve: npt.NDArray[np.floating], still: Bools, rate_db_s: float) -> npt.NDArray[np.floating]:
    """The curve held during `still`; what it moved meanwhile is caught up afterwards, within the rate."""
    step = rate_db_s / HOPS_PER_S
    out = curve.copy()
    spans = stretches(still)
    for (first, after), following in zip(spans.tolist(), [*spans[1:, 0].tolist(), len(still)], strict=False):
        now = out[first]
        out[first : after + 1] = now
        for node in range(after + 1, following + 1):
            if abs(curve[node] - now) <= step:
                break
            now += step if curve[node] > now else -step
            out[node] = now
    return out
