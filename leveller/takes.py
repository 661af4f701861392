"""When the files of a session were recorded: split takes are joined, the others get their offsets.

A recorder stamps each file with its time reference, the frame since midnight at which it starts, and splits a long take
into files that follow each other. Files of one series whose times meet are one take and are read as one. Files of
different tracks are delayed by what their times differ, where all carry one. In doubt nothing is guessed: a hole in a
series, formats that differ, or a file that starts when all others have ended is refused, with the `offset_s` that would
keep the recorder's time. A file with an `offset_s` of its own is where the editor wants it, and continues no other.

Two files are of one series if session.toml gives both the same name; or if their file names differ in one number only,
which grows; or if the recorder wrote the same track list into both. The first of these that holds decides. Times are
exact fractions of a second. A session over midnight is understood: it begins behind the longest silence of the day.
"""

from __future__ import annotations

import dataclasses
import itertools
import re
from collections.abc import Sequence
from dataclasses import dataclass
from fractions import Fraction
from pathlib import Path

from leveller.bwf import Bext
from leveller.errors import InputError
from leveller.ixml import TrackList
from leveller.samples import FileFacts, Part
from leveller.sessionfile import TrackEntry

DAY_S = 86400
LATEST_S = 2 * DAY_S  # a take may run over midnight without its reference starting again; beyond this it is no time
MEET_S = Fraction(20, 1000)  # our choice: half a video frame at 25 a second; no pause of speech is so short
SETTINGS = ("role", "channels", "polarity", "pan", "trim_db", "high_pass_hz")  # of a [[track]]; a take has one of each


@dataclass(frozen=True)
class Take:
    """One file, or several that are read as one, and when it starts."""

    entry: TrackEntry
    parts: tuple[Part, ...]
    facts: FileFacts  # frames of all parts
    bext: Bext | None  # of the first part
    track_list: TrackList
    start_s: Fraction | None  # since midnight; None where the file does not say
    offset_s: Fraction = Fraction(0)  # in the session

    @property
    def path(self) -> Path:
        """The first file."""
        return self.parts[0].path

    @property
    def end_s(self) -> Fraction:
        """When it ends, since midnight."""
        return (self.start_s or Fraction(0)) + Fraction(self.facts.frames, self.facts.rate_hz)

    @property
    def time_reference(self) -> int | None:
        """Frames of the file since midnight."""
        return None if self.bext is None or self.start_s is None else self.bext.time_reference


def take_of(
    path: Path, entry: TrackEntry, facts: FileFacts, bext: Bext | None, track_list: TrackList, notes: list[str]
) -> Take:
    """A take of one file; a time reference that can be no time of a day is set aside and that is said."""
    start_s = None
    if bext is not None and bext.time_reference is not None:
        start_s = Fraction(bext.time_reference, facts.rate_hz)
        if start_s >= LATEST_S:
            _say(notes, f"{path.name}: its time reference is {float(start_s / 3600):.1f} h behind midnight, not used")
            start_s = None
    return Take(entry, (Part(path, facts.frames),), facts, bext, track_list, start_s)


def joined(takes: Sequence[Take], notes: list[str]) -> list[Take]:
    """Join the files of split takes, in the order of their first files.

    Raises
    ------
    InputError
        for a hole in a series, for files that meet but differ in format or settings, and where it is not clear which
        file continues which
    """
    files = _over_midnight(takes)
    before = _links(files)
    after = {first: second for second, first in before.items()}
    _check_holes(files, before, after)
    out = []
    for index in range(len(files)):
        if index in before:
            continue
        chain = [index]
        while chain[-1] in after:
            chain.append(after[chain[-1]])
        out.append(_one([files[i] for i in chain], files, notes) if len(chain) > 1 else files[index])
    return out


