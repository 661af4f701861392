"""Figures of merit against the truth of a simulated conversation, and reference methods on the same material.

Purpose: one yardstick for the tests and for the accuracy table of the docs. `figures(cut_db, conversation)` judges
how far each microphone was turned down, `spread_db` how well voices match, `csv_error_db` whether an automation
tells the truth.

Conventions: `cut_db` is `(hops, microphones)`, positive where a microphone is turned down; a hop is 10 ms.

Method: own speech counts where it can be heard: inside its true segments, at most 25 dB under the voice's mean and
at most 6 dB under the bleed at the same microphone. Bleed counts where others speak and the person at the
microphone is silent (no breath, no laugh) from 350 ms before to 600 ms after, at most 30 dB under the mean bleed of
that microphone. All hops of all microphones are pooled.

References: a fixed gate; voice activity (webrtcvad); gain sharing (JAES 23, 1975); true segments with a
plain expander. K-weighting: ITU-R BS.1770-5, table 1 and 2.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np
import soxr
from conversations import Conversation, Spans
from scipy.ndimage import uniform_filter1d
from scipy.signal import sosfilt

K_WEIGHTING_48K = np.array([  # ITU-R BS.1770-5, tables 1 and 2
    [1.53512485958697, -2.69169618940638, 1.19839281085285, 1.0, -1.69065929318241, 0.73248077421585],
    [1.0, -2.0, 1.0, 1.0, -1.99004745483398, 0.99007225036621],
])
RANGE_DB = 18.0  # of the reference methods
HOLD_HOPS = 24
RELEASE_HOPS = 16


@dataclass(frozen=True)
class Figures:
    """What `figures` found; percentages of hops, utterances or breaths, levels in dB."""

    lost_pct: float  # own speech cut by more than 6 dB
    onset_bad_pct: float  # utterances whose first 80 ms are cut by more than 4 dB on average
    tail_bad_pct: float  # whose last 120 ms, or the 150 ms after them if nobody else speaks, are cut by more than 4 dB
    breath_bad_pct: float  # breaths through which the gain moves by more than 6 dB
    bleed_cut_db: float  # less bleed where only others speak; microphones weighed alike
    open_pct: float  # such bleed cut by less than 10 dB
    worst_lost_pct: float  # the worst microphone with 5 s of own speech or more


@dataclass(frozen=True)
class Truth:
    """Per hop and microphone: levels of own voice and bleed, and the masks made from them."""

    own_db: np.ndarray
    bleed_db: np.ndarray
    speaking: np.ndarray  # inside a true segment
    heard: np.ndarray  # own speech that counts
    only_bleed: np.ndarray  # bleed that counts


def truth_of(conversation: Conversation) -> Truth:
    """The truth on the hop grid."""
    own_db, bleed_db = (hop_levels_db(x, conversation.rate_hz) for x in (conversation.own, conversation.bleed))
    speaking = np.stack([mask(spans, len(own_db)) for spans in conversation.segments], axis=1)
    laughing = np.zeros_like(speaking)
    for event in conversation.events:
        if event.kind in ("laugh", "cough"):
            laughing[:, event.mic] |= mask([(event.from_s, event.to_s)], len(own_db))
    heard = speaking & (own_db > _mean_db(own_db, speaking) - 25) & (own_db > bleed_db - 6)
    breathing = np.stack([mask(spans, len(own_db)) for spans in conversation.breaths], axis=1)
    others = (speaking.sum(axis=1, keepdims=True) - speaking) > 0
    near = np.stack([_widened(column, 35, 60) for column in (speaking | laughing | breathing).T], axis=1)
    loud = bleed_db > _mean_db(bleed_db, np.isfinite(bleed_db)) - 30
    return Truth(own_db, bleed_db, speaking, heard, others & ~near & loud)


def figures(cut_db: np.ndarray, conversation: Conversation) -> Figures:
    """Judge a cut.

    Parameters
    ----------
    cut_db : np.ndarray, shape=(hops, microphones)
        How far each microphone was turned down; a hop more or less at the end is forgiven.
    """
    truth = truth_of(conversation)
    cut_db = _fitted(cut_db, truth.heard.shape)
    starts, ends = zip(*_edges(cut_db, conversation, truth), strict=True) if any(conversation.segments) else ((), ())
    bleed_cut = _bleed_cut_db(cut_db, truth)
    return Figures(
        lost_pct=_pct(cut_db[truth.heard] > 6),
        onset_bad_pct=_pct(starts),
        tail_bad_pct=_pct(ends),
        breath_bad_pct=_pct(list(_breaths(cut_db, conversation, truth))),
        bleed_cut_db=bleed_cut,
        open_pct=_pct(cut_db[truth.only_bleed] < 10),
        worst_lost_pct=max((_pct(c[h] > 6) for c, h in zip(cut_db.T, truth.heard.T, strict=True) if h.sum() >= 500),
                           default=0.0),
    )


def spread_db(gain_db: np.ndarray, conversation: Conversation) -> float:
    """Loudest voice less quietest after `gain_db` (hops, microphones), K-weighted; 0 for one voice."""
    own = np.asarray(conversation.own, np.float64)
    if conversation.rate_hz != 48_000:
        own = soxr.resample(own, conversation.rate_hz, 48_000)
    weighted_db = hop_levels_db(sosfilt(K_WEIGHTING_48K, own, axis=0), 48_000)
    heard = truth_of(conversation).heard
    gain_db, weighted_db = _fitted(gain_db, heard.shape), _fitted(weighted_db, heard.shape)
    voices = heard.any(axis=0)
    return float(np.ptp(_mean_db(weighted_db + gain_db, heard)[voices])) if voices.any() else 0.0


def csv_error_db(gain_db: np.ndarray, stems: np.ndarray, conversation: Conversation) -> float:
    """How far an automation is from what was heard: the 99th percentile over hops, of the worst microphone.

    The gain heard is the regression of stem on microphone, hop by hop; its median distance to `gain_db` is make-up.
    """
    shape = (conversation.hops, stems.shape[1])
    wet, dry = (_hops(x, conversation.rate_hz)[: shape[0]] for x in (stems, conversation.mics[: len(stems)]))
    power = np.sum(dry**2, axis=1)
    with np.errstate(divide="ignore", invalid="ignore"):
        found_db = 20 * np.log10(np.abs(np.sum(wet * dry, axis=1)) / power)
    off = np.where(power > 1e-9, found_db - _fitted(gain_db, shape)[: len(wet)], np.nan)
    off = off[:, np.isfinite(off).any(axis=0)]
    return float(np.max(np.nanpercentile(np.abs(off - np.nanmedian(off, axis=0)), 99, axis=0)))


def true_segments(conversation: Conversation) -> np.ndarray:
    """The best a plain expander can do: true segments, breaths and laughs; the last microphone stays open in pauses."""
    hops, mics = conversation.hops, len(conversation.names)
    wanted = np.zeros((hops, mics), bool)
    for m in range(mics):
        happened = [(e.from_s, e.to_s) for e in conversation.events if e.mic == m and e.kind in ("laugh", "cough")]
        spans = [*conversation.segments[m], *conversation.breaths[m], *happened]
        wanted[:, m] = _widened(mask(spans, hops), 10, HOLD_HOPS)
    spoken = np.flatnonzero(wanted.any(axis=1))
    for hop in np.setdiff1d(np.arange(hops), spoken):
        before, after = spoken[spoken < hop], spoken[spoken > hop]
        if before.size and not (after.size and after[0] - hop <= RELEASE_HOPS):
            wanted[hop] = wanted[before[-1]]
    return _ramped(wanted, lookahead_hops=12, hold_hops=0)


def fixed_gate(conversation: Conversation) -> np.ndarray:
    """A gate with one threshold a track: the one of 40 with the least lost_pct + open_pct, knowing the truth."""
    truth = truth_of(conversation)
    level_db = _smoothed_db(conversation)
    best = np.zeros_like(level_db)
    for m in range(level_db.shape[1]):
        tries = np.unique(np.percentile(level_db[np.isfinite(level_db[:, m]), m], np.linspace(1, 99.5, 40)))
        cuts = [_ramped((level_db[:, m : m + 1] > t), lookahead_hops=1)[:, 0] for t in tries]
        heard, far = truth.heard[:, m], truth.only_bleed[:, m]
        costs = [_pct(c[heard] > 6) + _pct(c[far] < 10) for c in cuts]
        best[:, m] = cuts[int(np.argmin(costs))] if costs else RANGE_DB
    return best


def voice_activity(conversation: Conversation) -> np.ndarray:
    """Open where webrtcvad (mode 2, 10 ms) finds a voice."""
    import webrtcvad

    x = conversation.mics
    if conversation.rate_hz != 16_000:
        x = soxr.resample(x, conversation.rate_hz, 16_000)
    found = np.zeros((conversation.hops, x.shape[1]), bool)
    for m in range(x.shape[1]):
        detector = webrtcvad.Vad(2)
        pcm = (np.clip(x[:, m], -1, 1) * 32767).astype("<i2")
        for hop in range(min(len(found), len(pcm) // 160)):
            found[hop, m] = detector.is_speech(pcm[hop * 160 : hop * 160 + 160].tobytes(), 16_000)
    return _ramped(found, lookahead_hops=1)


def gain_sharing(conversation: Conversation) -> np.ndarray:
    """Channel gain = channel level less level of the power sum (JAES 23, 1975); levels matched by the truth first."""
    truth = truth_of(conversation)
    voice_db = _mean_db(truth.own_db, truth.heard)
    trim_db = -np.where(np.isfinite(voice_db), voice_db, np.mean(voice_db[np.isfinite(voice_db)]))
    power = 10 ** ((_smoothed_db(conversation) + trim_db) / 10)
    with np.errstate(divide="ignore", invalid="ignore"):
        cut = 10 * np.log10(power.sum(axis=1, keepdims=True) / power)
    return np.nan_to_num(cut, nan=0.0, posinf=60.0)


def hop_levels_db(x: np.ndarray, rate_hz: int) -> np.ndarray:
    """Level of each hop, shape (hops, microphones); digital silence is -inf."""
    with np.errstate(divide="ignore"):
        return 10 * np.log10(np.mean(_hops(x, rate_hz) ** 2, axis=1))


def mask(spans: Spans, hops: int) -> np.ndarray:
    """Which hops lie in the spans."""
    out = np.zeros(hops, bool)
    for from_s, to_s in spans:
        out[max(round(from_s * 100), 0) : round(to_s * 100)] = True
    return out


def _hops(x: np.ndarray, rate_hz: int) -> np.ndarray:
    """(frames, microphones) as (hops, frames of one hop, microphones); a part of a hop at the end is left out."""
    assert rate_hz % 100 == 0, rate_hz
    hop = rate_hz // 100
    hops = len(x) // hop
    return np.asarray(x[: hops * hop], np.float64).reshape(hops, hop, x.shape[1])


def _mean_db(level_db: np.ndarray, where: np.ndarray) -> np.ndarray:
    """Level of the mean power over `where`, per microphone; -inf where there is nothing."""
    power = np.where(where, 10 ** (level_db / 10), 0.0)
    with np.errstate(divide="ignore"):
        return 10 * np.log10(power.sum(axis=0) / np.maximum(where.sum(axis=0), 1))


def _widened(on: np.ndarray, before: int, after: int) -> np.ndarray:
    """True also so many hops before and after."""
    counts = np.convolve(on.astype(np.int64), np.ones(before + after + 1, np.int64))
    return counts[before : before + len(on)] > 0


def _fitted(grid: np.ndarray, shape: tuple[int, int]) -> np.ndarray:
    """Cut, or grown by its last row, by at most two hops."""
    assert grid.shape[1:] == shape[1:], (grid.shape, shape)
    assert abs(len(grid) - shape[0]) <= 2, (grid.shape, shape)
    return np.pad(grid, ((0, max(shape[0] - len(grid), 0)), (0, 0)), mode="edge")[: shape[0]]


def _pct(bad: object) -> float:
    """Percentage that is true; 0 of nothing."""
    values = np.asarray(bad, bool)
    return float(100 * values.mean()) if values.size else 0.0


def _edges(cut_db: np.ndarray, conversation: Conversation, truth: Truth) -> Iterator[tuple[bool, bool]]:
    """For each utterance that can be heard for 50 ms: is its start cut, is its end cut."""
    for m, spans in enumerate(conversation.segments):
        others = np.delete(truth.speaking, m, axis=1).any(axis=1)
        for from_s, to_s in spans:
            inside = round(from_s * 100) + np.flatnonzero(truth.heard[round(from_s * 100) : round(to_s * 100), m])
            if len(inside) < 5:
                continue
            first, end = inside[0], inside[-1] + 1
            after = slice(end, end + 15)
            decay = cut_db[after, m] if not others[after].any() else cut_db[end:end, m]
            yield (bool(cut_db[first : first + 8, m].mean() > 4),
                   bool(cut_db[end - 12 : end, m].mean() > 4 or (decay.size and decay.mean() > 4)))
    if not any(truth.heard.any(axis=0)):
        yield False, False


def _breaths(cut_db: np.ndarray, conversation: Conversation, truth: Truth) -> Iterator[bool]:
    """For each breath nobody talks over: does the gain move through it."""
    for m, spans in enumerate(conversation.breaths):
        others = np.delete(truth.speaking, m, axis=1).any(axis=1)
        for from_s, to_s in spans:
            span = slice(int(from_s * 100), max(int(to_s * 100), int(from_s * 100) + 1))
            if not others[span].any() and cut_db[span, m].size:
                yield bool(np.ptp(cut_db[span, m]) > 6)


def _bleed_cut_db(cut_db: np.ndarray, truth: Truth) -> float:
    """Reduction of the power of bleed, each microphone's bleed scaled to a mean of one first."""
    before = after = 0.0
    for m in range(cut_db.shape[1]):
        far = truth.only_bleed[:, m]
        if far.any():
            power = 10 ** (truth.bleed_db[far, m] / 10)
            before += len(power)
            after += float(np.sum(power * 10 ** (-cut_db[far, m] / 10)) / power.mean())
    return float(10 * np.log10(before / after)) if after else 0.0


