"""ring-width: a guard ring is too narrow somewhere.

What it measures
    The least width [um] of the strips of every ring, against a limit for its kind: majority
    (a tap of its own body) or minority (an n-well, or a strip of the other type).
Why it matters
    A narrow strip carries the collected current along itself through more resistance, so it
    holds the silicon beside it less well; a narrow collector lets more carriers pass beneath.
How to mend
    Widen the strip at the place named.
Source
    Layout guidance of the foundry; common practice, no published source for one width.
Default limit
    0.5 um for both kinds.
"""

from __future__ import annotations

import numpy as np

from latchscan.layout.connections import MAJORITY
from latchscan.rules.breaks import Breaks, and_others, place, ratio
from latchscan.rules.model import Evidence
from latchscan.rules.strips import guarded, ring_boxes, ring_title
from latchscan.technology.model import RingWidthRule

NAME = "ring-width"
UNIT = "um"


def check(evidence: Evidence, limits: RingWidthRule) -> Breaks:
    """Rings narrower than the limit of their kind, or of unknown width."""
    rings = evidence.connections.rings
    limit = np.where(rings.kind == MAJORITY, limits.majority_min_um, limits.minority_min_um)
    rows = np.flatnonzero(~(rings.width_um >= limit))
    box = ring_boxes(evidence, rows)
    known = np.isfinite(rings.width_at_um[rows]).all(axis=1, keepdims=True)
    at = np.where(known, rings.width_at_um[rows], box[:, :2])
    return Breaks(
        member=rows,
        subject=rings.ids[rows],
        body=rings.body[rows],
        reason=rings.kind[rows],
        x_um=at[:, 0],
        y_um=at[:, 1],
        measured=rings.width_um[rows],
        limit=limit[rows],
        excess=ratio(limit[rows], rings.width_um[rows]),
        box_um=box,
    )


def describe(evidence: Evidence, breaks: Breaks, row: int, count: int) -> str:
    """One sentence about the ring in `row`, the narrowest of `count`."""
    ring = int(breaks.member[row])
    title = f"{ring_title(evidence, ring)} around {guarded(evidence, ring)}"
    at = place(breaks.x_um[row], breaks.y_um[row])
    others = and_others(count, "ring")
    if np.isnan(breaks.measured[row]):
        return (
            f"The width of the {title} at {at} could not be measured{others}; inspect it by hand."
        )
    return (
        f"The {title} is only {breaks.measured[row]:.3f} um wide at {at}{others}, less than the"
        f" limit of {breaks.limit[row]:g} um; widen it there."
    )