def placed(takes: Sequence[Take], notes: list[str]) -> list[Take]:
    """Give each take its offset: what session.toml says, else what the time references say where all have one.

    Raises
    ------
    InputError
        for a take that starts when all others have ended
    """
    free = [take for take in takes if take.entry.offset_s is None]
    timed = sorted((take for take in free if take.start_s is not None), key=lambda take: take.start_s or 0)
    silent = [take for take in free if take.start_s is None]
    differ = len({take.start_s for take in timed}) > 1
    if differ and silent:
        _say(notes, f"time references differ, but are not used, since {silent[0].path.name} has none; files without "
                    "an offset_s start together")
    use = differ and not silent
    if use:
        _check_overlap(timed)
    zero_s = _start(timed[0]) if use else Fraction(0)
    out = []
    for take in takes:
        given = take.entry.offset_s
        offset_s = Fraction(given) if given is not None else _start(take) - zero_s if use else Fraction(0)
        if given is None and offset_s:
            _say(notes, f"{take.path.name}: starts {float(offset_s):.3f} s after {timed[0].path.name} by their time "
                        "references, delayed by that")
        out.append(dataclasses.replace(take, offset_s=offset_s))
    return out


def session_reference(placed: Sequence[tuple[Take, int]], rate_hz: int) -> int | None:
    """Time reference of session zero from the takes and their offsets in frames; None where they do not agree.

    Takes whose offset was given by hand count only where there are no others.
    """
    timed = [(take, offset) for take, offset in placed if take.start_s is not None]
    own = [(take, offset) for take, offset in timed if take.entry.offset_s is None] or timed
    day = DAY_S * rate_hz
    zeros = [(round(_start(take) * rate_hz) - offset) % day for take, offset in own]
    if not zeros or max(zeros) - min(zeros) > 1:  # frames are rounded
        return None
    return min(zeros)


def _say(notes: list[str], text: str) -> None:
    """Add a note once; a polyphonic file may be named for each of its channels."""
    if text not in notes:
        notes.append(text)


def _start(take: Take) -> Fraction:
    """When a take with a time reference starts."""
    assert take.start_s is not None
    return take.start_s


def _over_midnight(takes: Sequence[Take]) -> list[Take]:
    """Move what was recorded after midnight a day on, where the longest time without any file lies within the day."""
    timed = sorted((take for take in takes if take.start_s is not None), key=_start)
    if not timed:
        return list(takes)
    reach = timed[0].end_s
    longest, first = Fraction(0), timed[0]
    for take in timed[1:]:
        if _start(take) - reach > longest:
            longest, first = _start(take) - reach, take
        reach = max(reach, take.end_s)
    if longest <= DAY_S - (reach - _start(timed[0])):
        return list(takes)
    return [dataclasses.replace(take, start_s=take.start_s + DAY_S)
            if take.start_s is not None and take.start_s < _start(first) else take for take in takes]


def _series(first: Take, second: Take) -> int | None:
    """How surely the second can continue the first, 0 the surest; None where it cannot."""
    one, two = first.entry, second.entry
    if one.channel != two.channel or first.path == second.path:
        return None
    if one.name is not None and two.name is not None:
        return 0 if one.name == two.name else None
    if _counts_up(first.path, second.path):
        return 1
    tracks = first.track_list.tracks
    return 2 if tracks and tracks == second.track_list.tracks else None


def _counts_up(first: Path, second: Path) -> bool:
    """Whether two file names differ in exactly one number, which grows."""
    one, two = (re.split(r"([0-9]+)", path.name.casefold()) for path in (first, second))
    if len(one) != len(two):
        return False
    differing = [(a, b) for a, b in zip(one, two, strict=True) if a != b]
    return len(differing) == 1 and all(text.isdigit() for text in differing[0]) and (
        int(differing[0][0]) < int(differing[0][1]))


def _meet(first: Take, second: Take) -> bool:
    """Whether the second starts where the first ends."""
    return _start(first) < _start(second) and abs(_start(second) - first.end_s) <= MEET_S


def _links(files: Sequence[Take]) -> dict[int, int]:
    """For each file that continues another, which one."""
    timed = [i for i, take in enumerate(files) if take.start_s is not None]
    pairs = [(rank, a, b) for b in timed if files[b].entry.offset_s is None for a in timed
             if _meet(files[a], files[b]) and (rank := _series(files[a], files[b])) is not None]
    surest: dict[tuple[str, int], int] = {}
    for rank, a, b in pairs:
        for key in (("before", a), ("behind", b)):
            surest[key] = min(rank, surest.get(key, rank))
    before: dict[int, int] = {}
    after: dict[int, int] = {}
    for rank, a, b in pairs:
        if rank > surest["before", a] or rank > surest["behind", b]:
            continue
        if a in after or b in before:
            one, verb, others = (a, "be continued by", (after[a], b)) if a in after else (b, "continue", (before[b], a))
            raise InputError(
                f"{files[one].path}: could {verb} {' or '.join(files[i].path.name for i in others)} by their time "
                "references. Give the files that belong together the same name in session.toml")
        before[b], after[a] = a, b
    return before


