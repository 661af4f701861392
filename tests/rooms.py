"""Rooms with people and microphones, and their impulse responses.

Purpose: the acoustics of the simulated conversations, shared by the tests and the maker of the demo session.

Conventions: metres, seconds, 16 kHz unless the room says otherwise; responses are `(frames, microphones)` of one
mouth, with the delay of the way (343 m/s) and a level of 0 dB at one metre. Positions: x along the room, y across,
z up.

Method: image sources in a shoebox room (J. B. Allen, D. A. Berkley, JASA 65(4), 1979) by pyroomacoustics; wall
absorption from the wanted RT60 by Sabine's formula. A reverberation time of 0 means no walls (anechoic). Responses
are kept for the life of the process, since tests ask for the same room again and again.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache

import numpy as np
import pyroomacoustics as pra
from pyroomacoustics.directivities import Cardioid, DirectionVector

RATE_HZ = 16_000
SPEED_M_S = 343.0
KINDS = ("round table", "lapels", "far table", "desk", "panel")
MOST_ORDER = 34  # images beyond arrive after the response is cut; keeps a hall under a second

Point = tuple[float, float, float]


@dataclass(frozen=True)
class Microphone:
    """Where it stands and, for a cardioid, the point it looks at; None hears all round."""

    at: Point
    looks_at: Point | None = None


@dataclass(frozen=True)
class Room:
    """A shoebox with mouths and microphones; `sits_at[p]` is the microphone of person p."""

    size: Point
    rt60_s: float
    mouths: tuple[Point, ...]
    microphones: tuple[Microphone, ...]
    sits_at: tuple[int, ...]
    own_lead_db: tuple[float, ...] | None = None  # lapels: own voice over the next loudest person
    rate_hz: int = RATE_HZ


def furnish(
    kind: str, people: int, rng: np.random.Generator, *, rt60_s: float, empty: int = 0, shared: int = 0
) -> Room:
    """A room of one of `KINDS`; `empty` more microphones nobody sits at, the last `shared` people at another's."""
    assert kind in KINDS, f"{kind!r} is none of {KINDS}"
    size = (float(rng.uniform(5, 7)), float(rng.uniform(4.2, 5.5)), float(rng.uniform(2.6, 3.2)))
    if kind == "panel":
        size = (0.8 * people + 4.0, 6.0, 3.4)
    seats = people + empty
    mouths, inward = _seats(kind, seats, size, rng)
    hosts = people - shared
    sat_at = [*range(hosts), *range(people, seats)]
    microphones = tuple(_microphone(kind, mouths[k], inward[k], size, rng) for k in sat_at)
    sits_at = (*range(hosts), *(hosts - 1 - k for k in range(shared)))
    placed = list(mouths[:people])
    for k in range(shared):
        placed[hosts + k] = beside(mouths[hosts - 1 - k], inward[hosts - 1 - k])
    lead = tuple(float(v) for v in rng.uniform(3, 6, len(microphones))) if kind == "lapels" else None
    return Room(size, rt60_s, tuple(placed), microphones, sits_at, lead)


def beside(mouth: Point, inward: np.ndarray) -> Point:
    """The mouth of a person who shares the microphone: half a metre to the side."""
    x, y, z = np.array(mouth) + 0.5 * np.array([-inward[1], inward[0], 0.0])
    return float(x), float(y), float(z)


def leaned_back(room: Room, person: int, by_m: float = 0.35) -> Point:
    """The mouth moved away from its microphone."""
    mouth, mic = np.array(room.mouths[person]), np.array(room.microphones[room.sits_at[person]].at)
    away = (mouth - mic) * (1, 1, 0)
    length = np.linalg.norm(away)
    away = away / length if length > 0.02 else np.array([0.0, 1.0, 0.0])
    return _inside(mouth + by_m * away, room.size)


def other_seat(room: Room, person: int, rng: np.random.Generator) -> Point:
    """The mouth of a person who shifted the chair 25 to 45 cm sideways."""
    step = rng.uniform(0.25, 0.45) * np.exp(1j * rng.uniform(0, 2 * np.pi))
    move = np.array([step.real, step.imag, rng.uniform(-0.05, 0.05)])
    return _inside(room.mouths[person] + move, room.size)


@lru_cache(maxsize=256)
def responses(room: Room, mouth: Point, person: int | None = None) -> np.ndarray:
    """Impulse responses from a mouth to every microphone, shape (frames, microphones).

    Lapels have the direct-and-room response of the person's own microphone scaled, so that it leads by `own_lead_db`.
    """
    raw = _image_sources(room, mouth)
    if room.own_lead_db is None or person is None:
        return raw
    mic = room.sits_at[person]
    others = [_image_sources(room, m)[:, mic] for k, m in enumerate(room.mouths) if room.sits_at[k] != mic]
    if not others:
        return raw
    wanted = max(_energy(h) for h in others) * 10 ** (room.own_lead_db[mic] / 10)
    usual = _image_sources(room, room.mouths[person])[:, mic]
    scaled = raw.copy()
    scaled[:, mic] *= np.sqrt(wanted / _energy(usual))
    return scaled


