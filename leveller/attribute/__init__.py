"""Measurements in, activity out: who speaks into which microphone, hop by hop, and how sure that is.

The story, each step a module:

1. `tone`      leave out line-up tone and the stretches marked in the session file;
2. `floor`     the noise floor of every microphone and band; `tail`: how fast the room decays;
3. `seeds`     a few hops per person that are as good as certain, from arrival times or levels;
4. `coupling`  from the hops labelled so far: how much of every voice each microphone hears;
5. `bleed`     from the coupling: what the others explain at each microphone, and the evidence for own voice;
6. back to 4 with the hops in which one microphone clearly has its own voice and no other has, `ROUNDS` times;
7. `answers`   a few bands that stand out of the bleed for a quarter of a second: a short answer under another voice;
   `leads`: a microphone that clearly hears first has its own voice; `knocks`: sounds too short for a voice say nothing;
8. `decode`    evidence into states over time;
9. `knobs`     recording gains that were turned in the middle.

`lag` looks for voices that arrive late somewhere (a call, a clock of its own) before the first round.

Nothing here depends on how the recording gains were set. Voice activity is evidence, never a veto: it says from which
hops couplings may be learnt (6), and opens and closes nothing by itself.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import Any

import numpy as np
import numpy.typing as npt

from leveller.attribute.answers import with_answers
from leveller.attribute.bleed import CLIP, Evidence, Half, evidence_of
from leveller.attribute.coupling import NONE_DB, Coupling, estimate_coupling
from leveller.attribute.decode import margins
from leveller.attribute.floor import floor_of, noise_floor, quietest_db
from leveller.attribute.knobs import Step, knob_steps
from leveller.attribute.knocks import without_knocks
from leveller.attribute.lag import find_lags
from leveller.attribute.leads import with_leads
from leveller.attribute.seeds import NOBODY, Labels, first_labels, labels_by_level
from leveller.attribute.tail import tail_db_per_hop
from leveller.attribute.tone import steady_tone
from leveller.measure import Measurements
from leveller.measure.levels import STEP_DB, level_to_db, walked
from leveller.session import Session
from leveller.units import HOPS_PER_S, Bools, seconds_to_hops

ROUNDS = 3  # of couplings and evidence
CLEARLY_OWN = 0.6  # mean nats a band: this microphone has its own voice
CLEARLY_NOT = 0.2  # ... and this one has not
CLEARLY_AUDIBLE_DB = 6.0
KEPT_SEEDS = 0.5
HEARD_DB = 3.0  # mean over bands, over the noise: something sounds
NEAR_HOPS = 10

Grid = npt.NDArray[np.float32]


@dataclass(frozen=True)
class Activity:
    """Who speaks into which microphone."""

    own: Bools  # (hops, tracks) the microphone's own voice speaks
    bleed: Bools  # (hops, tracks) not own, and somebody else is heard
    margin: Grid  # (hops, tracks) nats in favour of own
    own_to_bleed_db: Grid  # (hops, tracks) level over predicted bleed plus noise
    audible_db: Grid  # (hops, tracks) level over noise, 0 .. 20
    floor_db: Grid  # (seconds, tracks, bands) noise
    coupling: Coupling
    programme: Bools  # (hops,) False in skipped stretches and steady tone
    score: Half  # (hops, tracks) nats a band for own voice, as far as levels say
    standing_out_db: Half  # (hops, tracks) `own_to_bleed_db` of the bands that stand out most
    bright_db: Half  # (hops, tracks) `own_to_bleed_db` of the high bands less that of the lowest
    steps: tuple[Step, ...] = ()  # recording gains that were turned


def attribute(m: Measurements, session: Session) -> Activity:
    """Decide for every microphone and hop whether its own voice speaks.

    Tracks with another role than `voice` take no part; they have neither own voice nor bleed.
    """
    tone = steady_tone(m.levels)
    programme = ~tone & ~_skipped(m.hops, session)
    voices = [i for i, track in enumerate(session.tracks) if track.role == "voice"]
    if not voices:
        return _nobody(m, programme)
    found = _decided(m.of_tracks(voices), programme)
    return found if len(voices) == len(session.tracks) else _spread_out(found, voices, noise_floor(m.levels))


def _decided(m: Measurements, programme: Bools) -> Activity:
    """The story above, over voice tracks only."""
    quiet_db = quietest_db(m.levels)
    floor_db = floor_of(quiet_db)
    audible_db = _audible(m, floor_db)
    tail = tail_db_per_hop(m.levels, floor_db)
    lags = find_lags(audible_db, labels_by_level(m, audible_db, programme))
    labels = seeds = first_labels(m, audible_db, programme)
    del audible_db  # 4 bytes a hop and track, as is all that is freed here
    near_voice = programme[:, None] & _near(m.voiced)
    for _ in range(ROUNDS - 1):
        coupling = estimate_coupling(m.levels, floor_db, labels, lags)
        labels = _relabelled(evidence_of(m.levels, floor_db, coupling, tail_db_per_hop=tail), near_voice, seeds)
    coupling = estimate_coupling(m.levels, floor_db, labels, lags)
    evidence = evidence_of(m.levels, floor_db, coupling, tail_db_per_hop=tail, details=True)
    evidence = replace(evidence, own=with_answers(evidence, programme))
    voice = without_knocks(with_leads(evidence, m.arrivals, coupling), m.levels)
    voice[~programme] = 0
    margin = margins(voice)
    del voice
    own = (margin > 0) & _near(evidence.audible_db > HEARD_DB)
    return Activity(
        own=own, bleed=_bleed(own, evidence), margin=margin, own_to_bleed_db=evidence.own_to_bleed_db,
        audible_db=evidence.audible_db, floor_db=floor_db, coupling=coupling, programme=programme,
        score=evidence.score.astype(np.float16), standing_out_db=evidence.standing_out_db,
        bright_db=evidence.bright_db,
        steps=tuple(knob_steps(quiet_db, level_to_db(m.voice_levels), own)))


def _nobody(m: Measurements, programme: Bools) -> Activity:
    """A session without a single voice track."""
    hops, tracks, bands = m.levels.shape
    nothing, level = np.zeros((hops, tracks), np.bool_), np.zeros((hops, tracks), np.float32)
    half = np.zeros((hops, tracks), np.float16)
    coupling = Coupling(np.full((1, tracks, tracks, bands), NONE_DB, np.float32), np.zeros(tracks, np.int64))
    return Activity(
        own=nothing, bleed=nothing, margin=level - CLIP, own_to_bleed_db=level, audible_db=level,
        floor_db=noise_floor(m.levels), coupling=coupling, programme=programme, score=half, standing_out_db=half,
        bright_db=half)


def _spread_out(found: Activity, voices: list[int], floor_db: Grid) -> Activity:
    """The same activity with columns for the tracks that are not voices."""
    hops, tracks = len(found.own), floor_db.shape[1]

    def wide(grid: npt.NDArray[Any], fill: float) -> npt.NDArray[Any]:
        out = np.full((hops, tracks), fill, grid.dtype)
        out[:, voices] = grid
        return out

    local = np.full((len(found.coupling.local_db), tracks, tracks, floor_db.shape[2]), NONE_DB, np.float32)
    local[:, np.array(voices)[:, None], voices] = found.coupling.local_db
    heard = np.zeros(tracks, np.int64)
    heard[voices] = found.coupling.heard_hops
    return Activity(
        own=wide(found.own, False), bleed=wide(found.bleed, False), margin=wide(found.margin, -CLIP),
        own_to_bleed_db=wide(found.own_to_bleed_db, 0), audible_db=wide(found.audible_db, 0), floor_db=floor_db,
        coupling=Coupling(local, heard), programme=found.programme,
        score=wide(found.score, 0), standing_out_db=wide(found.standing_out_db, 0), bright_db=wide(found.bright_db, 0),
        steps=tuple(replace(step, track=voices[step.track]) for step in found.steps))


def _near(flags: Bools) -> Bools:
    """Flags widened by `NEAR_HOPS` either way along the first axis: a word's soft end belongs to the word."""
    out = np.empty_like(flags)
    for track in range(flags.shape[1]):  # one by one: a sum takes four bytes a hop
        total = np.cumsum(np.pad(flags[:, track], (NEAR_HOPS + 1, NEAR_HOPS)), dtype=np.int32)
        out[:, track] = total[2 * NEAR_HOPS + 1 :] > total[: -2 * NEAR_HOPS - 1]
    return out


