"""Writes into the manual what the program itself knows: help texts, settings, reported quantities, constants.

    python docs/refresh.py

Between `<!-- made: NAME -->` and `<!-- made: end -->` a page holds what `blocks()` gives for that name, and
tests/test_docs.py fails where it does not. A command that docs/commands.md does not know yet gets a section at its end.
"""

from __future__ import annotations

import ast
import contextlib
import io
import math
import os
import re
from pathlib import Path
from typing import Any

import typer

import leveller
from leveller import cli
from leveller.report import records
from leveller.report.quantities import quantities
from leveller.settings import DELIVERIES, Settings

DOCS = Path(__file__).parent
PACKAGE = Path(leveller.__file__).parent
COMMANDS = DOCS / "commands.md"
BLOCK = re.compile(r"<!-- made: (?P<name>[^>]+?) -->\n(?P<body>.*?)<!-- made: end -->", re.DOTALL)
YARDSTICK = re.compile(r"copying an hour, \*\*([\d.]+) s\*\* of processor time; leveller, \*\*([\d.]+)\*\* times that")
CATALOGUE_H, LINE_GBIT = 100_000, 10
SOURCES_GB, RESULTS_GB = 1.56, 2.6  # of an hour: three tracks; float stems, mix, tables, measurements (84 MB for 120 s)
MOVED_GB = 7.3  # over the network: sources for measuring, rendering and their SHA-256, results once
SIZES_GB = {
    "sources": SOURCES_GB, "results: float stems, mix, tables, kept measurements": RESULTS_GB,
    "moved over the network: sources for measuring, rendering and their SHA-256, results once": MOVED_GB}
RECORDS = {  # key of report.json: the record behind it
    "delivery": records.DeliveryFigures, "mix": records.MixFigures, "voices": records.VoiceFigures,
    "others": records.OtherFigures}


def command_names() -> list[str]:
    """The commands, in the order of the help."""
    root: Any = typer.main.get_command(cli.app)
    return list(root.commands)


def help_of(command: str) -> str:
    """The help of a command at 80 columns; of the whole program where it is empty."""
    kept = os.environ.get("COLUMNS")
    os.environ["COLUMNS"] = "80"
    said = io.StringIO()
    try:
        with contextlib.redirect_stdout(said), contextlib.suppress(SystemExit):
            cli.app(args=[*command.split(), "--help"], prog_name="leveller", standalone_mode=False)
    finally:
        os.environ.pop("COLUMNS")
        if kept is not None:
            os.environ["COLUMNS"] = kept
    return said.getvalue().rstrip() + "\n"


def blocks() -> dict[str, str]:
    """Every block by its name."""
    helps = {f"help {name}".rstrip(): f"```\n$ leveller {name}{' ' if name else ''}--help\n{help_of(name)}```\n"
             for name in ("", *command_names())}
    figures = {f"report {key}": _quantity_table(record) for key, record in RECORDS.items()}
    return {**helps, **figures, "settings": _settings_table(), "deliveries": _delivery_table(),
            "constants": _constant_tables(), "catalogue": _catalogue()}


def refreshed(text: str, made: dict[str, str]) -> str:
    """A page with its blocks as they should be; KeyError for a block of an unknown name."""
    return BLOCK.sub(lambda m: f"<!-- made: {m['name']} -->\n{made[m['name']]}<!-- made: end -->", text)


def _catalogue() -> str:
    """What 100 000 hours cost, from the copy and the ratio that docs/performance.md gives in one line."""
    found = YARDSTICK.search((DOCS / "performance.md").read_text(encoding="utf-8"))
    assert found, f"docs/performance.md: no line like {YARDSTICK.pattern}"
    copy_s, ratio = map(float, found.groups())
    own_s = copy_s * ratio
    core_hours = own_s * CATALOGUE_H / 3600
    line_s = MOVED_GB * 8 / LINE_GBIT
    rows = [(what, f"{cpu_s:.0f} s", f"{cpu_s * CATALOGUE_H / 3600:,.0f} core hours".replace(",", " ") + then)
            for what, cpu_s, then in (("copying alone (yardstick), one thread", copy_s, ": nothing can be quicker"),
                                      (f"processor time, {ratio:g} times the copy", own_s, ""))]
    rows += [(what, f"{size:g} GB", f"{size * CATALOGUE_H / 1000:.0f} TB") for what, size in SIZES_GB.items()]
    return _table(("per hour of programme", "", "100 000 hours"), rows) + f"""
* **Storage limits first.** {LINE_GBIT} Gbit/s carries {MOVED_GB} GB in {line_s:.1f} s at best: the whole catalogue in
  {line_s * CATALOGUE_H / 3600:.0f} hours, whatever computes. At {own_s:.0f} s of processor time an hour,
  {math.ceil(own_s / line_s)} cores keep that line full; more need more lines, or sources copied to the worker's
  own disk first (then they cross once: {SOURCES_GB + RESULTS_GB:.1f} GB). `--stems limited` writes 24 bit instead of 32
  and saves a fifth of the results.
* **Cost.** Core hours times their price, plus the storage: twelve rented cores need {core_hours / 12 / 24:.1f} days for
  the work itself.
"""


