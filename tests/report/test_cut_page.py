"""report.html of a finished cut in a real browser: the session's page without what a cut does not have.

The browser is Debian's chromium (see `browsing`). A cut of two files with hostile names is finished once for all tests.
"""

from __future__ import annotations

import dataclasses
import itertools
import re
import shutil
import time
from pathlib import Path

import numpy as np
import pytest
import soundfile as sf
from browsing import Page

from leveller.cut import Finished
from leveller.pipeline import finish
from leveller.report.cut_page import cut_page_html, write_cut_page
from leveller.spots import MOST_OF_A_KIND, Spot, spots_to_hear

DEMO = Path(__file__).parents[2] / "demo_session"
SECONDS = 30
RATE_HZ = 48_000
IMAGE_NAME = "<img src=x onerror=window.hacked=1>"
SCRIPT_NAME = "&amp; <script>window.hacked=2<!--"
TITLE = "a cut's 'folder' <b>& more"
HOUR_BYTES = 3_000_000  # what we promise (docs/outputs.md): an hour's cut stays under 3 MB
LOUD_AT_S = 20.0  # three times as loud for two seconds: over the ceiling, with full scale in the file
SUMMARY = (("Delivery <i>", ("on target & <script>window.hacked=3</script>",)),)


@pytest.fixture(scope="module")
def finished(tmp_path_factory: pytest.TempPathFactory) -> Finished:
    """Half a minute of one voice and a tone beside it in two channels, finished."""
    folder = tmp_path_factory.mktemp("cut") / TITLE
    folder.mkdir()
    voice, _ = sf.read(DEMO / "maren.flac", frames=SECONDS * RATE_HZ)
    voice = voice * (0.5 / np.abs(voice).max())
    voice[round(LOUD_AT_S * RATE_HZ) : round((LOUD_AT_S + 2) * RATE_HZ)] *= 6
    sf.write(folder / f"{IMAGE_NAME}.wav", np.clip(voice, -1, 1), RATE_HZ, "PCM_16")
    tone = 0.01 * np.sin(2 * np.pi * 220 * np.arange((SECONDS - 4) * RATE_HZ) / RATE_HZ)
    sf.write(folder / f"{SCRIPT_NAME}.aiff", tone[:, None] * [1, 0.5], RATE_HZ, "PCM_16")
    return finish(sorted(folder.iterdir()), out=folder.parent / "done", delivery="podcast-stereo")


@pytest.fixture(scope="module")
def report_page(finished: Finished) -> Path:
    """The page that finish wrote."""
    return finished.out / "report.html"


def numbers(text: str) -> list[float]:
    """The numbers with one decimal that a text holds, minus signs and all."""
    return [float(found.replace("\u2212", "-")) for found in re.findall("[-\u2212]?\\d+\\.\\d(?!\\d)", text)]


def test_finish_writes_the_page_of_its_cut(finished: Finished) -> None:
    """The same cut gives the same bytes; no address of the network, no absolute path, no name that is an element."""
    text = (finished.out / "report.html").read_text(encoding="utf-8")
    assert cut_page_html(finished, SPOTS, SUMMARY) == cut_page_html(finished, list(SPOTS), list(SUMMARY))
    assert str(finished.out.parent) not in text
    assert "http:" not in text
    assert "https:" not in text
    assert "%%" not in text
    assert text.count("<script") == text.count("</script") == 2
    assert "<img" not in text


SPOTS = (Spot(1.0, 2.0, "loud", "", "<b>much</b>", 2.0), Spot(5.0, 5.5, "full scale", IMAGE_NAME, "at full scale", 1.2))


def test_what_a_cut_does_not_have_is_absent(page: Page) -> None:
    """No states, no stems, no corrections: neither shells nor words of them; what is heard is file and mix."""
    for selector in ("#mend", "#corrections", "#save", "#hear-stem", "#legend .bleed", "#gain"):
        assert page.script("return document.querySelectorAll(arguments[0]).length", selector) == 0, selector
    said = page.text("body > header") + page.text("main")
    assert not re.search("bleed|own voice|doubt|correction|stem|session|undefined|NaN", said)
    assert page.script("return [...document.querySelectorAll('#hear input')].map((e) => e.id)") == [
        "hear-source", "hear-mix"]


