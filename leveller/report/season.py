"""A season's records: what every episode came to, what stands out, and how well each voice keeps its level.

Episodes are read from their report.json and listen.csv, so that one that was finished last week counts like one of
today. Levels are compared *against the target*: own speech in the stem after make-up, less the delivery's target, less
the trim that the session itself asks for; so episodes of different deliveries can stand side by side.

What stands out is what a listener would notice from one episode to the next; each limit says what it is worth. "The
rest" is the median of all other episodes, or voices, and needs two of them.
"""

from __future__ import annotations

import csv
import dataclasses
import json
import statistics
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from leveller.report.faults import NOT_LINED_UP
from leveller.report.quantities import quantity

FINISHED, UNCHANGED, EDITED, FAILED, WAITING = "finished", "unchanged", "edited", "failed", "not reached"
OUTCOMES = {
    FINISHED: "processed in this run", UNCHANGED: "as it was: sources, settings and version are the same",
    EDITED: "kept as it is: it was edited by hand", FAILED: "not processed; the reason stands beside it",
    WAITING: "the run ended before its turn"}
SOME_FAILED_EXIT, INTERRUPTED_EXIT = 7, 130

WIDER_LU = 2.0  # loudness range over the rest: as far as EBU Tech 3342's own test signals are told apart twice over
RECORDED_LOW_DB = 6.0  # source level under the rest: half the amplitude, so the noise comes up by as much
OFF_LU = 2.0  # level after make-up from the rest of the voices
KEPT_LU = 0.5  # a voice's level over the season; a step of 0.5 to 0.9 dB is just noticed (Jesteadt 1977)
LEAST_REST = 2
WIDER = "LU wider than the rest"  # how that remark ends
LEAST_SPEECH_S = 3.0  # a voice heard for less has no level worth a mark


@dataclass(frozen=True)
class SeasonVoice:
    """One voice in one episode."""

    voice: str
    speaks_s: float = quantity("speaks", "s", 1, "time in which the voice is decided to speak")
    source_lufs: float | None = quantity("recorded at", "LUFS", 1, "its speech alone, in the source")
    level_lufs: float | None = quantity("level", "LUFS", 1, "its speech alone, in its stem after make-up")
    against_lu: float | None = quantity(
        "against target", "LU", 1, "level less the delivery's target and the trim the session asks for", signed=True)
    remarks: tuple[str, ...] = ()


@dataclass(frozen=True)
class EpisodeFigures:
    """What an episode's own reports say."""

    delivery: str
    met: bool
    why_not: str
    voices: tuple[SeasonVoice, ...]
    listen_places: int | None  # rows of listen.csv
    target_lufs: float | None = quantity("target", "LUFS", 1, "integrated loudness that was asked for")
    length_s: float | None = quantity("length", "s", 1, "from start to end")
    integrated_lufs: float | None = quantity("integrated", "LUFS", 2, "ITU-R BS.1770-5, both gates")
    range_lu: float | None = quantity("range", "LU", 1, "loudness range, EBU Tech 3342")
    true_peak_dbtp: float | None = quantity("true peak", "dBTP", 2, "ITU-R BS.1770-5, Annex 2")
    listen_s: float | None = quantity("to listen to", "s", 1, "length of all places of listen.csv together")
    not_lined_up: tuple[str, ...] = ()  # a sentence for each track that is off against the others, or upside down


@dataclass(frozen=True)
class Outcome:
    """What became of one episode."""

    episode: str
    outcome: str  # one of OUTCOMES
    reason: str = ""  # of a failure, or what was noticed
    figures: EpisodeFigures | None = None
    tries: int = 0  # how often it was begun in this run
    took_s: float | None = quantity("took", "s", 1, "wall time of the processing", default=None)
    cpu_s: float | None = quantity("processor time", "s", 1, "of all threads", default=None)
    remarks: tuple[str, ...] = ()


@dataclass(frozen=True)
class KeptLevel:
    """How well a voice keeps its level over the season."""

    voice: str
    episodes: int
    lowest_lu: float = quantity("lowest", "LU", 1, "against target, in any episode", signed=True)
    highest_lu: float = quantity("highest", "LU", 1, "against target, in any episode", signed=True)
    spread_lu: float = quantity("spread", "LU", 1, "highest less lowest")

    @property
    def kept(self) -> bool:
        """Whether all episodes lie within `KEPT_LU` of each other."""
        return round(self.spread_lu, 1) <= KEPT_LU