def _smoothed_db(conversation: Conversation) -> np.ndarray:
    """Level of each microphone above 100 Hz, smoothed over 30 ms."""
    from scipy.signal import butter

    sos = butter(2, 100, "highpass", fs=conversation.rate_hz, output="sos")
    power = np.mean(_hops(sosfilt(sos, conversation.mics, axis=0), conversation.rate_hz) ** 2, axis=1)
    with np.errstate(divide="ignore"):
        return 10 * np.log10(np.maximum(uniform_filter1d(power, 3, axis=0), 0))[: conversation.hops]


def _ramped(wanted: np.ndarray, *, lookahead_hops: int, hold_hops: int = HOLD_HOPS) -> np.ndarray:
    """Cut in dB of an expander that opens early within `lookahead_hops`, holds, and closes within 160 ms."""
    opened = np.stack([_widened(column, 0, hold_hops) for column in wanted.T], axis=1).astype(float)
    out = np.zeros_like(opened)
    for k in range(lookahead_hops + 1):  # opening ramp, ended when the voice starts
        ahead = np.concatenate([opened[k:], np.zeros((k, opened.shape[1]))])
        out = np.maximum(out, ahead * (1 - k / (lookahead_hops + 1)))
    for k in range(1, RELEASE_HOPS):
        behind = np.concatenate([np.zeros((k, opened.shape[1])), opened[:-k]])
        out = np.maximum(out, behind * (1 - k / RELEASE_HOPS))
    return RANGE_DB * (1 - out)
