"""leveller.report.figures: what is reported is what the files hold, and every fault is said with its time."""

from __future__ import annotations

import dataclasses
import math
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import pytest
import runs
import soundfile
from conversations import Conversation, ConversationSpec

from leveller.measure.loudness import LoudnessMeter, power_to_lufs
from leveller.pipeline import Result
from leveller.reading import measure_files
from leveller.report.faults import KINDS, mix_left_open
from leveller.report.figures import figures_of
from leveller.report.quantities import quantities, quantity, rounded, shown
from leveller.report.records import Fault, MixFigures, Report, VoiceFigures

TWO_CHANNELS_LU = 10 * math.log10(2)  # ITU-R BS.1770-5 Annex 1: powers of the channels are summed
DECIDED_DB = 1.0  # speech as decided against speech as simulated: edges and pauses within phrases
ROUNDED_24 = 5e-6  # dB: half a 24-bit step at -6 dBFS is 1e-6, and an interpolator's taps add up to less than 4
ROUNDING_LU = 0.01


@pytest.fixture(scope="module")
def ran(tmp_path_factory: pytest.TempPathFactory) -> tuple[Conversation, Result, Report]:
    """Two people at two microphones, levelled."""
    folder = tmp_path_factory.mktemp("figures")
    conversation, _ = runs.written(folder / "talk")
    result = runs.run(folder / "talk", folder / "out")
    return conversation, result, figures_of(result)


def k_cells(x: np.ndarray) -> np.ndarray:
    """K-weighted power per 10 ms."""
    meter = LoudnessMeter(runs.RATE_HZ, 1)
    meter.push(x)
    return meter.cells()


def spoken(conversation: Conversation, track: int, count: int) -> np.ndarray:
    """Hops in which somebody says a phrase into a microphone, by the simulation."""
    out = np.zeros(count, np.bool_)
    for a, b in conversation.segments[track]:
        out[round(a * 100) : round(b * 100)] = True
    return out


def faults(report: Report, kind: str) -> list[Fault]:
    """Faults of one kind."""
    assert kind in KINDS
    return [fault for fault in report.faults if fault.kind == kind]


def test_mix_reads_as_its_file(ran: tuple[Conversation, Result, Report]) -> None:
    """Every reading of the mix is that of mix.wav as `measure` reads it."""
    _, result, report = ran
    reading = measure_files([result.out / "mix.wav"])[0]
    for name in quantities(reading):
        assert getattr(report.mix, name) == pytest.approx(getattr(reading, name), abs=ROUNDED_24), name
    assert report.delivery.met
    assert abs(report.mix.integrated_lufs - report.delivery.target_lufs) <= 0.1
    assert report.mix.two_channels_lufs == pytest.approx(report.mix.integrated_lufs + TWO_CHANNELS_LU, abs=ROUNDING_LU)


def test_speech_before_is_that_of_the_simulation(ran: tuple[Conversation, Result, Report]) -> None:
    """Own speech before is the level of what was said, and others before that of what spilled, within a decibel."""
    conversation, _, report = ran
    cells = [k_cells(conversation.mics[:, i]) for i in (0, 1)]
    for i, other in ((0, 1), (1, 0)):
        own, others = (spoken(conversation, k, len(cells[i])) for k in (i, other))
        speech = power_to_lufs(cells[i][own & ~others].mean())
        bleed = power_to_lufs(cells[i][others & ~own].mean())
        assert report.voices[i].before_lufs == pytest.approx(speech, abs=DECIDED_DB)
        assert report.voices[i].bleed_before_db == pytest.approx(bleed - speech, abs=2 * DECIDED_DB)


def test_after_is_read_from_the_stems(ran: tuple[Conversation, Result, Report]) -> None:
    """Own speech after is the level in the stem; all voices are alike; bleed and noise are as the stem has them."""
    conversation, result, report = ran
    levels = [voice.after_lufs for voice in report.voices]
    assert max(levels) - min(levels) < 0.2
    for i, voice in enumerate(report.voices):
        stem, _ = soundfile.read(result.out / "stems" / f"{voice.track}.wav", dtype="float32")
        cells = k_cells(stem)
        own, others = (spoken(conversation, k, len(cells)) for k in (i, 1 - i))
        speech, bleed = (power_to_lufs(cells[where].mean()) for where in (own & ~others, others & ~own))
        assert voice.after_lufs == pytest.approx(speech, abs=DECIDED_DB)
        assert voice.bleed_after_db == pytest.approx(bleed - speech, abs=2 * DECIDED_DB)
        assert voice.bleed_after_db < voice.bleed_before_db - 3
        assert voice.expander_db == pytest.approx(-voice.range_db, abs=0.1)


