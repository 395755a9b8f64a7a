"""tie-net: a well or the substrate is tied to something that is not its rail.

What it measures
    For every contacted tap whose net is known, the number of right rails it is on: a supply
    for a tap of an n-well, a ground for a tap of the substrate or of an isolated p-well.  One
    is needed.  A body that reaches its rail only through poly or a resistor is judged by
    ``tie-resistance``, and a well that is itself a marked resistor is left alone.
Why it matters
    A body on a signal follows that signal, so its junctions turn on in normal work; a body on
    a pad takes the full current of every pulse at the pin; a body on an internal or unnamed
    net is held by nothing that is known to hold.
How to mend
    Tie the tap to the body's rail.  Where the net is a rail, name it by a label or in the
    block file.
Source
    Common practice, no published source; it follows from what a tap is for (R. R. Troutman,
    Latchup in CMOS Technology, 1986).
Default limit
    One rail a tap.
"""

from __future__ import annotations

import numpy as np
import shapely
from numpy.typing import NDArray

from latchscan.layout.connections import Texts
from latchscan.layout.model import WELL_TAP, Ints
from latchscan.rules.breaks import Breaks, and_others, place, tap_ids
from latchscan.rules.model import Evidence
from latchscan.rules.rails import (
    RAIL_KINDS,
    net_title,
    resistor_wells,
    right_kind,
    right_kinds,
)

NAME = "tie-net"
UNIT = "1"

ON_PAD, ON_SIGNAL, ON_OTHER_RAIL, ON_INTERNAL, ON_UNNAMED = range(5)
_WORDS = {
    ON_PAD: "the bonded pin",
    ON_SIGNAL: "the signal",
    ON_OTHER_RAIL: "the wrong kind of rail,",
    ON_INTERNAL: "the internal or not bonded net",
    ON_UNNAMED: "a net that is no known rail,",
}


def check(evidence: Evidence) -> Breaks:
    """Contacted taps on a net that does not suit their body."""
    taps, ties = evidence.layout.taps, evidence.connections.ties
    pins = evidence.connections.pins
    rows = np.flatnonzero((taps.contact_count > 0) & (ties.tap_net >= 0))
    if not pins.supply_known:
        rows = rows[:0]
    wanted = right_kinds(evidence.layout)[taps.body[rows]]
    kind = pins.net_kind[ties.tap_net[rows]]
    reason = _reasons(evidence, ties.tap_net[rows])
    # an unnamed net is suspicious only where rails of the right kind have names
    guessed = (reason == ON_UNNAMED) & ~np.isin(wanted, pins.net_kind)
    wrong = (kind != wanted) & ~guessed & ~_spared(evidence, rows, wanted, reason)
    rows, reason = rows[wrong], reason[wrong]
    shapes = taps.polygons[rows]
    points = shapely.point_on_surface(shapes)
    return Breaks(
        member=rows,
        subject=tap_ids(rows),
        body=taps.body[rows],
        reason=reason,
        x_um=shapely.get_x(points),
        y_um=shapely.get_y(points),
        measured=np.zeros(len(rows)),
        limit=np.ones(len(rows)),
        excess=shapely.area(shapes),
        box_um=shapely.bounds(shapes).reshape(-1, 4),
    )


def _reasons(evidence: Evidence, net: Ints) -> Ints:
    """(k,) what a net is if it is not the right rail."""
    pins = evidence.connections.pins
    kind, pin = pins.net_kind[net], pins.net_pin[net]
    bonded = np.zeros(len(net), dtype=np.bool_)
    bonded[pin >= 0] = pins.has_pad[pin[pin >= 0]]
    return np.select(
        [np.isin(kind, RAIL_KINDS), bonded, kind == "signal", kind == "unknown"],
        [ON_OTHER_RAIL, ON_PAD, ON_SIGNAL, ON_UNNAMED],
        ON_INTERNAL,
    ).astype(np.int64)


def _spared(evidence: Evidence, rows: Ints, wanted: Texts, reason: Ints) -> NDArray[np.bool_]:
    """(k,) whether another rule judges the tap's body, or none should."""
    layout, ties = evidence.layout, evidence.connections.ties
    kind = evidence.connections.pins.net_kind
    body = layout.taps.body[rows]
    direct = np.zeros(len(layout.bodies), dtype=np.bool_)
    direct[body[kind[ties.tap_net[rows]] == wanted]] = True
    rail = ties.rail[body]
    reached = np.zeros(len(rows), dtype=np.bool_)
    reached[rail >= 0] = kind[rail[rail >= 0]] == wanted[rail >= 0]
    # a tap on a pin is wrong even if that pin is held through a resistor
    quiet = (reason == ON_INTERNAL) | (reason == ON_UNNAMED)
    spared: NDArray[np.bool_] = (quiet & reached & ~direct[body]) | resistor_wells(evidence)[body]
    return spared


def describe(evidence: Evidence, breaks: Breaks, row: int, count: int) -> str:
    """One sentence about the tap in `row`, the largest of `count`."""
    tap = int(breaks.member[row])
    layout, connections = evidence.layout, evidence.connections
    body = layout.bodies[breaks.body[row]]
    words = "well tap" if layout.taps.kind[tap] == WELL_TAP else "substrate tap"
    rail = right_kind(body)
    reason = int(breaks.reason[row])
    naming = " or name its net as one" if reason == ON_UNNAMED else ""
    return (
        f"The {words} {breaks.subject[row]} of {body.id} at"
        f" {place(breaks.x_um[row], breaks.y_um[row])}{and_others(count, 'tap')} is tied to"
        f" {_WORDS[reason]} {net_title(connections, int(connections.ties.tap_net[tap]))}, to 0 of"
        f" at least 1 {rail}; tie it to the {rail} of its body{naming}."
    )
