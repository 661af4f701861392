"""The gain plan as CSV, both ways: the file an editor reads, changes and renders again.

RFC 4180, header on line 1, rows by time, then session order; times on the 10 ms grid, gains to 0.01 dB, linear in dB
between rows. Only `gain_db` is read back; the parts explain it. A row whose parts no longer add up to its gain
although the gain is unchanged is refused, since the edit would silently do nothing.
"""

from __future__ import annotations

from pathlib import Path

import numpy as np

from leveller.plan import CAUSES, PARTS, STATES, GainPlan
from leveller.session import Session
from leveller.units import HOPS_PER_S, hop_to_frame

COLUMNS = ("time_s", "time", "sample", "track", "gain_db", *(f"{part}_db" for part in PARTS), "state", "cause")
_FORMULA = ("=", "+", "-", "@", "\t", "\r")


def write_automation(path: Path, plan: GainPlan, session: Session) -> None:
    """Write the plan of all tracks."""
    order = np.concatenate([np.stack([gain.hop, np.full(len(gain.hop), i), np.arange(len(gain.hop))], 1)
                            for i, gain in enumerate(plan.tracks)])
    order = order[np.lexsort((order[:, 2], order[:, 1], order[:, 0]))]
    names = [text_cell(track.name) for track in session.tracks]
    with open(path, "w", encoding="utf-8", newline="") as file:
        file.write(",".join(COLUMNS) + "\r\n")
        for hop, track, row in order.tolist():
            gain = plan.tracks[track]
            levels = ",".join(_db(value) for value in (gain.gain_cdb[row], *gain.parts_cdb[row]))
            file.write(f"{hop / HOPS_PER_S:.2f},{_clock(hop)},{hop_to_frame(hop, session.rate_hz)},{names[track]},"
                       f"{levels},{STATES[gain.state[row]]},{CAUSES[gain.cause[row]]}\r\n")


def text_cell(text: str) -> str:
    """A text cell that no spreadsheet runs as a formula, quoted where RFC 4180 asks for it."""
    if text.startswith(_FORMULA):
        text = "'" + text
    return '"' + text.replace('"', '""') + '"' if any(c in text for c in ',;"\r\n\'') else text


def _db(hundredths: int) -> str:
    """Hundredths of a dB with two decimals; no minus sign before zero."""
    return f"{int(hundredths) / 100:.2f}"


def _clock(hop: int) -> str:
    """h:mm:ss.cc."""
    seconds, part = divmod(hop, HOPS_PER_S)
    return f"{seconds // 3600}:{seconds // 60 % 60:02d}:{seconds % 60:02d}.{part:02d}"
