"""Who belongs to whom among pins, nets, injectors and rings, as reports look it up."""

from __future__ import annotations

import numpy as np

from latchscan.layout.connections import Connections, Nets, Pins, Rings
from latchscan.layout.model import Floats, Ints
from latchscan.rules.model import Evidence

UNNAMED_NODE = "internal node"
"""Name of an injector that neither a pin nor a marker declares."""


def nets_of_nodes(nets: Nets, nodes: Ints) -> Ints:
    """Net of every node, -1 where the node is -1."""
    if len(nets.node_net) == 0:
        return np.full(len(nodes), -1)
    return np.asarray(np.where(nodes < 0, -1, nets.node_net[nodes]), dtype=np.int64)


def nets_of_pin(pins: Pins, pin: int) -> Ints:
    """Nets of one pin."""
    return pins.net[pins.net_first[pin] : pins.net_first[pin + 1]]


def nets_with_pad(nets: Nets) -> Ints:
    """Nets that a bond pad lies on, in order."""
    found = np.unique(nets_of_nodes(nets, nets.pad_node))
    return np.asarray(found[found >= 0], dtype=np.int64)


def diffusion_counts(nets: Nets) -> Ints:
    """(k,) pieces of diffusion of every net."""
    owner = nets_of_nodes(nets, nets.piece_node)
    return np.bincount(owner[owner >= 0], minlength=len(nets.ids)).astype(np.int64)


def injectors_of_pin(connections: Connections, pin: int) -> Ints:
    """Rows of the injectors that one pin drives."""
    return np.flatnonzero(connections.injectors.pin == pin)


def injector_name(evidence: Evidence, row: int) -> str:
    """Name of the pin or marker that makes row an injector."""
    injectors = evidence.connections.injectors
    pin, emitter = int(injectors.pin[row]), int(injectors.emitter[row])
    if pin >= 0:
        return str(evidence.connections.pins.names[pin])
    found = str(evidence.layout.emitters.injector[emitter]) if emitter >= 0 else ""
    return found or UNNAMED_NODE


def injector_place(evidence: Evidence, row: int) -> tuple[float, float]:
    """Middle of the injector's box (x, y) [um]."""
    injectors, layout = evidence.connections.injectors, evidence.layout
    emitter = int(injectors.emitter[row])
    if emitter >= 0:
        x0, y0, x1, y1 = layout.emitters.box_um[emitter].tolist()
    else:
        x0, y0, x1, y1 = body_box(evidence, int(injectors.body[row]))
    return ((x0 + x1) / 2, (y0 + y1) / 2)


def body_box(evidence: Evidence, body: int) -> tuple[float, float, float, float]:
    """Box around the drawn wells of a body; NaN where none is drawn."""
    bounds = [polygon.bounds for polygon in evidence.layout.bodies[body].polygons]
    sides = np.array([box for box in bounds if len(box) == 4]).reshape(-1, 4)
    if len(sides) == 0:
        return (np.nan, np.nan, np.nan, np.nan)
    low, high = sides[:, :2].min(axis=0), sides[:, 2:].max(axis=0)
    return (float(low[0]), float(low[1]), float(high[0]), float(high[1]))


def ring_gaps(rings: Rings, ring: int) -> slice:
    """Where the openings of one ring stand in the columns of openings."""
    return slice(int(rings.gap_first[ring]), int(rings.gap_first[ring + 1]))


def ring_members(rings: Rings, ring: int) -> slice:
    """Where the injectors of one ring stand in the columns of members."""
    return slice(int(rings.member_first[ring]), int(rings.member_first[ring + 1]))


def gap_middles(rings: Rings, ring: int) -> Floats:
    """(g, 2) middles (x, y) of the openings of one ring [um]."""
    run = ring_gaps(rings, ring)
    return np.asarray((rings.gap_from_um[run] + rings.gap_to_um[run]) / 2, dtype=np.float64)
