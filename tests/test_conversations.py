"""The simulator keeps its promises: acoustics, truth, determinism, shares, and the figures that judge."""

from __future__ import annotations

import dataclasses

import numpy as np
import pytest
import rooms
import scoring
import soundfile as sf
import sounds
from conversations import Conversation, ConversationSpec, overlap_share, script, simulate

INVERSE_DISTANCE_BAND_DB = 1.0
RT60_BAND = 0.25
FAST = ConversationSpec(rate_hz=16_000, seconds=40.0)


def fast(**changes: object) -> Conversation:
    """A short conversation at 16 kHz."""
    return simulate(dataclasses.replace(FAST, **changes))


@pytest.fixture(scope="module")
def plain() -> Conversation:
    return simulate(FAST)


def level_db(x: np.ndarray) -> float:
    return float(10 * np.log10(np.mean(np.square(x, dtype=np.float64)) + 1e-30))


def test_the_parts_add_up_to_what_the_microphones_record(plain):
    """mics = own + bleed + noise, sample by sample, as float32."""
    assert plain.mics.dtype == np.float32
    assert plain.mics.shape == (40 * 16_000, 3)
    assert np.array_equal(plain.mics, plain.own + plain.bleed + plain.noise)
    assert min(level_db(x) for x in (plain.own, plain.bleed, plain.noise)) > -100


def test_the_same_spec_gives_the_same_samples(plain):
    """Two runs of one spec agree in every sample and span, another seed does not."""
    again = simulate(FAST)
    assert again.mics.tobytes() == plain.mics.tobytes()
    assert (again.segments, again.breaths, again.events) == (plain.segments, plain.breaths, plain.events)
    assert fast(seed=2).mics.tobytes() != plain.mics.tobytes()


def test_without_walls_level_falls_by_the_inverse_distance_law():
    """An anechoic response is 20 log10 r softer at r metres, and r / 343 m/s late."""
    distances_m = (0.2, 0.5, 1.0, 3.0)
    mics = tuple(rooms.Microphone((1.0 + r, 2.0, 1.5)) for r in distances_m)
    room = rooms.Room((6.0, 4.0, 3.0), 0.0, ((1.0, 2.0, 1.5),), mics, (0,))
    response = rooms.responses(room, room.mouths[0])
    found_db = 10 * np.log10(np.sum(response**2, axis=0))
    assert found_db == pytest.approx([-20 * np.log10(r) for r in distances_m], abs=INVERSE_DISTANCE_BAND_DB)
    assert np.argmax(np.abs(response), axis=0) == pytest.approx([r / 343 * 16_000 for r in distances_m], abs=1)


@pytest.mark.parametrize("rt60_s", [0.3, 0.5, 0.8])
def test_reverberation_decays_within_the_time_asked_for(rt60_s):
    """RT60 from the slope between -5 and -25 dB of the backward integral (M. R. Schroeder, JASA 37(3), 1965)."""
    mic = rooms.Microphone((4.2, 3.1, 1.4))
    room = rooms.Room((6.2, 4.6, 2.9), rt60_s, ((1.3, 1.2, 1.6),), (mic,), (0,))
    energy = np.cumsum(rooms.responses(room, room.mouths[0])[::-1, 0] ** 2)[::-1]
    decay_db = 10 * np.log10(energy / energy[0])
    start, end = np.argmax(decay_db < -5), np.argmax(decay_db < -25)
    assert 3 * (end - start) / 16_000 == pytest.approx(rt60_s, rel=RT60_BAND)


def test_a_cardioid_hears_its_front_louder_than_its_back():
    """The same distance in front and behind differs by more than 15 dB without walls."""
    mic = rooms.Microphone((3.0, 2.0, 1.5), looks_at=(2.0, 2.0, 1.5))
    room = rooms.Room((6.0, 4.0, 3.0), 0.0, ((2.0, 2.0, 1.5), (4.0, 2.1, 1.5)), (mic,), (0, 0))
    front, back = (np.sum(rooms.responses(room, mouth) ** 2) for mouth in room.mouths)
    assert front > 30 * back


def test_lapels_hear_everybody_almost_alike():
    """The own voice leads the next loudest person by 3 to 6 dB on every lapel."""
    room = rooms.furnish("lapels", 4, np.random.default_rng(3), rt60_s=0.35)
    heard = [np.sum(rooms.responses(room, m, p) ** 2, axis=0) for p, m in enumerate(room.mouths)]
    heard_db = 10 * np.log10(np.array(heard))
    for mic in range(4):
        lead_db = heard_db[mic, mic] - max(heard_db[p, mic] for p in range(4) if p != mic)
        assert 3 <= lead_db <= 6


