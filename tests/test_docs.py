"""The manual: everything the program knows stands in it, and what it shows is what happens."""

from __future__ import annotations

import csv
import json
import os
import re
import shutil
import subprocess
import sys
from pathlib import Path

import numpy as np
import pytest
import soundfile

import leveller
from leveller import automation, settings
from leveller.advice import KINDS as ADVICE_KINDS
from leveller.defaults import DEFAULT_KEYS
from leveller.plan import CAUSES, STATES
from leveller.report import faults, tables
from leveller.report.season import OUTCOMES, SOME_FAILED_EXIT
from leveller.report.season_files import SEASON_COLUMNS
from leveller.season import EPISODE_KEYS
from leveller.sessionfile import (
    CORRECTION_KEYS,
    DECISIONS,
    ROLES,
    SESSION_BOUNDS,
    SESSION_KEYS,
    SKIP_KEYS,
    TRACK_BOUNDS,
    TRACK_KEYS,
)

ROOT = Path(__file__).parents[1]
DOCS = ROOT / "docs"
DEMO = ROOT / "demo_session"
PAGES = sorted([*ROOT.glob("*.md"), *DOCS.glob("*.md"), *DEMO.glob("*.md")])

sys.path.append(str(DOCS))

import refresh  # noqa: E402 - it lies in docs/

MADE = refresh.blocks()


def page(name: str) -> str:
    """A page of docs/."""
    return (DOCS / name).read_text(encoding="utf-8")


def boxes(text: str) -> list[str]:
    """What stands in the `sh` boxes of a page, in order."""
    return re.findall(r"^```sh\n(.*?)^```", text, re.DOTALL | re.MULTILINE)


def rows_for(text: str, key: str) -> list[str]:
    """The table rows that name a key in their first cell."""
    return [line for line in text.splitlines() if line.startswith("|") and f"`{key}`" in line.split("|")[1]]


def words(text: str) -> list[str]:
    """Text without what versions of typer write differently: kinds of arguments, brackets, line ends."""
    return re.sub(r"<[^<>\n]*>|[{}\[\]\\]|\.\.\.", " ", text).split()


# What the program writes into the pages


def blocks_of(path: Path) -> dict[str, str]:
    """Blocks of a page by name."""
    return {m["name"]: m["body"] for m in refresh.BLOCK.finditer(path.read_text(encoding="utf-8"))}


def test_pasted_help_is_the_real_one() -> None:
    """Every command has a section with its help as it is; run `python docs/refresh.py` where this fails."""
    pasted = blocks_of(DOCS / "commands.md")
    assert set(pasted) == {name for name in MADE if name.startswith("help")}
    for name, text in pasted.items():
        assert words(text) == words(MADE[name]), name
    for command in refresh.command_names():
        assert f"\n## {command}\n" in page("commands.md")


def test_made_tables_are_fresh() -> None:
    """Settings, deliveries, quantities and named numbers stand in the pages as they are; else run docs/refresh.py."""
    found = {name: body for path in DOCS.glob("*.md") for name, body in blocks_of(path).items()}
    assert set(found) == set(MADE)
    stale = [name for name, body in found.items() if not name.startswith("help") and body != MADE[name]]
    assert stale == []


def test_every_option_is_in_the_manual() -> None:
    """Every option of every command is shown in its section."""
    for command in refresh.command_names():
        section = page("commands.md").partition(f"\n## {command}\n")[2].partition("\n## ")[0]
        options = set(re.findall(r"--[a-z][a-z-]+", refresh.help_of(command)))
        assert options
        assert [option for option in options if option not in section] == []


def test_every_setting_has_its_row() -> None:
    """Every setting stands in docs/settings.md once, with unit and reason."""
    for key, _, unit, why in settings.Settings().rows():
        rows = rows_for(page("settings.md"), key)
        assert len(rows) == 1, key
        assert f"| {unit} | {why} |" in rows[0]
    assert [name for name in settings.DELIVERIES if not rows_for(page("settings.md"), name)] == []


