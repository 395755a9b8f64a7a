"""double-ring: no pair of a p and an n strip parts an injector from a thyristor's other half.

What it measures
    Between every injector and the nearest opposite diffusion of another pin (a driver) and of
    no pin (the core), the kinds of strips that the straight line between them crosses:
    contacted substrate taps, and well taps or n-type collectors.  Both kinds are needed up to
    a distance each.
Why it matters
    One ring collects only one type of carrier.  Between two opposite drivers, and between a
    driver and the core, both types flow when a pin is forced, and both feed the thyristor.
How to mend
    Put a contacted p strip on ground and a contacted n strip on the supply between the two, or
    move them farther apart than the limit.
Source
    Common practice of double guard rings around drivers, no published source for the distance;
    R. R. Troutman, Latchup in CMOS Technology, 1986, treats both kinds of ring.
Default limit
    Two kinds; asked for within 50 um of a driver and within 50 um of the core.
"""

from __future__ import annotations

import numpy as np

from latchscan.rules.breaks import Breaks, and_others, place
from latchscan.rules.model import Evidence
from latchscan.rules.strips import injector_boxes, injector_id, injector_title
from latchscan.technology.model import DoubleRingRule

NAME = "double-ring"
UNIT = "1"

KINDS_NEEDED = 2
AGAINST_DRIVER, AGAINST_CORE = 0, 1


def check(evidence: Evidence, limits: DoubleRingRule) -> Breaks:
    """Injectors with fewer than both kinds of strips towards a near opposite diffusion."""
    connections = evidence.connections
    crossings = connections.crossings
    within = np.where(crossings.driver, limits.driver_within_um, limits.core_within_um)
    kinds = (crossings.p_strips > 0).astype(np.int64) + (crossings.n_strips > 0)
    rows = np.flatnonzero(~(crossings.spacing_um > within) & (kinds < KINDS_NEEDED))
    injector = crossings.injector[rows]
    measured = kinds[rows].astype(np.float64)
    at = (crossings.from_um[rows] + crossings.to_um[rows]) / 2
    nearness = 1.0 / (1.0 + np.nan_to_num(crossings.spacing_um[rows], nan=0.0))
    return Breaks(
        member=rows,
        subject=np.array([injector_id(evidence, row) for row in injector.tolist()], dtype=np.str_),
        body=connections.injectors.body[injector],
        reason=np.where(crossings.driver[rows], AGAINST_DRIVER, AGAINST_CORE),
        x_um=at[:, 0],
        y_um=at[:, 1],
        measured=measured,
        limit=np.full(len(rows), float(KINDS_NEEDED)),
        excess=KINDS_NEEDED - measured + nearness,
        box_um=injector_boxes(evidence, injector),
    )


def describe(evidence: Evidence, breaks: Breaks, row: int, count: int) -> str:
    """One sentence about the injector in `row`, the worst of `count`."""
    crossings, emitters = evidence.connections.crossings, evidence.layout.emitters
    member = int(breaks.member[row])
    title = injector_title(evidence, int(crossings.injector[member]))
    other = int(crossings.other[member])
    facing = (
        f"driver {emitters.ids[other]}"
        if breaks.reason[row] == AGAINST_DRIVER
        else f"emitter {emitters.ids[other]} of the core"
    )
    missing = [
        words
        for words, strips in (
            ("p strip on ground", crossings.p_strips[member]),
            ("n strip on a supply", crossings.n_strips[member]),
        )
        if strips == 0
    ]
    spacing = crossings.spacing_um[member]
    away = f"{spacing:.3f} um away" if np.isfinite(spacing) else "at an unknown distance"
    present = {0: "no strips", 1: "only strips of one kind (p or n)"}[int(breaks.measured[row])]
    return (
        f"Between {title} and {facing}, {away}, lie {present}"
        f" at {place(breaks.x_um[row], breaks.y_um[row])}{and_others(count, 'injector')}, less than"
        f" the limit of {breaks.limit[row]:g} kinds; add a contacted {' and an '.join(missing)}"
        " there."
    )
