"""What a run was asked for, and all that is settled about it before any sound is read.

A `Request` is the sources and options as they were given. It opens the session and checks every option on the way, so
that what is refused is refused at the door; it knows whether the corrections are a corrections.csv or an edited
speech.csv (which can be understood only once it is decided who speaks), and what the result's fingerprint will be.

`output_folder` says where a session's result goes and how much room it takes: an upper bound, computed from the length
alone, since a disk that is too small is told before the work starts.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from leveller.attribute import Activity
from leveller.audio import parts_of
from leveller.edits import is_speech_table, with_speech_table
from leveller.errors import SettingsError
from leveller.fingerprint import fingerprint
from leveller.folder import OutputFolder
from leveller.names import safe_name
from leveller.plan.corrections import check_corrections
from leveller.render.mix import LEVELS
from leveller.session import Session, open_session
from leveller.timeline import check_asked, check_table
from leveller.units import frames_to_hops

DEFAULT_OUT = Path("levelled")
KEPT_BYTES = 40 + 28  # of measurements, a hop and track, and of the levels that lie in a file meanwhile
MARGIN_BYTES = 64 << 20  # tables, page and what else is small


@dataclass(frozen=True)
class Request:
    """Sources and options of a run, as `pipeline.process` describes them."""

    sources: Sequence[Path | str] | Path | str
    delivery: str | None = None
    stems: str = LEVELS[0]
    settings: Mapping[str, Any] | None = None
    corrections: Path | None = None
    accept_short: bool = False
    align: bool | None = None
    season: Path | None = None

    def opened(self, *, tables: Sequence[Path] = ()) -> Session:
        """The session, with every option checked.

        Parameters
        ----------
        tables : sequence of Path
            further tables of an earlier run (an automation.csv), which must be of this session's timeline

        Raises
        ------
        InputError, SettingsError, AutomationError
        """
        if self.stems not in LEVELS:
            raise SettingsError(f"stems {self.stems!r}: expected {' or '.join(LEVELS)}")
        paths, speech = _listed(self.sources), self._speech_table()
        session = open_session(
            paths, delivery=self.delivery, assignments=self.settings, accept_short=self.accept_short,
            corrections=None if speech else self.corrections, season=self.season, align=self.align)
        check_corrections(session)
        check_asked(session, [*tables, *([speech] if speech else [])])
        return session

    def with_speech_table(self, session: Session, activity: Activity) -> Session:
        """The session with the corrections of an edited speech.csv, if that is what was given; raises as `opened`."""
        speech = self._speech_table()
        if speech is None:
            return session
        check_table(speech, session)
        return with_speech_table(session, activity, speech)

    def fingerprint(self) -> str:
        """The digest of all that the result depends on; raises as `opened`."""
        return fingerprint(
            _listed(self.sources), delivery=self.delivery, stems=self.stems, settings=self.settings,
            corrections=self.corrections, accept_short=self.accept_short, align=self.align, season=self.season)

    def _speech_table(self) -> Path | None:
        """The corrections, where they are an edited speech.csv."""
        table = None if self.corrections is None else Path(self.corrections)
        return table if table is not None and is_speech_table(table) else None


def default_out(session: Session) -> Path:
    """Where a session's result goes if nothing else is said."""
    return DEFAULT_OUT / safe_name(session.title)


def output_folder(session: Session, out: Path | str | None, *, replace: bool, stems: str) -> OutputFolder:
    """The folder asked for, or the default one, with room for stems, mix and what is kept."""
    stem_bytes = 4 if stems == LEVELS[0] else 4 + 3  # limited ones of 24 bit are made from float ones beside them
    frame_bytes = session.mix_channels * (stem_bytes * len(session.tracks) + 3)
    kept_bytes = KEPT_BYTES * len(session.tracks) * frames_to_hops(session.frames, session.rate_hz)
    wanted = Path(out) if out is not None else default_out(session)
    return OutputFolder(wanted, replace, needed_bytes=session.frames * frame_bytes + kept_bytes + MARGIN_BYTES,
                        sources=source_paths(session))


def cut_folder(session: Session, out: Path | str | None, *, replace: bool) -> OutputFolder:
    """The same for a finished cut: its mix of 24 bit, and the float sum that it is made from."""
    wanted = Path(out) if out is not None else DEFAULT_OUT / f"{safe_name(session.title)} finished"
    needed_bytes = session.frames * session.mix_channels * (4 + 3) + MARGIN_BYTES
    return OutputFolder(wanted, replace, needed_bytes=needed_bytes, sources=source_paths(session))


def source_paths(session: Session) -> list[Path]:
    """Every file the session reads."""
    return [part.path for track in session.tracks for part in parts_of(track)] + [s.path for s in session.set_aside]


def _listed(sources: Sequence[Path | str] | Path | str) -> list[Path | str]:
    """One source or several, as a list."""
    return [sources] if isinstance(sources, str | Path) else list(sources)
