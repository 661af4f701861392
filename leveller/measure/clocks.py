"""How late one recording runs against another, and how fast its clock is, from places where both hear the same sound.

`onsets` knows it to a hop or two. Here some two-second places that share the most onsets are read, all over the
session, and each gives a delay to 15 microseconds; a straight line through them is offset and drift.

Which voice a place holds matters. Where the first track's own speaker talks, the second hears it later by the way
through the air; where the second's talks, earlier. The lines of both have one slope, the clock's offset lies in their
middle, and half their distance is the way. Whose voice it is, the levels say: a voice is louder, against the loud
speech of the track, on its own. Where only one of them is heard by the other, way and offset cannot be told apart.

Method: smoothed coherence transform (G. C. Carter, A. H. Nuttall, P. G. Cable, Proc. IEEE 61(10), 1973; from memory)
over windows of 0.5 s, moved by fractions of a frame along the line known so far; the line by the most inliers of all
pairs (M. A. Fischler, R. C. Bolles, Comm. ACM 24(6), 1981), then least squares.

Conventions: seconds of session time of the first track; a delay is positive where the second is late.
"""

from __future__ import annotations

import functools
from collections.abc import Iterator, Sequence
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from leveller.audio import clock_rate_hz, parts_of, pieces
from leveller.measure.onsets import Line, Onsets
from leveller.session import Track
from leveller.units import HOP_S, HOPS_PER_S

PLACE_S, WINDOW_S, STEP_S = 2.0, 0.5, 0.25
STRETCHES, EACH = 40, 3  # places are spread: up to so many a fortieth of the session
BAND_HZ = (150, 4000)
REACH_S = 0.06
AIR_S = 0.03  # the longest way, ten metres; an echo comes up to so much after the direct sound
EARLY_SHARE = 0.45  # of the highest peak, that the direct sound reaches (as in `alignment`)
MANY, EARLY_SHARES_OF_MANY = 3, (0.20, 0.27, 0.45)  # places laid over each other: softer, in the null of a cardioid,
OVER_NOISE = 6.0  # if it stands so many standard deviations over what comes before any direct sound
SIDE_LOBES_S, SIDE_LOBE = 0.00035, 1 / 3
CLEAR = 0.075  # height of a peak that counts; without a common sound few reach it (measured, see tests)
LOUD_WITHIN_DB = 20.0
OWN_DB, AHEAD_DB = -12.0, 1.5  # own speech against the track's loud hops, and against the other track
NO_LEVEL_DB = -200.0  # where there is no hop, or nobody else: softer than any sound
NEAR_S = 0.0008  # from the line: people move their heads
STEEPEST = 500e-6
WORTH_A_SLOPE = 1.15  # a drift must explain so much more than none
LEAST_FOR_SIGN, AGREED = 4, 0.8
LEAST_WAY_S, MOST_WAY_S = -0.0003, 0.015  # through the air, five metres
READ_AGAIN = 20e-6  # a slope this far from what was assumed blurs the windows
LAG_S = 1 / 65536  # 15 microseconds
_LAGS = round(WINDOW_S / LAG_S)

Floats = npt.NDArray[np.float64]


