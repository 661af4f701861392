"""What a microphone hears against what the others' voices explain: the evidence for own voice, per hop.

Per block of 5 s and band:

1. *Sources.* The power of each voice at its own microphone is the power there, less noise, less the bleed of the
   other voices; solved by a few rounds over the interference matrix (`coupling`), so that two people who talk at
   once do not take each other for bleed of bleed.
2. *Prediction.* The bleed at m is the sum over the other voices of coupling times source power, held up by the
   room's decaying tail: what was loud a moment ago still sounds.
3. *Evidence.* In each band the level over predicted bleed plus noise is about 0 dB in bleed, with a scatter of some
   4 to 5 dB, and anywhere up to 30 dB in own speech, which need not fill all bands. So the likelihood of bleed is a
   normal one and that of own speech a mixture of it with a uniform one; the mean over bands of the log ratio, times
   `INDEPENDENT` (neighbouring bands and hops are not independent), is the evidence in nats. The lowest bands count
   by themselves as well, since an "mm" fills no others.

Published relatives: level differences between channels beat correlation features (K. Boakye, A. Stolcke,
Interspeech 2006); sources from an interference matrix (E. Kokkinis et al., 2012; T. Praetzlich et al., ICASSP
2015).
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt

from leveller.attribute.coupling import LEAST_EVER, STEP_HOPS, Coupling
from leveller.attribute.lag import Lags
from leveller.measure.levels import STEP_DB, Levels, walked
from leveller.units import HOPS_PER_S

ROUNDS = 4
DAMPING = 0.75  # of each round's change; undamped, strong coupling makes the rounds swing
SAFETY_DB = 1.0  # predicted bleed is taken this much higher
SCATTER_DB = 4.5  # of band level in bleed round its prediction, measured
OWN_SHARE = 0.2  # of bands in which own speech stands out, at least
OWN_SPAN_DB = 30.0  # own speech lies anywhere up to this over the bleed
BELOW = 0.05  # a band under its prediction speaks against own voice
MOST_PER_BAND = 3.0  # nats
INDEPENDENT = 3.0  # what 14 bands and three overlapping hops are worth together
LEANING = 0.44  # nats: in doubt, open
CLIP = 1.5  # nats a hop can say at most
AUDIBLE_DB = 8.0  # a hop that stands less over the noise says proportionally less
NARROW_BANDS = 4  # 180 to 650 Hz: an "mm" fills no others and drowns in the mean of all
STANDING_OUT_BANDS = 3  # a voice under another one fills some bands of its own
BRIGHT_FROM_BAND = 8  # 1.5 kHz and up
LOW_BANDS = 3  # 180 to 510 Hz
NARROW_WORTH = 6.0  # nats a nat of their mean (measured)
RATIO_SPAN_DB = (-6.0, 20.0)
_TABLE_STEP_DB = 1 / 16

DETAILS = ("standing_out_db", "bright_db")

Grid = npt.NDArray[np.float32]
Half = npt.NDArray[np.float16]


@dataclass(frozen=True)
class Evidence:
    """Per hop and track."""

    own: Grid  # (hops, tracks) nats in favour of own voice, clipped, weighted by audibility
    score: Grid  # (hops, tracks) mean log-likelihood ratio of a band, unclipped
    own_to_bleed_db: Grid  # (hops, tracks) mean over bands of level over predicted bleed plus noise
    audible_db: Grid  # (hops, tracks) mean over bands of level over noise, clipped to 0 .. 20
    standing_out_db: Half  # (hops, tracks) `own_to_bleed_db` of the bands that stand out most; zero without `details`
    bright_db: Half  # (hops, tracks) the same of the high bands less that of the lowest; zero without `details`


def evidence_of(
    levels: Levels, floor_db: Grid, coupling: Coupling, *, tail_db_per_hop: float, details: bool = False
) -> Evidence:
    """Evidence of all hops.

    Parameters
    ----------
    levels : shape=(hops, tracks, bands)
    floor_db : shape=(seconds, tracks, bands)
    tail_db_per_hop : float
        How fast the room decays.
    details : bool
        Also what only the search for doubtful places asks for.
    """
    hops, tracks, _ = levels.shape
    out: dict[str, npt.NDArray[Any]] = {
        name: np.zeros((hops, tracks), np.float16 if name in DETAILS else np.float32)
        for name in (*Evidence.__dataclass_fields__, "narrow") if name != "own"}  # narrow: the lowest bands' score
    tail = np.zeros(levels.shape[1:], np.float32)
    table = _likelihood_table()
    for block, rows in enumerate(walked(levels, STEP_HOPS)):
        level_db = levels[rows].astype(np.float32) * np.float32(STEP_DB)
        noise_db = _per_hop(floor_db, rows)
        predicted = (_predicted_late(levels, floor_db, coupling, block, rows) if coupling.lags.any()
                     else _predicted(level_db, noise_db, coupling, block))
        bleed, tail = _held(predicted, tail, tail_db_per_hop)
        ratio_db = _describe({name: grid[rows] for name, grid in out.items()}, level_db, noise_db, bleed, table)
        if details:
            _describe_doubt(out["standing_out_db"][rows], out["bright_db"][rows], ratio_db)
    own = np.empty((hops, tracks), np.float32)
    narrow = out.pop("narrow")
    for track in range(tracks):  # one by one, so that what is needed in between stays small
        score = _three(out["score"][:, track])
        weight = np.clip(out["audible_db"][:, track] / np.float32(AUDIBLE_DB), 0, 1)
        wide = np.float32(INDEPENDENT) * score + np.float32(LEANING)
        low = np.float32(NARROW_WORTH) * _three(narrow[:, track])
        own[:, track] = np.clip(np.maximum(wide, low), -CLIP, CLIP) * weight
        out["score"][:, track] = score
    return Evidence(own=own, **out)


def _per_hop(floor_db: Grid, rows: slice) -> Grid:
    """The floor of each hop of a block."""
    seconds = np.minimum(np.arange(rows.start, rows.stop) // HOPS_PER_S, len(floor_db) - 1)
    return np.asarray(floor_db[seconds])


def _predicted_late(levels: Levels, floor_db: Grid, coupling: Coupling, block: int, rows: slice) -> Grid:
    """`_predicted` where some voices arrive late (or early) somewhere: worked out with a margin on either side."""
    margin = ROUNDS * int(np.abs(coupling.lags).max())
    wide = slice(max(rows.start - margin, 0), min(rows.stop + margin, len(levels)))
    level_db = levels[wide].astype(np.float32) * np.float32(STEP_DB)
    out = _predicted(level_db, _per_hop(floor_db, wide), coupling, block)
    return out[rows.start - wide.start : rows.stop - wide.start]


def _predicted(level_db: Grid, noise_db: Grid, coupling: Coupling, block: int) -> Grid:
    """Power of the others' voices at each microphone, shape=(hops, tracks, bands), without the room's tail."""
    clean = np.maximum(_power(level_db) - _power(noise_db), 0).transpose(2, 0, 1)  # (bands, hops, tracks)
    matrix = _power(coupling.at(block)).transpose(2, 0, 1).copy()  # (bands, voice, microphone)
    diagonal = np.arange(matrix.shape[1])
    matrix[:, diagonal, diagonal] = 0
    matrix[:, coupling.heard_hops < LEAST_EVER] = 0
    source = clean
    for _ in range(ROUNDS - 1):
        rest = np.maximum(clean - _bleed_of(source, matrix, coupling.lags), 0)
        source = source + np.float32(DAMPING) * (rest - source)
    return np.ascontiguousarray(_bleed_of(source, matrix, coupling.lags).transpose(1, 2, 0))


def _bleed_of(source: Grid, matrix: Grid, lags: Lags) -> Grid:
    """Power at each microphone, shape=(bands, hops, tracks), each voice as late as it arrives there."""
    if not lags.any():
        return source @ matrix
    out = source @ np.where(lags == 0, matrix, 0)
    for k, m in np.argwhere(lags != 0):
        moved = np.roll(source[:, :, k], lags[k, m], axis=1)
        moved[:, slice(0, lags[k, m]) if lags[k, m] > 0 else slice(lags[k, m], None)] = 0
        out[:, :, m] += moved * matrix[:, k, m][:, None]
    return np.asarray(out, np.float32)


def _held(bleed: Grid, before: Grid, decay_db: float) -> tuple[Grid, Grid]:
    """Bleed held up by a tail: the largest of all earlier values, each decayed since; and the state after it."""
    out = np.empty_like(bleed)
    step = 50  # powers of ten stay small
    growth = _power(np.arange(1, step + 1, dtype=np.float32) * np.float32(decay_db))[:, None, None]
    for start in range(0, len(bleed), step):
        part = bleed[start : start + step]
        grown = part * growth[: len(part)]
        np.maximum(grown[0], before, out=grown[0])
        np.maximum.accumulate(grown, axis=0, out=grown)
        grown /= growth[: len(part)]
        out[start : start + len(part)] = grown
        before = grown[-1]
    return out, before


def _describe(
    out: dict[str, npt.NDArray[Any]], level_db: Grid, noise_db: Grid, bleed: Grid, table: Grid
) -> Grid:
    """Fill one block of every grid; returns the ratio of every band."""
    noise = _power(noise_db)
    expected_db = _db(bleed * np.float32(10 ** (SAFETY_DB / 10)) + noise)
    ratio_db = level_db - expected_db
    np.clip(ratio_db, *RATIO_SPAN_DB, out=ratio_db)
    steps = (ratio_db - np.float32(RATIO_SPAN_DB[0])) * np.float32(1 / _TABLE_STEP_DB)
    nats = table[np.rint(steps).astype(np.int16)]
    out["score"][:] = nats.mean(axis=2)
    out["narrow"][:] = nats[:, :, :NARROW_BANDS].mean(axis=2)
    out["own_to_bleed_db"][:] = ratio_db.mean(axis=2)
    out["audible_db"][:] = np.clip(level_db - noise_db, 0, 20).mean(axis=2)
    return ratio_db


def _describe_doubt(standing_out_db: Half, bright_db: Half, ratio_db: Grid) -> None:
    """Fill one block of the details."""
    bright_db[:] = ratio_db[:, :, BRIGHT_FROM_BAND:].mean(axis=2) if ratio_db.shape[2] > BRIGHT_FROM_BAND else 0
    bright_db -= ratio_db[:, :, :LOW_BANDS].mean(axis=2).astype(np.float16)
    standing_out_db[:] = np.sort(ratio_db, axis=2)[:, :, -STANDING_OUT_BANDS:].mean(axis=2)


def _likelihood_table() -> Grid:
    """Log-likelihood ratio own / bleed of one band over its clipped ratio, in nats."""
    low, high = RATIO_SPAN_DB
    ratio = np.arange(low, high + _TABLE_STEP_DB / 2, _TABLE_STEP_DB)
    normal = np.exp(-0.5 * (ratio / SCATTER_DB) ** 2) / (SCATTER_DB * np.sqrt(2 * np.pi))
    uniform = np.where(ratio > 0, 1.0, BELOW) / OWN_SPAN_DB
    nats: Grid = np.log((1 - OWN_SHARE) + OWN_SHARE * uniform / np.maximum(normal, 1e-6))
    return np.asarray(np.minimum(nats, MOST_PER_BAND), np.float32)


def _three(values: Grid) -> Grid:
    """Mean over three hops, the edges repeated."""
    padded = np.concatenate([values[:1], values, values[-1:]])
    return np.asarray((padded[:-2] + padded[1:-1] + padded[2:]) / np.float32(3))


def _power(level_db: Grid) -> Grid:
    """Power of a level in dB, float32."""
    return np.asarray(np.exp(level_db * np.float32(np.log(10) / 10)))


def _db(power: Grid) -> Grid:
    """Level of a power in dB, float32, never under -190."""
    return np.asarray(np.float32(10 / np.log(10)) * np.log(np.maximum(power, np.float32(1e-19))))
