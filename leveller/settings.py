"""Every setting of every stage: its value, unit, bounds and reason; and the deliveries.

A stage's settings are one frozen dataclass, a table of session.toml and a prefix of `--set` (`expander.range_db=18`).
`Settings.changed` returns a copy with some values replaced, each checked against its bounds; `Settings.rows` lists
them for `leveller settings` and the docs. Where a value comes from common practice or from our own measurement, its
reason says so.
"""

from __future__ import annotations

import dataclasses
from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Any

from leveller.errors import SettingsError, nearest

AUTO = "auto"


def setting(default: Any, unit: str, low: float, high: float, why: str, *, auto: bool = False) -> Any:
    """A dataclass field with its unit, bounds and reason; `auto` allows the word as well as a number."""
    return field(default=default, metadata={"unit": unit, "low": low, "high": high, "why": why, "auto": auto})


def switch(default: bool, why: str) -> Any:
    """A dataclass field that is on or off."""
    return field(default=default, metadata={"unit": "on/off", "why": why})


@dataclass(frozen=True)
class Expander:
    """Downward expander of each microphone (D. Giannoulis, M. Massberg, J. D. Reiss, JAES 60(6), 2012)."""

    enabled: bool = switch(True, "off leaves every microphone open")
    range_db: float | str = setting(
        AUTO, "dB", 0, 60, "deepest cut; auto takes what brings the bleed 24 dB under the voice, 6 to 18 dB", auto=True)
    threshold_db: float = setting(5.0, "dB over the predicted bleed", 0, 30, "own voice stands 10 to 30 dB over it")
    ratio: float = setting(5.0, ":1", 1, 100, "bleed lies near 0 dB and gets the whole range at 5:1")
    knee_db: float = setting(4.0, "dB", 0, 24, "soft, so that doubtful places close by a part only")
    attack_s: float = setting(0.08, "s", 0.005, 1, "opening ramp; it ends before the voice starts (look-ahead)")
    hold_s: float = setting(0.24, "s", 0, 5, "common practice, no source: 0.1 to 0.3 s for speech")
    release_s: float = setting(0.16, "s", 0.01, 5, "common practice, no source: 0.15 to 0.5 s for speech")
    lookahead_s: float = setting(0.18, "s", 0, 1, "opens this long before the voice is found")


@dataclass(frozen=True)
class Trim:
    """One static gain per voice, so that all lie at the same K-weighted level (ITU-R BS.1770)."""

    enabled: bool = switch(True, "off leaves the voices as far apart as they were recorded")
    most_db: float = setting(30.0, "dB", 0, 40, "no voice is moved further than this")


@dataclass(frozen=True)
class Ride:
    """The slow fader hand that follows a voice which leans back."""

    enabled: bool = switch(True, "off leaves each voice at its static trim")
    range_db: float = setting(6.0, "dB", 0, 20, "most it moves either way")
    window_s: float = setting(40.0, "s", 1, 120, "it averages over this, both ways; shorter flattens phrases")
    rate_db_s: float = setting(1.0, "dB/s", 0.05, 10, "slower than the ear takes for a level step")


@dataclass(frozen=True)
class Compressor:
    """Gentle soft-knee compressor (JAES 60(6), 2012), threshold relative to the voice's own level."""

    enabled: bool = switch(True, "off leaves the dynamics within a phrase as spoken")
    threshold_db: float = setting(8.0, "dB over the voice's level", -20, 30, "works on the loudest syllables only")
    ratio: float = setting(2.0, ":1", 1, 20, "common practice, no source: 2 to 3 for speech")
    knee_db: float = setting(6.0, "dB", 0, 24, "soft onset")
    attack_s: float = setting(0.01, "s", 0.001, 1, "common practice, no source: 5 to 20 ms for speech")
    release_s: float = setting(0.15, "s", 0.01, 5, "common practice, no source: 0.1 to 0.25 s for speech")
    most_db: float = setting(6.0, "dB", 0, 40, "it never turns down further than this")


@dataclass(frozen=True)
class Limiter:
    """Look-ahead true-peak limiter on the mix, all channels linked."""

    lookahead_s: float = setting(0.005, "s", 0.001, 0.02, "the gain has come down before the peak arrives")
    release_s: float = setting(0.1, "s", 0.01, 1, "common practice, no source")