# What is written by hand


@pytest.mark.parametrize(("heading", "keys", "bounds"), [
    ("The session", SESSION_KEYS, SESSION_BOUNDS), ("`[[track]]`", TRACK_KEYS, TRACK_BOUNDS),
    ("`[[skip]]`", SKIP_KEYS, {}), ("`[[correction]]`", CORRECTION_KEYS, {})])
def test_every_session_key_has_its_row(
    heading: str, keys: tuple[str, ...], bounds: dict[str, tuple[float, float, str]]
) -> None:
    """Every key of session.toml stands in its section, with its bounds."""
    section = page("session_file.md").partition(f"\n## {heading}\n")[2].partition("\n## ")[0]
    for key in keys:
        assert len(rows_for(section, key)) == 1, key
    for key, (low, high, _) in bounds.items():
        assert f"| {low:.15g} to {high:.15g}" in rows_for(section, key)[0]


def test_words_of_session_files() -> None:
    """Roles and decisions are explained."""
    text = page("session_file.md")
    assert [role for role in ROLES if not rows_for(text, role)] == []
    assert all(f"`{word}`" in rows_for(text, "decide")[0] for word in DECISIONS)


@pytest.mark.parametrize(("file", "columns"), [
    ("automation.csv", automation.COLUMNS), ("mix.csv", tables.MIX_COLUMNS), ("speech.csv", tables.SPEECH_COLUMNS),
    ("listen.csv", tables.LISTEN_COLUMNS)])
def test_every_column_has_its_row(file: str, columns: tuple[str, ...]) -> None:
    """Every column of every table is explained in its section, in order."""
    section = page("outputs.md").partition(f"\n## {file}\n")[2].partition("\n## ")[0]
    lines = section.splitlines()
    at = [lines.index(rows_for(section, column)[0]) for column in columns]
    assert at == sorted(at)


def test_seasons_are_explained() -> None:
    """Every key of a list of episodes, every column of season.csv and every outcome has its row in docs/batch.md."""
    text = page("batch.md")
    assert [key for key in (*EPISODE_KEYS, *SEASON_COLUMNS) if not rows_for(text, key)] == []
    assert [outcome for outcome in OUTCOMES if f"\n| {outcome} | " not in text] == []
    section = text.partition("\n## A show's defaults\n")[2].partition("\n## ")[0]
    assert [key for key in DEFAULT_KEYS if f"`{key}`" not in section and key not in settings.STAGES] == []


def test_states_causes_and_kinds() -> None:
    """Every state, cause and kind of fault is in docs/outputs.md; causes, the closed list, each with a meaning."""
    text = page("outputs.md")
    assert [state for state in STATES if f"`{state}`" not in rows_for(text, "state")[0]] == []
    assert [cause for cause in CAUSES if not rows_for(text, cause)] == []
    assert [kind for kind in faults.KINDS if f"`{kind}`" not in text] == []


def test_advice_kinds_are_listed() -> None:
    """Every kind of advice that `inspect` gives is in docs/outputs.md."""
    assert [kind for kind in ADVICE_KINDS if f"`{kind}`" not in page("outputs.md")] == []


def test_exit_codes() -> None:
    """Every error's exit code has its row in docs/commands.md."""
    kinds = [leveller.LevellerError, *leveller.LevellerError.__subclasses__()]
    codes = {kind.exit_code for kind in kinds if kind.__module__ == "leveller.errors"} | {0, 2, SOME_FAILED_EXIT, 130}
    assert [code for code in codes if f"\n| {code} | " not in page("commands.md")] == []


def anchor(heading: str) -> str:
    """The anchor a heading gets where Markdown is shown."""
    return re.sub(r"[^\w\- ]", "", heading.strip().lower()).replace(" ", "-")


