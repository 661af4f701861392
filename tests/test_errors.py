"""docs/errors.md: every row of its tables is run, and message and exit code are as they stand there.

A cell's code is what is typed and what is said. `{here}` is the folder in which the command runs, `{300 a}` a name of
300 letters. Rows that need a right taken away run in a process of their own, without the superuser's powers.
"""

from __future__ import annotations

import os
import re
import shlex
import shutil
import subprocess
import sys
from pathlib import Path

import badinput
import pytest
import runs

from leveller import cli

PAGE = Path(__file__).parents[1] / "docs" / "errors.md"
CODES = {"3": "InputError", "4": "SettingsError", "5": "OutputError", "6": "AutomationError", "2": "command line"}
LOCKED = ("a file that may not be read", "a folder that may not be read", "a read-only place")
LONG_NAME = "a" * 300
UNPRIVILEGED = ["setpriv", "--bounding-set=-all", "--inh-caps=-all"]


def rows(heading: str) -> list[list[str]]:
    """Rows of the table under a heading: input, command, what is said, exit code."""
    section = PAGE.read_text(encoding="utf-8").partition(f"\n## {heading}\n")[2].partition("\n## ")[0]
    found = [[cell.strip() for cell in re.split(r"(?<!\\)\|", line)[1:-1]]
             for line in section.splitlines() if line.startswith("|")][2:]
    assert found, heading
    return found


REFUSED, ACCEPTED = rows("Refused"), rows("Accepted, repaired and said")


def plain(cell: str, here: Path) -> str:
    """A cell's code, as it is typed or said in a folder."""
    code = re.fullmatch(r"(`+)(.*)\1", cell)
    assert code is not None, cell
    text = code[2].strip(" ") if len(code[1]) > 1 else code[2]
    return text.replace("\\|", "|").replace("{here}", str(here)).replace("{300 a}", LONG_NAME)


@pytest.fixture(scope="module")
def talk(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A short session, to be copied."""
    folder = tmp_path_factory.mktemp("errors") / "talk"
    runs.written(folder, names=("Ana", "Odo"))
    return folder


@pytest.fixture
def here(talk: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Path:
    """The current folder, with a copy of the session in it."""
    shutil.copytree(talk, tmp_path / "talk")
    monkeypatch.chdir(tmp_path)
    return tmp_path


def tree(folder: Path) -> dict[str, bytes | None]:
    """Everything below a folder, with the bytes of the files."""
    return {str(path.relative_to(folder)): path.read_bytes() if path.is_file() else None
            for path in sorted(folder.rglob("*"))}


def said_by(line: str, name: str, capsys: pytest.CaptureFixture[str]) -> tuple[int, str, str]:
    """Exit code, standard output and standard error of a command line."""
    words = shlex.split(line)
    assert words[0] == "leveller"
    if name in LOCKED and os.name == "posix":
        lead = UNPRIVILEGED if os.geteuid() == 0 else []
        if lead and shutil.which(lead[0]) is None:
            pytest.skip("the superuser may do everything, and there is no setpriv to give that up")
        done = subprocess.run([*lead, sys.executable, "-m", "leveller", *words[1:]], capture_output=True, text=True,
                              check=False, timeout=120)
        return done.returncode, done.stdout, done.stderr
    with pytest.raises(SystemExit) as left:
        cli.main(words[1:])
    said = capsys.readouterr()
    return int(left.value.code or 0), said.out, said.err


def test_the_tables_are_what_is_tried() -> None:
    """Every input that the tests can make has a row, every row an input, and each exit code of an error occurs."""
    assert [row[0] for row in REFUSED] == list(badinput.REFUSED)
    assert list(dict.fromkeys(row[0] for row in ACCEPTED)) == list(badinput.ACCEPTED)
    assert {row[3] for row in REFUSED} == set(CODES)


@pytest.mark.parametrize("row", REFUSED, ids=[row[0] for row in REFUSED])
def test_refused(
    row: list[str], here: Path, monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    """One line on the standard error word for word, the exit code, and nothing written or changed."""
    name, line, message, code = row
    badinput.REFUSED[name](monkeypatch)
    before = None if name in LOCKED and os.geteuid() else tree(here)
    found = said_by(plain(line, here), name, capsys)
    assert found == (int(code), "", plain(message, here) + "\n")
    assert before is None or tree(here) == before


@pytest.mark.parametrize("row", ACCEPTED, ids=[row[0] for row in ACCEPTED])
def test_accepted(
    row: list[str], here: Path, monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    """Exit code 0, nothing on the standard error, the sources as they were, and the summary says it."""
    name, line, message, code = row
    badinput.ACCEPTED[name](monkeypatch)
    before = tree(here / "talk")
    found, out, err = said_by(plain(line, here), name, capsys)
    assert (found, err) == (int(code), "")
    assert [text for text in out.splitlines() if plain(message, here) in text] != []
    assert tree(here / "talk") == before
