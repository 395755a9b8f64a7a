"""ring-contacts: too little of a guard ring is near a contact.

What it measures
    The share (a pure number) of the area of every ring's strips that lies within
    ``rings.contact_reach_um`` of a contact on them.
Why it matters
    Between contacts the collected current flows in the strip itself, which lifts its
    potential; a strip far from any contact is hardly a ring.
How to mend
    Add contacts all along the ring, with metal to its rail above them.
Source
    Common practice of contacting rings without pause, no published source for one share.
Default limit
    0.5.
"""

from __future__ import annotations

import numpy as np
import shapely

from latchscan.rules.breaks import Breaks, and_others, place
from latchscan.rules.model import Evidence
from latchscan.rules.strips import guarded, ring_boxes, ring_title
from latchscan.technology.model import RingContactsRule

NAME = "ring-contacts"
UNIT = "1"


def check(evidence: Evidence, limits: RingContactsRule) -> Breaks:
    """Rings whose contacted share is below the limit or not known."""
    rings = evidence.connections.rings
    share = rings.contacted_share
    rows = np.flatnonzero(~(share >= limits.min_share))
    points = shapely.point_on_surface(rings.polygons[rows])
    lacking = limits.min_share - share[rows]
    return Breaks(
        member=rows,
        subject=rings.ids[rows],
        body=rings.body[rows],
        reason=rings.kind[rows],
        x_um=shapely.get_x(points),
        y_um=shapely.get_y(points),
        measured=share[rows],
        limit=np.full(len(rows), limits.min_share),
        excess=np.where(np.isnan(lacking), np.inf, lacking),
        box_um=ring_boxes(evidence, rows),
    )


def describe(evidence: Evidence, breaks: Breaks, row: int, count: int) -> str:
    """One sentence about the ring in `row`, the least contacted of `count`."""
    ring = int(breaks.member[row])
    title = f"{ring_title(evidence, ring)} around {guarded(evidence, ring)}"
    at = place(breaks.x_um[row], breaks.y_um[row])
    others = and_others(count, "ring")
    if np.isnan(breaks.measured[row]):
        return (
            f"The contacted share of the {title} at {at} could not be measured{others}; inspect it"
            " by hand."
        )
    return (
        f"The {title} at {at} has contacts near only {breaks.measured[row]:.3g} of its"
        f" area{others}, less than the limit of {breaks.limit[row]:g}; contact it all along."
    )