@pytest.mark.parametrize("path", PAGES, ids=lambda path: path.relative_to(ROOT).as_posix())
def test_links_resolve(path: Path) -> None:
    """Every link within the project leads somewhere, also to the heading it names."""
    text = re.sub(r"^```.*?^```", "", path.read_text(encoding="utf-8"), flags=re.DOTALL | re.MULTILINE)
    for target in re.findall(r"\]\(([^)\s]+)\)", text):
        if re.match(r"[a-z]+:", target):
            continue
        file, _, place = target.partition("#")
        there = path.parent / file if file else path
        assert there.exists(), target
        if place:
            headings = re.findall(r"^#+ (.*)$", there.read_text(encoding="utf-8"), re.MULTILINE)
            assert place in [anchor(heading) for heading in headings], target


def test_every_page_is_reached() -> None:
    """Every page of docs/ is linked from another page."""
    linked = {(path.parent / target.partition("#")[0]).resolve() for path in PAGES
              for target in re.findall(r"\]\(([^)\s]+)\)", path.read_text(encoding="utf-8")) if path.parent != DEMO}
    assert [path.name for path in DOCS.glob("*.md") if path.resolve() not in linked] == []


def test_every_room_is_introduced() -> None:
    """Every module and package stands in the table of rooms in DEVELOPERS.md."""
    text = (ROOT / "DEVELOPERS.md").read_text(encoding="utf-8")
    package = Path(leveller.__file__).parent
    rooms = [*(path.stem for path in package.glob("*.py") if path.stem.strip("_") == path.stem),
             *(f"{path.parent.name}/" for path in package.glob("*/__init__.py"))]
    assert len(rooms) > 20
    table = "".join(line for line in text.splitlines() if line.startswith("|"))
    assert [room for room in rooms if f"`{room}`" not in table] == []


def test_the_readme_begins_with_its_two_commands() -> None:
    """The first two fenced boxes are one line each: install and process the demo; install and test."""
    text = (ROOT / "README.md").read_text(encoding="utf-8")
    found = re.findall(r"^```\w*\n(.*?)^```", text, re.DOTALL | re.MULTILINE)
    demo, tests = (box.strip() for box in found[:2])
    for line in (demo, tests):
        assert "\n" not in line
        assert line.startswith("python3 -m venv .venv && .venv/bin/python -m pip install ")
        assert line.count(" && ") == 2
    assert " && .venv/bin/leveller process demo_session --out " in demo
    assert demo.endswith(" --replace")
    assert "'.[test]'" in tests
    assert " && .venv/bin/python -m pytest" in tests


# What is run as it stands


def run_boxes(name: str, folder: Path) -> list[str]:
    """Run a page's boxes in a folder with a copy of the demo; returns what each printed."""
    shutil.copytree(DEMO, folder / "demo_session")
    beside = Path(sys.executable).parent  # where this environment's `leveller` and `python` are
    assert (beside / "leveller").exists(), "leveller is not installed: pip install --editable '.[test]'"
    environment = {**os.environ, "PATH": f"{beside}{os.pathsep}{os.environ['PATH']}"}
    said = []
    for box in boxes(page(name)):
        done = subprocess.run(["bash", "-euo", "pipefail", "-c", box], cwd=folder, env=environment, text=True,
                              capture_output=True, check=False, timeout=300)
        assert (done.returncode, done.stderr) == (0, ""), box
        said.append(done.stdout)
    return said


def rows_of(path: Path) -> list[dict[str, str]]:
    """Rows of a CSV."""
    with open(path, newline="", encoding="utf-8") as file:
        return list(csv.DictReader(file))


@pytest.fixture(scope="module")
def walk(tmp_path_factory: pytest.TempPathFactory) -> tuple[Path, list[str]]:
    """The walkthrough, walked."""
    folder = tmp_path_factory.mktemp("walk")
    return folder / "walk", run_boxes("correction_walkthrough.md", folder)


def test_the_walk_starts_at_a_doubt(walk: tuple[Path, list[str]]) -> None:
    """The place it speaks of is in listen.csv: Odo, decided own, while Isbel speaks."""
    places = list(csv.reader(walk[1][2].splitlines()))
    assert [place for place in places if float(place[0]) < 38.3 < float(place[1])]