@dataclass(frozen=True)
class Settings:
    """All stages' settings; `Settings()` holds the defaults."""

    expander: Expander = Expander()
    trim: Trim = Trim()
    ride: Ride = Ride()
    compressor: Compressor = Compressor()
    limiter: Limiter = Limiter()

    def changed(self, values: Mapping[str, Any], *, where: str = "") -> Settings:
        """A copy with `{"expander.range_db": 18}` applied.

        Raises
        ------
        SettingsError
            for an unknown key or a value of the wrong kind or out of bounds; the message starts with `where`.
        """
        stages: dict[str, dict[str, Any]] = {}
        for key, value in values.items():
            stage, name, spec = _find(key, where)
            stages.setdefault(stage, {})[name] = _checked(key, value, spec, where)
        return dataclasses.replace(
            self, **{stage: dataclasses.replace(getattr(self, stage), **v) for stage, v in stages.items()})

    def rows(self) -> list[tuple[str, Any, str, str]]:
        """Every setting as (key, value, unit, reason)."""
        return [
            (f"{stage.name}.{f.name}", getattr(getattr(self, stage.name), f.name), f.metadata["unit"],
             f.metadata["why"])
            for stage in dataclasses.fields(self)
            for f in dataclasses.fields(getattr(self, stage.name))
        ]


STAGES = tuple(f.name for f in dataclasses.fields(Settings))


def _find(key: str, where: str) -> tuple[str, str, dataclasses.Field[Any]]:
    """Stage, name and field of a dotted key."""
    defaults = Settings()
    known = [row[0] for row in defaults.rows()]
    if key not in known:
        raise SettingsError(f"{where}unknown setting {key!r}{nearest(key, known)}")
    stage, name = key.split(".")
    spec = next(f for f in dataclasses.fields(getattr(defaults, stage)) if f.name == name)
    return stage, name, spec


def _checked(key: str, value: Any, spec: dataclasses.Field[Any], where: str) -> Any:
    """The value in its own type, or SettingsError."""
    meta = spec.metadata
    if meta["unit"] == "on/off":
        words = {"true": True, "on": True, "yes": True, "false": False, "off": False, "no": False}
        if isinstance(value, bool):
            return value
        if str(value).strip().lower() in words:
            return words[str(value).strip().lower()]
        raise SettingsError(f"{where}{key} = {value!r}: expected true or false")
    if meta["auto"] and value == AUTO:
        return AUTO
    expected = (f"expected {'auto or ' if meta['auto'] else ''}a number from {meta['low']:g} to {meta['high']:g} "
                f"({meta['unit']})")
    try:
        number = float(value)
    except (TypeError, ValueError, OverflowError):
        raise SettingsError(f"{where}{key} = {value!r}: {expected}") from None
    if isinstance(value, bool) or not meta["low"] <= number <= meta["high"]:
        raise SettingsError(f"{where}{key} = {value!r}: {expected}")
    return number


def parse_assignments(assignments: list[str]) -> dict[str, str]:
    """`["expander.range_db=18"]` as a dict; raises SettingsError where the = is missing, and for align."""
    pairs = {}
    for text in assignments:
        key, equals, value = text.partition("=")
        if not equals:
            raise SettingsError(f"--set {text!r}: expected KEY=VALUE, such as expander.range_db=18")
        if key.strip() == "align":
            raise SettingsError(f"--set {text!r}: align has options of its own. Give --align or --no-align")
        pairs[key.strip()] = value.strip()
    return pairs


@dataclass(frozen=True)
class Delivery:
    """What the mix shall read: loudness target, true-peak ceiling, channels."""

    name: str
    target_lufs: float
    ceiling_dbtp: float
    channels: int | None  # None: one unless a pan or a stereo bed asks for two
    source: str


DELIVERIES = {
    d.name: d
    for d in (
        Delivery("podcast-mono", -19.0, -1.0, 1, "common practice, no source"),
        Delivery("podcast-stereo", -16.0, -1.0, 2, "common practice, no source"),
        Delivery("aes-speech", -18.0, -1.0, None, "AES TD1008 (2021), speech"),
        Delivery("r128", -23.0, -1.0, 2, "EBU R 128 (2023)"),
        Delivery("r128-stream", -18.0, -1.0, 2, "EBU R 128 s2, within -20 to -16 LUFS"),
        Delivery("a85", -24.0, -2.0, 2, "ATSC A/85, dialogue anchored"),
    )
}
DEFAULT_DELIVERY = "podcast-mono"


def delivery_named(name: str) -> Delivery:
    """The delivery of that name, or SettingsError with the nearest one."""
    if name not in DELIVERIES:
        raise SettingsError(f"unknown delivery {name!r}{nearest(name, DELIVERIES)}; known: {', '.join(DELIVERIES)}")
    return DELIVERIES[name]
