"""What can go wrong, as a tree with one exit code a branch.

::

    LevellerError            1   root; nothing else is caught by `cli` and `batch`
    ├── InputError           3   a source is missing, unreadable, empty or short
    ├── SettingsError        4   session.toml, --set or an option: unknown key, value out of range
    ├── OutputError          5   the output folder: exists, read-only, no room
    └── AutomationError      6   a CSV that shall be rendered: order, range, unknown track

Exit code 2 is a wrong command line, 7 a batch in which some episodes failed, 130 an interruption. A message says
what, where, found against expected, and the way out, in one line.
"""

from __future__ import annotations

import difflib
from collections.abc import Iterable


class LevellerError(Exception):
    """Root of the tree; `exit_code` is what the command ends with."""

    exit_code = 1


class InputError(LevellerError):
    """A source cannot be used as it is."""

    exit_code = 3


class SettingsError(LevellerError):
    """A key or a value that is not understood."""

    exit_code = 4


class OutputError(LevellerError):
    """The output cannot be written where it was asked for."""

    exit_code = 5


class AutomationError(LevellerError):
    """An automation or corrections file that cannot be rendered."""

    exit_code = 6


def nearest(word: str, known: Iterable[str]) -> str:
    """A hint ' (did you mean "x"?)', or '' where nothing known is close."""
    close = difflib.get_close_matches(word, list(known), n=1, cutoff=0.55)
    return f' (did you mean "{close[0]}"?)' if close else ""
