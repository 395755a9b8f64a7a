"""well-spacing: two n-wells at different potentials are too near to each other.

What it measures
    The distance [um] between every two n-wells whose rails have different voltage ranges.
    Wells on separate supplies of the same range pass, and so do wells of unknown voltage.
Why it matters
    The p-type strip between them is the base of a transistor from well to well.  The narrower
    it is, the larger the share of the electrons that one well injects and the other collects,
    and the sooner the two depletion regions meet.
How to mend
    Move the wells apart, or put a substrate tap between them and let the other rules judge.
Source
    Layout guidance of the foundry for wells at different potentials; common practice, no
    published source for one distance.
Default limit
    3 um.
"""

from __future__ import annotations

import numpy as np

from latchscan.rules.breaks import Breaks, and_others, place, ratio
from latchscan.rules.model import Evidence
from latchscan.rules.rails import net_title
from latchscan.technology.model import WellSpacingRule

NAME = "well-spacing"
UNIT = "um"


def check(evidence: Evidence, limits: WellSpacingRule) -> Breaks:
    """Pairs of n-wells of different voltage that are nearer than allowed."""
    ties = evidence.connections.ties
    body = np.repeat(np.arange(len(ties.rail)), np.diff(ties.spacing_first))
    ranges = np.column_stack((ties.low_v, ties.high_v))
    one, other = ranges[body], ranges[ties.neighbour]
    known = np.isfinite(one).all(axis=1) & np.isfinite(other).all(axis=1)
    differ = known & (one != other).any(axis=1) & evidence.connections.pins.supply_known
    rows = np.flatnonzero(differ & ~(ties.spacing_um >= limits.min_um))
    ends = np.hstack((ties.spacing_from_um[rows], ties.spacing_to_um[rows]))
    at = (ends[:, :2] + ends[:, 2:]) / 2
    limit = np.full(len(rows), limits.min_um)
    return Breaks(
        member=rows,
        subject=np.array(
            [evidence.layout.bodies[row].id for row in body[rows].tolist()], dtype=np.str_
        ),
        body=body[rows],
        reason=ties.neighbour[rows],
        x_um=at[:, 0],
        y_um=at[:, 1],
        measured=ties.spacing_um[rows],
        limit=limit,
        excess=ratio(limit, ties.spacing_um[rows]),
        box_um=np.hstack(
            (np.minimum(ends[:, :2], ends[:, 2:]), np.maximum(ends[:, :2], ends[:, 2:]))
        ),
    )


def describe(evidence: Evidence, breaks: Breaks, row: int, count: int) -> str:
    """One sentence about the two wells in `row`, the nearest of `count`."""
    ties = evidence.connections.ties
    titles = [
        f"{evidence.layout.bodies[body].id} on"
        f" {net_title(evidence.connections, int(ties.rail[body]))}"
        for body in (int(breaks.body[row]), int(ties.neighbour[breaks.member[row]]))
    ]
    wells = f"The n-wells {titles[0]} and {titles[1]}"
    at = place(breaks.x_um[row], breaks.y_um[row])
    others = and_others(count, "pair")
    if np.isnan(breaks.measured[row]):
        return (
            f"{wells} are at different potentials and their spacing at {at} could not be"
            f" measured{others}; inspect it by hand."
        )
    return (
        f"{wells} are {breaks.measured[row]:.3f} um apart at {at}{others}, less than the limit of"
        f" {breaks.limit[row]:g} um for different potentials; move them apart."
    )
