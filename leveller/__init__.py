"""leveller: a multitrack dialogue leveller for spoken-word editors.

Conventions, said once:

* audio is float32, `(frames,)` for one channel or `(frames, channels)`; analysis grids are `(hops, tracks)`;
* a *frame* is one instant on all channels, a *block* is what is read at once, a *hop* is one analysis step of 10 ms;
* units ride in names: `_db`, `_lufs`, `_dbtp`, `_hz`, `_s`, `_frames`, `_hops`;
* silence is -inf dB, a gain of -inf dB is zero, and a silent track gets 0 dB of gain and no speech.

Public names are loaded when they are first used, so that `import leveller` is quick. The command limits numpy's linear
algebra to one thread, since tracks are worked on side by side; in a program of your own set OPENBLAS_NUM_THREADS=1,
OMP_NUM_THREADS=1 and MKL_NUM_THREADS=1 before numpy is imported to get the same speed. The bytes written are the same.
"""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from leveller.errors import AutomationError, InputError, LevellerError, OutputError, SettingsError
    from leveller.pipeline import Finished, Result, finish, process, render_again
    from leveller.reading import measure_files
    from leveller.report.figures import figures_of
    from leveller.report.records import FileReading, Report
    from leveller.session import Session, open_session
    from leveller.settings import DELIVERIES, Delivery, Settings

__version__ = "0.1.0"

__all__ = [
    "DELIVERIES", "AutomationError", "Delivery", "FileReading", "Finished", "InputError", "LevellerError",
    "OutputError", "Report", "Result", "Session", "Settings", "SettingsError", "figures_of", "finish", "measure_files",
    "open_session", "process", "render_again",
]

_HOMES = {
    "leveller.errors": ("AutomationError", "InputError", "LevellerError", "OutputError", "SettingsError"),
    "leveller.pipeline": ("Finished", "Result", "finish", "process", "render_again"),
    "leveller.reading": ("measure_files",),
    "leveller.report.figures": ("figures_of",),
    "leveller.report.records": ("FileReading", "Report"),
    "leveller.session": ("Session", "open_session"),
    "leveller.settings": ("DELIVERIES", "Delivery", "Settings"),
}


def __getattr__(name: str) -> Any:
    """A public name, from the module it lives in."""
    from importlib import import_module

    for home, names in _HOMES.items():
        if name in names:
            value = getattr(import_module(home), name)
            globals()[name] = value
            return value
    raise AttributeError(f"module 'leveller' has no attribute {name!r}")