def _skipped(hops: int, session: Session) -> Bools:
    """Hops inside a marked stretch."""
    out = np.zeros(hops, np.bool_)
    for skip in session.skips:
        out[seconds_to_hops(skip.from_s) : seconds_to_hops(skip.to_s)] = True
    return out


def _audible(m: Measurements, floor_db: Grid) -> Grid:
    """Mean over bands of level over noise, clipped to 0 .. 20 dB, second by second to stay small."""
    out = np.zeros(m.levels.shape[:2], np.float32)
    for second, rows in enumerate(walked(m.levels, HOPS_PER_S)):
        over = m.levels[rows].astype(np.float32) * np.float32(STEP_DB) - floor_db[second]
        out[rows] = np.clip(over, 0, 20).mean(axis=2)
    return out


def _relabelled(evidence: Evidence, voiced: Bools, seeds: Labels) -> Labels:
    """Hops in which one microphone clearly has its own voice, voice activity agrees, and all others clearly have not.

    A person of whom this finds less than the seeds did keeps the seeds: microphones that hear everybody almost alike
    have no clear hops.
    """
    best = evidence.score.argmax(axis=1)
    rows = np.arange(len(best))
    clear = (evidence.score[rows, best] > CLEARLY_OWN) & (evidence.audible_db[rows, best] > CLEARLY_AUDIBLE_DB)
    if evidence.score.shape[1] > 1:
        clear &= np.partition(evidence.score, -2, axis=1)[:, -2] < CLEARLY_NOT
    labels = np.where(clear & voiced[rows, best], best, NOBODY).astype(np.int16)
    for person in range(evidence.score.shape[1]):
        if np.count_nonzero(labels == person) < KEPT_SEEDS * np.count_nonzero(seeds == person):
            labels[(seeds == person) & (labels == NOBODY)] = person
    return labels


def _bleed(own: Bools, evidence: Evidence) -> Bools:
    """Not own, and somebody else's voice is decided or audible here."""
    others = own.sum(axis=1, dtype=np.int16)[:, None] > own
    return np.asarray(~own & (others | (evidence.audible_db > HEARD_DB)))