def test_nothing_is_asked_of_the_network(page: Page, finished: Finished) -> None:
    """Opening the page asks for the page alone."""
    addresses = [address for address in page.requests() if not address.startswith("data:")]
    assert addresses == [(finished.out / "report.html").as_uri()]


def test_hostile_names_stay_text(page: Page, finished: Finished, tmp_path: Path) -> None:
    """Title, files, reasons and summary appear letter for letter and make no element."""
    assert page.text("#title") == TITLE
    assert page.driver.title == f"{TITLE} - leveller"
    names = page.script("return [...document.querySelectorAll('#track option')].map((o) => o.textContent)")
    assert names == [track.name for track in finished.session.tracks] == [SCRIPT_NAME, IMAGE_NAME]
    write_cut_page(tmp_path / "words.html", finished, SPOTS, SUMMARY)
    page.open(tmp_path / "words.html")
    assert page.script("return document.querySelectorAll('img, #places b b, #summary i, #summary script').length") == 0
    assert "<b>much</b>" in page.text("#places")
    assert SUMMARY[0][1][0] in page.text("#summary")


def test_it_says_what_was_done(page: Page, finished: Finished) -> None:
    """At a position the page names each peak, the gain and the loudness as the run has them."""
    page.keys("END", control=True)
    page.keys(*["ARROW_LEFT"] * 90)  # nothing plays: to 21 s, where it is loud
    assert page.text("#clock") == "0:21.00"
    hop = 2100
    said = page.text("#reading").split(": ", 1)[1]
    for name in (SCRIPT_NAME, IMAGE_NAME):
        said = said.replace(name, "")
    near = [figures_at(finished, at) for at in (hop - 1, hop, hop + 1)]  # the clock is rounded, the position is not
    assert any(numbers(said) == pytest.approx(figures, abs=0.31) for figures in near)  # half a dB a step, one decimal
    assert "on target" in page.text("#facts")
    assert "2 files" in page.text("#facts")