@lru_cache(maxsize=256)
def _image_sources(room: Room, mouth: Point) -> np.ndarray:
    """The raw responses, at 0 dB at one metre, without the filter delay of the simulator."""
    if room.rt60_s > 0:
        absorption, order = pra.inverse_sabine(room.rt60_s, room.size)
    else:
        absorption, order = 1.0, 0
    walls = pra.Material(absorption)
    shoebox = pra.ShoeBox(room.size, fs=room.rate_hz, materials=walls, max_order=min(order, MOST_ORDER))
    shoebox.set_sound_speed(SPEED_M_S)
    shoebox.add_source(list(mouth))
    places, patterns = np.array([m.at for m in room.microphones]).T, [_pattern(m) for m in room.microphones]
    shoebox.add_microphone_array(pra.MicrophoneArray(places, room.rate_hz, directivity=patterns))
    shoebox.compute_rir()
    late = pra.constants.get("frac_delay_length") // 2
    found = [shoebox.rir[m][0][late:] for m in range(len(room.microphones))]
    frames = min(max(map(len, found)), int((max(room.rt60_s, 0.05) * 1.1 + 0.03) * room.rate_hz))
    out = np.zeros((frames, len(found)))
    for m, response in enumerate(found):
        n = min(frames, len(response))
        out[:n, m] = response[:n]
    return out * (4 * np.pi if _one_metre_is_quarter_pi() else 1.0)


@lru_cache(maxsize=1)
def _one_metre_is_quarter_pi() -> bool:
    """Whether this simulator scales by 1 / (4 pi r) (true of some versions) and not by 1 / r."""
    shoebox = pra.ShoeBox((9, 9, 9), fs=RATE_HZ, materials=pra.Material(1.0), max_order=0)
    shoebox.add_source([4.0, 4.5, 4.5])
    shoebox.add_microphone([5.0, 4.5, 4.5])
    shoebox.compute_rir()
    return float(np.sqrt(_energy(shoebox.rir[0][0]))) < 0.3


def _pattern(microphone: Microphone) -> Cardioid | None:
    """A cardioid towards its point, or None."""
    if microphone.looks_at is None:
        return None
    x, y, z = np.array(microphone.looks_at) - np.array(microphone.at)
    azimuth, colatitude = np.arctan2(y, x), np.arccos(z / np.sqrt(x * x + y * y + z * z))
    return Cardioid(DirectionVector(azimuth=float(azimuth), colatitude=float(colatitude), degrees=False))


def _seats(kind: str, seats: int, size: Point, rng: np.random.Generator) -> tuple[list[Point], list[np.ndarray]]:
    """Mouths, and for each the direction in which the person looks."""
    centre = np.array([size[0] / 2, size[1] / 2, 0.0])
    mouths, inward = [], []
    radius = max({"desk": 0.65, "lapels": 0.7, "far table": 0.9}.get(kind, 0.85), 0.13 * seats)
    for k in range(seats):
        if kind == "panel":
            at = centre + np.array([0.75 * (k - (seats - 1) / 2), -1.2, 0.0])
            look = np.array([0.0, 1.0, 0.0])
        else:
            turn = 2 * np.pi * (k + rng.uniform(-0.08, 0.08)) / seats + 0.4
            look = -np.array([np.cos(turn), np.sin(turn), 0.0])
            at = centre - radius * look
        at = at + np.array([*rng.uniform(-0.04, 0.04, 2), rng.uniform(1.12, 1.3)])
        mouths.append((float(at[0]), float(at[1]), float(at[2])))
        inward.append(look)
    return mouths, inward


def _microphone(kind: str, mouth: Point, look: np.ndarray, size: Point, rng: np.random.Generator) -> Microphone:
    """The microphone of a seat: how far, how low, and its pattern, by the kind of room."""
    away_m, low_m = {
        "lapels": (0.05, rng.uniform(0.15, 0.25)), "far table": (0.7, 0.4), "desk": (0.22, 0.08)
    }.get(kind, (rng.uniform(0.24, 0.36), rng.uniform(0.08, 0.18)))
    at = _inside(np.array(mouth) + away_m * look - (0, 0, low_m), size)
    return Microphone(at, None if kind in ("lapels", "far table") else mouth)


def _inside(at: np.ndarray, size: Point) -> Point:
    """Kept 20 cm from the walls."""
    x, y, z = np.clip(at, 0.2, np.array(size) - 0.2)
    return float(x), float(y), float(z)


def _energy(response: np.ndarray) -> float:
    return float(np.sum(response**2))
