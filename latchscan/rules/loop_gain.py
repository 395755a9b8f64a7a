"""loop-gain: a p+ / n-well / substrate / n+ thyristor is strong enough to latch.

What it measures
    The loop gain (a pure number) of every site, a pair of one anode and one cathode, at the
    probe current of the technology file; for each anode its worst site.
Why it matters
    From a loop gain of 1 on, a current in the loop sustains itself: once fired, the thyristor
    holds until the supply is removed.
How to mend
    Lower the resistance on either side (taps beside the anode in the well, taps beside the
    cathode in the substrate), or move anode and cathode apart.
Equation
    T = [b_n R_s(K,A) / (R_s(K,K) + r_pi,n)] [b_p R_w(A,C) / (R_w(A,A) + r_pi,p)], the shunted
    gains of R. R. Troutman, Latchup in CMOS Technology, 1986, with the loop taken as a pair of
    two-ports.
Default limit
    None; the technology file states ``max_gain``.
"""

from __future__ import annotations

import numpy as np
import shapely

from latchscan.layout.model import Floats, Ints
from latchscan.rules.breaks import Breaks, and_others, over_limit, place, ratio, tied_bodies
from latchscan.rules.model import Evidence
from latchscan.technology.model import LoopGainRule

NAME = "loop-gain"
UNIT = "1"


def check(evidence: Evidence, limits: LoopGainRule, *, untied_reported: bool) -> Breaks:
    """Worst site of every anode whose loop gain is above the limit.

    Sites whose well or cathode body is untied are left out when another rule reports that
    (`untied_reported`): a tap is what they lack, and their gain is a limit for infinite
    resistance.
    """
    sites, pairs = evidence.sites, evidence.pairs
    limit = np.full(len(sites.ids), limits.max_gain)
    tied = tied_bodies(evidence.layout)
    floating = ~(tied[pairs.well[sites.pair]] & tied[pairs.base[sites.pair]])
    covered = floating & untied_reported
    broken = np.flatnonzero(over_limit(sites.loop_gain, limit) & ~covered)
    order = np.lexsort((broken, -ratio(sites.loop_gain[broken], limit[broken])))
    broken = broken[order]
    _, first = np.unique(pairs.anode[sites.pair[broken]], return_index=True)
    rows = broken[np.sort(first)]
    pair = sites.pair[rows]
    return Breaks(
        member=rows,
        subject=sites.ids[rows],
        body=pairs.well[pair],
        reason=np.zeros(len(rows), dtype=np.int64),
        x_um=sites.x_um[rows],
        y_um=sites.y_um[rows],
        measured=sites.loop_gain[rows],
        limit=limit[rows],
        excess=ratio(sites.loop_gain[rows], limit[rows]),
        box_um=_boxes(evidence, pair),
    )


def _boxes(evidence: Evidence, pair: Ints) -> Floats:
    """(k, 4) boxes of the anodes [um]."""
    layout, pairs = evidence.layout, evidence.pairs
    count = len(layout.emitters.ids)
    anode = pairs.anode[pair]
    boxes = np.empty((len(pair), 4))
    single = anode < count
    boxes[single] = layout.emitters.box_um[anode[single]]
    for row in np.flatnonzero(~single):
        boxes[row] = shapely.total_bounds(layout.bodies[anode[row] - count].polygons)
    return boxes


def describe(evidence: Evidence, breaks: Breaks, row: int, count: int) -> str:
    """One sentence about the site in `row`, the worst of `count` anodes."""
    site = breaks.member[row]
    pair = evidence.sites.pair[site]
    emitters = evidence.layout.emitters
    anode = evidence.pairs.anode[pair]
    anode_id = (
        emitters.ids[anode]
        if anode < len(emitters.ids)
        else evidence.layout.bodies[anode - len(emitters.ids)].id
    )
    cathode_id = emitters.ids[evidence.pairs.cathode[pair]]
    at = place(breaks.x_um[row], breaks.y_um[row])
    body = evidence.layout.bodies[breaks.body[row]]
    names = f"{breaks.subject[row]} ({anode_id} in {body.id} to {cathode_id})"
    others = and_others(count, "anode")
    if np.isnan(breaks.measured[row]):
        return (
            f"The loop gain of {names} at {at} could not be evaluated{others}; inspect the taps"
            " around it by hand."
        )
    trigger = evidence.sites.trigger_current_a[site]
    fires = (
        f", fired by {trigger * 1e3:.3g} mA"
        if np.isfinite(trigger)
        else " (no current fires it alone, for its gains fall at high current)"
    )
    return (
        f"The loop gain of {names} at {at} is {breaks.measured[row]:.3g}{others}{fires}, more"
        f" than the limit of {breaks.limit[row]:g}; add taps beside the anode and the cathode or"
        " move them apart."
    )