def test_short_answers_can_be_words():
    """All of them then last 0.25 to 0.8 s, 2 to 10 dB softer than speech, and are brighter than an "mm"."""
    def answers(spoken_answers: float) -> list[np.ndarray]:
        said = script(ConversationSpec(seconds=120.0, short_answers_per_min=20.0, spoken_answers=spoken_answers))
        return [s.dry for s in said if s.kind == "short answer"]

    def brightness(dry: np.ndarray) -> float:
        return float(np.mean(np.diff(dry) ** 2) / np.mean(dry**2))

    words, hums = answers(1.0), answers(0.0)
    assert min(len(words), len(hums)) > 5
    for dry in words:
        assert 0.25 <= len(dry) / sounds.RATE_HZ <= 0.8
        assert -11 < 20 * np.log10(sounds.active_level(dry)) < -1
    assert np.median([brightness(d) for d in words]) > 3 * np.median([brightness(d) for d in hums])


@pytest.mark.parametrize("share", [0.0, 0.12])
def test_the_share_of_overlapped_speech_is_about_what_was_asked_for(share):
    """Over four minutes the overlap lies within 4 percentage points of the spec."""
    said = script(ConversationSpec(seconds=240.0, overlap_share=share, short_answers_per_min=0.0))
    assert overlap_share(said) == pytest.approx(share, abs=0.04)


def test_each_person_gets_about_the_share_of_talk_asked_for():
    """Shares of 60, 36 and 4 % come out within 8 percentage points, the last one never silent."""
    spoken = script(ConversationSpec(seconds=240.0, shares=(0.60, 0.36, 0.04), short_answers_per_min=0.0))
    said = np.array([sum(len(s.dry) for s in spoken if s.person == p and s.kind == "phrase") for p in range(3)])
    assert said / said.sum() == pytest.approx([0.60, 0.36, 0.04], abs=0.08)
    assert said[2] > 16_000


def test_own_speech_lies_in_the_segments(plain):
    """Between segments, breaths, laughs and their decay, the own signal is 30 dB softer than inside."""
    for m, spans in enumerate(plain.segments):
        inside = scoring.mask(spans, plain.hops)
        others = [(e.from_s, e.to_s) for e in plain.events if e.mic == m and e.kind in ("laugh", "cough")]
        around = [(a - 0.02, b + 0.4) for a, b in [*spans, *plain.breaths[m], *others]]
        power = 10 ** (scoring.hop_levels_db(plain.own[:, m : m + 1], plain.rate_hz)[:, 0] / 10)
        outside = power[~scoring.mask(around, plain.hops)]
        assert 10 * np.log10(power[inside].mean() / max(outside.mean(), 1e-20)) > 30


def test_breaths_come_before_phrases_and_are_softer():
    """A breath ends 20 to 150 ms before a phrase by the same person, and lies 10 to 35 dB under it."""
    spoken = fast(seconds=120.0, noise_db=-80.0, overlap_share=0.0)
    assert sum(map(len, spoken.breaths)) >= 6
    for m, spans in enumerate(spoken.breaths):
        for a, b in spans:
            start, end = next(s for s in spoken.segments[m] if s[0] >= b)
            assert 0.02 < start - b < 0.15
            quiet, loud = (spoken.own[int(f * 16_000) : int(t * 16_000), m] for f, t in ((a, b), (start, end)))
            assert 10 < level_db(loud) - level_db(quiet) < 35


def test_gain_errors_and_knobs_move_all_parts_of_one_microphone():
    """A knob turned by 8 dB shifts own, bleed and noise of that microphone alone, from then on."""
    still = fast(gains_db=(0.0, 5.0, -5.0))
    turned = fast(gains_db=(0.0, 5.0, -5.0), knobs=((20.0, 8.0, (1,)),))
    for part in ("own", "bleed", "noise"):
        a, b = getattr(still, part), getattr(turned, part)
        assert np.array_equal(a[:, [0, 2]], b[:, [0, 2]])
        assert np.array_equal(a[: 20 * 16_000], b[: 20 * 16_000])
        assert level_db(b[21 * 16_000 :, 1]) - level_db(a[21 * 16_000 :, 1]) == pytest.approx(8.0, abs=0.01)


