"""The records all reports are made from: delivery, mix, voices, faults, and what is left open.

Levels in LUFS are K-weighted (ITU-R BS.1770-5); times in seconds of session time. Each field that is a number says its
name, unit and rounding once, by `quantity`.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Any, Protocol

from leveller.measure.loudness import Loudness
from leveller.report.quantities import quantity

if TYPE_CHECKING:
    from collections.abc import Mapping
    from pathlib import Path

    from leveller.render.mix import Mix
    from leveller.session import Session

Place = tuple[float, float]  # from, to in seconds
TWO_CHANNELS_LU = 3.01  # 10 log10 2: BS.1770-5 Annex 1 sums the channels' powers


class Run(Protocol):
    """What reports on a mix need of the run that made it: a session's result, or a finished cut."""

    @property
    def session(self) -> Session: ...
    @property
    def mix(self) -> Mix: ...
    @property
    def stems(self) -> str: ...
    @property
    def digests(self) -> Mapping[Path, str]: ...


@dataclass(frozen=True)
class DeliveryFigures:
    """What was asked for, and whether the mix is it."""

    name: str
    source: str
    met: bool
    why_not: str  # one sentence; empty where it is met
    target_lufs: float = quantity("target", "LUFS", 1, "integrated loudness that was asked for")
    ceiling_dbtp: float = quantity("ceiling", "dBTP", 1, "true peak that was asked for at most")


@dataclass(frozen=True, kw_only=True)
class LoudnessFigures:
    """What a file of sound reads, whatever it is."""

    channels: int
    rate_hz: int
    length_s: float = quantity("length", "s", 3, "from start to end")
    integrated_lufs: float = quantity("integrated", "LUFS", 2, "ITU-R BS.1770-5, both gates")
    two_channels_lufs: float | None = quantity(
        "on two channels", "LUFS", 2, "what a mono file reads when both loudspeakers play it: 3.01 LU more")
    range_lu: float = quantity("range", "LU", 1, "loudness range, EBU Tech 3342")
    max_short_term_lufs: float = quantity("short-term, most", "LUFS", 1, "loudest 3 s, EBU Tech 3341")
    max_short_term_s: float = quantity("short-term, most, at", "s", 2, "end of these 3 s")
    max_momentary_lufs: float = quantity("momentary, most", "LUFS", 1, "loudest 400 ms, EBU Tech 3341")
    max_momentary_s: float = quantity("momentary, most, at", "s", 2, "end of these 400 ms")
    true_peak_dbtp: float = quantity("true peak", "dBTP", 2, "ITU-R BS.1770-5, Annex 2")
    true_peak_s: float = quantity("true peak, at", "s", 2, "where it lies")


@dataclass(frozen=True, kw_only=True)
class FileReading(LoudnessFigures):
    """What one file reads that was given to `measure`."""

    file: str  # its name, with folders only where another file has the same one
    repaired_frames: int  # held NaN or Inf, silenced


@dataclass(frozen=True, kw_only=True)
class MixFigures(LoudnessFigures):
    """The mix as it was written."""

    speech_lufs: float | None = quantity("speech", "LUFS", 2, "while somebody speaks, one gate 25 dB under the mean")
    make_up_db: float = quantity("make-up gain", "dB", 2, "from the sum of the stems' plan to the target", signed=True)
    limiting_most_db: float = quantity("limiting, most", "dB", 1, "largest reduction by the limiter")
    limiting_most_s: float = quantity("limiting, most, at", "s", 2, "where it lies")
    limiting_total_s: float = quantity("limiting, in all", "s", 1, "time with more than 0.1 dB of reduction")
    limiting_heavy_pct: float = quantity("limiting over 3 dB", "%", 2, "share of the mix with more than 3 dB of it")


def loudness_figures(
    loudness: Loudness, *, true_peak_dbtp: float, true_peak_s: float, channels: int, rate_hz: int, length_s: float
) -> dict[str, Any]:
    """The fields of `LoudnessFigures` from what the meters read."""
    return {
        "channels": channels, "rate_hz": rate_hz, "length_s": length_s, "integrated_lufs": loudness.integrated_lufs,
        "two_channels_lufs": loudness.integrated_lufs + TWO_CHANNELS_LU if channels == 1 else None,
        "range_lu": loudness.range_lu,
        "max_short_term_lufs": loudness.max_short_term_lufs, "max_short_term_s": loudness.max_short_term_s,
        "max_momentary_lufs": loudness.max_momentary_lufs, "max_momentary_s": loudness.max_momentary_s,
        "true_peak_dbtp": true_peak_dbtp, "true_peak_s": true_peak_s,
    }


@dataclass(frozen=True)
class VoiceFigures:
    """One voice in its own microphone, before and after; *after* is its stem with make-up, before the limiter."""

    track: str
    speaks_s: float = quantity("speaks", "s", 1, "time in which the voice is decided to speak")
    before_lufs: float | None = quantity("own speech before", "LUFS", 1, "its speech alone, in the source")
    after_lufs: float | None = quantity("own speech after", "LUFS", 1, "its speech alone, in its stem")
    noise_before_lufs: float | None = quantity("noise before", "LUFS", 1, "median while nobody speaks, in the source")
    noise_after_lufs: float | None = quantity("noise after", "LUFS", 1, "median while nobody speaks, in its stem")
    bleed_before_db: float | None = quantity(
        "others before", "dB", 1, "level while only others speak against its own speech, in the source", signed=True)
    bleed_after_db: float | None = quantity(
        "others after", "dB", 1, "level while only others speak against its own speech, in its stem", signed=True)
    trim_db: float = quantity("trim", "dB", 1, "static gain, median over its speech", signed=True)
    trim_low_db: float = quantity("trim, least", "dB", 1, "it steps where a gain knob was turned", signed=True)
    trim_high_db: float = quantity("trim, most", "dB", 1, "it steps where a gain knob was turned", signed=True)
    ride_db: float = quantity("ride", "dB", 1, "furthest move of the slow ride", signed=True)
    compressor_db: float = quantity("compressor", "dB", 1, "deepest move of the compressor", signed=True)
    expander_db: float = quantity("closed", "dB", 1, "deepest move of the expander", signed=True)
    range_db: float = quantity("range", "dB", 1, "of the expander; what `auto` came to where it was auto")


@dataclass(frozen=True)
class OtherFigures:
    """A track that is no voice: room or bed."""

    track: str
    role: str
    gain_db: float = quantity("gain", "dB", 1, "constant gain, as the session says, before make-up", signed=True)


@dataclass(frozen=True)
class Fault:
    """Something about a source that an editor should know."""

    kind: str  # one of `faults.KINDS`
    track: str  # empty for the session as a whole
    sentence: str
    places: tuple[Place, ...]


@dataclass(frozen=True)
class Report:
    """Everything reported of one run."""

    title: str
    delivery: DeliveryFigures
    mix: MixFigures
    voices: tuple[VoiceFigures, ...]
    others: tuple[OtherFigures, ...]
    faults: tuple[Fault, ...]
    left_open: tuple[str, ...]  # sentences: what was not done or not reached, and what to do about it
