"""Names that become file names: what may stand in them, how they are made safe, how equal ones are told apart.

A track's name is its stem's file name and the CSV's `track`, letter for letter, so it is settled once, here. Spaces,
quotes and letters of any script stay; what no file system or no text file can hold does not.
"""

from __future__ import annotations

import re
import unicodedata
from collections.abc import Sequence

LONGEST_BYTES = 200  # file systems take 255; ' ch12', ' 2' and '.wav' are still to come
DEVICES = frozenset({"con", "prn", "aux", "nul", "conin$", "conout$"} | {
    f"{port}{n}" for port in ("com", "lpt") for n in range(1, 10)})  # names that Windows keeps for itself
FORBIDDEN = re.compile(r"[/\\\x00-\x1f\x7f-\x9f\u2028\u2029\ud800-\udfff]")


def why_unsafe(name: str) -> str:
    """Why a name cannot be a file name in the output folder, or '' where it can."""
    if not name.strip():
        return "is empty"
    if FORBIDDEN.search(name):
        return "holds a path separator or a control character"
    if not name.strip(". "):
        return "would leave the output folder"
    if name.split(".")[0].strip().lower() in DEVICES:
        return "is the name of a device on some systems"
    if len(name.encode()) > LONGEST_BYTES:
        return f"is longer than {LONGEST_BYTES} bytes"
    return ""


def safe_name(text: str) -> str:
    """The nearest text that can be a file or folder name; unchanged where it can be one already."""
    name = FORBIDDEN.sub("_", text)
    name = name.encode()[:LONGEST_BYTES].decode(errors="ignore")
    if not name.strip(". "):
        return "_" + name.strip()
    return f"_{name}" if why_unsafe(name) else name


def unique_names(names: Sequence[str]) -> list[str]:
    """The names in order; the second of equal ones gets ' 2'. Case, outer blanks and accents' encoding do not count."""
    taken: set[str] = set()
    out = []
    for name in names:
        candidate, count = name, 1
        while (key := unicodedata.normalize("NFC", candidate).casefold().strip()) in taken:
            count += 1
            candidate = f"{name} {count}"
        taken.add(key)
        out.append(candidate)
    return out
