"""ring-net: a guard ring is on a net that makes it useless.

What it measures
    For every ring whose net is known, whether that net suits its kind (1) or not (0): a ring
    that collects majority carriers must hold its own body's rail, a ring that collects
    minority carriers must hold its junction reverse-biased.
Why it matters
    A ring on a signal or on the wrong rail collects nothing when it is needed, or injects
    carriers by itself.
How to mend
    Connect the ring to the right rail: strips of p-type to ground, strips of n-type and n-wells
    to a supply that is at least the one beside them.
Source
    Common practice; both kinds of ring are treated in R. R. Troutman, Latchup in CMOS
    Technology, 1986.
Default limit
    Every ring whose net is known is on a net that suits it.
"""

from __future__ import annotations

import numpy as np
import shapely

from latchscan.rules.breaks import Breaks, and_others, place
from latchscan.rules.model import Evidence
from latchscan.rules.rails import net_title
from latchscan.rules.strips import guarded, ring_boxes, ring_title

NAME = "ring-net"
UNIT = "1"

UNSUITED = 0
"""Value of `Rings.net_suits` where the net is known and wrong."""


def check(evidence: Evidence) -> Breaks:
    """Rings on a net that is known not to suit their kind; the larger the ring, the worse."""
    rings = evidence.connections.rings
    judged = evidence.connections.pins.supply_known & (rings.net_suits == UNSUITED)
    rows = np.flatnonzero(judged)
    shapes = rings.polygons[rows]
    points = shapely.point_on_surface(shapes)
    return Breaks(
        member=rows,
        subject=rings.ids[rows],
        body=rings.body[rows],
        reason=rings.kind[rows],
        x_um=shapely.get_x(points),
        y_um=shapely.get_y(points),
        measured=np.zeros(len(rows)),
        limit=np.ones(len(rows)),
        excess=shapely.area(shapes),
        box_um=ring_boxes(evidence, rows),
    )


def describe(evidence: Evidence, breaks: Breaks, row: int, count: int) -> str:
    """One sentence about the ring in `row`, the largest of `count`."""
    ring = int(breaks.member[row])
    net = int(evidence.connections.rings.net[ring])
    on = net_title(evidence.connections, net) if net >= 0 else "an unknown net"
    return (
        f"The {ring_title(evidence, ring)} around {guarded(evidence, ring)} at"
        f" {place(breaks.x_um[row], breaks.y_um[row])}{and_others(count, 'ring')} is on {on}, which"
        " does not suit it (0 of at least 1 right rail); connect it to the rail of its kind."
    )
