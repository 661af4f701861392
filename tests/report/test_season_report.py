"""leveller.report.season and its files: what stands out over a season, and how it is shown."""

from __future__ import annotations

import csv
import dataclasses
import io
import json
import re
from html.parser import HTMLParser

import pytest

from leveller.report.season import EpisodeFigures, Outcome, SeasonReport, SeasonVoice, season_report
from leveller.report.season_files import SEASON_COLUMNS, season_csv, season_json
from leveller.report.season_page import season_page
from leveller.report.season_text import format_season, last_lines

VERSIONS = {"leveller": "0.1.0"}


def episode(
    name: str, *, range_lu: float = 5.0, met: bool = True, off: tuple[str, ...] = (), **voices: tuple[float, float]
) -> Outcome:
    """A finished episode; each voice has its source level and its level against the target."""
    said = tuple(SeasonVoice(voice, 60.0, source, -19 + against, against)
                 for voice, (source, against) in voices.items())
    figures = EpisodeFigures(
        "podcast-mono", met, "" if met else "the mix is silent", said, 3, target_lufs=-19.0, length_s=600.0,
        integrated_lufs=-19.0, range_lu=range_lu, true_peak_dbtp=-1.2, listen_s=12.5, not_lined_up=off)
    return Outcome(name, "finished", figures=figures, tries=1, took_s=2.5, cpu_s=4.0)


def report(*episodes: Outcome, interrupted: bool = False) -> SeasonReport:
    """A season of these."""
    return season_report("Harbour", episodes, made_by=VERSIONS, interrupted=interrupted, took_s=9.0)


def test_an_episode_wider_than_the_rest_is_marked() -> None:
    """2 LU over the median of the others is marked, less is not."""
    even = report(episode("a"), episode("b", range_lu=5.4), episode("c", range_lu=7.1))
    assert [e.remarks for e in even.episodes] == [(), (), ()]
    wide = report(episode("a"), episode("b", range_lu=5.4), episode("c", range_lu=7.4))
    assert [e.remarks for e in wide.episodes] == [(), (), ("range 2.2 LU wider than the rest",)]
    assert report(episode("a"), episode("b", range_lu=9)).episodes[1].remarks == ()  # one episode is no rest


def test_tracks_that_do_not_line_up_are_told_of() -> None:
    """What an episode's report says of them stands on the season's page, in its table and on the console."""
    words = "guest: 0.200 s late against host (confidence 0.90). --align corrects it"
    found = report(episode("a", off=(words,), host=(-26.0, 0.0)), episode("b", host=(-26.0, 0.0)))
    assert [e.remarks for e in found.episodes] == [(words,), ()]
    assert [row["remarks"] for row in csv.DictReader(io.StringIO(season_csv(found), newline=""))] == [
        words, "", "", ""]
    assert season_page(found).count(words) == 2  # what stands out, and the episode's row
    assert '<span class="off">5.0' not in season_page(found)  # its loudness range does not stand out
    assert f"  a: {words}" in [line.text for line in format_season(found, out="out")]


def test_a_guest_6_db_lower_is_marked() -> None:
    """A voice recorded 6 dB lower than the rest, and one that comes out softer, say so."""
    found = report(episode("a", host=(-26.0, 0.1)), episode("b", host=(-27.0, 0.2), guest=(-33.0, 0.1)),
                   episode("c", host=(-26.5, 0.0), far=(-31.0, -6.2)))
    said = {voice.voice: voice.remarks for e in found.episodes if e.figures for voice in e.figures.voices}
    assert said["host"] == ()
    assert said["guest"] == ("recorded 6.2 dB lower than the rest",)
    assert said["far"] == ("comes out 6.3 LU softer than the rest",)


def test_an_episode_whose_voices_lie_off_together_is_marked() -> None:
    """0.5 LU from the median of the other episodes is marked, with the target that keeps the voices' level."""
    others = (episode("a", host=(-26, 0.2), odo=(-26, 0.3)), episode("b", host=(-26, 0.2), odo=(-26, 0.1)))
    near, off = (report(*others, episode("c", host=(-26, level), odo=(-26, level))) for level in (-0.2, -0.6))
    assert [e.remarks for e in near.episodes] == [(), (), ()]
    assert [e.remarks for e in off.episodes] == [(), (), (
        "meeting the target makes all voices 0.8 LU softer than in the rest; target_lufs = -18.2 would keep their "
        "level instead",)]
    assert report(others[0], episode("c", host=(-26, -0.6))).episodes[1].remarks == ()  # one episode is no rest


