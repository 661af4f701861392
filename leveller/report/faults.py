"""What an editor should know of the sources, with times, and what is left open after the run.

A fault never stops a run: it was repaired, left out or left as it is, and the sentence says which. `left_open` holds
what was not done or not reached, each with what to do about it.
"""

from __future__ import annotations

from collections.abc import Iterator
from typing import TYPE_CHECKING

import numpy as np
import numpy.typing as npt

from leveller.advice import DC_DBFS
from leveller.measure.peaks import PeakReading
from leveller.plan import CAUSES, PARTS, TrackGain
from leveller.plan.corrections import offset_nodes_db
from leveller.plan.levels import k_power, level_lufs
from leveller.plan.stretches import stretches
from leveller.report.quantities import shown
from leveller.report.records import Fault, Report
from leveller.suspects import warns_of_alignment
from leveller.units import HOPS_PER_S, Bools, db_to_gain, gain_to_db, seconds_to_hops

if TYPE_CHECKING:
    from leveller.pipeline import Result
    from leveller.report.records import VoiceFigures

NOT_LINED_UP = "not lined up"
KINDS = ("set aside", "note", NOT_LINED_UP, "skip", "tone", "silent", "nobody", "clipped", "over full scale", "DC",
         "repaired", "knob", "corrected", "bed")
SILENT_DBFS = -90.0  # a choice of ours: a track that never gets over the last bit of 16 carries nothing
HEAVY_LIMITING_DB = 6.0  # common practice, no source: more is heard on speech
KNOB_DB = 0.5  # a choice of ours: a smaller step is not worth a line
BED_UNDER_LU = 10.0  # a choice of ours: a bed nearer to speech than this makes words hard to follow

Grid = npt.NDArray[np.float32]


def faults_of(result: Result, voices: tuple[VoiceFigures, ...]) -> tuple[Fault, ...]:
    """All faults, the session's first, then by track."""
    return (*_session_faults(result), *_track_faults(result), *_bed_faults(result, voices))


def left_open(report: Report, result: Result) -> tuple[str, ...]:
    """Sentences on what was not done or not reached."""
    return (*mix_left_open(report), *_left_open(report, result))


def over_full_scale(name: str, peak_dbfs: float, at_s: float) -> Fault:
    """A file of floats whose peaks pass full scale."""
    return Fault("over full scale", name, f"{name}: peaks reach {peak_dbfs:+.1f} dBFS; the file holds floats, so "
                 "nothing is lost", ((at_s, at_s),))


def _session_faults(result: Result) -> Iterator[Fault]:
    """Set aside, notes, skipped stretches and steady tone."""
    session = result.session
    for aside in session.set_aside:
        yield Fault("set aside", aside.name, f"{aside.name}: set aside and not processed, {aside.why}", ())
    for note in session.notes:
        name = next((track.name for track in session.tracks if note.startswith(f"{track.name}: ")), "")
        yield Fault(NOT_LINED_UP if warns_of_alignment(note) else "note", name, note, ())
    marked = np.zeros(result.measurements.hops, np.bool_)
    for skip in session.skips:
        marked[seconds_to_hops(skip.from_s) : seconds_to_hops(skip.to_s)] = True
        why = f" ({skip.why})" if skip.why else ""
        yield Fault("skip", "", f"marked to be skipped{why}, so levelling does not count it",
                    ((skip.from_s, skip.to_s),))
    tone = stretches(~result.activity.programme & ~marked)
    if len(tone):
        places = tuple((int(a) / HOPS_PER_S, int(b) / HOPS_PER_S) for a, b in tone)
        yield Fault("tone", "", "steady tone, so levelling does not count it", places)


def _track_faults(result: Result) -> Iterator[Fault]:
    """What the meters found, and what the editor overruled, track by track."""
    for i, track in enumerate(result.session.tracks):
        yield from _corrected(result, track.name)
        peaks, repaired = result.measurements.peaks[i], result.measurements.repaired_frames[i]
        if repaired:
            yield Fault("repaired", track.name, f"{track.name}: {_count(repaired, 'sample')} that held no number "
                        "(NaN or Inf) silenced", ())
        if peaks.sample_peak_dbfs < SILENT_DBFS:
            yield Fault("silent", track.name, f"{track.name}: silent throughout", ())
            continue
        if track.role == "voice" and not result.activity.own[:, i].any():
            yield Fault("nobody", track.name, f"nobody speaks into {track.name}: it has no trim and stays closed "
                        "while others speak", ())
        padded = result.session.frames / track.frames  # the mean was taken over the padding too
        yield from _waveform_faults(track.name, peaks, padded)
        yield from _knob_faults(track.name, result.plan.tracks[i])


def _corrected(result: Result, name: str) -> Iterator[Fault]:
    """The corrections in force on a track, so that nobody wonders whether a file of them was taken."""
    places = tuple(sorted((c.from_s, c.to_s) for c in result.session.corrections if c.track == name))
    if places:
        yield Fault("corrected", name, f"{name}: {_count(len(places), 'correction')} of yours", places)