def test_nobody_speaks_into_it(tmp_path: Path) -> None:
    """A microphone that nobody speaks into is named, and has no own speech to report."""
    spec = dataclasses.replace(runs.SPEC, empty=1, gains_db=(0.0, 0.0, 0.0))
    runs.written(tmp_path / "talk", spec)
    report = figures_of(runs.run(tmp_path / "talk", tmp_path / "out"))
    assert [(f.track, f.sentence) for f in faults(report, "nobody")] == [
        ("spare 3", "nobody speaks into spare 3: it has no trim and stays closed while others speak")]
    spare = report.voices[2]
    assert (spare.speaks_s, spare.before_lufs, spare.bleed_before_db, spare.trim_db) == (0.0, None, None, 0.0)


def test_faults_with_their_times(tmp_path: Path) -> None:
    """Clipping, DC, NaN, silence, a copy and a short track are each said once, where they are."""
    conversation, paths = runs.written(tmp_path / "talk")
    spoilt = conversation.mics[:, 0].copy()
    spoilt[5 * runs.RATE_HZ : 5 * runs.RATE_HZ + 20] = 1.0
    spoilt[12 * runs.RATE_HZ : 12 * runs.RATE_HZ + 20] = -1.0
    runs.save(paths[0], spoilt)
    other = conversation.mics[: 15 * runs.RATE_HZ, 1] + np.float32(0.01)
    other[100:103] = np.nan
    runs.save(paths[1], other, subtype="FLOAT")
    runs.save(tmp_path / "talk" / "zero.wav", np.zeros(20 * runs.RATE_HZ, np.float32))
    runs.save(tmp_path / "talk" / "seat 1 safety.wav", spoilt * 0.5)
    report = figures_of(runs.run(tmp_path / "talk", tmp_path / "out"))
    clipped = faults(report, "clipped")
    assert [fault.sentence for fault in clipped] == ["seat 1: clipped in 2 places"]
    assert np.allclose(clipped[0].places, [(5, 5.00125), (12, 12.00125)])
    assert [f.sentence for f in faults(report, "DC")] == [
        "seat 2: DC offset of -40 dBFS, left as it is; high_pass_hz = 20 for this track removes it"]
    assert [f.sentence for f in faults(report, "repaired")] == [
        "seat 2: 3 samples that held no number (NaN or Inf) silenced"]
    assert [f.sentence for f in faults(report, "silent")] == ["zero: silent throughout"]
    assert [f.sentence for f in faults(report, "set aside")] == [
        "seat 1 safety: set aside and not processed, a copy of seat 1"]
    assert [(f.track, f.sentence) for f in faults(report, "note")] == [
        ("seat 2", "seat 2: ends 5.000 s before the session, padded with silence")]
    assert not faults(report, "nobody"), "a silent track is not also one that nobody speaks into"


def test_tone_and_skips(tmp_path: Path) -> None:
    """A steady tone and a marked stretch are said with their times."""
    runs.written(tmp_path / "talk", ConversationSpec(seed=5, seconds=20, rate_hz=runs.RATE_HZ, people=2, slate_s=4.0,
                                                     gains_db=(0.0, 0.0)))
    (tmp_path / "talk" / "session.toml").write_text('[[skip]]\nfrom_s = 18\nto_s = 19.5\nwhy = "chat"\n')
    report = figures_of(runs.run(tmp_path / "talk", tmp_path / "out"))
    (tone,), (skip,) = faults(report, "tone"), faults(report, "skip")
    assert tone.places[0] == (pytest.approx(0, abs=0.5), pytest.approx(4, abs=0.7))
    assert skip.sentence == "marked to be skipped (chat), so levelling does not count it"
    assert skip.places == ((18.0, 19.5),)


def test_knob_and_bed(tmp_path: Path) -> None:
    """A knob turned in mid-session is said with its time and size; a bed too near to speech is warned of."""
    spec = ConversationSpec(seed=5, seconds=90, rate_hz=runs.RATE_HZ, people=2, gains_db=(0.0, 0.0),
                            knobs=((45.0, 8.0, (0,)),), noise_db=-36.0)
    runs.written(tmp_path / "talk", spec)
    runs.save(tmp_path / "talk" / "music.wav", runs.noise(90, level=0.05), subtype="FLOAT")
    (tmp_path / "talk" / "session.toml").write_text(
        '[[track]]\nfile = "seat 1.wav"\n[[track]]\nfile = "seat 2.wav"\n'
        '[[track]]\nfile = "music.wav"\nrole = "bed"\ntrim_db = -2\n')
    report = figures_of(runs.run(tmp_path / "talk", tmp_path / "out"))
    (knob,) = faults(report, "knob")
    assert knob.track == "seat 1"
    assert knob.places[0][0] == pytest.approx(45, abs=2)
    step_db = float(knob.sentence.split(" by ")[1].split()[0])
    assert step_db == pytest.approx(-8, abs=1.5)
    assert [(other.track, other.role, other.gain_db) for other in report.others] == [("music", "bed", -2.0)]
    (bed,) = faults(report, "bed")
    assert bed.sentence.startswith("music: this bed lies ")
    under = float(bed.sentence.split(" lies ")[1].split()[0]) * (1 if "LU under speech" in bed.sentence else -1)
    stem, _ = soundfile.read(tmp_path / "out" / "stems" / "music.wav", dtype="float32")
    assert under == pytest.approx(report.voices[0].after_lufs - power_to_lufs(k_cells(stem).mean()), abs=0.3)


