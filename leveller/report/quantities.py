"""What a reported quantity is: its name, unit, rounding and meaning, said once beside the field that holds it.

A record's field made by `quantity` carries a `Quantity`. Whoever prints it asks `shown` for the text, whoever stores it
asks `rounded` for the number, so that console, page and report.json cannot disagree. Times are shown as h:mm:ss.
What was not measured is None (shown as a dash); silence is -inf (shown as such, stored as null).
"""

from __future__ import annotations

import dataclasses
import math
from dataclasses import dataclass
from typing import Any

from leveller.units import clock

NOT_MEASURED = "-"
SILENCE = "-inf"


@dataclass(frozen=True)
class Quantity:
    """How a number is named, rounded and read."""

    label: str
    unit: str
    decimals: int
    meaning: str
    signed: bool = False  # shown with its plus


def quantity(
    label: str, unit: str, decimals: int, meaning: str, *, signed: bool = False, default: Any = dataclasses.MISSING
) -> Any:
    """A dataclass field that holds a reported quantity."""
    what = {"quantity": Quantity(label, unit, decimals, meaning, signed)}
    return dataclasses.field(metadata=what, default=default)


def quantities(record: Any) -> dict[str, Quantity]:
    """The quantities of a record or of its class, by field name."""
    return {f.name: f.metadata["quantity"] for f in dataclasses.fields(record) if "quantity" in f.metadata}


def rounded(record: Any, name: str) -> float | None:
    """The number to store; None where it was not measured or is silence."""
    value, decimals = getattr(record, name), quantities(record)[name].decimals
    if value is None or not math.isfinite(value):
        return None
    return round(float(value), decimals) + 0.0  # no minus before zero


def shown(record: Any, name: str, *, unit: bool = False) -> str:
    """The text to print, with the unit where asked for; times as h:mm:ss."""
    value, what = getattr(record, name), quantities(record)[name]
    if value is None:
        return NOT_MEASURED
    if what.unit == "s":
        return clock(value)
    number = rounded(record, name)
    if number is None:
        return SILENCE
    text = f"{number:{'+' if what.signed and number else ''}.{what.decimals}f}"
    return f"{text} {what.unit}" if unit else text
