"""leveller.automation: the gain plan as CSV, both ways."""

from __future__ import annotations

import csv
import io
from collections.abc import Callable
from pathlib import Path

import numpy as np
import pytest
import soundfile as sf
from hypothesis import given, settings
from hypothesis import strategies as st

from leveller.automation import NO_ROWS, ReadBack, read_automation, row_keys, write_automation
from leveller.errors import AutomationError
from leveller.plan import CAUSES, STATES, GainPlan, TrackGain
from leveller.session import Session, open_session

RATE_HZ = 16_000
HOPS = 300
NAMES = ("=1+1", "plain", 'Zoë, "the" host')  # in the order of a folder


@pytest.fixture(scope="module")
def session(tmp_path_factory: pytest.TempPathFactory) -> Session:
    """Three tracks of three seconds with names that are hard on a CSV."""
    folder = tmp_path_factory.mktemp("session")
    for seed, name in enumerate(NAMES):
        noise = np.random.default_rng(seed).uniform(-0.1, 0.1, HOPS * RATE_HZ // 100)
        sf.write(folder / f"{name}.wav", noise, RATE_HZ, subtype="PCM_24")
    return open_session([folder])


def plan_of(seed: int) -> GainPlan:
    """A plan of a few rows a track, steps among them, made by chance."""
    draw = np.random.default_rng(seed)
    tracks = []
    for _ in NAMES:
        inner = np.sort(draw.choice(np.arange(1, HOPS), 8, replace=False))
        hop = np.sort(np.concatenate([[0, HOPS], inner, inner[:2]]))
        parts = draw.integers(-900, 900, (len(hop), 4)).astype(np.int32)
        tracks.append(TrackGain(
            hop.astype(np.int64), parts, parts.sum(axis=1, dtype=np.int32),
            draw.integers(0, len(STATES), len(hop)).astype(np.int8),
            draw.integers(0, CAUSES.index("edit"), len(hop)).astype(np.int8)))
    ranges = tuple(max(0.0, -float(gain.parts_cdb[:, 1].min()) / 100) for gain in tracks)
    return GainPlan(HOPS, tuple(tracks), ranges)


def same(one: GainPlan, other: GainPlan) -> bool:
    """Whether two plans are equal in every row."""
    fields = ("hop", "parts_cdb", "gain_cdb", "state", "cause")
    return one.hops == other.hops and one.range_db == other.range_db and all(
        np.array_equal(getattr(a, field), getattr(b, field))
        for a, b in zip(one.tracks, other.tracks, strict=True) for field in fields)


def written(path: Path, plan: GainPlan, session: Session) -> list[list[str]]:
    """The cells of a written plan, header first."""
    write_automation(path, plan, session)
    with open(path, encoding="utf-8", newline="") as file:
        return list(csv.reader(file))


def read(path: Path, cells: list[list[str]], session: Session, plan: GainPlan) -> ReadBack:
    """What is read of these cells, when that plan had been written."""
    with open(path, "w", encoding="utf-8", newline="") as file:
        csv.writer(file).writerows(cells)
    return read_automation(path, session, hops=HOPS, written=row_keys(plan))


@given(
    seed=st.integers(0, 1000), delimiter=st.sampled_from(",;\t"), decimal=st.sampled_from(".,"),
    encoding=st.sampled_from(["utf-8", "utf-8-sig", "utf-16"]), ends=st.sampled_from(["\n", "\r\n", "\r"]),
    quoting=st.sampled_from([csv.QUOTE_MINIMAL, csv.QUOTE_ALL]), announced=st.booleans(), wrapped=st.booleans(),
    order=st.permutations(range(12)))
@settings(max_examples=60, deadline=None)
def test_a_spreadsheet_changes_nothing(
    session: Session, tmp_path_factory: pytest.TempPathFactory, seed: int, delimiter: str, decimal: str, encoding: str,
    ends: str, quoting: int, announced: bool, wrapped: bool, order: list[int],
) -> None:
    """Whatever dialect a spreadsheet saves in, the plan read is the plan written."""
    path = tmp_path_factory.mktemp("csv") / "automation.csv"
    plan = plan_of(seed)
    header, *rows = written(path, plan, session)
    for row in rows:
        for at in (0, *range(4, 9)):
            row[at] = row[at].rstrip("0").rstrip(".").replace(".", decimal)
            row[at] = f'="{row[at]}"' if wrapped else row[at]
    text = io.StringIO()
    writer = csv.writer(text, delimiter=delimiter, lineterminator=ends, quoting=quoting)
    for row in [[*header, "remarks"], *([*row, 'an "extra" cell'] for row in rows)]:
        writer.writerow([row[at] for at in order])
    announcement = f"sep={delimiter}{ends}" if announced else ""
    path.write_bytes((announcement + text.getvalue()).encode(encoding))
    found = read_automation(path, session, hops=HOPS, written=row_keys(plan))
    assert same(found.plan, plan)
    assert (found.notes, found.edited_rows) == ((), 0)


def test_an_edited_gain_counts_and_its_part_is_told(session: Session, tmp_path: Path) -> None:
    """A changed gain_db is taken, the difference stands in auto_trim_db with the cause edit; other rows stay."""
    plan = plan_of(1)
    cells = written(tmp_path / "a.csv", plan, session)
    at = next(i for i, row in enumerate(cells) if row[3] == "plain" and i > 0 and row[0] != "0.00")
    before = float(cells[at][5])
    new = 3.0 if float(cells[at][4]) != 3.0 else 4.0
    difference = new - float(cells[at][4])
    cells[at][4] = f"{new}"
    found = read(tmp_path / "a.csv", cells, session, plan)
    again = written(tmp_path / "b.csv", found.plan, session)
    assert found.edited_rows == 1
    assert float(again[at][4]) == new
    assert float(again[at][5]) == pytest.approx(before + difference, abs=1e-9)
    assert again[at][-1] == "edit"
    assert again[:at] + again[at + 1 :] == cells[:at] + cells[at + 1 :]
    assert all(abs(sum(map(float, row[5:9])) - float(row[4])) < 0.005 for row in again[1:])


def test_rows_may_be_added_and_deleted(session: Session, tmp_path: Path) -> None:
    """Rows that an editor adds need time, track and gain only; inner rows may go."""
    plan = plan_of(2)
    cells = written(tmp_path / "a.csv", plan, session)
    ends = [row for row in cells[1:] if row[0] in ("0.00", "3.00")]
    added = ["1.50", "", "", NAMES[2], "-7.25", "", "", "", "", "", ""]
    found = read(tmp_path / "a.csv", [cells[0], *ends[:3], added, *ends[3:]], session, plan)
    gain = found.plan.tracks[2]
    assert gain.hop.tolist() == [0, 150, 300]
    assert gain.gain_cdb[1] == -725
    assert gain.parts_cdb[1].tolist() == [-725, 0, 0, 0]
    assert gain.state[1] == gain.state[0]
    assert CAUSES[gain.cause[1]] == "edit"


def test_columns_that_are_not_read_back_may_be_missing(session: Session, tmp_path: Path) -> None:
    """time_s, track and gain_db are enough."""
    plan = plan_of(3)
    cells = written(tmp_path / "a.csv", plan, session)
    found = read(tmp_path / "a.csv", [[row[0], row[3], row[4]] for row in cells], session, plan)
    for mine, theirs in zip(found.plan.tracks, plan.tracks, strict=True):
        assert np.array_equal(mine.gain_cdb, theirs.gain_cdb)
        assert np.array_equal(mine.hop, theirs.hop)


def test_what_is_rounded_is_said(session: Session, tmp_path: Path) -> None:
    """Times off the 10 ms grid and gains finer than 0.01 dB are rounded, with a sentence for each."""
    plan = plan_of(4)
    cells = written(tmp_path / "a.csv", plan, session)
    at = 4
    cells[at][0] = f"{float(cells[at][0]) + 0.0012:.4f}"
    cells[at + 1][4] = "1.2345"
    found = read(tmp_path / "a.csv", cells, session, plan)
    assert found.notes == ("a.csv: 1 row has an editor's gain",
                           "a.csv: time_s rounded to the 10 ms grid in 1 row (first on line 5)",
                           "a.csv: gain_db rounded to 0.01 dB in 1 row (first on line 6)")
    assert 123 in np.concatenate([gain.gain_cdb for gain in found.plan.tracks])


def test_parts_within_the_slack_are_no_edit(session: Session, tmp_path: Path) -> None:
    """Parts that miss the gain by 0.03 dB are taken as they are, by 0.04 dB refused."""
    plan = plan_of(5)
    cells = written(tmp_path / "a.csv", plan, session)
    at = 5
    cells[at][6] = f"{float(cells[at][6]) + 0.03:.2f}"
    assert read(tmp_path / "a.csv", cells, session, plan).edited_rows == 0
    cells[at][6] = f"{float(cells[at][6]) + 0.01:.2f}"
    with pytest.raises(AutomationError, match="the parts add up to"):
        read(tmp_path / "a.csv", cells, session, plan)


def test_an_edited_part_needs_the_file_as_it_was_written(session: Session, tmp_path: Path) -> None:
    """Where nothing is known of the file before the edit, parts that do not add up count as an edited gain."""
    plan = plan_of(6)
    cells = written(tmp_path / "a.csv", plan, session)
    cells[5][6] = f"{float(cells[5][6]) - 2:.2f}"
    with open(tmp_path / "a.csv", "w", encoding="utf-8", newline="") as file:
        csv.writer(file).writerows(cells)
    found = read_automation(tmp_path / "a.csv", session, hops=HOPS, written=NO_ROWS)
    assert found.edited_rows == 1
    assert [gain.gain_cdb.tolist() for gain in found.plan.tracks] == [gain.gain_cdb.tolist() for gain in plan.tracks]


def cell(line: int, column: int, text: str) -> Callable[[list[list[str]]], None]:
    """An edit that puts a text into a cell; lines as in the file, from 1."""
    def edit(cells: list[list[str]]) -> None:
        cells[line - 1][column] = text
    return edit


def swapped(cells: list[list[str]]) -> None:
    """Line 5 moved behind the rows at the end."""
    cells.append(cells.pop(4))


def swapped_at_start(cells: list[list[str]]) -> None:
    """Two tracks at 0 in the wrong order."""
    cells[1], cells[2] = cells[2], cells[1]


def no_start(cells: list[list[str]]) -> None:
    """The last track's row at 0 deleted."""
    del cells[3]


def no_end(cells: list[list[str]]) -> None:
    """The last row deleted."""
    del cells[-1]


def third(cells: list[list[str]]) -> None:
    """Three rows of one track at 1 s, all gains alike."""
    cells[:] = [cells[0], *([f"{time_s}", "", "", name, "-2", "", "", "", "", "", ""]
                            for time_s, names in ((0, NAMES), (1, NAMES[:1] * 3), (3, NAMES)) for name in names)]


def part(cells: list[list[str]]) -> None:
    """A part edited on line 3, the gain left."""
    cells[2][7] = f"{float(cells[2][7]) + 2:.2f}"


def no_track(cells: list[list[str]]) -> None:
    """No row of the last track at all."""
    cells[:] = [row for row in cells if row[3] != NAMES[2]]


REFUSED = [
    (cell(4, 4, "loud"), "a.csv, line 4: gain_db = 'loud': expected a number"),
    (cell(4, 4, "nan"), "a.csv, line 4: gain_db = 'nan': expected a number"),
    (cell(4, 4, ""), "a.csv, line 4: gain_db = '': expected a number"),
    (cell(2, 0, "soon"), "a.csv, line 2: time_s = 'soon': expected a number"),
    (cell(3, 6, "?"), "a.csv, line 3: expander_db = '?': expected a number"),
    (cell(4, 4, "40.01"), "a.csv, line 4: gain_db = 40.01: expected -120 to +40 dB"),
    (cell(4, 4, "-120.5"), "a.csv, line 4: gain_db = -120.5: expected -120 to +40 dB"),
    (cell(4, 3, "plane"), "a.csv, line 4: unknown track 'plane' (did you mean \"plain\"?); known: =1+1, "
                          'plain, Zoë, "the" host'),
    (cell(2, 0, "-0.01"), "a.csv, line 2: time_s = -0.01 lies outside the session, which lasts from 0 to 3.00 s"),
    (cell(37, 0, "3.01"), "a.csv, line 37: time_s = 3.01 lies outside the session, which lasts from 0 to 3.00 s"),
    (swapped_at_start, 'a.csv, line 3: out of order: 0.00 s, =1+1 stands after 0.00 s, plain. Sort the rows '
                       "by time_s, rows of one time as the session has the tracks"),
    (no_end, 'a.csv, line 34: Zoë, "the" host has its last row at 2.90 s, but needs one at the session\'s end at '
             "3.00 s"),
    (third, "a.csv, line 7: =1+1 has a third row at 1.00 s; a step is two rows at one time. Delete those between them"),
    (no_track, "a.csv, line 1: Zoë, \"the\" host has no row at 0 s. Every track needs one"),
]


@pytest.mark.parametrize(("edit", "message"), REFUSED)
def test_a_row_that_cannot_be_rendered_is_refused(
    session: Session, tmp_path: Path, edit: Callable[[list[list[str]]], None], message: str
) -> None:
    """Every refusal names file and line, word for word."""
    plan = plan_of(7)
    cells = written(tmp_path / "a.csv", plan, session)
    edit(cells)
    with pytest.raises(AutomationError) as caught:
        read(tmp_path / "a.csv", cells, session, plan)
    assert str(caught.value) == message
    assert caught.value.exit_code == 6


@pytest.mark.parametrize(("edit", "message"), [
    (swapped, r"a\.csv, line 37: out of order: .* s, .* stands after 3\.00 s, Zoë, \"the\" host\. Sort the rows by "
              r"time_s, rows of one time as the session has the tracks"),
    (no_start, r"a\.csv, line \d+: Zoë, \"the\" host has no row at 0 s\. Every track needs one"),
    (part, r"a\.csv, line 3: plain, 0\.00 s: the parts add up to -?\d+\.\d\d dB, but gain_db = -?\d+\.\d\d is as it "
           r"was written\. Only gain_db is rendered: change that instead"),
])
def test_refusals_that_depend_on_the_plan(
    session: Session, tmp_path: Path, edit: Callable[[list[list[str]]], None], message: str
) -> None:
    """Order, missing first rows and edited parts are refused with file and line."""
    plan = plan_of(8)
    cells = written(tmp_path / "a.csv", plan, session)
    edit(cells)
    with pytest.raises(AutomationError, match=f"^{message}$"):
        read(tmp_path / "a.csv", cells, session, plan)
