"""What an inspection found, as records: numbers with their units, and advice with the number that led to it.

Everything else about inspecting (finding, wording, drawing) works on these. Conventions: [k, m] = voice k at microphone
m; times are session times in seconds; what cannot be known is None, or nan inside a matrix; silence is -inf dB.
"""

from __future__ import annotations

import dataclasses
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from leveller.align import Alignment
from leveller.measure.hum import Hum

Matrix = npt.NDArray[np.float64]
Spans = tuple[tuple[float, float], ...]  # (from_s, to_s), ascending


@dataclass(frozen=True)
class RoomTone:
    """A stretch good for patching: nobody speaks, nothing knocks, the level stays by the floor."""

    from_s: float
    to_s: float
    level_lufs: float  # K-weighted
    swing_db: float  # 10th to 90th percentile of its level over 100 ms


@dataclass(frozen=True)
class TrackFindings:
    """One track by itself."""

    name: str
    role: str
    speaking_s: float  # own voice, heard over the noise
    own_share: float  # of the session, 0 .. 1
    voice_lufs: float | None  # K-weighted own speech; None: too little of it
    floor_lufs: float | None  # K-weighted noise in pauses; None: digital silence throughout
    peak_dbfs: float
    peak_s: float
    clipped: Spans
    dc_offset: float  # of full scale, the channel that is worst
    hum: Hum | None
    dropouts: Spans  # digital zero inside sound, up to half a second
    muted: Spans  # ... and longer
    silent: bool  # nothing but digital zero
    repaired_frames: int  # NaN or Inf, silenced
    room_tone: tuple[RoomTone, ...]  # best first


@dataclass(frozen=True)
class Advice:
    """One thing to do, or to know, and the number that led to it."""

    kind: str  # one of `advice.KINDS`
    track: str  # '' where it concerns the session
    value: float
    unit: str
    text: str


@dataclass(frozen=True)
class Inspection:
    """A session before anything is rendered."""

    title: str
    rate_hz: int
    length_s: float
    tracks: tuple[TrackFindings, ...]
    coupling_db: Matrix  # (tracks, tracks) voice k at microphone m against microphone k, gains as recorded
    bleed_db: Matrix  # (tracks, tracks) voice k against m's own voice at microphone m; recording gains cancel out
    delay_s: Matrix  # (tracks, tracks) how much later m hears voice k than k's own microphone
    correlation: Matrix  # (tracks, tracks) signed height of the correlation there
    late_s: tuple[float | None, ...]  # how late each track's clock runs against the first that shows it
    polarity: tuple[int | None, ...]  # +1 as most, -1 the other way round, None unknown
    tone: Spans  # steady tone, as for line-up
    set_aside: tuple[tuple[str, str], ...]  # (name, why)
    notes: tuple[str, ...]  # the session's own
    advice: tuple[Advice, ...] = ()
    alignment: tuple[Alignment, ...] = ()  # of the tracks as opened, where they were lined up; the rest is as aligned

    def of_voices(self) -> Inspection:
        """The same with the tracks alone that somebody may speak into: who sits at the table."""
        kept = [i for i, track in enumerate(self.tracks) if track.role == "voice"]
        grid = np.ix_(kept, kept)
        return dataclasses.replace(
            self, tracks=tuple(self.tracks[i] for i in kept), coupling_db=self.coupling_db[grid],
            bleed_db=self.bleed_db[grid], delay_s=self.delay_s[grid], correlation=self.correlation[grid],
            late_s=tuple(self.late_s[i] for i in kept), polarity=tuple(self.polarity[i] for i in kept))