@dataclass(frozen=True)
class Lags:
    """Delays at some places."""

    at_s: Floats  # (places,) session time of the first track
    base_s: Floats  # delay in the middle of `around`
    around: npt.NDArray[np.float32]  # (places, lags `LAG_S` apart), signed: negative where one is upside down
    side: npt.NDArray[np.int8]  # +1: the voice of the first track, -1: of the second, 0: neither's or unknown

    @property
    def height(self) -> Floats:
        """Of the highest peak."""
        height: Floats = np.abs(self.around).max(axis=1, initial=0.0).astype(np.float64)
        return height

    @property
    def delay_s(self) -> Floats:
        """By the highest peak, which may be a strong echo's."""
        at = np.abs(self.around).argmax(axis=1) if len(self.around) else np.zeros(0, np.int64)
        delay: Floats = self.base_s + (at - self.around.shape[1] // 2) * LAG_S
        return delay

    def chosen(self, which: npt.NDArray[np.bool_]) -> Lags:
        """Some of them."""
        return Lags(self.at_s[which], self.base_s[which], self.around[which], self.side[which])


@dataclass(frozen=True)
class Fit:
    """The line through the delays."""

    offset_s: float  # at 0
    drift: float  # seconds a second
    way_s: float | None  # through the air; None where only one side is heard
    sides: frozenset[int]  # that have a line
    near: Lags  # the places on the line
    clear: int  # places with a clear peak
    sign: int | None  # the polarity, where both sides agree on it

    @property
    def share(self) -> float:
        """Of the clear places, how many lie on the line."""
        return len(self.near.at_s) / self.clear


@dataclass(frozen=True)
class Heard:
    """What is known of one track before its sound is read again."""

    track: Track
    onsets: Onsets  # (hops, columns)
    level_db: npt.NDArray[np.float32]  # (hops,) speech level
    offset_s: float = 0.0  # of its clock, as far as it is known
    drift: float = 0.0

    @functools.cached_property
    def loud_db(self) -> float:
        """The middle of the hops that are near the loudest, however little is said."""
        near = self.level_db[self.level_db > np.percentile(self.level_db, 99.5) - LOUD_WITHIN_DB]
        return float(np.median(near)) if len(near) else NO_LEVEL_DB

    def over_db(self, at_s: float) -> float:
        """The loudest hop of a place that begins at a time of its own, against the loud hops of the track."""
        begin = max(round(at_s * HOPS_PER_S), 0)
        return float(self.level_db[begin : begin + round(PLACE_S * HOPS_PER_S)].max(initial=NO_LEVEL_DB)) - self.loud_db

    def own_time(self, other: Heard, at_s: float) -> float:
        """The time here when it is at_s at another one."""
        return self.offset_s + (1 + self.drift) * (at_s - other.offset_s) / (1 + other.drift)


def clock_of(first: Heard, second: Heard, line: Line, rate_hz: int, *, others: Sequence[Heard] = ()) -> Fit | None:
    """The line of the second track against the first, near the one that their onsets share; None without clear places.

    The others tell whose voice a place does not hold.

    Raises
    ------
    InputError
        where a file has become unreadable.
    """
    places = spread_places(first.onsets, second.onsets, line)
    fit = None
    drift, offset_s = line.drift, line.offset_hops * HOP_S
    for _ in range(2):
        sides = [_side(first, second, others, at * HOP_S, line) for at in places]
        lags = _read(first, second, places, offset_s, drift, rate_hz, sides)
        fit = fitted(lags.chosen(lags.height > CLEAR))
        if fit is None or abs(fit.drift - drift) < READ_AGAIN:
            return fit
        drift, offset_s = fit.drift, fit.offset_s
    return fit


def spread_places(first: Onsets, second: Onsets, line: Line) -> list[int]:
    """Hops at which places begin that share the most onsets, in order, spread over the session."""
    hops = np.arange(len(first))
    there = np.rint(hops + line.offset_hops + line.drift * hops).astype(np.int64)
    inside = (there >= 1) & (there < len(second) - 1)
    shared = np.zeros(len(first))
    for by in (-1, 0, 1):  # an onset falls into one hop or the next
        shared[inside] += (np.maximum(first[inside], 0) * np.maximum(second[there[inside] + by], 0)).sum(axis=1)
    length = round(PLACE_S * HOPS_PER_S)
    worth = np.concatenate([[0.0], shared])
    for half in (length // 2, length // 2):  # twice a mean of half a place: what lies in its middle counts most
        sums = np.cumsum(worth)
        worth = sums[half:] - sums[:-half] if len(sums) > half else np.zeros(0)
    count = max(1, min(STRETCHES, len(worth) // (2 * length)))
    chosen: list[int] = []
    for stretch in np.array_split(np.arange(len(worth)), count):
        chosen += _best(worth, stretch, EACH, length)
    return sorted(chosen + _best(worth, np.arange(len(worth)), STRETCHES * EACH - len(chosen), length))


def _best(worth: Floats, among: npt.NDArray[np.int64], most: int, length: int) -> list[int]:
    """Beginnings of the best places that do not overlap; their worth and that of all near them becomes 0 in place."""
    chosen: list[int] = []
    while len(among) and len(chosen) < most and worth[begin := int(among[worth[among].argmax()])] > 0:
        chosen.append(begin)
        worth[max(begin - length + 1, 0) : begin + length] = 0
    return chosen


def fitted(lags: Lags) -> Fit | None:
    """The line with one slope, and one way for either side, on which the most delays lie; None without any."""
    if not len(lags.at_s):
        return None
    slope, near = _most_inliers(lags)
    kept = lags.chosen(near)
    sides = sorted({int(s) for s in kept.side})
    if np.ptp(kept.at_s) > 0 and len(kept.at_s) > len(sides):
        columns = [kept.at_s, *((kept.side == s).astype(float) for s in sides)]
        slope = float(np.linalg.lstsq(np.stack(columns, axis=1), kept.delay_s, rcond=None)[0][0])
    offset_s, way_s, sign = _middle(kept, slope)
    return Fit(offset_s, slope, way_s, frozenset(sides), kept, len(lags.at_s), sign)


def _middle(kept: Lags, slope: float) -> tuple[float, float | None, int | None]:
    """Offset, way and sign, from the delays of both sides at 0; places of neither count only where no other is.

    A softer sound is taken for the direct one only as long as the way that follows is one.
    """
    counts = {side: int(np.count_nonzero(kept.side == side)) for side in (1, -1) if side in kept.side}
    counts = counts or {0: len(kept.side)}
    totals = {side: _laid_over(kept.chosen(kept.side == side), slope) for side in counts}
    for share in EARLY_SHARES_OF_MANY:
        heads = {side: _head(total, start_s, side, share if counts[side] >= MANY else EARLY_SHARE)
                 for side, (total, start_s) in totals.items()}
        if len(heads) < 2 or LEAST_WAY_S < (heads[1] - heads[-1]) / 2 < MOST_WAY_S:
            break
    sign = _sign(kept)
    if len(heads) == 2 and LEAST_WAY_S < (heads[1] - heads[-1]) / 2 < MOST_WAY_S:
        return (heads[1] + heads[-1]) / 2, (heads[1] - heads[-1]) / 2, sign
    if len(heads) == 2:  # the sides are muddled: what is strongest in all
        return _head(*_laid_over(kept, slope), 0, EARLY_SHARE), None, sign
    return next(iter(heads.values())), None, sign


def _sign(kept: Lags) -> int | None:
    """The polarity by the highest peaks, echo or not (a wall does not turn a sound over), where nearly all agree."""
    at = np.abs(kept.around).argmax(axis=1)
    height = np.take_along_axis(kept.around, at[:, None], axis=1).sum(axis=1, dtype=np.float64)
    agreed = float(height.sum() / np.abs(height).sum())
    return int(np.sign(agreed)) if len(height) >= LEAST_FOR_SIGN and abs(agreed) > AGREED else None


def _laid_over(lags: Lags, slope: float) -> tuple[Floats, float]:
    """The mean correlation of some places of one side, and the delay at 0 of its middle.

    Echoes stay, being the same at every place; noise does not.
    """
    starts = lags.base_s - slope * lags.at_s
    total = np.zeros(lags.around.shape[1])
    for row, start in zip(lags.around, starts, strict=True):
        total += np.roll(row, round((start - starts[0]) / LAG_S))
    return total / len(starts), float(starts[0])


def _head(total: Floats, start_s: float, side: int, share: float) -> float:
    """Delay at 0 of the direct sound of one side."""
    return start_s + (_direct(np.abs(total), side, share) - len(total) // 2) * LAG_S


def _most_inliers(lags: Lags) -> tuple[float, npt.NDArray[np.bool_]]:
    """Slope and the places near a line of each side, by trying the line through every pair of one side."""
    best_slope, best, most = 0.0, np.zeros(len(lags.at_s), np.bool_), 0.0
    slopes, height, delay_s = [0.0], lags.height, lags.delay_s
    for side in np.unique(lags.side):
        own = np.flatnonzero(lags.side == side)
        i, j = np.triu_indices(len(own), 1)
        run = lags.at_s[own[j]] - lags.at_s[own[i]]
        rise = delay_s[own[j]] - delay_s[own[i]]
        far = run > 0.3 * np.ptp(lags.at_s[own])
        found = rise[far] / np.maximum(run[far], 1e-9)
        slopes += list(found[np.abs(found) < STEEPEST])
    for slope in slopes[:: max(1, len(slopes) // 2000)]:
        near = np.zeros(len(lags.at_s), np.bool_)
        for side in np.unique(lags.side):
            own = np.flatnonzero(lags.side == side)
            near[own[_densest(delay_s[own] - slope * lags.at_s[own])]] = True
        got = float(height[near].sum())
        if got > most * (WORTH_A_SLOPE if best_slope == 0 else 1):
            best_slope, best, most = float(slope), near, got
    return best_slope, best


def _densest(values: Floats) -> npt.NDArray[np.bool_]:
    """The values within `NEAR_S` of the one that has the most such neighbours."""
    order = np.sort(values)
    counts = np.searchsorted(order, order + NEAR_S, "right") - np.searchsorted(order, order - NEAR_S, "left")
    return np.asarray(np.abs(values - order[int(counts.argmax())]) <= NEAR_S)


def _read(
    first: Heard, second: Heard, places: list[int], offset_s: float, drift: float, rate_hz: int, sides: list[int]
) -> Lags:
    """The correlation of every place."""
    at_s = np.array(places, dtype=np.float64) * HOP_S
    there_s = at_s + offset_s + drift * at_s
    middle_s = at_s + PLACE_S / 2
    near, far = spectra_at(first.track, rate_hz, at_s, 0.0), spectra_at(second.track, rate_hz, there_s, drift)
    rows = [correlation(a, b) for a, b in zip(near, far, strict=True)]
    around = np.stack(rows) if rows else np.zeros((0, 1), np.float32)
    return Lags(middle_s, offset_s + drift * middle_s, around, np.array(sides, np.int8))


def _side(first: Heard, second: Heard, others: Sequence[Heard], at_s: float, line: Line) -> int:
    """Whose own voice a place holds: +1 or -1, 0 for neither's."""
    over = first.over_db(at_s), second.over_db(at_s + line.offset_hops * HOP_S + line.drift * at_s)
    rival = max((other.over_db(other.own_time(first, at_s)) for other in others), default=NO_LEVEL_DB)
    if max(over) < max(OWN_DB, rival) or abs(over[0] - over[1]) < AHEAD_DB:
        return 0
    return 1 if over[0] > over[1] else -1


def spectra_at(track: Track, rate_hz: int, at_s: Floats, drift: float) -> Iterator[npt.NDArray[np.complex128]]:
    """Spectra of the windows of each place, shape=(windows, lines) in `BAND_HZ`, moved to exactly where they belong."""
    source_hz, frames = clock_rate_hz(track), round(WINDOW_S * track.source_rate_hz)
    steps = np.arange(round((PLACE_S - WINDOW_S) / STEP_S) + 1) * STEP_S * (1 + drift)
    taper = (np.hanning(frames + 1)[:-1] * track.polarity).astype(np.float32)
    lines = slice(round(BAND_HZ[0] * WINDOW_S), round(BAND_HZ[1] * WINDOW_S))
    hz = np.arange(lines.start, lines.stop) / WINDOW_S
    exact = (at_s - track.offset_frames / rate_hz) * source_hz
    begins = np.floor(exact).astype(np.int64)
    length = round(steps[-1] * source_hz) + frames + 2
    blocks = pieces(parts_of(track), [int(b) for b in begins], frames=length)
    for block, begin, place in zip(blocks, begins, exact, strict=True):
        one = block[:, list(track.channels)].mean(axis=1)
        out = np.zeros((len(steps), len(hz)), np.complex128)
        for row, step in enumerate(steps):
            wanted = place - begin + step * source_hz
            start = round(wanted)
            found = np.fft.rfft(one[start : start + frames] * taper)[lines]
            out[row, : len(found)] = found * np.exp(2j * np.pi * hz[: len(found)] * ((wanted - start) / source_hz))
        yield out


def correlation(near: npt.NDArray[np.complex128], far: npt.NDArray[np.complex128]) -> npt.NDArray[np.float32]:
    """Smoothed coherence transform at lags within `REACH_S`, 1 for a pure delay."""
    cross = np.sum(far * near.conj(), axis=0)
    power = np.sum(np.abs(near) ** 2, axis=0) * np.sum(np.abs(far) ** 2, axis=0)
    lines = np.zeros(_LAGS // 2 + 1, np.complex128)
    first = round(BAND_HZ[0] * WINDOW_S)
    lines[first : first + len(cross)] = cross / np.sqrt(np.maximum(power, 1e-30))
    around = np.fft.irfft(lines) * (_LAGS / (2 * len(cross)))
    reach = round(REACH_S / LAG_S)
    return np.concatenate([around[-reach:], around[: reach + 1]]).astype(np.float32)


def _direct(height: Floats, side: int, share: float) -> int:
    """The peak of the direct sound: the first of the high ones, the last where the second track is the nearer one."""
    if side < 0:
        return len(height) - 1 - _direct(height[::-1], 1, share)
    highest = int(height.argmax())
    if side == 0:
        return highest
    begin = max(highest - round(AIR_S / LAG_S), 1)
    before = height[:begin]
    noise = OVER_NOISE * 1.4826 * float(np.median(before)) if len(before) > AIR_S / LAG_S / 4 else 0.0
    least = max(share * float(height[highest]), min(noise, EARLY_SHARE * float(height[highest])))
    part = height[begin - 1 : highest + 2]
    tops = np.flatnonzero((part[1:-1] > part[:-2]) & (part[1:-1] >= part[2:]) & (part[1:-1] > least))
    near = round(SIDE_LOBES_S / LAG_S)
    for top in begin + tops:
        if height[top] >= SIDE_LOBE * height[max(top - near, 0) : top + near].max():
            return int(top)
    return highest
