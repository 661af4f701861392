"""An inspection as text for the console and as a dict for JSON; the picture is drawn in `inspection_picture`.

The text is plain: no colour, no boxes, columns by spaces, nothing wrapped but the advice stays one line each. What is
unknown is shown as "-", and as null in JSON; so is the level of digital silence.
"""

from __future__ import annotations

import dataclasses
import math
from collections.abc import Sequence
from pathlib import Path
from typing import Any

from leveller.advice import SPEED_M_S
from leveller.errors import OutputError
from leveller.findings import Inspection, Matrix, TrackFindings
from leveller.report.inspection_picture import inspection_svg

__all__ = ["format_inspection", "inspection_json", "inspection_svg", "write_picture"]

LONGEST_NAME = 24  # longer ones are cut in tables; advice has them whole
AIR_MOST_S = 0.03  # delays beyond are given in ms only


def format_inspection(inspection: Inspection) -> list[str]:
    """The lines to print, without line ends."""
    found = inspection
    lines = [f"{found.title}: {_counted(len(found.tracks), 'track')}, {_length(found.length_s)}, {found.rate_hz} Hz"]
    lines += ["", *_microphones(found), "", *_signal(found)]
    table = found.of_voices()
    if len(table.tracks) > 1:
        lines += ["", *_matrix(table, table.bleed_db, "Bleed: each row a voice, each column a microphone, in dB against"
                               " that microphone's own voice (gains cancel out)", _db)]
        lines += ["", *_matrix(table, table.coupling_db, "Coupling: the same in dB against the voice's own microphone, "
                               "in speech bands, gains as recorded", _db)]
        lines += ["", *_matrix(table, table.delay_s, "Delay: how much later the microphone hears the voice, in ms "
                               f"(and metres at {SPEED_M_S:.0f} m/s; over a wall where that is what it hears)", _way)]
    if found.alignment:
        lines += ["", *_alignment(found)]
    lines += ["", *_room_tone(found)]
    if found.notes:
        lines += ["", "Notes", *(f"  {note}" for note in found.notes)]
    lines += ["", "What to do" if found.advice else "Nothing to do: no fault found"]
    return lines + [f"  {line.text}." for line in found.advice]


def inspection_json(inspection: Inspection) -> dict[str, Any]:
    """The whole inspection as JSON takes it: matrices as lists of rows, numbers rounded to 0.0001, unknowns None."""
    plain = {field.name: _plain(getattr(inspection, field.name)) for field in dataclasses.fields(inspection)}
    assert isinstance(plain, dict)
    return plain


def write_picture(path: Path, inspection: Inspection) -> None:
    """Write the picture to a new file.

    Raises
    ------
    OutputError
        when the file exists or cannot be written.
    """
    try:
        with open(path, "x", encoding="utf-8", newline="\n") as file:
            file.write(inspection_svg(inspection))
    except FileExistsError:
        raise OutputError(f"{path}: exists already. Remove it, or name another file") from None
    except OSError as error:
        raise OutputError(f"{path}: cannot be written ({error.strerror})") from error


def _plain(value: Any) -> Any:
    """Records, tuples and arrays as dicts, lists and numbers."""
    if dataclasses.is_dataclass(value):
        return {field.name: _plain(getattr(value, field.name)) for field in dataclasses.fields(value)}
    if hasattr(value, "tolist"):
        return _plain(value.tolist())
    if isinstance(value, (list, tuple)):
        return [_plain(part) for part in value]
    if isinstance(value, float):
        return round(value, 4) + 0.0 if math.isfinite(value) else None
    return value


def _microphones(found: Inspection) -> list[str]:
    """Levels of all tracks."""
    rows = [("Track", "speaks", "share", "voice", "noise", "voice to noise", "peak", "clipped")]
    rows += [("", "s", "%", "LUFS", "LUFS", "dB", "dBFS", "places")]
    for t in found.tracks:
        over = None if t.voice_lufs is None or t.floor_lufs is None else t.voice_lufs - t.floor_lufs
        voice = _one(t.voice_lufs) if t.role == "voice" else t.role
        rows.append((_short(t.name), f"{t.speaking_s:.1f}", f"{100 * t.own_share:.0f}", voice, _one(t.floor_lufs),
                     _one(over), _one(t.peak_dbfs), str(len(t.clipped))))
    return _table(rows)