@dataclass(frozen=True)
class SeasonReport:
    """All episodes, in the season's order."""

    title: str
    made_by: Mapping[str, str]
    episodes: tuple[Outcome, ...]
    voices: tuple[KeptLevel, ...]
    notes: tuple[str, ...]
    interrupted: bool
    took_s: float = quantity("took", "s", 1, "wall time of the whole run")

    def count(self, outcome: str) -> int:
        """How many episodes came to that."""
        return sum(episode.outcome == outcome for episode in self.episodes)

    @property
    def sentence(self) -> str:
        """'12 episodes: 9 finished, 2 unchanged, 1 failed'."""
        parts = [f"{self.count(outcome)} {outcome}" for outcome in OUTCOMES if self.count(outcome)]
        return f"{len(self.episodes)} episode{'' if len(self.episodes) == 1 else 's'}: {', '.join(parts)}"

    @property
    def exit_code(self) -> int:
        """0 where every episode is finished or was so before."""
        return INTERRUPTED_EXIT if self.interrupted else SOME_FAILED_EXIT if self.count(FAILED) else 0


def season_report(
    title: str, outcomes: Sequence[Outcome], *, made_by: Mapping[str, str], notes: Sequence[str] = (),
    interrupted: bool = False, took_s: float = 0.0,
) -> SeasonReport:
    """The report of a season from what became of its episodes."""
    return SeasonReport(title, made_by, marked(outcomes), kept_levels(outcomes), tuple(notes), interrupted, took_s)


def episode_figures(folder: Path, said: Mapping[str, Any]) -> EpisodeFigures:
    """The figures of an output folder, whose report.json says `said`; raises KeyError or TypeError where it is none."""
    delivery, mix, asked = said["delivery"], said["mix"], said.get("trims_asked_db", {})
    places, listen_s = _to_listen(folder / "listen.csv")
    return EpisodeFigures(
        delivery=delivery["name"], met=delivery["met"], why_not=delivery["why_not"],
        voices=tuple(_voice(voice, delivery["target_lufs"], asked) for voice in said["voices"]), listen_places=places,
        target_lufs=delivery["target_lufs"], length_s=mix["length_s"], integrated_lufs=mix["integrated_lufs"],
        range_lu=mix["range_lu"], true_peak_dbtp=mix["true_peak_dbtp"], listen_s=listen_s,
        not_lined_up=tuple(fault["sentence"] for fault in said.get("faults", ()) if fault["kind"] == NOT_LINED_UP))


def marked(outcomes: Sequence[Outcome]) -> tuple[Outcome, ...]:
    """The outcomes with what stands out said."""
    middles = [None if o.figures is None else _middle(o.figures.voices) for o in outcomes]
    ranges = [None if o.figures is None else o.figures.range_lu for o in outcomes]
    everyone = [(i, k, voice) for i, o in enumerate(outcomes) if o.figures is not None
                for k, voice in enumerate(o.figures.voices)]
    sources = [_worth(voice, voice.source_lufs) for _, _, voice in everyone]
    levels = [_worth(voice, voice.against_lu) for _, _, voice in everyone]
    said = {(i, k): (*_recorded_low(sources, n), *_off(levels, n)) for n, (i, k, _) in enumerate(everyone)}
    out = []
    for i, outcome in enumerate(outcomes):
        if outcome.figures is not None:
            voices = tuple(dataclasses.replace(voice, remarks=said[i, k])
                           for k, voice in enumerate(outcome.figures.voices))
            outcome = dataclasses.replace(
                outcome, figures=dataclasses.replace(outcome.figures, voices=voices),
                remarks=(*outcome.figures.not_lined_up, *_wider(ranges, i),
                         *_all_off(middles, i, outcome.figures.target_lufs)))
        out.append(outcome)
    return tuple(out)