def test_each_voice_is_held_against_itself() -> None:
    """A voice keeps its level where its episodes lie within 0.5 LU; a voice of one episode is not listed."""
    found = report(episode("a", host=(-26, 0.1), odo=(-26, 0.0)), episode("b", host=(-26, 0.6), odo=(-26, 0.6)),
                   episode("c", host=(-26, 0.3), isbel=(-26, 0.0)))
    assert [(v.voice, v.episodes, round(v.spread_lu, 2), v.kept) for v in found.voices] == [
        ("host", 3, 0.5, True), ("odo", 2, 0.6, False)]


@pytest.mark.parametrize(("outcomes", "interrupted", "code", "sentence"), [
    (("finished", "unchanged"), False, 0, "2 episodes: 1 finished, 1 unchanged"),
    (("finished", "failed"), False, 7, "2 episodes: 1 finished, 1 failed"),
    (("failed", "not reached"), True, 130, "2 episodes: 1 failed, 1 not reached"),
    (("edited",), False, 0, "1 episode: 1 edited"),
])
def test_the_exit_code_says_how_it_went(outcomes: tuple[str, ...], interrupted: bool, code: int, sentence: str) -> None:
    """0 where nothing failed, 7 where something did, 130 after an interruption; the sentence counts them."""
    found = report(*(Outcome(str(i), outcome, "why") for i, outcome in enumerate(outcomes)), interrupted=interrupted)
    assert (found.exit_code, found.sentence) == (code, sentence)
    assert sentence in [line.text for line in last_lines(found)]


def test_tables_hold_every_number_once() -> None:
    """season.csv has a row an episode and a row a voice; formulas in names are quoted; season.json is plain JSON."""
    found = report(episode("=1+1", host=(-26.0, 0.1)), Outcome("b", "failed", 'a "bad", file'))
    rows = list(csv.DictReader(io.StringIO(season_csv(found), newline="")))
    assert tuple(rows[0]) == SEASON_COLUMNS
    assert [(row["row"], row["episode"], row["voice"]) for row in rows] == [
        ("episode", "'=1+1", ""), ("voice", "'=1+1", "host"), ("episode", "b", "")]
    assert rows[0]["took_s"] == "2.5"
    assert rows[1]["took_s"] == ""
    assert rows[1]["against_lu"] == "0.1"
    assert rows[2]["reason"] == 'a "bad", file'
    assert rows[2]["range_lu"] == ""
    said = json.loads(season_json(found))
    assert said["episodes"][0]["figures"]["voices"][0]["source_lufs"] == -26.0
    assert said["made_by"] == VERSIONS


class Page(HTMLParser):
    """Tags and attributes of a page."""

    def __init__(self) -> None:
        super().__init__()
        self.tags: list[tuple[str, dict[str, str | None]]] = []

    def handle_starttag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        self.tags.append((tag, dict(attrs)))


def test_the_page_stands_alone_and_runs_nothing() -> None:
    """No script, no inline style, nothing from elsewhere; names are text, whatever they hold; links stay inside."""
    bad = "<img src=x onerror=alert(1)>"
    found = report(episode("a", host=(-26, 0.1)), episode(f'{bad} "q"', host=(-26, 0.9)), Outcome("c", "failed", bad))
    text = season_page(dataclasses.replace(found, title=bad))
    page = Page()
    page.feed(text)
    assert {tag for tag, _ in page.tags}.isdisjoint({"script", "img", "iframe", "object"})
    assert all("style" not in attributes and not any(name.startswith("on") for name in attributes)
               for _, attributes in page.tags)
    links = [attributes["href"] for tag, attributes in page.tags if tag == "a"]
    assert links == ["a/report.html", "%3Cimg%20src%3Dx%20onerror%3Dalert%281%29%3E%20%22q%22/report.html"]
    assert not re.search(r"https?:", text)
    assert "prefers-color-scheme: dark" in text
    assert "default-src 'none'" in text


def test_what_stands_out_is_said_without_colour() -> None:
    """A stray bead is another shape and stands in words; failures and deliveries missed are words too."""
    found = report(episode("a", host=(-26, 0.0)), episode("b", met=False, host=(-26, 0.0)),
                   episode("c", host=(-26, 1.4), range_lu=8.0), Outcome("d", "failed", "host.wav: no sound"))
    text = season_page(found)
    assert text.count('<polygon class="stray"') == 1
    assert text.count('<circle class="bead"') == 2
    for words in ("podcast-mono NOT met", "range 3.0 LU wider than the rest", "not kept within 0.5 LU",
                  "host.wav: no sound", "delivery not met: the mix is silent"):
        assert words in text, words
    lines = [line.text for line in format_season(found, out="out")]
    assert "  host: not kept within 0.5 LU over the season: 0.0 to +1.4 LU against target" in lines
    assert lines[-3] == "failed: d: host.wav: no sound"


def test_the_same_report_gives_the_same_page() -> None:
    """Nothing of the page depends on when it is made."""
    found = report(episode("a", host=(-26, 0.0)), episode("b", host=(-26, 0.0)))
    assert season_page(found) == season_page(found)