def _signal(found: Inspection) -> list[str]:
    """Faults of all tracks."""
    rows = [("Track", "hum", "DC", "dropouts", "muted", "polarity", "late"), ("", "dBFS", "%", "places", "s", "", "ms")]
    for t, sign, late in zip(found.tracks, found.polarity, found.late_s, strict=True):
        hum = "none" if t.hum is None else f"{t.hum.mains_hz} Hz {t.hum.level_dbfs:.0f}"
        rows.append((_short(t.name), hum, f"{round(100 * t.dc_offset, 2) + 0.0:.2f}", str(len(t.dropouts)),
                     f"{sum(b - a for a, b in t.muted):.1f}", {1: "+", -1: "turned", None: "-"}[sign],
                     "-" if late is None else f"{round(1000 * late, 1) + 0.0:.1f}"))
    return _table(rows)


def _matrix(found: Inspection, values: Matrix, title: str, cell: Any) -> list[str]:
    """A matrix of voices and microphones under its title."""
    names = [_short(t.name) for t in found.tracks]
    rows = [("", *names)]
    for k, name in enumerate(names):
        rows.append((name, *("own" if k == m else cell(float(values[k, m])) for m in range(len(names)))))
    return [title, *_table(rows)]


def _alignment(found: Inspection) -> list[str]:
    """How the tracks lay before they were lined up."""
    rows = [("Track", "against", "late", "clock fast", "polarity", "confidence"), ("", "", "s", "ppm", "", "0 to 1")]
    for a in found.alignment:
        late = "-" if a.offset_s is None else f"{round(a.offset_s, 4) + 0.0:.4f}"
        fast = "-" if a.drift_ppm is None else f"{round(a.drift_ppm, 1) + 0.0:.1f}"
        rows.append((_short(a.track), _short(a.against) or "reference", late, fast,
                     {1: "+", -1: "turned", None: "-"}[a.polarity], f"{a.confidence:.2f}"))
    return ["Alignment: how the tracks lie as recorded; all else here is of the tracks lined up", *_table(rows)]


def _room_tone(found: Inspection) -> list[str]:
    """Where to cut room tone from."""
    lines = ["Room tone for patching (nobody speaks, nothing knocks; best first)"]
    return lines + [f"  {t.name}: {_stretches(t)}" for t in found.tracks if t.role != "bed"]


def _stretches(t: TrackFindings) -> str:
    """'0:00:03.10 to 0:00:05.00 (-66.1 LUFS, moves by 1.2 dB)' and so on."""
    if not t.room_tone:
        return "none of 1.5 s"
    return "; ".join(f"{_moment(s.from_s)} to {_moment(s.to_s)} ({s.level_lufs:.1f} LUFS, moves by {s.swing_db:.1f} dB)"
                     for s in t.room_tone)


def _table(rows: Sequence[tuple[str, ...]]) -> list[str]:
    """Columns by spaces: the first to the left, the others to the right."""
    widths = [max(len(row[c]) for row in rows) for c in range(len(rows[0]))]
    return [
        "  ".join([row[0].ljust(widths[0]), *(row[c].rjust(widths[c]) for c in range(1, len(row)))]).rstrip()
        for row in rows
    ]


def _one(value: float | None) -> str:
    """One decimal, or '-'."""
    return "-" if value is None or not math.isfinite(value) else f"{value:.1f}"


def _db(value: float) -> str:
    """A level difference."""
    return "-" if not math.isfinite(value) else f"{round(value, 1) + 0.0:.1f}"


def _way(value: float) -> str:
    """A delay in ms, with the way it stands for where air can have made it."""
    if not math.isfinite(value):
        return "-"
    way = f" ({value * SPEED_M_S:.2f} m)" if abs(value) <= AIR_MOST_S else ""
    return f"{round(1000 * value, 2) + 0.0:.2f}{way}"


def _moment(time_s: float) -> str:
    """h:mm:ss.hh"""
    hundredths = round(time_s * 100)
    return f"{hundredths // 360000}:{hundredths // 6000 % 60:02d}:{hundredths // 100 % 60:02d}.{hundredths % 100:02d}"


def _length(time_s: float) -> str:
    """The same to the second, rounded."""
    return _moment(round(time_s))[:-3]


def _short(name: str) -> str:
    """A name cut to fit a table."""
    return name if len(name) <= LONGEST_NAME else name[: LONGEST_NAME - 3] + "..."


def _counted(count: int, word: str) -> str:
    """'1 track', '3 tracks'."""
    return f"{count} {word}{'' if count == 1 else 's'}"
