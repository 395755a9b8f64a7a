"""tie-conflict: the taps of one body are on rails that differ.

What it measures
    For every body the number of different rails that its contacted taps are on.  Rails of
    different kind (a supply and a ground) differ, and so do separate supplies; nets that the
    block file joins are one rail, and several grounds are one as well.
Why it matters
    The body is a resistor between the two rails: it carries current from one to the other at
    all times, and no place of it is at either potential.
How to mend
    Part the well, or move the odd tap to the other taps' rail.  Supplies that are one net
    outside this layout belong under ``joined`` in the block file.
Source
    Common practice, no published source.
Default limit
    One rail.
"""

from __future__ import annotations

import numpy as np

from latchscan.rules.breaks import Breaks, and_others, place
from latchscan.rules.model import Evidence
from latchscan.rules.rails import (
    BODY_WORDS,
    RAIL_KINDS,
    body_boxes,
    net_title,
    resistor_wells,
    same_rail,
    tap_place,
)

NAME = "tie-conflict"
UNIT = "1"


def check(evidence: Evidence) -> Breaks:
    """Bodies on more than one rail; the place is a tap on the rail with the fewest contacts."""
    exempt = resistor_wells(evidence)
    found = [
        (body, rails)
        for body in _several_nets(evidence)
        if not exempt[body] and len(rails := _rails(evidence, body)) > 1
    ]
    rows = np.array([body for body, _ in found], dtype=np.int64)
    at = np.array([tap_place(evidence, body, rails[-1]) for body, rails in found]).reshape(-1, 2)
    measured = np.array([len(rails) for _, rails in found], dtype=np.float64)
    return Breaks(
        member=rows,
        subject=np.array([evidence.layout.bodies[row].id for row in rows.tolist()], dtype=np.str_),
        body=rows,
        reason=np.zeros(len(rows), dtype=np.int64),
        x_um=at[:, 0],
        y_um=at[:, 1],
        measured=measured,
        limit=np.ones(len(rows)),
        excess=measured,
        box_um=body_boxes(evidence.layout, rows),
    )


def _several_nets(evidence: Evidence) -> list[int]:
    """Bodies whose taps are on more than one net, where rails are known at all."""
    if not evidence.connections.pins.supply_known:
        return []
    return [int(row) for row in np.flatnonzero(np.diff(evidence.connections.ties.net_first) > 1)]


def _rails(evidence: Evidence, body: int) -> list[int]:
    """One net of every different rail of the body, most contacts first."""
    connections = evidence.connections
    ties, kind = connections.ties, connections.pins.net_kind
    rails: list[int] = []
    for net in ties.net[ties.net_first[body] : ties.net_first[body + 1]].tolist():
        if kind[net] not in RAIL_KINDS:
            continue
        known = any(
            same_rail(connections, net, rail) or (kind[net] == kind[rail] == "ground")
            for rail in rails
        )
        if not known:
            rails.append(net)
    return rails


def describe(evidence: Evidence, breaks: Breaks, row: int, count: int) -> str:
    """One sentence about the body in `row`, the worst of `count`."""
    member = int(breaks.member[row])
    body = evidence.layout.bodies[member]
    rails = _rails(evidence, member)
    titles = " and ".join(net_title(evidence.connections, net) for net in (rails[0], rails[-1]))
    return (
        f"The {BODY_WORDS[body.kind]} {body.id} is tied to {breaks.measured[row]:g} different rails"
        f"{and_others(count, 'body')}, {titles}, the last at"
        f" {place(breaks.x_um[row], breaks.y_um[row])}, more than the limit of"
        f" {breaks.limit[row]:g}; part the well or move that tap to the other rail."
    )
