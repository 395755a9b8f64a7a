"""ring-gap: a guard ring around an injector does not close.

What it measures
    The widest opening [um] of every ring of strips that surrounds enough of an injector to be
    meant as its guard ring (``rings.least_coverage`` of the technology file) and does not
    close.
Why it matters
    Carriers leave through the opening as if there were no ring on that side: a ring collects
    what crosses it, and nothing crosses a gap in it.
How to mend
    Close the ring at the place named.
Source
    Common practice, no published source for a width that still passes.
Default limit
    0 um: rings are closed.
"""

from __future__ import annotations

import numpy as np

from latchscan.layout.model import Floats, Ints
from latchscan.rules.breaks import Breaks, and_others, over_limit, place
from latchscan.rules.model import Evidence
from latchscan.rules.strips import guarded, ring_boxes, ring_title
from latchscan.technology.model import RingGapRule

NAME = "ring-gap"
UNIT = "um"


def check(evidence: Evidence, limits: RingGapRule) -> Breaks:
    """Open rings whose widest opening is wider than allowed or not known."""
    rings = evidence.connections.rings
    opened = np.flatnonzero(~rings.closed)
    widest, ends = _widest(evidence, opened)
    kept = over_limit(widest, np.full(len(opened), limits.max_um))
    rows, widest, ends = opened[kept], widest[kept], ends[kept]
    at = (ends[:, :2] + ends[:, 2:]) / 2
    return Breaks(
        member=rows,
        subject=rings.ids[rows],
        body=rings.body[rows],
        reason=rings.kind[rows],
        x_um=at[:, 0],
        y_um=at[:, 1],
        measured=widest,
        limit=np.full(len(rows), limits.max_um),
        excess=np.where(np.isnan(widest), np.inf, widest - limits.max_um),
        box_um=np.hstack(
            (np.minimum(ends[:, :2], ends[:, 2:]), np.maximum(ends[:, :2], ends[:, 2:]))
        ),
    )


def _widest(evidence: Evidence, rows: Ints) -> tuple[Floats, Floats]:
    """(k,) widest opening of each ring and (k, 4) its two ends [um].

    A ring without a measured opening has NaN, between two points of its box.
    """
    rings = evidence.connections.rings
    width = np.full(len(rows), np.nan)
    ends = ring_boxes(evidence, rows)
    for row, ring in enumerate(rows.tolist()):
        first, last = rings.gap_first[ring], rings.gap_first[ring + 1]
        if last > first:
            width[row] = rings.gap_um[first]
            ends[row] = (*rings.gap_from_um[first], *rings.gap_to_um[first])
    return width, ends


def describe(evidence: Evidence, breaks: Breaks, row: int, count: int) -> str:
    """One sentence about the ring in `row`, the widest opening of `count`."""
    ring = int(breaks.member[row])
    title = f"{ring_title(evidence, ring)} around {guarded(evidence, ring)}"
    at = place(breaks.x_um[row], breaks.y_um[row])
    others = and_others(count, "ring")
    if np.isnan(breaks.measured[row]):
        return (
            f"The {title} does not close, and its opening near {at} could not be measured{others};"
            " inspect it by hand."
        )
    gaps = evidence.connections.rings.gap_first
    openings = int(gaps[ring + 1] - gaps[ring])
    more = f", the widest of {openings} openings" if openings > 1 else ""
    return (
        f"The {title} is open by {breaks.measured[row]:.3f} um at {at}{more}{others}, more than the"
        f" limit of {breaks.limit[row]:g} um; close the ring there."
    )