def test_empty_and_shared_microphones():
    """A spare track has bleed and no own speech; two people at one microphone share its segments."""
    spoken = fast(people=4, shared=1, empty=1)
    assert spoken.names == ("seat 1", "seat 2", "seat 3", "spare 4")
    assert not spoken.own[:, 3].any()
    assert spoken.segments[3] == []
    assert level_db(spoken.bleed[:, 3]) > -75
    assert spoken.placed.sits_at == (0, 1, 2, 2)


def test_mutes_latency_and_late_bleed():
    """A muted call is digital zero, a late track starts late, and the bleed of a call comes back late."""
    spoken = fast(mutes=((0, 10.0, 14.0),), latency_ms=((1, 50.0),), late_bleed_ms=((2, 300.0),))
    plain = fast()
    assert not spoken.mics[10 * 16_000 : 14 * 16_000, 0].any()
    assert spoken.mics[14 * 16_000 + 1000 :, 0].any()
    assert np.array_equal(spoken.mics[800:, 1], plain.mics[:-800, 1])
    assert np.allclose(spoken.bleed[4800:, 2], plain.bleed[:-4800, 2], atol=1e-6)
    assert np.array_equal(spoken.own[:, 2], plain.own[:, 2])


def test_what_happens_in_the_room_is_listed_and_heard():
    """Thumps, clicks, keys, a fan, a slate, whispers and moves each raise an event; the noise rises with the fan."""
    spoken = fast(slate_s=3.0, fan_from_s=20.0, thumps_per_min=6.0, clicks_per_min=6.0, keyboard=((8.0, 10.0),),
                  whisper_share=0.5, coughs_per_min=3.0, laughs_per_min=3.0, leans=((10.0, 30.0, 0),),
                  seat_changes=((25.0, 1),), knobs=((12.0, 3.0, (0,)),), hum_db=-50.0, rain_db=-50.0)
    kinds = {event.kind for event in spoken.events}
    assert kinds >= {"slate", "fan", "thump", "click", "keyboard", "whisper", "cough", "laugh", "lean", "seat", "knob"}
    assert min(a for spans in spoken.segments for a, _ in spans) > 4.0
    before, after = spoken.noise[12 * 16_000 : 19 * 16_000, 1], spoken.noise[24 * 16_000 :, 1]
    assert np.percentile(np.abs(after), 50) > 2 * np.percentile(np.abs(before), 50)
    for event in (e for e in spoken.events if e.kind == "thump"):
        at, size = int(event.from_s * 16_000), 1600
        thump, quiet = (spoken.noise[t : t + size] for t in (at, at - 2 * size))
        assert np.abs(thump).max() > 3 * np.abs(quiet).max()


def test_leaning_back_makes_the_own_voice_softer():
    """While a person leans back, the own microphone hears it 3 to 12 dB softer and nobody else changes."""
    still, leant = fast(gain_error_db=0.0), fast(gain_error_db=0.0, leans=((0.0, 40.0, 1),))
    assert 3 < level_db(still.own[:, 1]) - level_db(leant.own[:, 1]) < 12
    assert np.array_equal(still.own[:, [0, 2]], leant.own[:, [0, 2]])


@pytest.mark.parametrize(("room", "people"), [("lapels", 3), ("far table", 3), ("desk", 2), ("panel", 6)])
def test_every_kind_of_room_makes_a_conversation(room, people):
    """Everybody speaks, and no microphone clips."""
    spoken = fast(room=room, people=people)
    assert len(spoken.names) == people
    assert all(spoken.segments)
    assert np.abs(spoken.mics).max() < 1


def test_written_are_the_microphones_and_nothing_else(plain, tmp_path):
    """One 24 bit file a microphone at the rate of the spec, equal to the samples within half a step."""
    paths = plain.write(tmp_path / "session")
    assert sorted((tmp_path / "session").iterdir()) == sorted(paths)
    assert [path.stem for path in paths] == list(plain.names)
    for m, path in enumerate(paths):
        samples, rate_hz = sf.read(path, dtype="float32")
        assert (rate_hz, sf.info(path).subtype) == (16_000, "PCM_24")
        assert np.abs(samples - plain.mics[:, m]).max() <= 2.0**-23


def test_other_rates_hold_the_same_conversation(plain):
    """At 48 kHz the truth is the same and the levels agree within 0.2 dB."""
    wide = simulate(dataclasses.replace(FAST, rate_hz=48_000))
    assert (wide.segments, wide.events) == (plain.segments, plain.events)
    assert level_db(wide.own) == pytest.approx(level_db(plain.own), abs=0.2)