def _check_holes(files: Sequence[Take], before: dict[int, int], after: dict[int, int]) -> None:
    """Refuse a file that comes later than another of its series without continuing it."""
    ends = [i for i, take in enumerate(files) if take.start_s is not None and i not in after]
    for b, second in enumerate(files):
        if b in before or second.start_s is None or second.entry.offset_s is not None:
            continue
        for first in (files[a] for a in ends):
            if _series(first, second) is not None and second.start_s > first.end_s - MEET_S:
                late_s = float(second.start_s - first.end_s)
                raise InputError(
                    f"{second.path}: starts {late_s:.3f} s after the end of {first.path.name} by their time references,"
                    f" so they are no take without a gap. {_way_out(files, first, second)}")


def _check_overlap(timed: Sequence[Take]) -> None:
    """Refuse a take that starts when all earlier ones have ended."""
    last = timed[0]
    for take in timed[1:]:
        if _start(take) > last.end_s - MEET_S:
            late_s = float(_start(take) - last.end_s)
            raise InputError(
                f"{take.path}: starts when all others have ended (by its time reference {late_s:.3f} s after "
                f"{last.path.name}). If it continues that file, give both the same name in session.toml; else: "
                f"{_way_out(timed, last, take)}")
        last = max(last, take, key=lambda other: other.end_s)


def _way_out(files: Sequence[Take], first: Take, take: Take) -> str:
    """What the editor can write to keep the recorder's time, or to leave it."""
    if first.entry.offset_s is not None:
        zero_s = _start(first) - Fraction(first.entry.offset_s)
    else:
        zero_s = min(_start(other) for other in files if other.start_s is not None and other.entry.offset_s is None)
    offset_s = float(_start(take) - zero_s)
    return (f"Give {take.path.name} an offset_s in session.toml ({offset_s:.3f} keeps the recorder's time), or put it "
            "in a folder of its own")


def _one(chain: Sequence[Take], files: Sequence[Take], notes: list[str]) -> Take:
    """One take of several files that meet; how they met is said."""
    first = chain[0]
    for one, two in itertools.pairwise(chain):
        _check_alike(files, one, two)
        apart_s = _start(two) - one.end_s
        if abs(apart_s) > Fraction(1, one.facts.rate_hz):
            side = "after" if apart_s > 0 else "before"
            _say(notes, f"{two.path.name}: starts {abs(float(apart_s)) * 1000:.1f} ms {side} the end of "
                        f"{one.path.name}, joined without a gap")
    frames = sum(take.facts.frames for take in chain)
    _say(notes, f"{first.path.name}: read as one take with {', '.join(take.path.name for take in chain[1:])} "
                f"({frames / first.facts.rate_hz:.3f} s), since their time references meet")
    return dataclasses.replace(
        first, parts=tuple(part for take in chain for part in take.parts),
        facts=dataclasses.replace(first.facts, frames=frames, header_frames=frames))


def _check_alike(files: Sequence[Take], one: Take, two: Take) -> None:
    """Refuse files that meet but cannot be read as one."""
    expected, found = (f"{take.facts.rate_hz} Hz {take.facts.subtype} with {take.facts.channels} channel(s)"
                       for take in (one, two))
    if expected != found:
        raise InputError(f"{two.path}: follows {one.path.name} without a gap, but is {found}, expected {expected} as "
                         f"that file. Convert it, or: {_way_out(files, one, two)}")
    default = TrackEntry("")
    said = {key: (getattr(one.entry, key), getattr(two.entry, key)) for key in SETTINGS}
    differing = [key for key, (a, b) in said.items() if a != b and b != getattr(default, key)]
    if differing:
        key = differing[0]
        raise InputError(f"{two.path}: follows {one.path.name} without a gap, but its [[track]] says {key} = "
                         f"{said[key][1]!r}, expected {said[key][0]!r} as for that file. Say the same for both, or: "
                         f"{_way_out(files, one, two)}")
