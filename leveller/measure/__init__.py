"""Blocks of audio in, numbers per hop out: the only pass over the sources before anything is decided.

Each meter is one module with `push(block)` and `result()`, gives the same answer at any block size, and knows
nothing of the others. `measure` walks all tracks block by block and hands each block to the meters; what it returns
is small (about 12 MB a track-hour) and everything after it is pure.

================  ==========================================================
`bands`           power in speech bands, K-weighted power, rumble, per hop
`voice`           voice activity (webrtcvad)
`arrival`         which microphone hears first (GCC-PHAT)
`peaks`           sample peak, DC, clipping; true peak
`loudness`        ITU-R BS.1770 loudness, EBU Tech 3342 range
================  ==========================================================
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace
from pathlib import Path

import numpy as np
import numpy.typing as npt

from leveller.audio import Resampler, TrackReader, open_readers
from leveller.lanes import walk
from leveller.measure.arrival import ArrivalMeter, Arrivals
from leveller.measure.bands import ANALYSIS_HZ, BANDS, BandMeter, bands_within
from leveller.measure.levels import SILENT, Levels, level_grid, release
from leveller.measure.peaks import PeakMeter, PeakReading
from leveller.measure.voice import VoiceMeter
from leveller.session import Session, Track
from leveller.units import Bools, frames_to_hops

BLOCK_S = 8.0
RELEASED_BLOCKS = 32  # between two times that written levels leave the memory
OnProgress = Callable[[str, float, float], None]  # stage, done, total (seconds of programme)


def no_progress(stage: str, done: float, total: float) -> None:
    """For those who do not ask."""


@dataclass(frozen=True)
class Measurements:
    """What is known of a session's sound, before any decision."""

    levels: Levels  # (hops, tracks, bands) power in dB / STEP_DB
    k_levels: Levels  # (hops, tracks) K-weighted power
    voice_levels: Levels  # (hops, tracks) the same over 180 Hz: no thumps, no plosives
    rumble: Levels  # (hops, tracks) 50 to 180 Hz
    voiced: Bools  # (hops, tracks) webrtcvad
    arrivals: Arrivals
    peaks: tuple[PeakReading, ...]  # per track
    repaired_frames: tuple[int, ...]  # per track: NaN or Inf silenced

    @property
    def hops(self) -> int:
        """Analysis steps in the session."""
        return len(self.k_levels)

    def without_bands(self) -> Measurements:
        """The same without the levels in bands: once it is known who speaks, nothing needs these 28 bytes a hop."""
        return replace(self, levels=self.levels[:0].copy())

    def of_tracks(self, tracks: list[int]) -> Measurements:
        """The same measurements for some of the tracks only."""
        if len(tracks) == self.levels.shape[1]:
            return self
        return Measurements(
            levels=self.levels[:, tracks], k_levels=self.k_levels[:, tracks],
            voice_levels=self.voice_levels[:, tracks], rumble=self.rumble[:, tracks], voiced=self.voiced[:, tracks],
            arrivals=self.arrivals.of_tracks(tracks), peaks=tuple(self.peaks[i] for i in tracks),
            repaired_frames=tuple(self.repaired_frames[i] for i in tracks))


def measure(
    session: Session, *, on_progress: OnProgress = no_progress, block_s: float = BLOCK_S, folder: Path | None = None
) -> Measurements:
    """One pass over all tracks of a session; a folder is where the levels of a long one may lie (`levels.level_grid`).

    Raises
    ------
    InputError
        when a source vanishes or shrinks while it is read.
    """
    frames = round(block_s * session.rate_hz)
    blocks = -(-session.frames // frames)
    grids = _Grids(session, folder)
    with open_readers(session) as readers:
        meters = [_TrackMeters(track, reader, session) for track, reader in zip(session.tracks, readers, strict=True)]
        arrival = ArrivalMeter(len(meters), session.frames / session.rate_hz)

        def step(lane: int, block: int) -> npt.NDArray[np.float32]:
            low = meters[lane].push(min(frames, session.frames - block * frames), last=block == blocks - 1)
            for rows in meters[lane].bands.take():
                grids.keep(lane, rows)
            return low

        with walk(step, lanes=len(meters), blocks=blocks) as rows:
            for block, row in enumerate(rows):
                arrival.push(row)
                if block % RELEASED_BLOCKS == 0:
                    release(grids.levels)
                on_progress("measure", min((block + 1) * frames, session.frames) / session.rate_hz,
                            session.frames / session.rate_hz)
        for lane, meter in enumerate(meters):
            grids.keep(lane, meter.bands.result())
        return _collected(meters, grids, arrival)


class _Grids:
    """What is kept a hop and track, filled as it comes; hops the resampler left out at the end are silent."""

    def __init__(self, session: Session, folder: Path | None) -> None:
        hops, tracks = frames_to_hops(session.frames, session.rate_hz), len(session.tracks)
        bands = max(1, min((bands_within(t.source_rate_hz) for t in session.tracks), default=BANDS))
        self.levels = level_grid((hops, tracks, bands), folder=folder)
        self.others = np.full((3, hops, tracks), SILENT, np.int16)
        self._at = [0] * tracks

    def keep(self, track: int, rows: Levels) -> None:
        """Write rows of the band meter behind those before."""
        hops, bands = len(self.levels), self.levels.shape[2]
        place = slice(self._at[track], min(self._at[track] + len(rows), hops))
        rows = rows[: place.stop - place.start]
        self.levels[place, track] = rows[:, :bands]
        self.others[:, place, track] = rows[:, BANDS:].T
        self._at[track] = place.stop


class _TrackMeters:
    """The meters of one track behind its reader."""

    def __init__(self, track: Track, reader: TrackReader, session: Session) -> None:
        self.reader = reader
        self.peak = PeakMeter(session.rate_hz, track.width, float_source=track.is_float)
        self.bands = BandMeter()
        self.voice = VoiceMeter(track.loud_dbfs)
        self._to_analysis = Resampler(session.rate_hz, ANALYSIS_HZ)

    def push(self, frames: int, *, last: bool) -> npt.NDArray[np.float32]:
        """Read and measure the next frames; returns them at the analysis rate."""
        block = self.reader.read(frames)
        self.peak.push(block)
        one = block if block.ndim == 1 else block.mean(axis=1)
        low = self._to_analysis.push(one, last=last)
        self.bands.push(low)
        self.voice.push(low)
        return low


def _collected(meters: list[_TrackMeters], grids: _Grids, arrival: ArrivalMeter) -> Measurements:
    """All results on one hop grid."""
    voiced = np.zeros(grids.levels.shape[:2], np.bool_)
    for i, meter in enumerate(meters):
        flags = meter.voice.result()[: len(voiced)]
        voiced[: len(flags), i] = flags
    return Measurements(
        levels=grids.levels, k_levels=grids.others[0], voice_levels=grids.others[1], rumble=grids.others[2],
        voiced=voiced, arrivals=arrival.result(),
        peaks=tuple(m.peak.result() for m in meters), repaired_frames=tuple(m.reader.repaired_frames for m in meters))