def kept_levels(outcomes: Sequence[Outcome]) -> tuple[KeptLevel, ...]:
    """Every voice that is heard in two episodes or more, by name, the most often heard first."""
    found: dict[str, list[float]] = {}
    for outcome in outcomes:
        for voice in outcome.figures.voices if outcome.figures is not None else ():
            level = _worth(voice, voice.against_lu)
            if level is not None:
                found.setdefault(voice.voice, []).append(level)
    often = sorted((item for item in found.items() if len(item[1]) > 1), key=lambda item: (-len(item[1]), item[0]))
    return tuple(KeptLevel(name, len(levels), min(levels), max(levels), max(levels) - min(levels))
                 for name, levels in often)


def _voice(said: Mapping[str, Any], target_lufs: float, asked: Mapping[str, float]) -> SeasonVoice:
    """A voice as report.json has it."""
    after = said["after_lufs"]
    against = None if after is None else round(after - target_lufs - asked.get(said["track"], 0.0), 2)
    return SeasonVoice(said["track"], said["speaks_s"], said["before_lufs"], after, against)


def _to_listen(path: Path) -> tuple[int | None, float | None]:
    """How many places a listen.csv has, and how long they are; None where there is no such file."""
    try:
        with open(path, encoding="utf-8-sig", newline="") as file:
            lengths = [float(row["to_s"]) - float(row["from_s"]) for row in csv.DictReader(file)]
    except (OSError, ValueError, KeyError, TypeError):
        return None, None
    return len(lengths), sum(lengths)


def read_json(path: Path) -> dict[str, Any] | None:
    """A report.json or season.json, or None where there is no such thing."""
    try:
        said = json.loads(path.read_bytes())
    except (OSError, ValueError):
        return None
    return said if isinstance(said, dict) else None


def _worth(voice: SeasonVoice, value: float | None) -> float | None:
    """A level, where the voice speaks long enough to have one."""
    return value if voice.speaks_s >= LEAST_SPEECH_S else None


def _rest(values: Sequence[float | None], i: int) -> float | None:
    """Median of the others, None where there are too few."""
    others = [value for k, value in enumerate(values) if k != i and value is not None]
    return statistics.median(others) if len(others) >= LEAST_REST else None


def _wider(ranges: Sequence[float | None], i: int) -> tuple[str, ...]:
    """Whether an episode's loudness range is wider than the rest's."""
    rest, value = _rest(ranges, i), ranges[i]
    if rest is None or value is None or round(value - rest, 2) < WIDER_LU:
        return ()
    return (f"range {value - rest:.1f} {WIDER}",)


def _middle(voices: Sequence[SeasonVoice]) -> float | None:
    """Median level of an episode's voices against the target, None where none speaks long enough."""
    levels = [level for voice in voices if (level := _worth(voice, voice.against_lu)) is not None]
    return statistics.median(levels) if levels else None


def _all_off(middles: Sequence[float | None], i: int, target_lufs: float | None) -> tuple[str, ...]:
    """Whether an episode's voices lie off the season's level together, which its delivery alone can do."""
    rest, value = _rest(middles, i), middles[i]
    if rest is None or value is None or target_lufs is None or round(abs(value - rest), 2) < KEPT_LU:
        return ()
    way = "louder" if value > rest else "softer"
    return (f"meeting the target makes all voices {abs(value - rest):.1f} LU {way} than in the rest; target_lufs = "
            f"{target_lufs + rest - value:.1f} would keep their level instead",)


def _recorded_low(levels: Sequence[float | None], i: int) -> tuple[str, ...]:
    """Whether a voice was recorded lower than the rest."""
    rest, value = _rest(levels, i), levels[i]
    if rest is None or value is None or round(rest - value, 2) < RECORDED_LOW_DB:
        return ()
    return (f"recorded {rest - value:.1f} dB lower than the rest",)


def _off(levels: Sequence[float | None], i: int) -> tuple[str, ...]:
    """Whether a voice comes out louder or softer than the rest."""
    rest, value = _rest(levels, i), levels[i]
    if rest is None or value is None or round(abs(value - rest), 2) < OFF_LU:
        return ()
    return (f"comes out {abs(value - rest):.1f} LU {'louder' if value > rest else 'softer'} than the rest",)
