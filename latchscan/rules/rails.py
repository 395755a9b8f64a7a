"""What holds a body, in words and choices that several rules of ties share.

A body's *right kind* of rail is a supply for n-wells and a ground for everything of p-type.
"""

from __future__ import annotations

import numpy as np
import shapely
from numpy.typing import NDArray

from latchscan.layout.connections import Connections, Texts
from latchscan.layout.model import Body, Floats, Ints, Layout
from latchscan.rules.model import Evidence

RAIL_KINDS = ("supply", "ground")
BODY_WORDS = {"nwell": "n-well", "isolated_pwell": "isolated p-well", "substrate": "substrate"}
LONGEST_NAME = 40
"""Characters of a label's text that a message repeats."""
MOST_NAMES = 3
"""Names of a net that a message repeats."""


def right_kind(body: Body) -> str:
    """Kind of the rail that should hold a body."""
    return "supply" if body.kind == "nwell" else "ground"


def right_kinds(layout: Layout) -> Texts:
    """(b,) kind of the rail that should hold each body."""
    return np.array([right_kind(body) for body in layout.bodies], dtype=np.str_)


def short_name(name: str) -> str:
    """A label's text as messages repeat it.

    Examples
    --------
    >>> short_name("VDD")
    'VDD'
    """
    return name if len(name) <= LONGEST_NAME else name[: LONGEST_NAME - 1] + "…"


def net_title(connections: Connections, net: int) -> str:
    """A net in words: its pin or names and its id."""
    nets, pins = connections.nets, connections.pins
    pin = int(pins.net_pin[net]) if net < len(pins.net_pin) else -1
    names = list(nets.names[net][:MOST_NAMES])
    if pin >= 0 and str(pins.names[pin]) not in nets.names[net]:
        names.insert(0, str(pins.names[pin]))
    if not names:
        return f"unnamed {nets.ids[net]}"
    return f"{'/'.join(short_name(name) for name in names)} ({nets.ids[net]})"


def same_rail(connections: Connections, one: int, other: int) -> bool:
    """Whether two nets are one rail: the same net, nets of one pin, or nets of one name."""
    if one == other:
        return True
    if one < 0 or other < 0:
        return False
    pin = connections.pins.net_pin
    names = connections.nets.names
    return bool(pin[one] >= 0 and pin[one] == pin[other]) or not set(names[one]).isdisjoint(
        names[other]
    )


def resistor_wells(evidence: Evidence) -> NDArray[np.bool_]:
    """(b,) whether a marked resistor is drawn in the n-well body: its taps are terminals."""
    layout, resistors = evidence.layout, evidence.connections.nets.resistors
    drawn = resistors.polygons[resistors.conductor == "nwell"]
    found = np.zeros(len(layout.bodies), dtype=np.bool_)
    if len(drawn) == 0:
        return found
    tree = shapely.STRtree(drawn)
    for row, body in enumerate(layout.bodies):
        if body.kind == "nwell":
            well, over = tree.query(body.polygons, predicate="intersects")
            shared = shapely.area(shapely.intersection(body.polygons[well], drawn[over]))
            found[row] = bool((shared > 0.0).any())
    return found


def body_boxes(layout: Layout, rows: Ints) -> Floats:
    """(k, 4) bounding boxes of bodies [um]."""
    return np.array(
        [shapely.total_bounds(layout.bodies[row].polygons) for row in rows.tolist()],
        dtype=np.float64,
    ).reshape(-1, 4)


def tap_place(evidence: Evidence, body: int, net: int) -> tuple[float, float]:
    """Point (x, y) of the body's tap with the most contacts on `net` [um].

    Where no tap of the body is on it, a point of the body.
    """
    taps = evidence.layout.taps
    on = (taps.body == body) & (evidence.connections.ties.tap_net == net)
    rows = np.flatnonzero(on & (taps.contact_count > 0))
    if len(rows):
        shape = taps.polygons[rows[np.argmax(taps.contact_count[rows])]]
    else:
        wells = evidence.layout.bodies[body].polygons
        shape = wells[np.argmax(shapely.area(wells))]
    point = shapely.point_on_surface(shape)
    return float(point.x), float(point.y)
