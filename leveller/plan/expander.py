"""The downward expander of each microphone: when it opens and closes, and how deep.

*When.* A microphone is open round its own voice: from `lookahead_s` before to `hold_s` after. In a pause in which
nobody speaks the last microphone stays open, so that the room tone stays, and closes as the next voice starts; that
voice's own microphone opens up to `EARLY_S` early through the silence, so that the breath before the words is
whole. Gaps too short to be worth a move stay open.

*How deep.* The static curve of `curves.expander_gain_db` at the own-to-bleed ratio of the closed stretch (its upper
quartile): bleed that lies where it was predicted gets the whole range, a doubtful stretch, in which more is heard
than the others explain, is closed by a part. One depth a stretch: what is closed does not flutter.

*Range.* `auto` brings the bleed of the loudest neighbour 24 dB under the voice that speaks (both after their trims),
between 6 and 18 dB: a microphone that is clean already needs 6, and deep gates make the room tone breathe.
"""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

from leveller import settings as settings_
from leveller.attribute.coupling import LEAST_EVER
from leveller.plan.curves import expander_gain_db
from leveller.plan.stretches import Spans, flagged, stretches, without_short_gaps
from leveller.units import HOPS_PER_S, Bools

EARLY_S = 0.6  # a breath takes 0.25 to 0.45 s and ends just before the first word
SHORT_GAP_S = 0.4  # closing and opening take 0.24 s
CLEAN_DB = 24.0
AUTO_RANGE_DB = (6.0, 18.0)
LONE_PAUSE_S = 1.0  # with one microphone there is only noise to turn down, and only in longer pauses
DOUBT_QUANTILE = 0.75

Nodes = npt.NDArray[np.float32]  # (hops + 1,) dB at hop edges


def auto_range_db(coupling_db: npt.NDArray[np.float32], heard: npt.NDArray[np.int64], trim_db: Nodes) -> Nodes:
    """Range per track that brings its bleed `CLEAN_DB` under the voice that speaks.

    Parameters
    ----------
    coupling_db : shape=(tracks, tracks)
        [k, m]: voice k at microphone m against its own microphone.
    heard : shape=(tracks,)
        Hops each voice was heard for.
    trim_db : shape=(tracks,)
    """
    tracks = len(trim_db)
    ranges = np.full(tracks, AUTO_RANGE_DB[0], np.float32)
    for m in range(tracks):
        voices = [k for k in range(tracks) if k != m and heard[k] >= LEAST_EVER]
        if voices:
            loudest = max(coupling_db[k, m] + trim_db[m] - trim_db[k] for k in voices)
            ranges[m] = np.clip(CLEAN_DB + loudest, *AUTO_RANGE_DB)
    return ranges


def opened(own: Bools, *, settings: settings_.Expander, lone: bool) -> Bools:
    """When each microphone is open, shape=(hops, tracks), without its ramps."""
    hops, tracks = own.shape
    before, after = round(settings.lookahead_s * HOPS_PER_S), round(settings.hold_s * HOPS_PER_S)
    spans = [stretches(own[:, track]) for track in range(tracks)]
    out = np.zeros_like(own)
    for track in range(tracks):
        widened = spans[track] + np.array([-before, after])
        if not lone:
            others = np.concatenate([spans[k] for k in range(tracks) if k != track] or [np.empty((0, 2), np.int64)])
            widened = _through_silence(widened, spans[track], others, hops, settings)
        shortest = LONE_PAUSE_S if lone else SHORT_GAP_S
        out[:, track] = without_short_gaps(flagged(widened, hops), round(shortest * HOPS_PER_S))
    return out


def _through_silence(widened: Spans, own: Spans, others: Spans, hops: int, settings: settings_.Expander) -> Spans:
    """Open stretches drawn out through pauses in which nobody speaks."""
    starts, ends = np.sort(others[:, 0]), np.sort(others[:, 1])
    speaking = flagged(others, hops)
    release = round(settings.release_s * HOPS_PER_S)
    early = round(EARLY_S * HOPS_PER_S)
    out = widened.copy()
    for i, (first, after) in enumerate(own):
        if after >= hops or not speaking[min(after, hops - 1)]:
            following = np.searchsorted(starts, after)
            until = starts[following] - release if following < len(starts) else hops
            out[i, 1] = max(out[i, 1], until)
        if first > 0 and not speaking[first - 1]:
            previous = np.searchsorted(ends, first, side="right") - 1
            since = ends[previous] if previous >= 0 else -1
            out[i, 0] = min(out[i, 0], max(first - early, since)) if since >= 0 else 0
    return out


def expander_nodes_db(open_: Bools, doubt_db: Nodes, *, range_db: float, settings: settings_.Expander) -> Nodes:
    """Gain of one microphone at hop edges, shape=(hops + 1,), from -range to 0.

    Parameters
    ----------
    open_ : shape=(hops,)
    doubt_db : shape=(hops,)
        Own-to-bleed ratio.
    """
    hops = len(open_)
    out = np.zeros(hops + 1, np.float32)
    if not settings.enabled or range_db <= 0:
        return out
    attack = max(1, round(settings.attack_s * HOPS_PER_S))
    release = max(1, round(settings.release_s * HOPS_PER_S))
    for first, after in stretches(~open_):
        level = np.array([np.quantile(doubt_db[first:after], DOUBT_QUANTILE)])
        depth = float(expander_gain_db(
            level, threshold_db=settings.threshold_db, ratio=settings.ratio, knee_db=settings.knee_db,
            range_db=range_db)[0])
        edge = np.arange(after - first + 1)
        closing = 1.0 if first == 0 else np.minimum(edge / release, 1.0)
        opening = 1.0 if after == hops else np.minimum(edge[::-1] / attack, 1.0)
        out[first : after + 1] = depth * np.minimum(closing, opening)
    return out
