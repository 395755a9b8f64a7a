"""tie-resistance: a body reaches its rail only through too much resistance.

What it measures
    For every body that reaches a rail of its kind, the resistance [ohm] of poly and resistors
    between its taps and that rail; 0 where they are joined by metal alone.
Why it matters
    It is in series with the whole body: the body's own resistance to its taps may be small,
    and yet the current of one pin lifts all of it at once.  A thyristor fires when the drop
    across both reaches the forward voltage of a junction.
How to mend
    Connect the taps to the rail in metal, or shorten and widen the poly.
Equation
    R = sheet resistance x squares + contact resistance / contacts for every strap and
    resistor, joined by Kirchhoff's laws.
Source
    Common practice, no published source for one limit.
Default limit
    50 ohm: 10 mA drop 0.5 V.
"""

from __future__ import annotations

import numpy as np

from latchscan.rules.breaks import Breaks, and_others, over_limit, place, ratio
from latchscan.rules.model import Evidence
from latchscan.rules.rails import BODY_WORDS, body_boxes, net_title, right_kinds, tap_place
from latchscan.technology.model import TieResistanceRule

NAME = "tie-resistance"
UNIT = "ohm"


def check(evidence: Evidence, limits: TieResistanceRule) -> Breaks:
    """Bodies whose way to their rail has more resistance than allowed, or an unknown one."""
    ties, pins = evidence.connections.ties, evidence.connections.pins
    held = ties.rail >= 0
    held &= pins.supply_known & (np.diff(ties.net_first) > 0)
    held[held] = pins.net_kind[ties.rail[held]] == right_kinds(evidence.layout)[held]
    limit = np.full(len(ties.rail), limits.max_ohm)
    rows = np.flatnonzero(held & over_limit(ties.resistance_ohm, limit))
    first = ties.net[ties.net_first[rows]] if len(rows) else rows
    at = np.array(
        [
            tap_place(evidence, body, net)
            for body, net in zip(rows.tolist(), first.tolist(), strict=True)
        ]
    ).reshape(-1, 2)
    measured = ties.resistance_ohm[rows]
    return Breaks(
        member=rows,
        subject=np.array([evidence.layout.bodies[row].id for row in rows.tolist()], dtype=np.str_),
        body=rows,
        reason=np.zeros(len(rows), dtype=np.int64),
        x_um=at[:, 0],
        y_um=at[:, 1],
        measured=measured,
        limit=limit[rows],
        excess=ratio(measured, limit[rows]),
        box_um=body_boxes(evidence.layout, rows),
    )


def describe(evidence: Evidence, breaks: Breaks, row: int, count: int) -> str:
    """One sentence about the body in `row`, the worst of `count`."""
    body = evidence.layout.bodies[breaks.member[row]]
    rail = net_title(evidence.connections, int(evidence.connections.ties.rail[breaks.member[row]]))
    at = place(breaks.x_um[row], breaks.y_um[row])
    others = and_others(count, "body")
    if np.isnan(breaks.measured[row]):
        return (
            f"The resistance between the taps of {body.id} at {at} and its rail {rail} could not"
            f" be worked out{others}; inspect its straps and resistors by hand."
        )
    return (
        f"The {BODY_WORDS[body.kind]} {body.id} reaches its rail {rail} from the tap at {at}"
        f" through {breaks.measured[row]:.4g} ohm of wiring{others}, more than the limit of"
        f" {breaks.limit[row]:g} ohm; connect its taps to the rail in metal."
    )