def figures_at(finished: Finished, hop: int) -> list[float]:
    """Peaks of files and mix, make-up and limiter gain in dB, short-term loudness, as the run has them at a hop."""
    levels = [20 * np.log10(outline[hop]) for outline in (*finished.file_peaks, finished.mix_peaks)]
    short_term = finished.mix.short_term_lufs[hop // 10 * 10 - 300]
    return [*levels, finished.mix.make_up_db, finished.limiter_db[hop], short_term]


def test_places_are_those_of_the_run(page: Page, finished: Finished) -> None:
    """What stands out is listed strongest first, and the limiter's and the file's places lie where it was loud."""
    spots = spots_to_hear(finished)
    listed = page.script("return [...document.querySelectorAll('#places .entry small')].map((e) => e.textContent)")
    assert listed == [spot.reason for spot in spots]
    assert {"full scale", "limiter"} <= {spot.kind for spot in spots}
    starts = [spot.from_s for spot in spots if spot.kind in ("full scale", "limiter")]
    assert all(LOUD_AT_S - 1 < start < LOUD_AT_S + 2.5 for start in starts)
    assert page.script("return document.getElementById('places-more')") is None


def test_keys_move_mark_and_jump(page: Page) -> None:
    """Arrows move, with Shift they mark, N jumps to the strongest place and plays, Escape unmarks."""
    page.keys(*["ARROW_RIGHT"] * 3)
    assert page.text("#clock") == "0:00.30"
    page.keys("END", control=True)
    assert page.text("#clock") == f"0:{SECONDS}.00"
    page.keys("HOME", control=True)
    page.keys("ARROW_RIGHT", "ARROW_RIGHT", shift=True)
    page.wait("return document.getElementById('said').textContent.includes('marked 0:00.00 to 0:00.20')")
    page.keys("ESCAPE")
    page.keys("ENTER", "o", "b", "s", "g")
    page.keys("z", control=True)
    page.keys("n")
    page.wait("return document.getElementById('play').textContent === 'Pause'")
    page.keys(" ")
    assert page.script("return document.querySelectorAll('#places li[data-here]').length") == 1
    page.keys("t")
    assert page.value("#track") in (IMAGE_NAME, SCRIPT_NAME)
    before = page.text("#span")
    page.keys("+")
    assert page.text("#span") != before
    page.keys("0")
    assert page.text("#span") == "30 s a line"


def test_asked_again_before_it_sounds_it_stays_silent(page: Page) -> None:
    """Play pressed twice before the file could start is silence; three times, sound; nothing is complained of."""
    press = "for (let i = 0; i < arguments[0]; i++) document.getElementById('play').click()"
    page.keys("HOME")  # browsers let nothing sound before a key is pressed
    page.script(press, 2)
    time.sleep(0.5)
    assert (page.text("#play"), page.text("#clock")) == ("Play", "0:00.00")
    page.script(press, 3)
    page.wait("return document.getElementById('play').textContent === 'Pause'")
    page.wait("return document.getElementById('clock').textContent > '0:00.30'")
    assert page.text("#play") == "Pause"
    assert page.text("#trouble") == ""


def test_given_file_and_finished_mix_play_at_one_position(page: Page) -> None:
    """1 is the given file where it lies, 2 the finished mix; a file no browser plays is disabled with a word why."""
    assert page.script("return document.getElementById('hear-source').disabled")
    assert page.text("#hear-source-why") == "browsers do not play .aiff"
    page.keys("t", *["ARROW_RIGHT"] * 5)
    page.requests()
    heard = []
    page.keys(" ")
    for key, file in (("2", "/done/mix.wav"), ("1", "onerror")):
        page.keys(key)
        page.wait("return document.getElementById('play').textContent === 'Pause'")
        time.sleep(0.3)
        heard += page.requests()
        assert any(file in address for address in heard), f"{file} was not opened"
    assert float(page.text("#clock").split(":")[1]) > 0.5
    assert all(address.startswith("file:") for address in heard)


def test_a_file_that_is_gone_is_said(page: Page, finished: Finished, tmp_path: Path) -> None:
    """Without its neighbours the page still opens, and says which file it cannot play."""
    page.open(Path(shutil.copy(finished.out / "report.html", tmp_path / "alone.html")))
    page.keys(" ")
    page.wait("return !document.getElementById('trouble').hidden")
    assert page.text("#trouble").startswith("mix.wav: no such file here")
    assert all("ERR_FILE_NOT_FOUND" in complaint for complaint in page.complaints())


def test_every_control_has_a_name(page: Page) -> None:
    """Whatever takes the focus is named for those who cannot see it."""
    page.driver.execute_cdp_cmd("Accessibility.enable", {})
    nodes = page.driver.execute_cdp_cmd("Accessibility.getFullAXTree", {})["nodes"]
    focusable = [node for node in nodes if any(
        fact["name"] == "focusable" and fact["value"]["value"] for fact in node.get("properties", ()))]
    assert len(focusable) > 10
    assert [node["role"]["value"] for node in focusable if not node.get("name", {}).get("value")] == []


@pytest.mark.parametrize(("width", "height", "scale"), [(700, 450, 2), (320, 640, 1), (1400, 900, 1)])
def test_no_sideways_scrolling(page: Page, finished: Finished, width: int, height: int, scale: float) -> None:
    """At 200 % zoom and in narrow windows all text wraps; WCAG 2.2, 1.4.10 asks for 320 pixels."""
    page.open(finished.out / "report.html", width=width, height=height, scale=scale, scheme="dark")
    assert page.script("return document.documentElement.scrollWidth") <= width


def test_the_mix_is_drawn_as_it_was_delivered(page: Page, finished: Finished) -> None:
    """Where the mix's outline is filled its height goes with the root of its peaks."""
    page.keys("0")
    heights = np.array(page.script(FILLED_HEIGHTS), float)
    columns = np.arange(len(heights))
    edges = np.round(np.append(columns, len(heights)) * len(finished.mix_peaks) / len(heights)).astype(int)
    peaks = np.array([finished.mix_peaks[a:b].max() for a, b in itertools.pairwise(edges)])
    assert np.corrcoef(heights, np.sqrt(peaks))[0, 1] > 0.97


FILLED_HEIGHTS = """
const seen = document.getElementById('lines'), canvas = document.createElement('canvas');
[canvas.width, canvas.height] = [seen.width, seen.height];
const pen = canvas.getContext('2d', {willReadFrequently: true});
pen.drawImage(seen, 0, 0);
const left = 116, width = canvas.width - left - 14;  // GUTTER and RIGHT of page_score.js
const own = getComputedStyle(document.documentElement).getPropertyValue('--own').trim();
const [r, g, b] = [1, 3, 5].map((i) => parseInt(own.slice(i, i + 2), 16));
const pixels = pen.getImageData(left, 0, width, canvas.height).data, out = [];
for (let x = 0; x < width; x++) {
  let count = 0;
  for (let y = 0; y < canvas.height; y++) {
    const at = 4 * (y * width + x);
    const off = Math.abs(pixels[at] - r) + Math.abs(pixels[at + 1] - g) + Math.abs(pixels[at + 2] - b);
    if (off < 30 && pixels[at + 3] > 200) count++;
  }
  out.push(count);
}
return out;
"""


def test_a_silent_cut_of_one_file(page: Page, tmp_path: Path) -> None:
    """A second of silence: a page all the same, without a choice of files, and nothing is stood out but the silence."""
    sf.write(tmp_path / "still.wav", np.zeros(16_000), 16_000, "PCM_16")
    still = finish(tmp_path / "still.wav", out=tmp_path / "still")
    page.open(still.out / "report.html")
    assert "reads silent" in page.text("#facts")
    assert page.text("#reading") == "At 0:00.00: still silent \u00b7 mix silent \u00b7 make-up 0.0 dB, limiter 0.0 dB"
    assert not page.find("#track").is_displayed()
    assert page.find("#places-none").is_displayed()
    page.keys("t", "n", "p", "END")


def test_an_hour_is_small_and_weaker_places_are_counted(page: Page, finished: Finished, tmp_path: Path) -> None:
    """An hour of two files stays under 3 MB, as do eight; a long list is cut and says by how many."""
    times, hops = 3600 // SECONDS, len(finished.mix_peaks)
    session = dataclasses.replace(finished.session, frames=finished.session.frames * times)
    loudness = dataclasses.replace(finished.mix.loudness, cells=np.tile(finished.mix.loudness.cells, times))
    hour = dataclasses.replace(
        finished, session=session, mix=dataclasses.replace(finished.mix, loudness=loudness),
        file_peaks=tuple(np.tile(peaks, times) for peaks in finished.file_peaks),
        mix_peaks=np.tile(finished.mix_peaks, times), limiter_db=np.tile(finished.limiter_db, times))
    spots = spots_to_hear(hour)
    assert len(spots) > 2 * times
    write_cut_page(tmp_path / "hour.html", hour, spots, SUMMARY)
    assert (tmp_path / "hour.html").stat().st_size < HOUR_BYTES
    page.open(tmp_path / "hour.html")
    assert page.text("#facts").startswith("1:00:00 ")
    kinds = {spot.kind for spot in spots}
    listed = page.script("return document.querySelectorAll('#places li').length")
    assert listed <= MOST_OF_A_KIND * len(kinds)
    assert page.text("#places-more").startswith(f"{len(spots) - listed} weaker ones")
    many = dataclasses.replace(hour, session=dataclasses.replace(session, tracks=session.tracks * 4),
                               file_peaks=hour.file_peaks * 4)
    assert len(cut_page_html(many, spots, SUMMARY)) < HOUR_BYTES
    assert hops == SECONDS * 100
