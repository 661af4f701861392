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

from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from leveller.audio import parts_of, pieces
from leveller.measure.onsets import Line, Onsets
from leveller.session import Track
from leveller.units import HOP_S, HOPS_PER_S

PLACE_S, WINDOW_S, STEP_S = 2.0, 0.5, 0.25
STRETCHES, EACH = 40, 3  # places are spread: up to so many a fortieth of the session
BAND_HZ = (150, 4000)
REACH_S = 0.06
AIR_S = 0.03  # the longest way, ten metres; an echo comes up to so much after the direct sound
EARLY_SHARE = 0.45  # of the highest peak, that the direct sound reaches (as in `alignment`)
CLEAR = 0.09  # height of a peak that counts; without a common sound few reach it (measured, see tests)
OWN_DB, AHEAD_DB = -14.0, 3.0  # own speech against the track's loud hops, and against the other track
NEAR_S = 0.0008  # from the line: people move their heads
STEEPEST = 500e-6
READ_AGAIN = 20e-6  # a slope this far from what was assumed blurs the windows
_LAGS = round(WINDOW_S * 65536)  # values in a window: 15 microseconds apart

Floats = npt.NDArray[np.float64]


@dataclass(frozen=True)
class Lags:
    """Delays at some places."""

    at_s: Floats  # (places,) session time of the first track
    delay_s: Floats
    height: Floats  # signed: negative where one is upside down
    side: npt.NDArray[np.int8]  # +1: the voice of the first track, -1: of the second, 0: neither's or unknown

    def chosen(self, which: npt.NDArray[np.bool_]) -> Lags:
        """Some of them."""
        return Lags(self.at_s[which], self.delay_s[which], self.height[which], self.side[which])


@dataclass(frozen=True)
class Fit:
    """The line through the delays."""

    offset_s: float  # at 0
    drift: float  # seconds a second
    way_s: float | None  # through the air; None where only one side is heard
    sides: frozenset[int]  # that have a line
    near: Lags  # the places on the line
    clear: int  # places with a clear peak

    @property
    def span_s(self) -> float:
        """Time from the first place on the line to the last."""
        return float(np.ptp(self.near.at_s)) if len(self.near.at_s) else 0.0

    @property
    def jitter_s(self) -> float:
        """Scatter round the line."""
        way = 0.0 if self.way_s is None else self.way_s
        rest = self.near.delay_s - self.offset_s - self.drift * self.near.at_s - way * self.near.side
        return float(np.std(rest)) if len(rest) > 2 else NEAR_S


@dataclass(frozen=True)
class Heard:
    """What is known of one track before its sound is read again."""

    track: Track
    onsets: Onsets  # (hops, columns)
    level_db: npt.NDArray[np.float32]  # (hops,) speech level


