"""The names that a recorder gave its tracks, from the `iXML` chunk of a WAV file.

Only TRACK_LIST / TRACK with CHANNEL_INDEX (the recorder's own number), INTERLEAVE_INDEX (the channel in this file, from
1) and NAME are read. The text comes from outside, so it is parsed by hand over expat: a document type is refused, hence
no entity is ever expanded, and what is longer than 1 MiB is not read. What cannot be understood is no reason to refuse
the audio; the channels go without names then, and the reason is handed over to be said.

Reference: iXML specification 2.0 and later, G. Sanders (element names, from memory).
"""

from __future__ import annotations

from collections import Counter
from dataclasses import dataclass
from pathlib import Path
from xml.parsers import expat

from leveller.riff import read_chunk

MOST_BYTES = 1 << 20  # common practice, no source: real ones hold a few KiB
DEEPEST = 64  # elements within elements; names lie four deep
LONGEST_FIELD = 1000  # characters; a file name takes 200 bytes
FIELDS = ("CHANNEL_INDEX", "INTERLEAVE_INDEX", "NAME")


@dataclass(frozen=True)
class NamedChannel:
    """One TRACK of the list; None where the recorder gives no number."""

    channel_index: int | None
    interleave_index: int | None
    name: str


@dataclass(frozen=True)
class TrackList:
    """The track list of a file."""

    tracks: tuple[NamedChannel, ...] = ()
    problem: str = ""  # why there is none although there is a chunk

    def names(self, channels: int) -> tuple[str | None, ...]:
        """The name of each channel of the file; None where it has none, or where two would claim it."""
        places = [track.interleave_index for track in self.tracks]
        if all(place is None for place in places):
            places = [track.channel_index for track in self.tracks]
        claims = Counter(places)
        out: list[str | None] = [None] * channels
        for place, track in zip(places, self.tracks, strict=True):
            if place is not None and 1 <= place <= channels and claims[place] == 1 and track.name:
                out[place - 1] = track.name
        return tuple(out)


def read_track_list(path: Path) -> TrackList:
    """The track list that the file's `iXML` chunk holds; empty where there is none."""
    text = read_chunk(path, b"iXML", most_bytes=MOST_BYTES + 1)
    if text is None:
        return TrackList()
    if len(text) > MOST_BYTES:
        return TrackList(problem="longer than 1 MiB")
    return parse_track_list(text.rstrip(b"\0 \t\r\n"))


def parse_track_list(text: bytes) -> TrackList:
    """The track list of an iXML document."""
    reader = _Reader()
    try:
        reader.parser.Parse(text, True)
    except (expat.ExpatError, ValueError, LookupError) as error:
        return TrackList(problem=f"not understood: {error}")
    return TrackList(tuple(reader.tracks))


class _Reader:
    """Collects the tracks while expat walks the document."""

    def __init__(self) -> None:
        self.tracks: list[NamedChannel] = []
        self._path: list[str] = []
        self._fields: dict[str, str] = {}
        self.parser = expat.ParserCreate()
        self.parser.buffer_text = True
        self.parser.StartDoctypeDeclHandler = self._refuse
        self.parser.StartElementHandler = self._start
        self.parser.EndElementHandler = self._end
        self.parser.CharacterDataHandler = self._text

    def _refuse(self, *_: object) -> None:
        raise ValueError("it has a document type")

    def _start(self, name: str, _: dict[str, str]) -> None:
        self._path.append(name)
        if len(self._path) > DEEPEST:
            raise ValueError(f"elements nested more than {DEEPEST} deep")
        if self._in_track(3):
            self._fields = {}

    def _end(self, _: str) -> None:
        if self._in_track(3):
            self.tracks.append(NamedChannel(
                _number(self._fields.get("CHANNEL_INDEX", "")), _number(self._fields.get("INTERLEAVE_INDEX", "")),
                " ".join(self._fields.get("NAME", "").split())))
        self._path.pop()

    def _text(self, text: str) -> None:
        if self._in_track(4) and self._path[3] in FIELDS:
            before = self._fields.get(self._path[3], "")
            self._fields[self._path[3]] = before + text[: LONGEST_FIELD - len(before)]

    def _in_track(self, depth: int) -> bool:
        """Whether the open elements are so many and lead to a track."""
        return len(self._path) == depth and self._path[1:3] == ["TRACK_LIST", "TRACK"]


def _number(text: str) -> int | None:
    """A whole number of few digits, or None."""
    text = text.strip()
    return int(text) if text.isascii() and text.isdigit() and len(text) < 6 else None
