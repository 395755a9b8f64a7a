"""net-names: one net carries several names, or one name lies on several separate nets.

What it measures
    For every net the number of names on it, and for every name the number of separate nets
    that carry it.  Names that the block file joins count as one.  A name on more than four
    nets that belongs to no pin is a local name of placed cells and is left alone.
Why it matters
    Two names on one net are a short or a wrong label; one name on two nets is a connection
    that is missing, or is made outside the layout.  Either way the voltages, and every rule
    that judges by them, may rest on the wrong name.
How to mend
    Correct the label, or connect or part the shapes.  Where the names are one net outside
    this layout, list them under ``joined`` in the block file.
Source
    Common practice of comparing a layout with its names, no published source.
Default limit
    One name a net and one net a name.
"""

from __future__ import annotations

import numpy as np

from latchscan.layout.pins import name_conflicts
from latchscan.rules.breaks import Breaks, and_others, place
from latchscan.rules.model import Evidence
from latchscan.rules.rails import short_name

NAME = "net-names"
UNIT = "1"

KINDS = SEVERAL_NAMES, SEVERAL_NETS = 0, 1
MOST_LISTED = 4
"""Names or nets that a message lists."""


def check(evidence: Evidence) -> Breaks:
    """Nets of several names, then names of several nets."""
    nets = evidence.connections.nets
    conflicts = name_conflicts(nets, evidence.connections.pins)
    count = len(conflicts.subject)
    box = np.array(
        [
            (*nets.box_um[list(rows), :2].min(axis=0), *nets.box_um[list(rows), 2:].max(axis=0))
            for rows in conflicts.nets
        ]
    ).reshape(-1, 4)
    known = np.isfinite(conflicts.x_um)
    measured = conflicts.count.astype(np.float64)
    kind = [SEVERAL_NAMES if len(names) > 1 else SEVERAL_NETS for names in conflicts.names]
    member = np.arange(count)
    return Breaks(
        member=member,
        subject=np.array(conflicts.subject, dtype=np.str_),
        body=np.full(count, -1),
        # every conflict is mended by itself, so each is a finding of its own
        reason=len(KINDS) * member + np.array(kind, dtype=np.int64),
        x_um=np.where(known, conflicts.x_um, box[:, 0]),
        y_um=np.where(known, conflicts.y_um, box[:, 1]),
        measured=measured,
        limit=np.ones(count),
        excess=measured,
        box_um=box,
        detail=tuple(
            _listed([short_name(name) for name in names])
            if len(names) > 1
            else _listed([str(nets.ids[row]) for row in rows])
            for names, rows in zip(conflicts.names, conflicts.nets, strict=True)
        ),
    )


def _listed(words: list[str]) -> str:
    """Words with commas, the end of a long list as a count."""
    shown = ", ".join(words[:MOST_LISTED])
    more = len(words) - MOST_LISTED
    return shown if more <= 0 else f"{shown} and {more} more"


def describe(_: Evidence, breaks: Breaks, row: int, count: int) -> str:
    """One sentence about the net or the name in `row`, the worst of `count`."""
    at = place(breaks.x_um[row], breaks.y_um[row])
    measured, limit = f"{breaks.measured[row]:g}", f"{breaks.limit[row]:g}"
    if breaks.reason[row] % len(KINDS) == SEVERAL_NAMES:
        return (
            f"Net {breaks.subject[row]} carries {measured} names ({breaks.detail[row]}), the first"
            f" at {at}{and_others(count, 'net')}, more than the limit of {limit}; part the shapes,"
            " correct the label, or join the names in the block file."
        )
    return (
        f"The name {short_name(str(breaks.subject[row]))} lies on {measured} separate nets"
        f" ({breaks.detail[row]}), the first at {at}{and_others(count, 'name')}, more than the"
        f" limit of {limit}; connect them, correct the label, or join them in the block file."
    )
