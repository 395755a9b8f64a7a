"""untied-body: a well or the substrate has no contacted tap at all.

What it measures
    The number of contacted taps of every n-well, of every isolated p-well and, when it holds
    n+ diffusions, of the substrate.  At least one is needed.
Why it matters
    A body without a tap floats: nothing holds its junctions off, its resistance to the rail is
    unbounded and no other rule can be evaluated for it.
How to mend
    Add a tap with contacts and tie it to the body's rail, or join the body to a tied one.
Source
    Common practice, no published source; it follows from the definition of the loop's shunt
    resistances (R. R. Troutman, Latchup in CMOS Technology, 1986).
Default limit
    One contacted tap.
"""

from __future__ import annotations

import numpy as np
import shapely

from latchscan.layout.model import Body, Floats
from latchscan.rules.breaks import Breaks, and_others, place, tied_bodies
from latchscan.rules.model import Evidence

NAME = "untied-body"
UNIT = "1"


def check(evidence: Evidence) -> Breaks:
    """Bodies without a contacted tap; the substrate only when it holds emitters."""
    layout = evidence.layout
    held = np.bincount(layout.emitters.body, minlength=len(layout.bodies))
    floating = ~tied_bodies(layout)
    rows = np.array(
        [
            index
            for index, body in enumerate(layout.bodies)
            if floating[index] and (body.kind != "substrate" or held[index])
        ],
        dtype=np.int64,
    )
    bodies = [layout.bodies[row] for row in rows]
    at = np.array([_inside(body) for body in bodies]).reshape(-1, 2)
    boxes = np.array([shapely.total_bounds(body.polygons) for body in bodies]).reshape(-1, 4)
    return Breaks(
        member=rows,
        subject=np.array([body.id for body in bodies], dtype=np.str_),
        body=rows,
        reason=np.zeros(len(rows), dtype=np.int64),
        x_um=at[:, 0],
        y_um=at[:, 1],
        measured=np.zeros(len(rows)),
        limit=np.ones(len(rows)),
        excess=held[rows].astype(np.float64),
        box_um=boxes,
    )


def _inside(body: Body) -> Floats:
    """Point (x, y) inside the largest polygon of the body [um]."""
    largest = body.polygons[int(np.argmax(shapely.area(body.polygons)))]
    point = shapely.point_on_surface(largest)
    return np.array([point.x, point.y])


def describe(evidence: Evidence, breaks: Breaks, row: int, count: int) -> str:
    """One sentence about the body in `row`, the worst of `count`."""
    body = evidence.layout.bodies[breaks.body[row]]
    words = {"nwell": "n-well", "isolated_pwell": "isolated p-well", "substrate": "p-well"}
    kind = words[body.kind]
    emitters = int(breaks.excess[row])
    noun = "emitter" if emitters == 1 else "emitters"
    at = place(breaks.x_um[row], breaks.y_um[row])
    return (
        f"{body.id} has no contacted tap (0 of at least 1) near {at}{and_others(count, 'body')}"
        f" and holds {emitters} {noun}; add a contacted {kind} tap and tie it to its rail."
    )
