"""Short answers under another voice, as evidence: a few bands stand out of the bleed for a quarter of a second.

A "yes" under an equally loud voice fills only some bands of its own, each now and then, so the mean over all bands
(`bleed`) stays near what bleed gives, hop by hop. Over `WINDOW_HOPS` it does not: the mean of what the strongest
bands say lies clearly over what this microphone ever shows while only others speak. The measure, in dB, is the excess
of the strongest bands less half of the excess of all (a coupling estimated too low lifts all of them, a voice a few)
and less half of what is bright (paper and keys stand out in the high bands).

How far bleed scatters depends on room and microphone: a lapel's lies 2 dB over that of a close microphone, a live
room's is narrower than a far table's. So the limit is each microphone's own: the median of the measure while somebody
else clearly speaks and this one does not, and `SPREADS` times the way from there to the upper decile. Both hardly
notice the few per cent of such hops that are answers after all. What lies over the limit speaks for own voice, up to
`MOST` nats a hop; what lies under it says nothing, so that this opens and never closes.

The numbers are our choice, measured on conversations of the development voices; they weigh lost words against bleed
left open.
"""

from __future__ import annotations

from typing import Any

import numpy as np
import numpy.typing as npt

from leveller.attribute.bleed import AUDIBLE_DB, Evidence
from leveller.units import Bools

WINDOW_HOPS = 27
OF_ALL = 0.5  # of the excess of all bands
OF_BRIGHT = 0.5  # of the excess of the high bands over the low ones
SPREADS = 3.4  # upper decile less median of bleed
UPPER = 0.9
NATS_PER_DB = 1.2
MOST = 1.0  # nats a hop
SPEAKS = 1.0  # nats a hop: somebody clearly speaks
LEAST_HOPS = 200  # of bleed; less gives no limit

Grid = npt.NDArray[np.float32]
Row = npt.NDArray[np.float32]  # (hops,)


def with_answers(evidence: Evidence, programme: Bools) -> Grid:
    """Evidence for own voice in which lasting excess of a few bands counts too, shape=(hops, tracks).

    Parameters
    ----------
    evidence : Evidence
        With its details.
    programme : shape=(hops,)
        False where a slate, a tone or a marked stretch is to be left out.
    """
    out = evidence.own.copy()
    somebody = programme & (evidence.own > SPEAKS).any(axis=1)
    for track in range(out.shape[1]):  # one by one, so that what is needed in between stays small
        bleed = somebody & (evidence.own[:, track] < 0)
        if np.count_nonzero(bleed) < LEAST_HOPS:
            continue
        lasting = _lasting_db(evidence, track)
        nats = np.minimum((lasting - _limit_db(lasting[bleed])) * np.float32(NATS_PER_DB), np.float32(MOST))
        weight = np.clip(evidence.audible_db[:, track] / np.float32(AUDIBLE_DB), 0, 1)
        np.maximum(out[:, track], nats * weight, out=out[:, track], where=nats > 0)
    return out


def mean_round(values: npt.NDArray[Any], hops: int) -> Row:
    """Mean over so many hops round each (odd); beyond the ends is nothing."""
    half = hops // 2
    total = np.cumsum(np.pad(values.astype(np.float64), (half + 1, half)))
    return np.asarray((total[hops:] - total[:-hops]) / hops, np.float32)


def _lasting_db(evidence: Evidence, track: int) -> Row:
    """The measure of one track."""
    excess_db = evidence.standing_out_db[:, track].astype(np.float32)
    excess_db -= np.float32(OF_ALL) * evidence.own_to_bleed_db[:, track]
    excess_db -= np.float32(OF_BRIGHT) * np.maximum(evidence.bright_db[:, track].astype(np.float32), 0)
    return mean_round(excess_db, WINDOW_HOPS)


def _limit_db(bleed_db: Row) -> np.float32:
    """What the measure of a microphone's bleed as good as never passes."""
    middle, upper = np.quantile(bleed_db, (0.5, UPPER))
    return np.float32(middle + SPREADS * (upper - middle))
