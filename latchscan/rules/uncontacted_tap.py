"""uncontacted-tap: a tap is drawn without a contact.

What it measures
    The number of contacts on every tap; at least one is needed.
Why it matters
    A tap without a contact ties nothing: it looks like protection in the layout and is none,
    so no measure counts it as a tap.
How to mend
    Put contacts and metal to the rail on it, or delete it.
Source
    Common practice, no published source.
Default limit
    One contact.
"""

from __future__ import annotations

import numpy as np
import shapely

from latchscan.layout.model import WELL_TAP
from latchscan.rules.breaks import Breaks, and_others, place, tap_ids
from latchscan.rules.model import Evidence

NAME = "uncontacted-tap"
UNIT = "1"


def check(evidence: Evidence) -> Breaks:
    """Taps that carry no contact; the larger the area, the worse."""
    taps = evidence.layout.taps
    rows = np.flatnonzero(taps.contact_count == 0)
    shapes = taps.polygons[rows]
    points = shapely.point_on_surface(shapes)
    return Breaks(
        member=rows,
        subject=tap_ids(rows),
        body=taps.body[rows],
        reason=taps.kind[rows],
        x_um=shapely.get_x(points),
        y_um=shapely.get_y(points),
        measured=np.zeros(len(rows)),
        limit=np.ones(len(rows)),
        excess=shapely.area(shapes),
        box_um=shapely.bounds(shapes).reshape(-1, 4),
    )


def describe(evidence: Evidence, breaks: Breaks, row: int, count: int) -> str:
    """One sentence about the tap in `row`, the largest of `count`."""
    kind = evidence.layout.taps.kind[breaks.member[row]]
    words = "well tap" if kind == WELL_TAP else "substrate tap"
    body = evidence.layout.bodies[breaks.body[row]]
    return (
        f"The {words} {breaks.subject[row]} of {body.id} at"
        f" {place(breaks.x_um[row], breaks.y_um[row])}{and_others(count, 'tap')} has no contact"
        " (0 of at least 1) and does not count as a tap; contact it to its rail or delete it."
    )
