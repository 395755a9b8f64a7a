"""isolation-gap: an n-well ring that should isolate a p-well is open.

What it measures
    The width [um] of every opening in an n-well ring over a buried layer that, were it
    closed, would isolate the p-well inside it.
Why it matters
    The p-well inside is drawn like an isolated one but hangs together with the substrate
    through the opening.  A voltage meant for it alone is shorted to the substrate, and its
    diffusions inject into the substrate that they should be isolated from.
How to mend
    Close the n-well at the place named, or remove the buried layer if no isolation is meant.
Source
    It follows from the geometry of a triple well; common practice, no published source.
Default limit
    No opening at all.
"""

from __future__ import annotations

import numpy as np

from latchscan.rules.breaks import Breaks, and_others, place
from latchscan.rules.model import Evidence

NAME = "isolation-gap"
UNIT = "um"


def check(evidence: Evidence) -> Breaks:
    """Every opening of an n-well ring over a buried layer."""
    ties = evidence.connections.ties
    ends = np.hstack((ties.gap_from_um, ties.gap_to_um))
    at = (ends[:, :2] + ends[:, 2:]) / 2
    count = len(ties.gap_body)
    return Breaks(
        member=np.arange(count),
        subject=np.array(
            [evidence.layout.bodies[row].id for row in ties.gap_body.tolist()], dtype=np.str_
        ),
        body=ties.gap_body,
        reason=np.zeros(count, dtype=np.int64),
        x_um=at[:, 0],
        y_um=at[:, 1],
        measured=ties.gap_um,
        limit=np.zeros(count),
        excess=np.where(np.isnan(ties.gap_um), np.inf, ties.gap_um),
        box_um=np.hstack(
            (np.minimum(ends[:, :2], ends[:, 2:]), np.maximum(ends[:, :2], ends[:, 2:]))
        ),
    )


def describe(evidence: Evidence, breaks: Breaks, row: int, count: int) -> str:
    """One sentence about the opening in `row`, the widest of `count`."""
    ties = evidence.connections.ties
    gap = int(breaks.member[row])
    return (
        f"The n-well ring {breaks.subject[row]} over the buried layer is open by"
        f" {breaks.measured[row]:.3f} um at {place(breaks.x_um[row], breaks.y_um[row])}"
        f"{and_others(count, 'opening')}, from {place(*ties.gap_from_um[gap])} to"
        f" {place(*ties.gap_to_um[gap])}, more than the limit of {breaks.limit[row]:g} um, so the"
        " p-well inside is not isolated; close the n-well there."
    )
