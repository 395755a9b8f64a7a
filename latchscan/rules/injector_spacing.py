"""injector-spacing: a diffusion that a pin can forward-bias lies too near a thyristor's half.

What it measures
    The smallest distance [um] from every n+ injector to the nearest n-well, and from every p+
    injector to the nearest n+ diffusion outside wells.  A guard well around the injector
    itself, and the well without p+ around its own isolated p-well, collect: they do not count.
Why it matters
    A pin pulled outside its supplies makes the injector emit carriers into the silicon.  The
    nearer the foreign well, the larger the share that it collects, and that share is what
    fires the thyristors in it.
How to mend
    Move the injector or the well apart, or put guard rings between them and let the other
    rules judge the result.
Source
    Common practice, no published source for one distance; the collected share falls with the
    base width as sech(W/L) in one dimension (any device text).
Default limit
    None; the technology file states ``min_um``.
"""

from __future__ import annotations

import numpy as np

from latchscan.layout.model import P_IN_NWELL
from latchscan.rules.breaks import Breaks, and_others, place, ratio
from latchscan.rules.model import Evidence
from latchscan.technology.model import InjectorSpacingRule

NAME = "injector-spacing"
UNIT = "um"


def check(evidence: Evidence, limits: InjectorSpacingRule) -> Breaks:
    """Injectors nearer to the opposite half of a thyristor than allowed.

    An injector without any opposite half in the block has nothing to be near to and passes.
    """
    spacings = evidence.spacings
    emitters = evidence.layout.emitters
    measured = spacings.spacing_um
    faced = spacings.body >= 0
    rows = np.flatnonzero(faced & ~(measured >= limits.min_um))
    limit = np.full(len(rows), limits.min_um)
    source = spacings.emitter[rows]
    known = np.isfinite(measured[rows])
    centre = (emitters.box_um[source, :2] + emitters.box_um[source, 2:]) / 2
    at = np.where(known[:, None], spacings.from_um[rows], centre)
    return Breaks(
        member=rows,
        subject=emitters.ids[source],
        body=spacings.body[rows],
        reason=emitters.kind[source],
        x_um=at[:, 0],
        y_um=at[:, 1],
        measured=measured[rows],
        limit=limit,
        excess=ratio(limit, measured[rows]),
        box_um=emitters.box_um[source],
    )


def describe(evidence: Evidence, breaks: Breaks, row: int, count: int) -> str:
    """One sentence about the injector in `row`, the nearest of `count`."""
    emitters = evidence.layout.emitters
    source = evidence.spacings.emitter[breaks.member[row]]
    body = evidence.layout.bodies[breaks.body[row]]
    p_kind = emitters.kind[source] == P_IN_NWELL
    own, target = ("p+", f"an n+ emitter of {body.id}") if p_kind else ("n+", body.id)
    name = emitters.injector[source]
    at = place(breaks.x_um[row], breaks.y_um[row])
    others = and_others(count, "injector")
    if np.isnan(breaks.measured[row]):
        return (
            f"The spacing of {own} injector {breaks.subject[row]} ({name}) at {at} could not be"
            f" measured{others}; inspect it by hand."
        )
    other_at = place(*evidence.spacings.to_um[breaks.member[row]])
    return (
        f"The {own} injector {breaks.subject[row]} ({name}) at {at} is"
        f" {breaks.measured[row]:.3f} um from {target} at {other_at}{others}, less than the"
        f" limit of {breaks.limit[row]:g} um; move them apart or guard the injector with rings."
    )
