"""Arrival times as evidence: a microphone that clearly hears first has its own voice.

Where microphones hear everybody almost alike (far from the mouths, or all on lapels), levels say little and arrival
times still tell who speaks. A clear lead (`measure.arrival`) opens its microphone; that a microphone does not lead
closes nothing, since of two people who talk at once only one can. Where levels separate well, the lead must be
clearer to count: there it can only add errors.
"""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

from leveller.attribute.coupling import LEAST_EVER, Coupling
from leveller.attribute.seeds import AUDIBLE_DB, three
from leveller.measure.arrival import Arrivals

NATS = 1.0  # what a clear lead says for own voice, per hop
LEAD = 0.25
LEAD_WHERE_ALIKE = 0.15
ALIKE_DB = -5.0  # coupling over all bands: these two microphones hear a voice almost alike

Grid = npt.NDArray[np.float32]


def with_leads(evidence: Grid, arrivals: Arrivals, audible_db: Grid, coupling: Coupling) -> Grid:
    """Evidence in which leading microphones have at least `NATS` for own voice, shape=(hops, tracks)."""
    inside = arrivals.hop < len(evidence)
    hop, lead = arrivals.hop[inside], three(arrivals.lead[inside])
    if len(hop) < 2:
        return evidence
    first = lead.argmax(axis=1)
    wanted = np.where(_alike(coupling), LEAD_WHERE_ALIKE, LEAD)[first]
    clear = (lead.max(axis=1) > wanted) & (audible_db[hop, first] > AUDIBLE_DB)
    out = evidence.copy()
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
