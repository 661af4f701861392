"""Arrival times as evidence: a microphone that clearly hears first has its own voice.

Where a microphone far from its mouth hears everybody almost alike, levels say little and arrival times still tell who
speaks. There a clear lead (`measure.arrival`) opens its microphone; that a microphone does not lead closes nothing,
since of two people who talk at once only one can. Where levels separate, leads have no say, nor against the levels of
the moment: an air conditioner that all microphones hear leads somewhere too.
"""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

from leveller.attribute.bleed import Evidence
from leveller.attribute.coupling import LEAST_EVER, Coupling
from leveller.attribute.seeds import AUDIBLE_DB, three
from leveller.measure.arrival import Arrivals

NATS = 1.0  # what a clear lead says for own voice, per hop
LEAD = 0.15
CONTRADICTED_DB = -2.0  # own-to-bleed ratio under which levels speak against the lead
ALIKE_DB = -5.0  # coupling over all bands: these two microphones hear a voice almost alike

Grid = npt.NDArray[np.float32]


def with_leads(evidence: Evidence, arrivals: Arrivals, coupling: Coupling) -> Grid:
    """Evidence in which leading microphones have at least `NATS` for own voice, shape=(hops, tracks)."""
    inside = arrivals.hop < len(evidence.own)
    hop, lead = arrivals.hop[inside], three(arrivals.lead[inside])
    if len(hop) < 2:
        return evidence.own
    first = lead.argmax(axis=1)
    clear = _alike(coupling)[first] & (lead.max(axis=1) > LEAD)
    clear &= evidence.audible_db[hop, first] > AUDIBLE_DB
    clear &= evidence.own_to_bleed_db[hop, first] > CONTRADICTED_DB
    out = evidence.own.copy()
    apart = int(hop[1] - hop[0])
    for offset in range(-(apart // 2), apart - apart // 2):
        at = np.clip(hop[clear] + offset, 0, len(out) - 1)
        out[at, first[clear]] = np.maximum(out[at, first[clear]], np.float32(NATS))
    return out


def _alike(coupling: Coupling) -> npt.NDArray[np.bool_]:
    """Tracks whose voice another microphone hears almost as loud, shape=(tracks,)."""
    overall = coupling.overall_db.copy()
    np.fill_diagonal(overall, -np.inf)
    return np.asarray((overall.max(axis=1) > ALIKE_DB) & (coupling.heard_hops >= LEAST_EVER))
