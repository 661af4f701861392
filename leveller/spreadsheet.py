"""Reads a CSV that a spreadsheet may have saved in between: the same cells, whatever the dialect.

Understood are commas, semicolons and tabs between cells, decimal points and decimal commas, a byte-order mark, UTF-16,
any line ends, quoted cells, numbers as `="1.5"`, a typographic minus, a first line `sep=;`, other columns, and columns
in another order. Every row comes with its line, so that a message can name it.

RFC 4180 for quoting; the rest is what spreadsheet programs are seen to write (from memory).
"""

from __future__ import annotations

import csv
import io
import re
from collections.abc import Iterator, Sequence
from pathlib import Path

from leveller.errors import AutomationError, InputError, nearest

MOST = 1e15  # beyond it a number of seconds or dB is none, and hundredths of it are not exact
DELIMITERS = ",;\t"
_UTF16 = (b"\xff\xfe", b"\xfe\xff")
_WRAPPED = re.compile(r'="(.*)"', re.DOTALL)
_ANNOUNCED = re.compile(r'"?sep=([,;\t])"?')
_GROUPED = re.compile(r"[+-]?\d{1,3}([.,])\d{3}(?:\1\d{3})*(?!\1)[.,]\d*")  # 1,234.5 or 1.234,5
_NUMBER = re.compile(r"[+-]?(\d+([.,]\d*)?|[.,]\d+)([eE][+-]?\d+)?")


def read_rows(
    path: Path, needed: Sequence[str], optional: Sequence[str] = (), *, others: bool = True
) -> Iterator[tuple[int, tuple[str, ...]]]:
    """Yield (line, cells) of each row: the needed columns, then the optional ones ('' where there is no such column).

    Parameters
    ----------
    others : bool
        whether the file may have further columns

    Raises
    ------
    InputError
        where the file cannot be read
    AutomationError
        for a file that is no text, a column that is missing, unknown or stands there twice, or a row with too few or
        too many cells
    """
    rows = _dialect(path)
    header, header_line = _header(rows)
    if not others:
        _check_known(header, (*needed, *optional), f"{path.name}, line {header_line}")
    places = _places(header, needed, optional, f"{path.name}, line {header_line}")
    least = max(places) + 1
    for line, row in rows:
        if not any(cell.strip() for cell in row):
            continue
        if len(row) < least or any(cell.strip() for cell in row[len(header) :]):  # more: a decimal comma, not quoted
            raise AutomationError(f"{path.name}, line {line}: {len(row)} cells, but the header has {len(header)}")
        yield line, tuple("" if at < 0 else _bare(row[at]) for at in places)


def columns_of(path: Path) -> tuple[str, ...]:
    """The names in a file's header; raises as `read_rows` does."""
    return tuple(_header(_dialect(path))[0])


def number(cell: str) -> float:
    """A cell's number; raises ValueError where it is none."""
    try:
        value = float(cell)
    except ValueError:
        value = _written_otherwise(cell)
    if not abs(value) < MOST or "_" in cell:
        raise ValueError(f"{cell!r} is no number")
    return value


def _written_otherwise(cell: str) -> float:
    """A number with a decimal comma, with thousands set apart, or with a typographic minus."""
    text = cell.replace("\u2212", "-").replace("\u00a0", "").replace("\u202f", "").strip()
    if _GROUPED.fullmatch(text):
        decimal = max(text.rfind("."), text.rfind(","))
        text = re.sub("[.,]", "", text[:decimal]) + "." + text[decimal + 1 :]
    if not _NUMBER.fullmatch(text):
        raise ValueError(f"{cell!r} is no number")
    return float(text.replace(",", "."))


def _text(path: Path) -> str:
    """The file as text."""
    try:
        data = path.read_bytes()
    except OSError as error:
        raise InputError(f"{path}: cannot be read ({error.strerror})") from None
    try:
        return data.decode("utf-16" if data[:2] in _UTF16 else "utf-8-sig")
    except UnicodeDecodeError as error:
        raise AutomationError(f"{path.name}: not UTF-8 text (byte {error.start}). Save it as UTF-8") from None


def _dialect(path: Path) -> Iterator[tuple[int, list[str]]]:
    """Rows with their lines; the delimiter is the one that the header uses most."""
    lines = io.StringIO(_text(path), newline="")
    head = lines.readline()
    announced = _ANNOUNCED.fullmatch(head.rstrip("\r\n").strip(" "))
    if announced is None:
        lines.seek(0)
    above = 0 if announced is None else 1
    reader = csv.reader(lines, delimiter=max(DELIMITERS, key=head.count) if announced is None else announced[1])
    try:
        for row in reader:
            yield reader.line_num + above, row
    except csv.Error as error:
        raise AutomationError(f"{path.name}, line {reader.line_num + above}: not readable as CSV ({error})") from None


def _header(rows: Iterator[tuple[int, list[str]]]) -> tuple[list[str], int]:
    """The names on the first line, in lower case, and its number."""
    line, row = next(rows, (1, []))
    return [_bare(cell).lower() for cell in row], line


def _check_known(header: Sequence[str], known: Sequence[str], where: str) -> None:
    """Refuse a column of another name; one without a name is what a spreadsheet leaves of an empty one."""
    for name in header:
        if name and name not in known:
            raise AutomationError(f"{where}: unknown column {name!r}{nearest(name, known)}; "
                                  f"known: {', '.join(known)}")


def _places(header: Sequence[str], needed: Sequence[str], optional: Sequence[str], where: str) -> list[int]:
    """Where the columns stand; -1 for an optional one that is missing."""
    for name in needed:
        if name not in header:
            raise AutomationError(f"{where}: column {name!r} is missing{nearest(name, header)}; "
                                  f"needed are {', '.join(needed)}")
    for name in (*needed, *optional):
        if header.count(name) > 1:
            raise AutomationError(f"{where}: column {name!r} stands there twice")
    return [header.index(name) if name in header else -1 for name in (*needed, *optional)]


def _bare(cell: str) -> str:
    """The cell without the spaces and the `="…"` round it."""
    text = cell.strip()
    wrapped = _WRAPPED.fullmatch(text)
    return wrapped[1].replace('""', '"') if wrapped else text
