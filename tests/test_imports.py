"""Imports point one way, without a cycle; each outside library has one owner; `import leveller` is light."""

from __future__ import annotations

import ast
import subprocess
import sys
from collections.abc import Iterator
from dataclasses import dataclass
from functools import lru_cache
from pathlib import Path

import pytest

import leveller

PACKAGE = Path(leveller.__file__).parent
ORDER = (  # the design: each room may import those before it (and its own modules), never those after it
    "errors", "units", "names", "riff", "samples", "wav", "settings", "spreadsheet", "folder", "desk", "interruptions",
    "lanes", "recursion", "decoder", "tracks", "bwf", "ixml", "audio", "sessionfile", "defaults", "takes", "drafts",
    "duplicates", "session", "season", "fingerprint", "measure", "align", "suspects", "timeline", "attribute", "plan",
    "doubt", "automation", "edits", "kept", "listen", "render", "marks", "cut", "spots", "findings", "advice", "quiet",
    "inspection", "report", "reading", "request", "pipeline", "worker", "workers", "cluster", "batch", "console", "cli",
    "__main__")
OWNERS = {  # outside library: the modules that may import it
    "soundfile": {"audio"}, "soxr": {"audio"}, "webrtcvad": {"measure.voice"}, "rich": {"console"}, "typer": {"cli"}}
LIGHT = ("numpy", "scipy", "soundfile", "soxr", "webrtcvad", "rich", "typer")  # what `import leveller` must not load


@dataclass(frozen=True)
class Import:
    """One import statement."""

    by: str  # module, without the package's name; "" for the package itself
    of: str  # full dotted name
    line: int
    typing_only: bool  # under `if TYPE_CHECKING`
    on_use: bool  # inside a function


@lru_cache(maxsize=1)
def modules() -> dict[str, Path]:
    """Every module of the package by dotted name; a package under its own name."""
    found = {}
    for path in sorted(PACKAGE.rglob("*.py")):
        parts = path.relative_to(PACKAGE).with_suffix("").parts
        found[".".join(part for part in parts if part != "__init__")] = path
    assert len(found) > 20
    return found


@lru_cache(maxsize=1)
def imports() -> tuple[Import, ...]:
    """Every import of the package."""
    found = tuple(one for name, path in modules().items()
                  for one in _imports(ast.parse(path.read_text(encoding="utf-8")), name, False, False))
    assert len(found) > 100
    return found


def _imports(node: ast.AST, by: str, typing_only: bool, on_use: bool) -> Iterator[Import]:
    for child in ast.iter_child_nodes(node):
        checked = typing_only or (isinstance(child, ast.If) and "TYPE_CHECKING" in ast.unparse(child.test))
        inside = on_use or isinstance(child, ast.FunctionDef | ast.AsyncFunctionDef | ast.Lambda)
        if isinstance(child, ast.Import):
            yield from (Import(by, alias.name, child.lineno, typing_only, on_use) for alias in child.names)
        elif isinstance(child, ast.ImportFrom):
            assert child.level == 0, f"{by}, line {child.lineno}: relative import"
            base = child.module or ""
            for alias in child.names:
                inner = f"{base}.{alias.name}".removeprefix("leveller.")
                is_module = base.startswith("leveller") and inner in modules()
                yield Import(by, f"{base}.{alias.name}" if is_module else base, child.lineno, typing_only, on_use)
        yield from _imports(child, by, checked, inside)


def inner_imports(*, on_use: bool = True) -> list[Import]:
    """Imports of the package's own modules that happen when it runs; the package itself holds only the version."""
    return [one for one in imports() if one.of.startswith("leveller.") and not one.typing_only and one.by
            and (on_use or not one.on_use)]


def room(module: str) -> str:
    return module.removeprefix("leveller.").split(".")[0]


def test_every_module_has_its_place() -> None:
    """The list names every module there is; what is not written yet may be on it."""
    there = {room(name) for name in modules() if name}
    assert there <= set(ORDER)
    assert len(set(ORDER)) == len(ORDER)


@pytest.mark.parametrize("module", [
    name for name in modules() if name])
def test_imports_point_one_way(module: str) -> None:
    """A module imports only what stands before it; also inside functions."""
    backwards = [f"line {one.line}: {one.of}" for one in inner_imports() if one.by == module
                 and room(one.of) != room(module) and ORDER.index(room(one.of)) >= ORDER.index(room(module))]
    assert backwards == []


def test_there_is_no_cycle() -> None:
    """No module imports itself by way of others when it is loaded."""
    edges: dict[str, set[str]] = {name: set() for name in modules()}
    for one in inner_imports(on_use=False):
        target = one.of.removeprefix("leveller.")
        if target != one.by:
            edges[one.by].add(target)
    done: set[str] = set()

    def walk(name: str, path: tuple[str, ...]) -> None:
        assert name not in path, " -> ".join((*path, name))
        if name not in done:
            for other in sorted(edges[name]):
                walk(other, (*path, name))
            done.add(name)

    for name in edges:
        walk(name, ())
    assert done == set(edges)


@pytest.mark.parametrize("library", sorted(OWNERS))
def test_one_module_owns_each_library(library: str) -> None:
    """Nobody else imports it, not even for its types; its owner does."""
    users = {one.by for one in imports() if one.of.split(".")[0] == library}
    assert users == OWNERS[library]


def test_heavy_libraries_are_loaded_on_use() -> None:
    """scipy is imported inside functions only, so that a command that needs none starts quickly."""
    at_the_top = [f"{one.by}, line {one.line}" for one in imports()
                  if one.of.split(".")[0] == "scipy" and not (one.on_use or one.typing_only)]
    assert at_the_top == []
    assert any(one.of.split(".")[0] == "scipy" for one in imports())


def test_importing_the_package_is_light() -> None:
    """`import leveller` loads none of the libraries, and public names still arrive when used."""
    code = ("import sys, leveller; before = set(sys.modules); leveller.Settings; "
            f"print(*[name for name in {LIGHT!r} if name in before], sep=',')")
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True, cwd=PACKAGE.parent)
    assert done.stdout.strip() == ""


def test_public_names_exist() -> None:
    """Every name of `__all__` can be had, and another gives AttributeError."""
    assert len(leveller.__all__) > 5
    assert all(getattr(leveller, name) is not None for name in leveller.__all__)
    with pytest.raises(AttributeError, match="no attribute 'nothing'"):
        _ = leveller.nothing
