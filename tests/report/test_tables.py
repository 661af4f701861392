"""leveller.report.tables: speech.csv, mix.csv and report.json hold what they promise, the same bytes in every run."""

from __future__ import annotations

import csv
import hashlib
import itertools
import json
import re
from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
import pytest
import runs
import soundfile

from leveller.measure.loudness import LoudnessMeter, short_term_lufs
from leveller.pipeline import Result
from leveller.plan import STATES
from leveller.report.figures import figures_of
from leveller.report.quantities import rounded
from leveller.report.tables import MIX_COLUMNS, SPEECH_COLUMNS

HOSTILE = ("=HYPERLINK(1)", 'Ana "A", [red]')
FILES = ("speech.csv", "mix.csv", "report.json")


@dataclass(frozen=True)
class Twice:
    """The same session levelled into two folders."""

    sources: list[Path]
    first: Result
    second: Result


@pytest.fixture(scope="module")
def twice(tmp_path_factory: pytest.TempPathFactory) -> Twice:
    """Two runs over tracks with hostile names, in two places of different names."""
    folder = tmp_path_factory.mktemp("tables")
    _, sources = runs.written(folder / "talk", names=HOSTILE)
    return Twice(sources, runs.run(folder / "talk", folder / "one"), runs.run(folder / "talk", folder / "two again"))


def rows(path: Path, columns: Sequence[str]) -> list[dict[str, str]]:
    """The rows of a CSV file, whose header must be as promised."""
    with open(path, encoding="utf-8", newline="") as file:
        table = csv.DictReader(file, strict=True)
        out = list(table)
        assert tuple(table.fieldnames or ()) == tuple(columns)
    return out


def content(result: Result) -> dict[str, Any]:
    """report.json, read strictly."""
    def refuse(word: str) -> None:
        raise AssertionError(f"{word} is no JSON")

    return json.loads((result.out / "report.json").read_text(encoding="utf-8"), parse_constant=refuse)


@pytest.mark.parametrize("name", FILES)
def test_two_runs_give_the_same_bytes(twice: Twice, name: str) -> None:
    """Every table is equal byte for byte in two runs."""
    assert (twice.first.out / name).read_bytes() == (twice.second.out / name).read_bytes()


def test_speech_covers_each_track_without_gap(twice: Twice) -> None:
    """Each track's stretches touch, from 0 to the end; rows lie in order of time, then session."""
    table = rows(twice.first.out / "speech.csv", SPEECH_COLUMNS)
    names = ["Ana \"A\", [red]", "'=HYPERLINK(1)"]  # sorted by file name; the formula is quoted
    assert sorted({row["track"] for row in table}) == sorted(names)
    for name in names:
        own = [row for row in table if row["track"] == name]
        assert own[0]["from_s"] == "0.00"
        assert all(a["to_s"] == b["from_s"] for a, b in itertools.pairwise(own))
        assert float(own[-1]["to_s"]) == pytest.approx(20.0)
        assert all(a["state"] != b["state"] for a, b in itertools.pairwise(own))
    order = [track.name for track in twice.first.session.tracks]
    keys = [(float(row["from_s"]), order.index(row["track"].removeprefix("'"))) for row in table]
    assert keys == sorted(keys)


def test_speech_says_what_was_decided(twice: Twice) -> None:
    """Own stretches are the decided ones; only they have a level; `sure` lies between 0.5 and 1."""
    table = rows(twice.first.out / "speech.csv", SPEECH_COLUMNS)
    for i, track in enumerate(twice.first.session.tracks):
        own = np.zeros(twice.first.measurements.hops, np.bool_)
        for row in table:
            if row["track"].removeprefix("'") == track.name and row["state"] == "own":
                own[round(float(row["from_s"]) * 100) : round(float(row["to_s"]) * 100)] = True
        assert (own == twice.first.activity.own[:, i]).all()
    assert {row["state"] for row in table} <= set(STATES)
    assert {row["state"] for row in table} >= {"own", "bleed"}
    assert all(bool(row["level_lufs"]) == (row["state"] == "own") for row in table)
    assert all(0.5 <= float(row["sure"]) <= 1 for row in table)
    shortest = min(float(row["to_s"]) - float(row["from_s"]) for row in table if row["state"] != "own")
    assert shortest > 0


def test_mix_table_is_that_of_the_mix(twice: Twice) -> None:
    """A row every 0.1 s; short-term loudness as a meter reads mix.wav; the limiter's deepest is in the table."""
    result = twice.first
    table = rows(result.out / "mix.csv", MIX_COLUMNS)
    assert [row["time_s"] for row in table] == [f"{step / 10:.1f}" for step in range(200)]
    mix, rate_hz = soundfile.read(result.out / "mix.wav", dtype="float32")
    meter = LoudnessMeter(rate_hz, 1)
    meter.push(mix)
    short_term = short_term_lufs(meter.cells())
    assert [row["short_term_lufs"] for row in table[:30]] == [""] * 30
    for row in table[30:]:
        window = round(float(row["time_s"]) * 100) - 300
        assert float(row["short_term_lufs"]) == pytest.approx(short_term[window], abs=0.051)
    assert min(float(row["limiter_db"]) for row in table) == pytest.approx(-result.mix.limiting.most_db, abs=0.0051)
    assert {row["make_up_db"] for row in table} == {f"{result.mix.make_up_db:.2f}"}


def test_report_holds_the_report(twice: Twice) -> None:
    """report.json holds every figure as it is rounded, the settings, and what made it."""
    found, report = content(twice.first), figures_of(twice.first)
    assert found["title"] == "talk"
    assert found["mix"]["integrated_lufs"] == rounded(report.mix, "integrated_lufs")
    assert [voice["track"] for voice in found["voices"]] == [track.name for track in twice.first.session.tracks]
    assert found["voices"][0]["trim_db"] == rounded(report.voices[0], "trim_db")
    assert found["settings"]["expander.range_db"] == "auto"
    assert set(found["made_by"]) == {"leveller", "numpy", "scipy", "soundfile", "soxr", "webrtcvad-wheels"}


def test_sources_are_fingerprinted(twice: Twice) -> None:
    """Each source stands there by name, size and SHA-256."""
    expected = {path.name: (path.stat().st_size, hashlib.sha256(path.read_bytes()).hexdigest())
                for path in twice.sources}
    found = {source["file"]: (source["bytes"], source["sha256"]) for source in content(twice.first)["sources"]}
    assert found == expected


def test_report_names_no_place_and_no_clock(twice: Twice) -> None:
    """No folder and no date or time of day stands in report.json."""
    text = (twice.first.out / "report.json").read_text(encoding="utf-8")
    assert str(twice.first.out.parent) not in text
    assert not re.search(r"\d{4}-\d\d-\d\d", text)


def test_silence_is_no_number(tmp_path: Path) -> None:
    """A silent session gives null and empty cells, never Infinity or NaN."""
    (tmp_path / "talk").mkdir()
    runs.save(tmp_path / "talk" / "A.wav", np.zeros(4 * runs.RATE_HZ, np.float32))
    result = runs.run(tmp_path / "talk", tmp_path / "out")
    assert content(result)["mix"]["integrated_lufs"] is None
    assert {row["short_term_lufs"] for row in rows(result.out / "mix.csv", MIX_COLUMNS)} == {""}
    table = rows(result.out / "speech.csv", SPEECH_COLUMNS)
    assert [(row["from_s"], row["to_s"], row["state"]) for row in table] == [("0.00", "4.00", "silence")]

