"""Where to listen in a finished cut: what stands out in its files and its mix, the strongest first.

Five kinds of stretches are remarked on: a given file at full scale, the limiter hard at work, short-term loudness far
over or far under the target, and long silence. Nothing is measured for it: all comes from the hop grid that the run
has made (file outlines, K-weighted cells, limiter gain).

Kinds are ranked on one scale, the times by which a stretch passes what is remarked on at all (so 6 dB of limiting, 3 dB
being remarked on, equals 10 LU over the target, where that is 5). The limits are choices of ours but for those with a
source beside them. Times are in s of the cut; a stretch that holds within the silence at hand is not also called quiet.
"""

from __future__ import annotations

from collections import Counter
from collections.abc import Iterator, Sequence
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from leveller.cut import Finished
from leveller.measure.loudness import OFFSET_LU, SHORT_TERM_CELLS
from leveller.measure.peaks import FULL_SCALE
from leveller.plan.stretches import stretches, without_short_gaps
from leveller.render.limiter import HEAVY_DB
from leveller.units import HOPS_PER_S, Bools, power_to_db

OVER_LU = 5.0  # EBU R 128 s1: short-term loudness of short programmes at most 5 LU over the target
UNDER_LU = 8.0  # a choice of ours: the demo as levelled stays within it
SILENT_UNDER_LU = 40.0  # of the target: a choice of ours, room tone lies higher
SILENT_S = 3.0  # a choice of ours: longer than a pause that is meant
JOIN_HOPS = 100  # stretches closer than a second are one
FULL_SCALE_HOPS = 5  # so many hops at full scale weigh as much again as the first
MOST_OF_A_KIND = 6  # on the page; the console says how many there are in all

Curve = npt.NDArray[np.float64]


@dataclass(frozen=True)
class Spot:
    """One stretch of a cut worth a listen."""

    from_s: float
    to_s: float
    kind: str  # full scale | limiter | loud | quiet | silence
    track: str  # the file it lies in; empty for the mix
    reason: str
    weight: float  # times over what is remarked on at all

    @property
    def sentence(self) -> str:
        """For the console."""
        return f"{self.track or 'mix'}: {self.kind}, {self.reason}"


def spots_to_hear(finished: Finished) -> tuple[Spot, ...]:
    """All that stands out, the strongest first; none where nothing does."""
    silences = _silences(finished)
    found = [*_full_scale(finished), *_limited(finished), *silences, *_off_target(finished, silences)]
    return tuple(sorted(found, key=lambda spot: (-spot.weight, spot.from_s, spot.track)))


def strongest(spots: Sequence[Spot]) -> tuple[Spot, ...]:
    """The first few of each kind, in the same order."""
    seen: Counter[str] = Counter()
    out = []
    for spot in spots:
        seen[spot.kind] += 1
        if seen[spot.kind] <= MOST_OF_A_KIND:
            out.append(spot)
    return tuple(out)


def _spans(flags: Bools) -> Iterator[tuple[int, int]]:
    """First hop and hop after the last of each stretch."""
    yield from ((int(first), int(after)) for first, after in stretches(without_short_gaps(flags, JOIN_HOPS)))


def _spot(first: int, after: int, kind: str, reason: str, weight: float, track: str = "") -> Spot:
    """A stretch of hops as a spot."""
    return Spot(first / HOPS_PER_S, after / HOPS_PER_S, kind, track, reason, round(weight, 3))


def _full_scale(finished: Finished) -> Iterator[Spot]:
    """Stretches in which a given file reaches full scale; floats that pass it have lost nothing."""
    for track, peaks in zip(finished.session.tracks, finished.file_peaks, strict=True):
        for first, after in _spans(np.asarray(peaks >= FULL_SCALE)):
            here = peaks[first:after]
            if track.is_float and here.max() > 1:
                continue
            count = int(np.count_nonzero(here >= FULL_SCALE))
            yield _spot(first, after, "full scale", f"maybe clipped, for {count / HOPS_PER_S:.2f} s in all",
                        1 + count / FULL_SCALE_HOPS, track.name)


def _limited(finished: Finished) -> Iterator[Spot]:
    """Stretches in which the limiter's work may be heard."""
    for first, after in _spans(np.asarray(finished.limiter_db <= -HEAVY_DB)):
        here = finished.limiter_db[first:after]
        most, heavy = -float(here.min()), np.count_nonzero(here <= -HEAVY_DB) / HOPS_PER_S
        reason = f"takes up to {most:.1f} dB, {HEAVY_DB:.0f} dB or more for {heavy:.2f} s"
        yield _spot(first, after, "limiter", reason, most / HEAVY_DB)


def _silences(finished: Finished) -> list[Spot]:
    """Stretches in which nothing is heard."""
    limit = finished.mix.delivery.target_lufs - SILENT_UNDER_LU
    silent = np.asarray(power_to_db(finished.mix.loudness.cells) + OFFSET_LU < limit)
    return [_spot(int(first), int(after), "silence", f"under {limit:.0f} LUFS for {seconds:.1f} s",
                  seconds / SILENT_S)
            for first, after in stretches(silent) if (seconds := (after - first) / HOPS_PER_S) >= SILENT_S]


def _off_target(finished: Finished, silences: Sequence[Spot]) -> Iterator[Spot]:
    """Stretches whose short-term loudness lies far over or under the target."""
    above = finished.mix.short_term_lufs - finished.mix.delivery.target_lufs
    yield from _beyond(above, OVER_LU, "loud", "over", ())
    if np.isfinite(finished.mix.loudness.integrated_lufs):
        yield from _beyond(-above, UNDER_LU, "quiet", "under", silences)


def _beyond(off_lu: Curve, limit_lu: float, kind: str, side: str, but: Sequence[Spot]) -> Iterator[Spot]:
    """Stretches over a limit, as long as their windows of 3 s reach, outside of others."""
    for first, last in _spans(np.asarray(off_lu > limit_lu)):
        after = last - 1 + SHORT_TERM_CELLS
        here = off_lu[first:last]
        most = float(here[np.isfinite(here)].max(initial=0.0))
        if any(spot.from_s < after / HOPS_PER_S and first / HOPS_PER_S < spot.to_s for spot in but):
            continue
        reason = f"short-term up to {most:.1f} LU {side} the target, {(after - first) / HOPS_PER_S:.1f} s"
        yield _spot(first, after, kind, reason, most / limit_lu)