def _waveform_faults(name: str, peaks: PeakReading, padded: float) -> Iterator[Fault]:
    """Clipping, peaks over full scale, DC."""
    if peaks.clipped:
        yield Fault("clipped", name, f"{name}: clipped in {_count(len(peaks.clipped), 'place')}", peaks.clipped)
    if peaks.sample_peak_dbfs > 0:
        yield over_full_scale(name, peaks.sample_peak_dbfs, peaks.sample_peak_s)
    dc_dbfs = gain_to_db(max(map(abs, peaks.dc_offset)) * padded)
    if dc_dbfs > DC_DBFS:
        yield Fault("DC", name, f"{name}: DC offset of {dc_dbfs:.0f} dBFS, left as it is; high_pass_hz = 20 for this "
                    "track removes it", ())


def _knob_faults(name: str, gain: TrackGain) -> Iterator[Fault]:
    """Places where the trim steps, since the recording gain did; a step that the editor made is none."""
    trim, by_hand = gain.parts_cdb[:, PARTS.index("auto_trim")], gain.cause == CAUSES.index("edit")
    for row, after in stretches((np.diff(trim) != 0) & ~by_hand[:-1] & ~by_hand[1:]):
        step_db = int(trim[after] - trim[row]) / 100
        if abs(step_db) >= KNOB_DB:
            place = (int(gain.hop[row]) / HOPS_PER_S, int(gain.hop[after]) / HOPS_PER_S)
            yield Fault("knob", name, f"{name}: its recording gain was turned, so its trim steps by {step_db:+.1f} dB",
                        (place,))


def _bed_faults(result: Result, voices: tuple[VoiceFigures, ...]) -> Iterator[Fault]:
    """Beds that lie too near to speech, both as they are in the mix."""
    speech = [voice.after_lufs for voice in voices if voice.after_lufs is not None]
    spoken: Bools = np.asarray(result.activity.own.any(axis=1))
    for i, track in enumerate(result.session.tracks):
        if track.role != "bed" or not speech:
            continue
        gain_db = result.plan.tracks[i].gain_cdb[0] / 100 + result.mix.make_up_db
        level = level_lufs(_bed_power(result, i) * np.float32(db_to_gain(gain_db) ** 2), spoken)
        under = None if level is None else float(np.mean(speech)) - level
        if under is not None and under < BED_UNDER_LU:
            yield Fault("bed", track.name, f"{track.name}: this bed lies {_apart(under)} speech while somebody speaks, "
                        f"less than {BED_UNDER_LU:g} LU under it; lower its trim_db", ())


def _bed_power(result: Result, i: int) -> Grid:
    """K-weighted power of a bed; a stereo one was measured as the mean of its channels, half of what they sum to."""
    wide = result.session.tracks[i].width == 2 and result.mix.channels == 2
    return k_power(result.measurements, i) * np.float32(2.0 if wide else 1.0)


def _left_open(report: Report, result: Result) -> Iterator[str]:
    """The sentences one by one."""
    if report.voices and not result.activity.own.any():
        yield ("no voice was found: nothing was matched and every microphone stays open; the make-up gain is all that "
               "was done")
    for voice in report.voices:
        if voice.speaks_s and voice.before_lufs is None:
            yield f"{voice.track}: only {voice.speaks_s:.1f} s of speech, too little to match its level"
    limit_db = result.session.settings.trim.most_db
    for voice in report.voices:
        if voice.before_lufs is not None and _most_trim_db(result, voice.track) >= limit_db > 0:
            yield f"{voice.track}: needs more than the {limit_db:g} dB of trim that trim.most_db allows"
    for stage in ("expander", "trim", "ride", "compressor"):
        if not getattr(result.session.settings, stage).enabled:
            yield f"{stage}.enabled is off: this stage was left out"


def _most_trim_db(result: Result, name: str) -> float:
    """The furthest that levelling itself trims a track, without what the editor added."""
    i = next(k for k, track in enumerate(result.session.tracks) if track.name == name)
    gain = result.plan.tracks[i]
    added_db = offset_nodes_db(result.session, i, result.measurements.hops)[gain.hop]
    trim_db = gain.parts_cdb[:, PARTS.index("auto_trim")] / 100 - added_db
    return float(np.abs(trim_db[gain.cause != CAUSES.index("edit")]).max(initial=0.0))


def mix_left_open(report: Report) -> Iterator[str]:
    """What the mix does not reach, and what it costs."""
    if not report.delivery.met:
        yield report.delivery.why_not
    if report.mix.limiting_most_db > HEAVY_LIMITING_DB:
        most, at = shown(report.mix, "limiting_most_db", unit=True), shown(report.mix, "limiting_most_s")
        yield (f"the limiter takes up to {most} (at {at}), and more than {HEAVY_LIMITING_DB:g} dB is heard: listen "
               "there, or choose a lower target")


def _apart(under: float) -> str:
    """'3.0 LU under' or '2.0 LU over'."""
    return f"{abs(under):.1f} LU {'under' if under >= 0 else 'over'}"


def _count(number: int, what: str) -> str:
    """'1 place', '2 places'."""
    return f"{number} {what}{'' if number == 1 else 's'}"
