"""What an output folder keeps for the next run: the measurements, and the automation's rows as they were written.

`.measurements.npz` spares a second pass over unchanged sources when a session is corrected or rendered again. It counts
only for the very same sources (each file's size, time of change, first and last MiB), the same place of every track in
the session, and the same measuring code; anything else, and any damage, means that the session is measured anew.
`.automation.npz` tells an edited gain from an edited part (`automation`).

Both are numpy's zip files: arrays by name, and under `record` their places as JSON; nothing is ever unpickled. The same
measurements give the same bytes.
"""

from __future__ import annotations

import contextlib
import dataclasses
import functools
import hashlib
import json
import typing
import zipfile
import zlib
from pathlib import Path
from typing import Any

import numpy as np
import numpy.typing as npt

from leveller import __version__
from leveller.audio import parts_of
from leveller.automation import row_keys
from leveller.measure import Measurements
from leveller.plan import GainPlan
from leveller.session import Session

MEASUREMENTS_FILE = ".measurements.npz"
ROWS_FILE = ".automation.npz"
END_BYTES = 1 << 20
_MEASURING = (  # what shapes the numbers
    "measure/*.py", "audio.py", "decoder.py", "lanes.py", "samples.py", "tracks.py", "units.py", "wav.py")
_DAMAGE = (OSError, EOFError, ValueError, KeyError, TypeError, IndexError, zipfile.BadZipFile, zlib.error,
           NotImplementedError, RuntimeError)


def keep_measurements(path: Path, m: Measurements, session: Session) -> None:
    """Write the measurements of a session; where there is no room for them, nothing is kept."""
    arrays: dict[str, npt.NDArray[Any]] = {}
    _write(path, {"session": _fingerprint(session), "record": _packed(m, "m", arrays)}, arrays)


def kept_measurements(folder: Path, session: Session) -> Measurements | None:
    """The measurements that a folder keeps of exactly this session, or None."""
    try:
        record, arrays = _read(folder / MEASUREMENTS_FILE)
        if record["session"] != _fingerprint(session):
            return None
        found = _unpacked(record["record"], arrays)
    except _DAMAGE:
        return None
    return found if isinstance(found, Measurements) else None


def keep_rows(path: Path, plan: GainPlan, session: Session) -> None:
    """Write down which rows the automation file was given."""
    _write(path, {"tracks": _names(session), "hops": plan.hops}, {"rows": row_keys(plan)})


def kept_rows(folder: Path, session: Session, hops: int) -> npt.NDArray[np.int64] | None:
    """`automation.row_keys` of the file that a folder was given, or None."""
    try:
        record, arrays = _read(folder / ROWS_FILE)
        same = record["tracks"] == _names(session) and record["hops"] == hops
        return arrays["rows"].astype(np.int64) if same else None
    except _DAMAGE:
        return None


def _names(session: Session) -> list[str]:
    """Track names in order."""
    return [track.name for track in session.tracks]


def _fingerprint(session: Session) -> str:
    """A digest of all that the measurements depend on."""
    tracks = [
        [[[*_file_mark(part.path), part.frames] for part in parts_of(track)], list(track.channels), track.width,
         track.offset_frames, track.frames, track.source_rate_hz, track.source_frames, track.is_float, track.polarity,
         track.high_pass_hz, track.loud_dbfs, *([track.clock_ppm] if track.clock_ppm else [])]
        for track in session.tracks
    ]
    text = json.dumps([__version__, _code_mark(), session.rate_hz, session.frames, tracks])
    return hashlib.sha256(text.encode()).hexdigest()


def _file_mark(path: Path) -> list[Any]:
    """Size, time of change, and a digest of both ends of a file."""
    facts = path.stat()
    digest = hashlib.sha256()
    with open(path, "rb") as file:
        digest.update(file.read(END_BYTES))
        file.seek(max(0, facts.st_size - END_BYTES))
        digest.update(file.read(END_BYTES))
    return [facts.st_size, facts.st_mtime_ns, digest.hexdigest()]


@functools.cache
def _code_mark() -> str:
    """A digest of the measuring code, so that what an older state of it measured is not taken for today's."""
    digest = hashlib.sha256()
    here = Path(__file__).parent
    for pattern in _MEASURING:
        for file in sorted(here.glob(pattern)):
            digest.update(file.read_bytes())
    return digest.hexdigest()


def _packed(value: Any, name: str, arrays: dict[str, npt.NDArray[Any]]) -> Any:
    """A record as JSON takes it; its arrays go to `arrays`."""
    if isinstance(value, np.ndarray):
        arrays[name] = value
        return {"array": name}
    if dataclasses.is_dataclass(value) and not isinstance(value, type):
        return {"of": type(value).__name__, "fields": {
            f.name: _packed(getattr(value, f.name), f"{name}.{f.name}", arrays) for f in dataclasses.fields(value)}}
    if isinstance(value, tuple):
        return {"tuple": [_packed(part, f"{name}.{i}", arrays) for i, part in enumerate(value)]}
    return value.item() if isinstance(value, np.generic) else value


def _unpacked(value: Any, arrays: dict[str, npt.NDArray[Any]]) -> Any:
    """The record again."""
    if not isinstance(value, dict):
        return value
    if "array" in value:
        return arrays[value["array"]]
    if "tuple" in value:
        return tuple(_unpacked(part, arrays) for part in value["tuple"])
    fields = {name: _unpacked(part, arrays) for name, part in value["fields"].items()}
    return _records(Measurements)[value["of"]](**fields)


@functools.cache
def _records(kind: type[Any]) -> dict[str, type[Any]]:
    """The record and those that its fields hold, by name."""
    found = {kind.__name__: kind}
    for hint in typing.get_type_hints(kind).values():
        for part in (hint, *typing.get_args(hint)):
            if isinstance(part, type) and dataclasses.is_dataclass(part):
                found |= _records(part)
    return found


def _write(path: Path, record: dict[str, Any], arrays: dict[str, npt.NDArray[Any]]) -> None:
    """A zip of arrays; a full disk leaves no file and is no error.

    It is not compressed: levels in steps of 0.006 dB shrink by a tenth only (measured), at a second an hour of session.
    """
    try:
        with zipfile.ZipFile(path, "w", zipfile.ZIP_STORED) as file:
            with file.open("record.json", "w") as member:  # by name: no clock time comes in
                member.write(json.dumps(record).encode())
            for name, array in arrays.items():
                with file.open(f"{name}.npy", "w", force_zip64=True) as member:
                    np.lib.format.write_array(member, np.ascontiguousarray(array), allow_pickle=False)
    except OSError:
        with contextlib.suppress(OSError):
            path.unlink()


def _read(path: Path) -> tuple[dict[str, Any], dict[str, npt.NDArray[Any]]]:
    """Record and arrays of such a zip; raises one of `_DAMAGE`."""
    with zipfile.ZipFile(path) as file:
        record = json.loads(file.read("record.json"))
        arrays = {}
        for name in file.namelist():
            if name.endswith(".npy"):
                with file.open(name) as member:
                    arrays[name.removesuffix(".npy")] = np.lib.format.read_array(member, allow_pickle=False)
    return record, arrays
