"""A short simulated session on the disk, for the tests of what is done again: rendered, corrected, finished."""

from __future__ import annotations

import csv
from pathlib import Path

from conversations import Conversation, ConversationSpec, simulate

SPEC = ConversationSpec(seed=11, seconds=24.0, rate_hz=16_000, gains_db=(4.0, -3.0, 0.0))


def recorded(folder: Path) -> Conversation:
    """Three microphones as 24 bit WAV files in a new folder; returns the truth."""
    said = simulate(SPEC)
    said.write(folder)
    return said


def wavs(folder: Path) -> dict[str, bytes]:
    """The bytes of all WAV files below a folder by relative path."""
    found = {str(path.relative_to(folder)): path.read_bytes() for path in sorted(folder.rglob("*.wav"))}
    assert found, f"{folder}: no WAV files"
    return found


def rows_of(path: Path) -> list[dict[str, str]]:
    """The rows of a CSV as this tool writes it."""
    with open(path, encoding="utf-8", newline="") as file:
        rows = list(csv.DictReader(file))
    assert rows, f"{path}: no rows"
    return rows


def write_rows(path: Path, rows: list[dict[str, str]], *, delimiter: str = ",") -> Path:
    """The rows as a CSV again; returns its path."""
    with open(path, "w", encoding="utf-8", newline="") as file:
        writer = csv.DictWriter(file, rows[0], delimiter=delimiter)
        writer.writeheader()
        writer.writerows(rows)
    return path
