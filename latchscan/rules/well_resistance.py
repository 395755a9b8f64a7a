"""well-resistance: the n-well under a p+ diffusion is tied through too much resistance.

What it measures
    For every p+ emitter the patch resistance [ohm]: the mean potential under it for 1 A in
    all, spread over every p+ emitter of the same well within the patch radius.
Why it matters
    It is the shunt across the base-emitter junction of the vertical PNP.  The larger it is,
    the smaller the current that turns the transistor on: V_BE / R_w.
How to mend
    Add well taps beside the place named, widen the well, or lay a buried layer under it.
Equation
    -div(grad(phi) / R_sheet) = J in the well, phi = 0 at contacted taps (sheet conduction; for
    example R. R. Troutman, Latchup in CMOS Technology, 1986).
Default limit
    None; the technology file states ``max_ohm``.
"""

from __future__ import annotations

import numpy as np

from latchscan.layout.model import P_IN_NWELL
from latchscan.rules.breaks import Breaks, and_others, over_limit, place, ratio, tied_bodies
from latchscan.rules.model import Evidence
from latchscan.technology.model import WellResistanceRule

NAME = "well-resistance"
UNIT = "ohm"


def check(evidence: Evidence, limits: WellResistanceRule) -> Breaks:
    """p+ emitters of tied wells whose patch resistance is above the limit."""
    emitters = evidence.layout.emitters
    measured = evidence.resistances.patch_ohm[: len(emitters.ids)]
    limit = np.full(len(measured), limits.max_ohm)
    tied = tied_bodies(evidence.layout)[emitters.body]
    rows = np.flatnonzero((emitters.kind == P_IN_NWELL) & tied & over_limit(measured, limit))
    box = emitters.box_um[rows]
    return Breaks(
        member=rows,
        subject=emitters.ids[rows],
        body=emitters.body[rows],
        reason=np.zeros(len(rows), dtype=np.int64),
        x_um=(box[:, 0] + box[:, 2]) / 2,
        y_um=(box[:, 1] + box[:, 3]) / 2,
        measured=measured[rows],
        limit=limit[rows],
        excess=ratio(measured[rows], limit[rows]),
        box_um=box,
    )


def describe(evidence: Evidence, breaks: Breaks, row: int, count: int) -> str:
    """One sentence about the emitter in `row`, the worst of `count`."""
    body = evidence.layout.bodies[breaks.body[row]]
    at = place(breaks.x_um[row], breaks.y_um[row])
    others = and_others(count, "emitter")
    if np.isnan(breaks.measured[row]):
        return (
            f"The well resistance under {breaks.subject[row]} in {body.id} at {at} could not be"
            f" solved{others}; inspect its taps by hand."
        )
    return (
        f"The well resistance of {body.id} under {breaks.subject[row]} at {at} is"
        f" {breaks.measured[row]:.4g} ohm{others}, more than the limit of {breaks.limit[row]:g}"
        " ohm; add well taps beside it."
    )