def clock_of(first: Heard, second: Heard, line: Line, rate_hz: int) -> Fit | None:
    """The line of the second track against the first, near the one that their onsets share; None without clear places.

    Raises
    ------
    InputError
        where a file has become unreadable.
    """
    places = spread_places(first.onsets, second.onsets, line)
    fit = None
    drift, offset_s = line.drift, line.offset_hops * HOP_S
    for _ in range(2):
        lags = _read(first, second, places, offset_s, drift, rate_hz)
        fit = fitted(lags.chosen(np.abs(lags.height) > CLEAR))
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
        shared[inside] += np.maximum(first[inside] * second[there[inside] + by], 0).sum(axis=1)
    length = round(PLACE_S * HOPS_PER_S)
    sums = np.concatenate([[0.0], np.cumsum(shared)])
    worth = sums[length:] - sums[:-length] if len(sums) > length else np.zeros(0)
    chosen: list[int] = []
    for stretch in np.array_split(np.arange(len(worth)), max(1, min(STRETCHES, len(worth) // (2 * length)))):
        left = worth[stretch]
        for _ in range(EACH):
            at = int(left.argmax()) if len(left) else 0
            if not len(left) or left[at] <= 0:
                break
            begin = int(stretch[at])
            left[max(at - length, 0) : at + length] = 0
            if not chosen or begin - chosen[-1] >= length or all(abs(begin - c) >= length for c in chosen):
                chosen.append(begin)
    return sorted(chosen)


def fitted(lags: Lags) -> Fit | None:
    """The line with one slope, and one way for either side, on which the most delays lie; None without any."""
    if not len(lags.at_s):
        return None
    slope, near = _most_inliers(lags)
    kept = lags.chosen(near)
    sides = sorted({int(s) for s in kept.side})
    columns = [kept.at_s, *((kept.side == s).astype(float) for s in sides)]
    if np.ptp(kept.at_s) > 0 and len(kept.at_s) > len(sides):
        solved = np.linalg.lstsq(np.stack(columns, axis=1), kept.delay_s, rcond=None)[0]
        slope, heads = float(solved[0]), dict(zip(sides, solved[1:], strict=True))
    else:
        heads = {s: float(np.median(kept.delay_s[kept.side == s] - slope * kept.at_s[kept.side == s])) for s in sides}
    if 1 in heads and -1 in heads:
        offset_s, way_s = (heads[1] + heads[-1]) / 2, (heads[1] - heads[-1]) / 2
    else:
        most = max(sides, key=lambda s: (np.count_nonzero(kept.side == s), s))
        offset_s, way_s = heads[most], None
    return Fit(float(offset_s), slope, None if way_s is None else float(way_s), frozenset(sides), kept, len(lags.at_s))


def _most_inliers(lags: Lags) -> tuple[float, npt.NDArray[np.bool_]]:
    """Slope and the places near a line of each side, by trying the line through every pair of one side."""
    best_slope, best, most = 0.0, np.zeros(len(lags.at_s), np.bool_), -1.0
    slopes = [0.0]
    for side in np.unique(lags.side):
        own = np.flatnonzero(lags.side == side)
        i, j = np.triu_indices(len(own), 1)
        run = lags.at_s[own[j]] - lags.at_s[own[i]]
        rise = lags.delay_s[own[j]] - lags.delay_s[own[i]]
        far = run > 0.3 * np.ptp(lags.at_s[own])
        found = rise[far] / np.maximum(run[far], 1e-9)
        slopes += list(found[np.abs(found) < STEEPEST])
    for slope in slopes[:: max(1, len(slopes) // 2000)]:
        near = np.zeros(len(lags.at_s), np.bool_)
        for side in np.unique(lags.side):
            own = np.flatnonzero(lags.side == side)
            near[own[_densest(lags.delay_s[own] - slope * lags.at_s[own])]] = True
        got = float(np.abs(lags.height[near]).sum())
        if got > most + 1e-9:
            best_slope, best, most = float(slope), near, got
    return best_slope, best


def _densest(values: Floats) -> npt.NDArray[np.bool_]:
    """The values within `NEAR_S` of the one that has the most such neighbours."""
    order = np.sort(values)
    counts = np.searchsorted(order, order + NEAR_S, "right") - np.searchsorted(order, order - NEAR_S, "left")
    return np.asarray(np.abs(values - order[int(counts.argmax())]) <= NEAR_S)


def _read(first: Heard, second: Heard, places: list[int], offset_s: float, drift: float, rate_hz: int) -> Lags:
    """Delay, height and side of every place."""
    at_s = np.array(places, dtype=np.float64) * HOP_S
    there_s = at_s + offset_s + drift * at_s
    delay, height = np.zeros(len(places)), np.zeros(len(places))
    sides = np.array([_side(first, second, a, b) for a, b in zip(at_s, there_s, strict=True)], np.int8)
    near, far = _spectra(first.track, rate_hz, at_s, 0.0), _spectra(second.track, rate_hz, there_s, drift)
    for i, (a, b) in enumerate(zip(near, far, strict=True)):
        height[i], lag_s = _peak(a, b, int(sides[i]))
        middle_s = at_s[i] + PLACE_S / 2
        delay[i] = lag_s + offset_s + drift * middle_s
    return Lags(at_s + PLACE_S / 2, delay, height, sides)


def _side(first: Heard, second: Heard, at_s: float, there_s: float) -> int:
    """Whose own voice a place holds."""
    over = [float(level[max(round(t * HOPS_PER_S), 0) :][: round(PLACE_S * HOPS_PER_S)].max(initial=-200.0))
            - float(np.percentile(level[:: max(1, len(level) // 20000)], 95))
            for level, t in ((first.level_db, at_s), (second.level_db, there_s))]
    if max(over) < OWN_DB or abs(over[0] - over[1]) < AHEAD_DB:
        return 0
    return 1 if over[0] > over[1] else -1


def _spectra(track: Track, rate_hz: int, at_s: Floats, drift: float) -> Iterator[npt.NDArray[np.complex128]]:
    """Spectra of the windows of each place, shape=(windows, lines) in `BAND_HZ`, moved to exactly where they belong."""
    source_hz, frames = track.source_rate_hz, round(WINDOW_S * track.source_rate_hz)
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


def _peak(near: npt.NDArray[np.complex128], far: npt.NDArray[np.complex128], side: int) -> tuple[float, float]:
    """Signed height and lag in seconds of the direct sound."""
    cross = np.sum(far * near.conj(), axis=0)
    power = np.sum(np.abs(near) ** 2, axis=0) * np.sum(np.abs(far) ** 2, axis=0)
    lines = np.zeros(_LAGS // 2 + 1, np.complex128)
    first = round(BAND_HZ[0] * WINDOW_S)
    lines[first : first + len(cross)] = cross / np.sqrt(np.maximum(power, 1e-30))
    around = np.fft.irfft(lines) * (_LAGS / (2 * len(cross)))
    reach = round(REACH_S * _LAGS / WINDOW_S)
    lags = np.concatenate([around[-reach:], around[: reach + 1]])
    at = _direct(np.abs(lags), side)
    return float(lags[at]), (at - reach) * WINDOW_S / _LAGS


def _direct(height: Floats, side: int) -> int:
    """The peak of the direct sound: the first of the high ones, the last where the second track is the nearer one."""
    if side < 0:
        return len(height) - 1 - _direct(height[::-1], 1)
    highest = int(height.argmax())
    if side == 0:
        return highest
    begin = max(highest - round(AIR_S * _LAGS / WINDOW_S), 1)
    part = height[begin - 1 : highest + 2]
    tops = np.flatnonzero((part[1:-1] > part[:-2]) & (part[1:-1] >= part[2:])
                          & (part[1:-1] > EARLY_SHARE * height[highest]))
    return begin + int(tops[0]) if len(tops) else highest
