"""ring-missing: an injector has no guard ring of a kind that the technology asks for.

What it measures
    For every injector and every kind of ring that the technology file asks for around its
    type, the number of such rings it lies in (0 where it breaks the limit).  An open ring
    counts here, for ``ring-gap`` reports it.
Why it matters
    What an injector emits spreads to the thyristors around it.  A ring of taps (majority) holds
    the body's potential around it, a ring of the other type (minority) collects the carriers
    themselves.
How to mend
    Draw the ring around the injector, closed, contacted all along and tied to its rail.
Source
    Layout guidance of the foundry; common practice, no published source for one demand.
Default limit
    One majority ring around every injector; ``n_injector`` and ``p_injector`` list the kinds.
"""

from __future__ import annotations

import numpy as np

from latchscan.layout.connections import RING_KINDS, Flags
from latchscan.layout.model import Ints
from latchscan.rules.breaks import Breaks, and_others, place
from latchscan.rules.model import Evidence
from latchscan.rules.strips import (
    emits_electrons,
    injector_boxes,
    injector_id,
    injector_title,
)
from latchscan.technology.model import RingMissingRule

NAME = "ring-missing"
UNIT = "1"


def check(evidence: Evidence, limits: RingMissingRule) -> Breaks:
    """Injectors in no ring of an asked kind, each shape once a kind."""
    injectors = evidence.connections.injectors
    every = np.arange(len(injectors.emitter))
    n_type = emits_electrons(evidence, every)
    rows: list[int] = []
    reason: list[int] = []
    for kind, name in enumerate(RING_KINDS):
        asked = np.where(n_type == 1, name in limits.n_injector, name in limits.p_injector)
        missing = np.flatnonzero(asked & ~_within(evidence, kind))
        shape = np.column_stack((injectors.emitter, injectors.body))[missing]
        _, first = np.unique(shape, axis=0, return_index=True)
        found = missing[np.sort(first)]
        rows += found.tolist()
        reason += (2 * kind + n_type[found]).tolist()
    chosen = np.array(rows, dtype=np.int64)
    box = injector_boxes(evidence, chosen)
    return Breaks(
        member=chosen,
        subject=np.array([injector_id(evidence, row) for row in rows], dtype=np.str_),
        body=injectors.body[chosen],
        reason=np.array(reason, dtype=np.int64),
        x_um=(box[:, 0] + box[:, 2]) / 2,
        y_um=(box[:, 1] + box[:, 3]) / 2,
        measured=np.zeros(len(rows)),
        limit=np.ones(len(rows)),
        excess=injectors.area_um2[chosen],
        box_um=box,
    )


def _within(evidence: Evidence, kind: int) -> Flags:
    """(i,) whether each injector's shape lies in a ring of `kind`, whichever pin drives it."""
    rings, injectors = evidence.connections.rings, evidence.connections.injectors
    ring = np.repeat(np.arange(len(rings.ids)), np.diff(rings.member_first))
    inside: Ints = rings.member_injector[rings.kind[ring] == kind]
    shape = np.column_stack((injectors.emitter, injectors.body))
    _, label = np.unique(shape, axis=0, return_inverse=True)
    label = label.reshape(-1)
    return np.isin(label, label[inside])


def describe(evidence: Evidence, breaks: Breaks, row: int, count: int) -> str:
    """One sentence about the injector in `row`, the largest of `count`."""
    kind = RING_KINDS[int(breaks.reason[row]) // 2]
    own = "n" if breaks.reason[row] % 2 else "p"
    title = injector_title(evidence, int(breaks.member[row]))
    body = evidence.layout.bodies[breaks.body[row]].id
    return (
        f"The {own}-type {title} of {body} at {place(breaks.x_um[row], breaks.y_um[row])}"
        f"{and_others(count, 'injector')} lies in no {kind} ring (0 of at least 1); draw a closed,"
        " contacted ring around it."
    )