def test_float_peaks_over_full_scale(tmp_path: Path) -> None:
    """A float source over full scale is said not to be clipped, with its peak and where it lies."""
    conversation, paths = runs.written(tmp_path / "talk")
    loud = conversation.mics[:, 0].copy()
    loud[7 * runs.RATE_HZ] = 2.0
    runs.save(paths[0], loud, subtype="FLOAT")
    report = figures_of(runs.run(tmp_path / "talk", tmp_path / "out"))
    (fault,) = faults(report, "over full scale")
    assert fault.sentence == "seat 1: peaks reach +6.0 dBFS; the file holds floats, so nothing is lost"
    assert fault.places == ((7.0, 7.0),)
    assert not faults(report, "clipped")


def test_heavy_limiting_is_warned_of(ran: tuple[Conversation, Result, Report]) -> None:
    """More than 6 dB of limiting stands in what is left open, with its time; 6 dB do not."""
    _, _, report = ran
    for most_db, count in ((6.0, 0), (6.1, 1)):
        mix = dataclasses.replace(report.mix, limiting_most_db=most_db, limiting_most_s=61.0)
        said = list(mix_left_open(dataclasses.replace(report, mix=mix)))
        assert said == ["the limiter takes up to 6.1 dB (at 0:01:01), and more than 6 dB is heard: listen there, or "
                        "choose a lower target"][:count]


def test_near_silence_says_why(tmp_path: Path) -> None:
    """A session without sound is not delivered; the reason and the missing voice stand in what is left open."""
    (tmp_path / "talk").mkdir()
    for name in ("A", "B"):
        runs.save(tmp_path / "talk" / f"{name}.wav", np.zeros(5 * runs.RATE_HZ, np.float32))
    report = figures_of(runs.run(tmp_path / "talk", tmp_path / "out"))
    assert not report.delivery.met
    assert report.left_open[0] == report.delivery.why_not
    assert "no sound over the -70 LUFS gate" in report.delivery.why_not
    assert any(sentence.startswith("no voice was found") for sentence in report.left_open)
    assert shown(report.mix, "integrated_lufs") == "-inf"
    assert rounded(report.mix, "integrated_lufs") is None


def test_stages_left_out_are_said(tmp_path: Path) -> None:
    """A stage that is switched off stands in what is left open."""
    runs.written(tmp_path / "talk")
    report = figures_of(runs.run(tmp_path / "talk", tmp_path / "out", settings={"expander.enabled": "off"}))
    assert "expander.enabled is off: this stage was left out" in report.left_open


def test_every_number_says_what_it_is() -> None:
    """Each number of a record has a name, a unit, a rounding and a meaning, and no two in a record share a name."""
    for record in (MixFigures, VoiceFigures):
        known = quantities(record)
        numbers = {f.name for f in dataclasses.fields(record) if "float" in str(f.type)}
        assert numbers == set(known)
        assert len({what.label for what in known.values()}) >= len(known) - 1
        assert all(what.unit and what.meaning and what.decimals >= 0 for what in known.values())


@dataclass(frozen=True)
class Sample:
    """A record with one quantity of each kind."""

    level: float | None = quantity("level", "dB", 1, "a level", signed=True)
    at_s: float = quantity("at", "s", 2, "a time")


@pytest.mark.parametrize(("level", "text", "number"), [
    (1.25, "+1.2", 1.2), (-0.04, "0.0", 0.0), (-3.06, "-3.1", -3.1), (None, "-", None), (-math.inf, "-inf", None)])
def test_rounding(level: float | None, text: str, number: float | None) -> None:
    """Text and stored number of a quantity agree; zero has no sign, silence and the unmeasured no number."""
    sample = Sample(level, 3725.999)
    assert (shown(sample, "level"), rounded(sample, "level")) == (text, number)
    assert number is None or math.copysign(1, rounded(sample, "level")) == (1 if number >= 0 else -1)
    assert (shown(sample, "at_s"), rounded(sample, "at_s")) == ("1:02:05", 3726.0)
