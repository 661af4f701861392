"""The story: what `leveller process` does, one line a stage, and what it returns.

`process` is what the command itself calls. Nothing here computes; each stage is a room of its own.
"""

from __future__ import annotations

import dataclasses
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from leveller.attribute import Activity, attribute
from leveller.automation import write_automation
from leveller.errors import SettingsError
from leveller.folder import OutputFolder
from leveller.measure import Measurements, OnProgress, measure, no_progress
from leveller.names import safe_name
from leveller.plan import GainPlan, make_plan
from leveller.render.mix import LEVELS, Mix, render
from leveller.session import Session, open_session

DEFAULT_OUT = Path("levelled")
MARGIN_BYTES = 64 << 20  # tables, page and what else is small


@dataclass(frozen=True)
class Result:
    """Everything known after a run; all reports are made from it."""

    session: Session
    measurements: Measurements
    activity: Activity
    plan: GainPlan
    mix: Mix
    stems: str
    out: Path


def process(
    sources: Sequence[Path | str] | Path | str,
    *,
    out: Path | str | None = None,
    replace: bool = False,
    delivery: str | None = None,
    stems: str = LEVELS[0],
    settings: Mapping[str, Any] | None = None,
    corrections: Path | None = None,
    accept_short: bool = False,
    on_progress: OnProgress = no_progress,
) -> Result:
    """Level a conversation: write stems, mix, automation and reports.

    Parameters
    ----------
    sources : path or sequence of paths
        A session folder, a session.toml, or the audio files of one conversation.
    out : path, optional
        Folder to write, `./levelled/<title>` by default; it appears whole or not at all.
    replace : bool
        Allow an existing folder to be replaced.
    delivery : str, optional
        Name of a delivery (`leveller.settings.DELIVERIES`).
    stems : "before-limiter" or "limited"
    settings : mapping, optional
        Settings by dotted name, such as `{"expander.range_db": 18}`.
    corrections : path, optional
        A corrections.csv.
    accept_short : bool
        Take what is there of a file that is shorter than its header says.
    on_progress : callable (stage, done, total), optional

    Returns
    -------
    Result

    Raises
    ------
    LevellerError
        With one line that says what, where and the way out; nothing is written then.
    """
    if stems not in LEVELS:
        raise SettingsError(f"stems {stems!r}: expected {' or '.join(LEVELS)}")
    paths = [sources] if isinstance(sources, str | Path) else list(sources)
    session = open_session(paths, delivery=delivery, assignments=settings, accept_short=accept_short,
                           corrections=corrections)
    folder = OutputFolder(_out(out, session), replace, needed_bytes=_needed_bytes(session),
                          sources=[track.path for track in session.tracks])
    with folder:
        measurements = measure(session, on_progress=on_progress)
        activity = attribute(measurements, session)
        plan = make_plan(measurements, activity, session)
        mix = render(session, plan, folder.work, stems=stems, on_progress=on_progress)
        result = Result(session, measurements, activity, plan, mix, stems, folder.path)
        write_automation(folder.file("automation.csv"), plan, session)
    return result


def _out(out: Path | str | None, session: Session) -> Path:
    """The output folder asked for, or the default one."""
    return Path(out) if out is not None else DEFAULT_OUT / safe_name(session.title)


def _needed_bytes(session: Session) -> int:
    """Room for float stems, the spilled sum and the mix."""
    frame_bytes = session.mix_channels * (4 * len(session.tracks) + 4 + 3)
    return session.frames * frame_bytes + MARGIN_BYTES
