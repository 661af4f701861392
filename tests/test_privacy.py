"""Nothing leaves the machine, and no report says where on it the work was done."""

from __future__ import annotations

import socket
from pathlib import Path
from typing import NoReturn

import pytest
import runs

from leveller.batch import batch
from leveller.inspection import inspect
from leveller.pipeline import finish, process, render_again
from leveller.reading import measure_files

SECRET = "a-folder-nobody-shall-read-of"


def forbidden(*_: object, **__: object) -> NoReturn:
    """Stands in for everything that opens a connection."""
    raise AssertionError("a connection was opened")


@pytest.fixture(scope="module")
def done(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A folder in which everything was run while sockets were forbidden; its own name is a secret."""
    home = tmp_path_factory.mktemp("privacy") / SECRET
    home.mkdir()
    with pytest.MonkeyPatch.context() as patch:
        for name in ("socket", "create_connection", "getaddrinfo", "gethostbyname", "socketpair"):
            patch.setattr(socket, name, forbidden)
        patch.setenv("HOME", str(home))
        runs.written(home / "talk", names=("Ana", "Odo"))
        (home / "talk" / "session.toml").write_text('[[track]]\nfile = "Ana.wav"\n[[track]]\nfile = "Odo.wav"\n')
        (home / "words.csv").write_text("track,from_s,to_s,decide\nAna,1,2,own\n")
        process(home / "talk", out=home / "first", corrections=home / "words.csv")
        render_again(home / "talk", home / "first" / "automation.csv", out=home / "second")
        finish(home / "first" / "mix.wav", out=home / "third")
        (home / "list").mkdir()
        (home / "list" / "season.csv").write_text(
            "session,name,expander.range_db\n../talk,good,\n../nowhere,gone,\nbad.wav,,\n../talk,odd,1e9\n"
            "../talk,taken,\n")
        (home / "list" / "bad.wav").write_bytes(b"no sound" * 9)
        (home / "fourth" / "taken").mkdir(parents=True)
        report = batch(home / "list" / "season.csv", out=home / "fourth", jobs=1)
        assert [outcome.reason.partition(" (")[0].partition(". ")[0] for outcome in report.episodes] == [
            "", "../nowhere: no such file", "bad.wav: not readable as audio",
            "odd, in the season's list: expander.range_db = 1000000000.0: expected auto or a number from 0 to 60",
            "fourth/taken: exists and is no result of leveller's"]
        assert inspect([home / "talk"]).tracks
        assert measure_files([home / "first" / "mix.wav"])
    return home


def test_no_connection_is_opened(done: Path) -> None:
    """All commands ran to their ends without a socket, and a socket would be seen."""
    results = ("first", "second", "third", "fourth/good")
    assert [name for name in results if not (done / name / "mix.wav").exists()] == []
    with pytest.MonkeyPatch.context() as patch:
        patch.setattr(socket, "socket", forbidden)
        with pytest.raises(AssertionError, match="a connection was opened"):
            socket.create_connection(("localhost", 9))


def test_no_file_says_where_it_was_made(done: Path) -> None:
    """Neither the folder of the work nor the home folder stands in any byte of any file that was written."""
    results = ("first", "second", "third", "fourth")
    written = [path for name in results for path in (done / name).rglob("*") if path.is_file()]
    assert {".csv", ".json", ".html", ".wav", ".npz"} <= {path.suffix for path in written}
    secrets = [SECRET.encode(), str(done.parent).encode(), str(Path("~").expanduser()).encode() + b"/"]
    assert [path.name for path in written for secret in secrets if secret in path.read_bytes()] == []
