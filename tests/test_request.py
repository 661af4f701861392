"""leveller.request: options are checked at the door, and where a result goes and what room it takes is known there."""

from __future__ import annotations

import re
import shutil
from pathlib import Path

import pytest
from runs import noise, run, save

from leveller.errors import OutputError, SettingsError
from leveller.fingerprint import fingerprint
from leveller.folder import OutputFolder
from leveller.request import MARGIN_BYTES, Request, cut_folder, output_folder, source_paths


@pytest.fixture
def place(tmp_path: Path) -> Path:
    """A folder with two short files."""
    (tmp_path / "in").mkdir()
    for seed, name in enumerate(("guest", "host")):
        save(tmp_path / "in" / f"{name}.wav", noise(4.0, seed=seed))
    return tmp_path / "in"


def asked_bytes(folder: OutputFolder, monkeypatch: pytest.MonkeyPatch) -> int:
    """The room that a folder asks for on entry, to 10 MB, as its refusal says."""
    monkeypatch.setattr(shutil, "disk_usage", lambda _: shutil._ntuple_diskusage(1, 1, 0))
    with pytest.raises(OutputError) as refused:
        folder.__enter__()
    return round(float(re.findall(r"needs ([\d.]+) GB", str(refused.value))[0]) * 1e9)


def test_unknown_stems_are_refused_before_anything_is_opened(tmp_path: Path) -> None:
    """The word is checked first: even of a session that is not there nothing else is said."""
    with pytest.raises(SettingsError, match="stems 'loud': expected before-limiter or limited"):
        Request(tmp_path / "nothing", stems="loud").opened()


def test_one_path_and_a_list_of_it_are_the_same_request(place: Path) -> None:
    """A source may stand alone, as a text or as a path, and the digest is that of `fingerprint`."""
    ways = [Request(place), Request(str(place)), Request([place])]
    assert len({way.opened() for way in ways}) == 1
    assert {way.fingerprint() for way in ways} == {fingerprint([place], stems="before-limiter")}


def test_every_option_reaches_the_session(place: Path) -> None:
    """What was asked for is what the session has."""
    session = Request(place, delivery="r128", settings={"ride.range_db": 3}, align=True).opened()
    assert (session.delivery.name, session.settings.ride.range_db, session.align) == ("r128", 3.0, True)


def test_an_edited_speech_table_is_no_corrections_file(place: Path, tmp_path: Path) -> None:
    """It opens without a correction, and becomes corrections once it is decided who speaks."""
    result = run(place, tmp_path / "out")
    table = tmp_path / "speech.csv"
    table.write_text("from_s,to_s,track,state\n1.00,2.00,host,own\n", encoding="utf-8")
    asked = Request(place, corrections=table)
    session = asked.opened()
    assert session.corrections == ()
    corrected = asked.with_speech_table(session, result.activity)
    assert [(c.track, c.from_s, c.to_s, c.decide) for c in corrected.corrections] == [("host", 1.0, 2.0, "own")]
    assert Request(place).with_speech_table(session, result.activity) is session


@pytest.mark.parametrize("stems", ["before-limiter", "limited"])
def test_the_room_asked_for_holds_what_is_written(
    place: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch, stems: str
) -> None:
    """All files of a result fit into it, and it is no more than they take and the margin twice."""
    result = run(place, tmp_path / "out", stems=stems)
    written = sum(path.stat().st_size for path in result.out.rglob("*") if path.is_file())
    asked = asked_bytes(output_folder(result.session, tmp_path / "b", replace=False, stems=stems), monkeypatch)
    assert 0 < written < asked < written + 2 * MARGIN_BYTES


def test_the_default_folder_bears_the_title(place: Path) -> None:
    """A result goes to ./levelled/TITLE, a finished cut beside it, unless a folder is named."""
    session = Request(place).opened()
    assert output_folder(session, None, replace=False, stems="limited").path == Path("levelled/in").absolute()
    assert cut_folder(session, None, replace=False).path == Path("levelled/in finished").absolute()
    assert cut_folder(session, place.parent / "x", replace=False).path == place.parent / "x"


def test_every_source_is_named(place: Path) -> None:
    """Also what was set aside is a source, which no output may replace."""
    shutil.copy(place / "host.wav", place / "host copy.wav")
    session = Request(place).opened()
    assert len(session.set_aside) == 1
    assert {path.name for path in source_paths(session)} == {"guest.wav", "host.wav", "host copy.wav"}