def _table(heading: tuple[str, ...], rows: list[tuple[str, ...]]) -> str:
    """A table in Markdown."""
    lines = [heading, tuple("---" for _ in heading), *rows]
    return "".join("| " + " | ".join(cell.replace("|", "\\|") for cell in line) + " |\n" for line in lines)


def _settings_table() -> str:
    """Key, default, bounds, unit, reason."""
    settings = Settings()
    rows = []
    for key, value, unit, why in settings.rows():
        stage, name = key.split(".")
        meta = type(getattr(settings, stage)).__dataclass_fields__[name].metadata
        bounds = f"{meta['low']:g} to {meta['high']:g}" if "low" in meta else "true, false"
        shown = str(value).lower() if isinstance(value, bool) else value if isinstance(value, str) else f"{value:g}"
        rows.append((f"`{key}`", shown, f"auto, {bounds}" if meta.get("auto") else bounds, unit, why))
    return _table(("setting", "default", "from and to", "unit", "why"), rows)


def _delivery_table() -> str:
    """Name, target, ceiling, channels, source."""
    return _table(("delivery", "target, LUFS", "ceiling, dBTP", "channels", "source"), [
        (f"`{d.name}`", f"{d.target_lufs:g}", f"{d.ceiling_dbtp:g}", str(d.channels or "1, or 2 if panned"), d.source)
        for d in DELIVERIES.values()])


def _quantity_table(record: type) -> str:
    """Key, unit, decimals, meaning."""
    known = quantities(record)
    return _table(("key", "what", "unit", "decimals"), [
        (f"`{name}`", f"{what.label}: {what.meaning}", what.unit, str(what.decimals)) for name, what in known.items()])


def _constant_tables() -> str:
    """Every named number with the note beside it, module by module."""
    out = []
    for path in sorted(PACKAGE.rglob("*.py")):
        rows = _constants(path.read_text(encoding="utf-8"))
        if rows:
            name = path.relative_to(PACKAGE).as_posix()
            out.append(f"**{name}**\n\n{_table(('name', 'value', 'note'), rows)}\n")
    return "".join(out)


def _constants(source: str) -> list[tuple[str, ...]]:
    """Public upper-case names that are given a number and a note on one line."""
    lines, rows = source.splitlines(), []
    for node in ast.parse(source).body:
        if not isinstance(node, ast.Assign) or node.lineno != node.end_lineno:
            continue
        target, line = node.targets[0], lines[node.lineno - 1]
        value = line[node.value.col_offset : node.value.end_col_offset]
        note = line[node.value.end_col_offset or 0 :].partition("#")[2].partition("noqa")[0].strip()
        public = isinstance(target, ast.Name) and re.fullmatch("[A-Z][A-Z0-9_]*", target.id)
        if public and note and re.search(r"\d", value):
            rows.append((f"`{public[0]}`", f"`{value}`", note))
    return rows


def main() -> None:
    """Refresh all pages."""
    made = blocks()
    for name in command_names():
        text = COMMANDS.read_text(encoding="utf-8")
        if f"<!-- made: help {name} -->" not in text:
            section = f"\n## {name}\n\n<!-- made: help {name} -->\n<!-- made: end -->\n"
            COMMANDS.write_text(text + section, encoding="utf-8")
    for page in sorted(DOCS.glob("*.md")):
        text = page.read_text(encoding="utf-8")
        page.write_text(refreshed(text, made), encoding="utf-8")


if __name__ == "__main__":
    main()
