"""docs/dependencies.md: every dependency with its lower bound, and the licence that its own metadata names."""

from __future__ import annotations

import re
import tomllib
from importlib import metadata
from pathlib import Path

import pytest

ROOT = Path(__file__).parents[1]
ROWS = [[cell.strip() for cell in line.split("|")[1:-1]]
        for line in (ROOT / "docs" / "dependencies.md").read_text(encoding="utf-8").splitlines()
        if line.startswith("| ") and not line.startswith("| package")]
PROJECT = tomllib.loads((ROOT / "pyproject.toml").read_text(encoding="utf-8"))["project"]


def needed() -> list[list[str]]:
    """Names and lower bounds that pyproject.toml asks for, for use and for a cluster."""
    lines = [*PROJECT["dependencies"], *PROJECT["optional-dependencies"]["cluster"]]
    return [list(re.fullmatch(r"([\w-]+)>=([\d.]+)", line).groups()) for line in lines]  # type: ignore[union-attr]


def test_every_dependency_has_its_row() -> None:
    """Names, order and lower bounds are those of pyproject.toml, and each row says what the package is for."""
    assert [row[:2] for row in ROWS] == needed()
    assert all(len(row) == 4 and row[3] for row in ROWS)


@pytest.mark.parametrize("row", ROWS, ids=[row[0] for row in ROWS])
def test_licences_are_those_of_the_metadata(row: list[str]) -> None:
    """The licence's family stands in what the installed package says of itself."""
    try:
        said = metadata.metadata(row[0])
    except metadata.PackageNotFoundError:
        assert row[0] == "distributed", "a dependency is not installed"
        pytest.skip("comes with [cluster] only")
    texts = [said.get("License-Expression") or "", (said.get("License") or "").partition("\n")[0],
             *(line for line in said.get_all("Classifier") or [] if line.startswith("License ::"))]
    family = row[2].split("-")[0]
    assert [text for text in texts if re.search(rf"\b{family}|Lesser General Public", text)
            and (family == "LGPL" or "Lesser" not in text)] != []
