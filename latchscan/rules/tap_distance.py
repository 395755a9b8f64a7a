"""tap-distance: a diffusion lies too far from the nearest tap of its own body.

What it measures
    For every p+ diffusion in an n-well and every n+ diffusion outside n-wells, the distance
    [um] from the farthest of any of its points to the nearest contacted tap of the same body.
Why it matters
    Current that flows sideways under a diffusion drops a voltage on the way to the tap.  The
    drop grows with the distance and forward-biases the diffusion's junction, which is the
    base-emitter junction of one half of the parasitic thyristor.
How to mend
    Add a contacted tap within the limit of the place named, or move the diffusion nearer.
Source
    Layout guidance of the foundry.  A published example is 20.00 um for both kinds (layout
    rules of an open 130 nm BiCMOS process, revision 0.4, section 7.2).
Default limit
    None; the technology file states ``p_diffusion_max_um`` and ``n_diffusion_max_um``.
"""

from __future__ import annotations

import numpy as np

from latchscan.layout.model import P_IN_NWELL
from latchscan.rules.breaks import (
    GROUPING_DISTANCE_UM,
    Breaks,
    and_others,
    over_limit,
    place,
    ratio,
    tied_bodies,
)
from latchscan.rules.model import Evidence
from latchscan.technology.model import TapDistanceRule

NAME = "tap-distance"
UNIT = "um"


def check(evidence: Evidence, limits: TapDistanceRule) -> Breaks:
    """Emitters of tied bodies whose tap distance is above the limit of their kind."""
    emitters = evidence.layout.emitters
    measured = evidence.distances.tap_distance_um
    limit = np.where(
        emitters.kind == P_IN_NWELL, limits.p_diffusion_max_um, limits.n_diffusion_max_um
    )
    tied = tied_bodies(evidence.layout)[emitters.body]
    rows = np.flatnonzero(tied & over_limit(measured, limit))
    known = np.isfinite(measured[rows])
    centre = (emitters.box_um[rows, :2] + emitters.box_um[rows, 2:]) / 2
    at = np.where(known[:, None], evidence.distances.farthest_um[rows], centre)
    return Breaks(
        member=rows,
        subject=emitters.ids[rows],
        body=emitters.body[rows],
        reason=emitters.kind[rows],
        x_um=at[:, 0],
        y_um=at[:, 1],
        measured=measured[rows],
        limit=limit[rows],
        excess=ratio(measured[rows], limit[rows]),
        box_um=emitters.box_um[rows],
        # one new tap serves everything within the limit of it
        grouping_um=max(
            GROUPING_DISTANCE_UM, min(limits.p_diffusion_max_um, limits.n_diffusion_max_um)
        ),
    )


def describe(evidence: Evidence, breaks: Breaks, row: int, count: int) -> str:
    """One sentence about the member in `row`, the worst of `count`."""
    member = breaks.member[row]
    body = evidence.layout.bodies[breaks.body[row]]
    p_kind = evidence.layout.emitters.kind[member] == P_IN_NWELL
    diffusion, tap = ("p+", "n-well tap") if p_kind else ("n+", "p-well tap")
    at = place(breaks.x_um[row], breaks.y_um[row])
    others = and_others(count, "emitter")
    if np.isnan(breaks.measured[row]):
        return (
            f"The tap distance of {diffusion} emitter {breaks.subject[row]} in {body.id} at {at}"
            f" could not be measured{others}; inspect its taps by hand."
        )
    tap_at = place(*evidence.distances.nearest_tap_um[member])
    return (
        f"The {diffusion} emitter {breaks.subject[row]} reaches {breaks.measured[row]:.3f} um"
        f" from the nearest tap of {body.id}, from {tap_at} to {at}{others}, more than the limit of"
        f" {breaks.limit[row]:g} um; add a contacted {tap} within {breaks.limit[row]:g} um of"
        " that place."
    )