def test_the_walk_changes_what_it_says(walk: tuple[Path, list[str]]) -> None:
    """The correction holds Odo's microphone open through his word and leaves all other rows as they were."""
    before, after = rows_of(walk[0] / "before.csv"), rows_of(walk[0] / "umbrellas" / "automation.csv")
    for rows, others in ((before, after), (after, before)):
        changed = [row for row in rows if row not in others]
        assert changed
        assert {row["track"] for row in changed} == {"Odo"}
        assert all(37.5 < float(row["time_s"]) < 40 for row in changed)
    assert gain_db(after, "Odo", 38.9) - gain_db(before, "Odo", 38.9) > 3
    assert "+++" not in walk[1][5]


def gain_db(rows: list[dict[str, str]], track: str, time_s: float) -> float:
    """The gain of a track at a time."""
    own = [row for row in rows if row["track"] == track]
    return float(np.interp(time_s, [float(row["time_s"]) for row in own], [float(row["gain_db"]) for row in own]))


def test_the_walk_settles_its_doubt(walk: tuple[Path, list[str]]) -> None:
    """speech.csv says own voice for the whole corrected stretch; before it did not."""
    own = [row for row in csv.reader(walk[1][6].splitlines()) if float(row[0]) <= 38.07 and float(row[1]) == 38.69]
    assert len(own) == 1


def test_the_walk_ends_on_target(walk: tuple[Path, list[str]]) -> None:
    """The finished cut is 2.6 s shorter, on target under its ceiling."""
    session, final = (json.loads((walk[0] / name / "report.json").read_text(encoding="utf-8"))
                      for name in ("umbrellas", "final"))
    assert final["delivery"]["met"] is True
    assert session["mix"]["length_s"] - final["mix"]["length_s"] == pytest.approx(2.6, abs=0.02)
    assert soundfile.info(walk[0] / "final" / "mix.wav").duration == pytest.approx(final["mix"]["length_s"], abs=0.001)


def test_report_json_is_explained(walk: tuple[Path, list[str]]) -> None:
    """Every key of a report.json is explained in docs/outputs.md."""
    report = json.loads((walk[0] / "umbrellas" / "report.json").read_text(encoding="utf-8"))
    text = page("outputs.md").partition("\n## report.json\n")[2].partition("\n## ")[0]
    keys = [*report, *report["delivery"], *report["mix"], *report["voices"][0], *report["sources"][0]]
    assert [key for key in keys if f"`{key}`" not in text] == []


def test_every_file_is_explained(walk: tuple[Path, list[str]]) -> None:
    """Every file of an output folder is in the table of docs/outputs.md."""
    table = page("outputs.md").partition("\n**")[0]
    names = [path.name for path in (walk[0] / "umbrellas").iterdir() if path.name != "stems"]
    assert len(names) > 6
    assert [name for name in names if f"`{name}`" not in table and name != "corrections.csv"] == []


def test_recipes_run(tmp_path: Path) -> None:
    """Every recipe runs as it stands, and what it promises is there."""
    run_boxes("recipes.md", tmp_path)
    done = tmp_path / "done"
    for name in ("interview", "review", "reviewed"):
        report = json.loads((done / name / "report.json").read_text(encoding="utf-8"))
        assert report["delivery"]["met"] is True, name
    assert (done / "season.log").read_text(encoding="utf-8") == ""  # quiet, and nothing had changed
    episodes = [row for row in rows_of(done / "season" / "season.csv") if row["row"] == "episode"]
    assert [row["episode"] for row in episodes] == ["episode-01", "episode-02"]
    assert {row["outcome"] for row in episodes} == {"unchanged"}
    edited = [row for row in rows_of(done / "reviewed" / "automation.csv") if row["cause"] == "edit"]
    assert {row["track"] for row in edited} == {"Isbel"}
    reading = json.loads((done / "reading.json").read_text(encoding="utf-8"))[0]
    assert reading["integrated_lufs"] == pytest.approx(-19, abs=0.1)
