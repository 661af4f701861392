"""What tests/reliability.py measures: `sure` keeps its word, and voices stand out more clearly after the expander."""

from __future__ import annotations

import numpy as np
import pytest
from conditions import CONDITIONS, OURS, VOICE_SETS
from conversations import ConversationSpec, simulate
from reliability import BIN_NAMES, FIRST_SEED, Comb, Found, comb, found_in, listened, reliability, ripple_db, si_sdr_db
from scoring import Truth

from leveller.listen import Place

RIGHT_FROM_090 = 0.8  # share of what is called 0.9 to 0.95; two short sessions give a few hundred hops only
RIPPLE_6_DB = 9.54  # dB of two paths 6.02 dB apart: 20 log10(1.5 / 0.5)
SURE_090, SURE_099 = BIN_NAMES.index("0.9 to 0.95"), BIN_NAMES.index("over 0.99")


@pytest.fixture(scope="module")
def both() -> list[Found]:
    """One session each of a voice in a live room and of people with lapel microphones."""
    wanted = [next(c for c in CONDITIONS if c.name == name) for name in ("live room 0.6", "lapels 0.3")]
    return [found_in(c, 0, seed=FIRST_SEED, voices=VOICE_SETS["dev"]) for c in wanted]


def test_sure_keeps_its_word(both: list[Found]) -> None:
    """Of the hops called 0.9 to 0.95, at least four in five are right; of those over 0.99, nearly all."""
    called, right = sum(f.called for f in both).sum(axis=0), sum(f.right for f in both).sum(axis=0)
    assert called[SURE_090] > 100
    assert right[SURE_090] / called[SURE_090] >= RIGHT_FROM_090
    assert right[SURE_099] / called[SURE_099] >= 0.98


def test_voices_stand_out_more(both: list[Found]) -> None:
    """SI-SDR rises by at least 3 dB, and no more than true segments allow."""
    for found in both:
        assert 3 < found.better_db[OURS] < found.better_db["true segments"] + 2


def test_comb_ripple_falls(both: list[Found]) -> None:
    """The sum of the microphones is less of a comb filter after the expander."""
    for found in both:
        assert found.comb.after_db < found.comb.before_db / 2


def test_ripple_of_two_paths() -> None:
    """Half the amplitude gives 9.5 dB, more or less of it the same, and alike paths the most that is told."""
    assert ripple_db(np.array([-6.02, 6.02, -200.0])) == pytest.approx([RIPPLE_6_DB, RIPPLE_6_DB, 0.0], abs=0.01)
    assert ripple_db(np.array([0.0])) == pytest.approx(20 * np.log10(1.99 / 0.01))


def truth(own_db: float, bleed_db: float, *, hops: int = 400) -> Truth:
    """Person 0 alone speaks in the first half, person 1 in the second."""
    first = np.arange(hops) < hops // 2
    heard = np.stack([first, ~first], axis=1)
    return Truth(np.where(heard, own_db, -np.inf), np.where(heard, -np.inf, bleed_db), heard, heard, ~heard)


def test_comb_of_known_levels() -> None:
    """Bleed 6 dB under the voice: 9.5 dB with both open, and that of 24 dB once it is 18 dB down."""
    made = truth(-20.0, -26.02)
    cut_db = np.where(made.heard, 0.0, 18.0)
    assert comb(cut_db, made) == Comb(*[pytest.approx(x, abs=0.01, nan_ok=True) for x in (
        RIPPLE_6_DB, 1.09, 0.0, np.nan, np.nan)])
    assert comb(np.zeros_like(cut_db), made).two_open_pct == 100


def test_reliability_counts() -> None:
    """Hops fall into the bin of their sureness, and right is what the truth says."""
    made = truth(-20.0, -40.0)
    own = made.heard.copy()
    own[:100, 0] = False
    sure = np.where(own, 1.0, 0.92)
    called, right = reliability(own, sure, made)
    assert called[1].tolist() == [0, 0, 0, 0, 300]
    assert right[1].tolist() == [0, 0, 0, 0, 300]
    assert called[0].tolist() == [0, 0, 500, 0, 0]
    assert right[0].tolist() == [0, 0, 400, 0, 0]


def test_listened_counts() -> None:
    """Two lost words, one under a place of its own track; a place on another track names nothing."""
    made = truth(-20.0, -40.0)
    cut_db = np.where(made.heard, 0.0, 18.0)
    cut_db[20:40, 0] = cut_db[100:110, 0] = 18.0
    cut_db[150:155, 0] = 18.0  # too short for a word
    cut_db[160:162, 0] = 18.0  # too short for anything but wrong time
    places = [Place(0.1, 0.6, "a", "bleed", "own", "", 0.5), Place(0.9, 1.2, "b", "bleed", "own", "", 0.4)]
    found = listened(cut_db, places, ["a", "b"], made)
    assert (found.words.all, found.words.named) == (2, 1)
    assert (found.slivers.all, found.slivers.named) == (3, 1)
    assert (found.wrong_hops.all, found.wrong_hops.named) == (37, 20)
    assert (found.collared_hops.all, found.collared_hops.named) == (32, 15)  # the first 25 hops lie near an edge
    assert (found.asked_hops, found.hops) == (80, 400)
    assert 0 < found.words.random < 1


def test_si_sdr_is_that_of_the_definition() -> None:
    """Energy of the part that is own speech, scaled to fit, against that of the rest; nothing is cut."""
    made = simulate(ConversationSpec(seconds=5, rate_hz=16_000, people=2))
    for value, own, mic in zip(si_sdr_db(made, np.zeros((made.hops, 2))), made.own.T.astype(np.float64),
                               made.mics.T.astype(np.float64), strict=True):
        part = own * (mic @ own) / (own @ own)
        assert value == pytest.approx(10 * np.log10(np.sum(part**2) / np.sum((mic - part) ** 2)), abs=1e-3)