def test_held_out_voices_are_nobody_of_the_dev_set():
    """The two sets share no recording, and every recording is listed with its set in SOURCES.md."""
    assert not set(sounds.DEV) & set(sounds.HELD_OUT)
    listed = {}
    for line in (sounds.VOICES / "SOURCES.md").read_text(encoding="utf-8").splitlines():
        if ".flac |" in line:
            name, group = (cell.strip() for cell in line.split("|")[1:3])
            listed[name.removesuffix(".flac")] = group
    assert sorted(listed) == sorted(path.stem for path in sounds.VOICES.glob("*.flac"))
    assert all(listed[name] == "dev" for name in sounds.DEV)
    assert all(listed[name] == "held-out" for name in sounds.HELD_OUT)


def test_open_microphones_lose_nothing_and_closed_ones_everything(plain):
    """A cut of 0 dB scores 0 / 0 / 0 / 0, bleed open; one of 18 dB loses all and cuts bleed by 18 dB."""
    shape = (plain.hops, 3)
    opened, closed = (scoring.figures(np.full(shape, cut), plain) for cut in (0.0, 18.0))
    assert dataclasses.astuple(opened) == (0, 0, 0, 0, 0, 100, 0)
    assert (closed.lost_pct, closed.onset_bad_pct, closed.tail_bad_pct, closed.open_pct) == (100, 100, 100, 0)
    assert closed.bleed_cut_db == pytest.approx(18)
    assert closed.breath_bad_pct == 0


def test_a_late_opening_is_found_at_the_onsets(plain):
    """True segments opened 100 ms too late clip nearly every onset and no tail; in time, none."""
    opened = [scoring.mask([(a + 0.1, b + 0.2) for a, b in spans], plain.hops) for spans in plain.segments]
    late = scoring.figures(np.where(np.stack(opened, axis=1), 0.0, 18.0), plain)
    assert late.onset_bad_pct > 80
    assert late.tail_bad_pct == 0
    assert scoring.figures(scoring.true_segments(plain), plain).onset_bad_pct == 0


def test_the_reference_methods_rank_as_the_truth_demands(plain):
    """True segments lose nothing; voice activity leaves bleed open; a fixed gate clips onsets."""
    found = {f.__name__: scoring.figures(f(plain), plain) for f in (
        scoring.true_segments, scoring.fixed_gate, scoring.voice_activity, scoring.gain_sharing)}
    assert found["true_segments"].lost_pct == 0
    assert found["true_segments"].bleed_cut_db > 15
    assert found["voice_activity"].open_pct > 60
    assert found["fixed_gate"].onset_bad_pct > 5
    assert found["gain_sharing"].bleed_cut_db > 5


def test_gain_sharing_gains_add_up_to_one(plain):
    """Powers of the gains sum to 1 in every hop that is not silent (JAES 23, 1975)."""
    assert np.sum(10 ** (-scoring.gain_sharing(plain) / 10), axis=1) == pytest.approx(1.0)


def test_spread_sees_a_gain_and_its_correction(plain):
    """Levels found by pushing the voices 100 dB apart bring the spread to 0, and then 6 dB on one voice give 6 dB."""
    def spread(*gains_db: float) -> float:
        return scoring.spread_db(np.tile(gains_db, (plain.hops, 1)), plain)

    second, third = spread(0, 200, 100) - 200, spread(0, 100, 200) - 200
    assert spread(0, 0, 0) > 1
    assert spread(0, -second, -third) == pytest.approx(0, abs=1e-6)
    assert spread(0, 6 - second, -third) == pytest.approx(6)


def test_csv_error_is_zero_for_the_truth_and_grows_with_a_lie(plain):
    """Stems made by a stepwise gain agree with it whatever the make-up gain; 1 dB off for 2 % of the hops is found."""
    gain_db = np.repeat(np.random.default_rng(1).uniform(-18, 0, (plain.hops // 10, 3)), 10, axis=0)
    frames = np.repeat(10 ** ((gain_db + 3.0) / 20), 160, axis=0)
    stems = plain.mics[: len(frames)] * frames
    assert scoring.csv_error_db(gain_db, stems, plain) < 0.001
    lie = gain_db.copy()
    lie[: plain.hops // 50] += 1.0
    assert scoring.csv_error_db(lie, stems, plain) == pytest.approx(1.0, abs=0.01)
