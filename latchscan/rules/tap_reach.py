"""tap-reach: a tap stretches too far beyond its last contact.

What it measures
    For every contacted tap, the largest distance [um] of any of its points from its nearest
    contact.
Why it matters
    The far end of a long tap hangs on the sheet resistance of the tap itself, so it holds the
    body's potential less well than its drawing suggests.
How to mend
    Add contacts along the tap, or cut the uncontacted end off.
Source
    Layout guidance of the foundry.  A published example is 6.00 um (layout rules of an open
    130 nm BiCMOS process, revision 0.4, section 7.2).
Default limit
    None; the technology file states ``max_um``.
"""

from __future__ import annotations

import numpy as np
import shapely

from latchscan.rules.breaks import Breaks, and_others, over_limit, place, ratio, tap_ids
from latchscan.rules.model import Evidence
from latchscan.technology.model import TapReachRule

NAME = "tap-reach"
UNIT = "um"


def check(evidence: Evidence, limits: TapReachRule) -> Breaks:
    """Contacted taps that reach farther from their contacts than allowed."""
    taps = evidence.layout.taps
    measured = evidence.distances.tap_reach_um
    limit = np.full(len(measured), limits.max_um)
    rows = np.flatnonzero((taps.contact_count > 0) & over_limit(measured, limit))
    boxes = shapely.bounds(taps.polygons[rows]).reshape(-1, 4)
    known = np.isfinite(measured[rows])
    centre = (boxes[:, :2] + boxes[:, 2:]) / 2
    at = np.where(known[:, None], evidence.distances.tap_reach_at_um[rows], centre)
    return Breaks(
        member=rows,
        subject=tap_ids(rows),
        body=taps.body[rows],
        reason=taps.kind[rows],
        x_um=at[:, 0],
        y_um=at[:, 1],
        measured=measured[rows],
        limit=limit[rows],
        excess=ratio(measured[rows], limit[rows]),
        box_um=boxes,
    )


def describe(evidence: Evidence, breaks: Breaks, row: int, count: int) -> str:
    """One sentence about the tap in `row`, the worst of `count`."""
    body = evidence.layout.bodies[breaks.body[row]]
    at = place(breaks.x_um[row], breaks.y_um[row])
    others = and_others(count, "tap")
    if np.isnan(breaks.measured[row]):
        return (
            f"The reach of tap {breaks.subject[row]} of {body.id} at {at} could not be"
            f" measured{others}; inspect its contacts by hand."
        )
    return (
        f"The tap {breaks.subject[row]} of {body.id} reaches {breaks.measured[row]:.3f} um beyond"
        f" its nearest contact at {at}{others}, more than the limit of {breaks.limit[row]:g} um;"
        " add contacts there or shorten it."
    )
