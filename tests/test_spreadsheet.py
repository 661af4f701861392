"""leveller.spreadsheet: the same cells, whatever dialect a spreadsheet has saved."""

from __future__ import annotations

import re
from pathlib import Path

import pytest

from leveller.errors import AutomationError, InputError
from leveller.spreadsheet import columns_of, number, read_rows


def rows(path: Path, text: str | bytes) -> list[tuple[int, tuple[str, ...]]]:
    """The rows of a file with that content: columns a, b and, optional, c."""
    path.write_bytes(text if isinstance(text, bytes) else text.encode())
    return list(read_rows(path, ("a", "b"), ("c",)))


@pytest.mark.parametrize("text", [
    "a,b,c\n1.5,x y,z\n", "a;b;c\r\n1.5;x y;z\r\n", "a\tb\tc\r1.5\tx y\tz\r", "\ufeffa,b,c\n1.5,x y,z",
    '"a";"b";"c"\n"1.5";"x y";"z"\n', "sep=;\na;b;c\n1.5;x y;z\n", "A , b,C\n 1.5, x y,z\n", 'a,b,c\n="1.5",="x y",z\n',
    "c,extra,b,a\nz,!,x y,1.5\n",
])
def test_every_dialect_gives_the_same_cells(tmp_path: Path, text: str) -> None:
    """Delimiter, quotes, line ends, byte-order mark, order and further columns make no difference."""
    assert [cells for _, cells in rows(tmp_path / "t.csv", text)] == [("1.5", "x y", "z")]


def test_utf16_is_read(tmp_path: Path) -> None:
    """What a spreadsheet calls Unicode text is read too."""
    assert rows(tmp_path / "t.csv", "a\tb\nZoë\t1\n".encode("utf-16"))[0][1] == ("Zoë", "1", "")


def test_lines_are_those_of_the_file(tmp_path: Path) -> None:
    """Empty rows and an announced delimiter are passed over, but counted."""
    assert rows(tmp_path / "t.csv", "sep=,\na,b\n1,2\n\n,\n3,4\n") == [(3, ("1", "2", "")), (6, ("3", "4", ""))]


@pytest.mark.parametrize(("cell", "value"), [
    ("-3", -3.0), ("-3,25", -3.25), ("\u22123.25", -3.25), ("+1.5", 1.5), ("1,234.5", 1234.5), ("1.234,5", 1234.5),
    ("1\u00a0234,5", 1234.5), (",5", 0.5), ("2.", 2.0), ("1e2", 100.0), ("1.234.567,25", 1234567.25),
])
def test_numbers_are_read_as_they_are_meant(cell: str, value: float) -> None:
    """Decimal commas, thousands set apart and a typographic minus are numbers."""
    assert number(cell) == value


@pytest.mark.parametrize("cell", ["", "x", "nan", "inf", "-Infinity", "1_000", "1,2,3", "1.2.3", "#REF!", "0x10"])
def test_what_is_no_number_is_none(cell: str) -> None:
    """Words, formula errors and what is not finite are no numbers."""
    with pytest.raises(ValueError, match="is no number"):
        number(cell)


@pytest.mark.parametrize(("text", "message"), [
    ("", "t.csv, line 1: column 'a' is missing; needed are a, b"),
    ("a,bb\n1,2\n", "t.csv, line 1: column 'b' is missing (did you mean \"bb\"?); needed are a, b"),
    ("a,b,b\n1,2,3\n", "t.csv, line 1: column 'b' stands there twice"),
    ("a,c,b\n1,2,3\n4,5\n", "t.csv, line 3: 2 cells, but the header has 3"),
    ("a,b,c\n1,2,3,\n1,2,3,5\n", "t.csv, line 3: 4 cells, but the header has 3"),
    (b"a,b\n\xff,1\n", "t.csv: not UTF-8 text (byte 4). Save it as UTF-8"),
])
def test_what_cannot_be_understood_is_refused(tmp_path: Path, text: str | bytes, message: str) -> None:
    """A refusal names file and line, word for word."""
    with pytest.raises(AutomationError, match=f"^{re.escape(message)}$"):
        rows(tmp_path / "t.csv", text)


def test_a_missing_file_is_an_input_error(tmp_path: Path) -> None:
    """A file that is not there is said to be unreadable."""
    with pytest.raises(InputError, match="cannot be read"):
        columns_of(tmp_path / "none.csv")
