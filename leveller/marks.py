"""What stems and mix carry besides sound: the recorder's clock, the loudness, and the places to hear as markers.

`bext` version 2 (EBU Tech 3285): description, TimeReference of session zero (so that stems and mix drop back on the
timeline), date and time of the source; in the mix its loudness too. `cue ` with `LIST adtl` (RIFF): the doubtful
places, each stem its own, the mix all of them.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from pathlib import Path

from leveller.audio import append_chunks
from leveller.bwf import Loudness, bext_chunk, cue_chunks
from leveller.listen import Place
from leveller.render.mix import Mix
from leveller.session import Session
from leveller.units import seconds_to_frames


def mark_files(work: Path, session: Session, mix: Mix, places: Sequence[Place]) -> None:
    """Append the chunks to every stem and to mix.wav below `work`."""
    for track in session.tracks:
        own = [place for place in places if place.track == track.name]
        _append(work / "stems" / f"{track.name}.wav", session, track.name, own, None)
    _append(work / "mix.wav", session, "mix", places, loudness_fields(mix))


def loudness_fields(mix: Mix) -> Loudness:
    """The loudness fields of `bext`; what has no value stays unset."""
    reading = mix.loudness
    values = (reading.integrated_lufs, reading.range_lu, mix.true_peak_dbtp, reading.max_momentary_lufs,
              reading.max_short_term_lufs)
    return Loudness(*(value if math.isfinite(value) else None for value in values))


def _append(path: Path, session: Session, name: str, places: Sequence[Place], loudness: Loudness | None) -> None:
    """The chunks of one file."""
    date, time = session.origination
    bext = bext_chunk(description=f"{session.title}, {name}", time_reference=session.time_reference, date=date,
                      time=time, loudness=loudness)
    append_chunks(path, [(b"bext", bext), *_cues(session, places)])


def _cues(session: Session, places: Sequence[Place]) -> list[tuple[bytes, bytes]]:
    """Markers in order of time."""
    if not places:
        return []
    rows = []
    for place in sorted(places, key=lambda p: (p.from_s, p.track)):
        frame = seconds_to_frames(place.from_s, session.rate_hz)
        length = seconds_to_frames(place.to_s, session.rate_hz) - frame
        rows.append((frame, length, f"{place.track}: {place.decided} or {place.could_be}? {place.reason}"))
    return cue_chunks(rows)
