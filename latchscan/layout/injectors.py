"""Diffusions and wells that a current forced into a pin reaches.

In: the layout, nets, links, pins and ties.  Out: `Injectors`, and the layout with the name of
every injector in its emitters.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np
import shapely

from latchscan.layout.connections import (
    ABOVE_SUPPLY,
    BELOW_GROUND,
    BY_MARKER,
    BY_PIN,
    BY_SUPPLY,
    Flags,
    Injectors,
    Links,
    Nets,
    Pins,
    Ties,
)
from latchscan.layout.model import (
    N_OUTSIDE_NWELL,
    P_IN_NWELL,
    Emitters,
    Floats,
    Ints,
    Layout,
    frozen,
)
from latchscan.layout.naming.footing import contacts_of_taps, pieces_beneath
from latchscan.layout.naming.paths import Wires, gather_wires, reached_from
from latchscan.layout.naming.places import pin_places
from latchscan.layout.runs import within_runs

MARKED = "marker"
INTERNAL = "internal"


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class _Rows:
    """Injectors before they are put in order; columns of `Injectors`."""

    reason: Ints
    pin: Ints
    polarity: Ints
    emitter: Ints
    body: Ints
    net: Ints
    resistance_ohm: Floats
    area_um2: Floats


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class _Feet:
    """Nodes that things stand on, sorted by node: the thing of each row, and its node."""

    thing: Ints
    node: Ints


def find_injectors(
    layout: Layout, nets: Nets, links: Links, pins: Pins, ties: Ties, *, internal: bool
) -> Injectors:
    """Injectors of every pin and polarity, those of markers, and those of internal nets.

    Parameters
    ----------
    layout
        Emitters, bodies and taps; injectors that a marker declares stand in the emitters.
    nets, links, pins
        What the emitters and taps are connected to; signal pins are tested.
    ties
        The rail of every body.
    internal
        Whether diffusions that only a supply's transient forward-biases count too.

    Returns
    -------
    Injectors
        Below ground: n+ outside n-wells, and n-wells by their taps.  Above the supply: p+ in
        n-wells, and isolated p-wells by their taps.  `share` is NaN.

    Notes
    -----
    A pin's current is followed through straps and marked resistors, but never into the net of
    a supply or ground.  A diffusion resistor stands on several nodes and is reached by each.
    """
    emitter_feet = _emitter_feet(layout, nets)
    body_feet = _body_feet(layout, nets)
    barred = np.isin(pins.net_kind, ("supply", "ground"))[nets.node_net]
    free = ~barred[links.node].any(axis=1)
    wires = gather_wires(len(nets.node_net), links.node[free], links.ohm[free])
    parts = [
        _of_pin(start, wires, emitter_feet, body_feet, layout, nets)
        for start in _tested_pins(pins, nets, barred)
    ]
    net = _chief_net(emitter_feet, nets, len(layout.emitters.ids))
    driven = np.zeros(len(layout.emitters.ids), dtype=np.bool_)
    for part in parts:
        driven[part.emitter[part.emitter >= 0]] = True
    declared = (layout.emitters.injector != "") & ~driven
    parts.append(_undriven(np.flatnonzero(declared), BY_MARKER, layout, net))
    if internal:
        loose = _forward_biased(layout, pins, ties, net) & ~driven & ~declared
        parts.append(_undriven(np.flatnonzero(loose), BY_SUPPLY, layout, net))
    return _ordered(parts)


def mark_injectors(layout: Layout, pins: Pins, injectors: Injectors) -> Layout:
    """The layout with the reason why an emitter is an injector in its emitters.

    Parameters
    ----------
    layout, pins, injectors
        The layout, its pins and what `find_injectors` found in it.

    Returns
    -------
    Layout
        `Emitters.injector` is the first pin's name in the alphabet, else what the layout
        itself declared (``marker``), else ``internal``; "" where it is none.
    """
    found: list[str] = layout.emitters.injector.tolist()
    # backwards, so that of several reasons the first in the table's order stays
    for row in range(len(injectors.emitter) - 1, -1, -1):
        emitter = int(injectors.emitter[row])
        if emitter < 0:
            continue
        if injectors.reason[row] == BY_PIN:
            found[emitter] = str(pins.names[injectors.pin[row]])
        elif injectors.reason[row] == BY_SUPPLY:
            found[emitter] = INTERNAL
        elif not found[emitter]:
            found[emitter] = MARKED
    names = np.array(found, dtype=np.str_)
    names.setflags(write=False)
    return replace(layout, emitters=replace(layout.emitters, injector=names))


def _emitter_feet(layout: Layout, nets: Nets) -> _Feet:
    emitter, piece = pieces_beneath(layout.emitters.polygons, nets.piece_polygons)
    return _feet(emitter, nets.piece_node[piece])


def _body_feet(layout: Layout, nets: Nets) -> _Feet:
    """Contacted taps of n-wells and isolated p-wells; the substrate is no pin's junction."""
    tap, _, piece, _ = contacts_of_taps(layout.taps, nets)
    body = layout.taps.body[tap]
    wells = np.array([found.kind != "substrate" for found in layout.bodies], dtype=np.bool_)
    return _feet(body[wells[body]], nets.piece_node[piece[wells[body]]])


def _feet(thing: Ints, node: Ints) -> _Feet:
    pairs = np.unique(np.stack([node, thing])[:, node >= 0], axis=1)
    return _Feet(thing=pairs[1], node=pairs[0])


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class _Start:
    """A tested pin: the nodes that the current enters by, and all nodes of its nets."""

    pin: int
    places: Ints
    nodes: Ints


def _tested_pins(pins: Pins, nets: Nets, barred: Flags) -> list[_Start]:
    """Every signal pin that is on a net of no rail."""
    order = np.argsort(nets.node_net, kind="stable")
    first = np.searchsorted(nets.node_net[order], np.arange(len(nets.ids) + 1))
    pin_of_place, place = pin_places(nets, pins)
    cut = np.searchsorted(pin_of_place, np.arange(len(pins.names) + 1))
    found = []
    for pin in np.flatnonzero(pins.kind == "signal").tolist():
        on = pins.net[pins.net_first[pin] : pins.net_first[pin + 1]].tolist()
        nodes = np.concatenate(
            [np.zeros(0, dtype=np.int64), *(order[first[net] : first[net + 1]] for net in on)]
        )
        nodes = np.sort(nodes[~barred[nodes]])
        places = place[cut[pin] : cut[pin + 1]]
        if len(nodes):
            found.append(_Start(pin=pin, places=places[~barred[places]], nodes=nodes))
    return found


def _reach(start: _Start, wires: Wires) -> tuple[Ints, Floats]:
    """Nodes a pin's current reaches, in order, and the least resistance to each [ohm].

    A node of the pin's own nets that no known link leads to is reached all the same, through
    a resistance that is not known.
    """
    node, ohm = reached_from(start.places, wires)
    stray = np.setdiff1d(start.nodes, node)
    if len(stray):
        further, _ = reached_from(stray, wires)
        further = np.setdiff1d(further, node)
        node = np.concatenate([node, further])
        ohm = np.concatenate([ohm, np.full(len(further), np.nan)])
        order = np.argsort(node)
        node, ohm = node[order], ohm[order]
    return node, ohm


def _standing(feet: _Feet, node: Ints, ohm: Floats) -> tuple[Ints, Ints, Floats]:
    """Things that stand on reached nodes: the thing, its nearest node, the resistance [ohm]."""
    first = np.searchsorted(feet.node, node)
    length = np.searchsorted(feet.node, node, side="right") - first
    thing = feet.thing[np.repeat(first, length) + within_runs(length)]
    node, ohm = np.repeat(node, length), np.repeat(ohm, length)
    # what is not known sorts last
    order = np.lexsort((node, ohm, thing))
    found, row = np.unique(thing[order], return_index=True)
    return found, node[order[row]], ohm[order[row]]


def _of_pin(
    start: _Start, wires: Wires, emitters: _Feet, bodies: _Feet, layout: Layout, nets: Nets
) -> _Rows:
    """What one pin reaches."""
    node, ohm = _reach(start, wires)
    emitter, at, through = _standing(emitters, node, ohm)
    body, body_at, body_through = _standing(bodies, node, ohm)
    is_nwell = np.array([layout.bodies[row].kind == "nwell" for row in body], dtype=np.bool_)
    count = len(emitter) + len(body)
    return _Rows(
        reason=np.full(count, BY_PIN),
        pin=np.full(count, start.pin),
        polarity=np.concatenate(
            [
                _polarity(layout.emitters, emitter),
                np.where(is_nwell, BELOW_GROUND, ABOVE_SUPPLY),
            ]
        ),
        emitter=np.concatenate([emitter, np.full(len(body), -1)]),
        body=np.concatenate([layout.emitters.body[emitter], body]),
        net=nets.node_net[np.concatenate([at, body_at])],
        resistance_ohm=np.concatenate([through, body_through]),
        area_um2=np.concatenate(
            [
                layout.emitters.area_um2[emitter],
                [float(shapely.area(layout.bodies[row].polygons).sum()) for row in body],
            ]
        ),
    )


def _polarity(emitters: Emitters, rows: Ints) -> Ints:
    return np.where(emitters.kind[rows] == N_OUTSIDE_NWELL, BELOW_GROUND, ABOVE_SUPPLY)


def _chief_net(feet: _Feet, nets: Nets, emitters: int) -> Ints:
    """(n,) net of every emitter, the first where it stands on several; -1 where on none."""
    found = np.full(emitters, -1, dtype=np.int64)
    net = nets.node_net[feet.node]
    order = np.lexsort((net, feet.thing))
    emitter, row = np.unique(feet.thing[order], return_index=True)
    found[emitter] = net[order[row]]
    return found


def _forward_biased(layout: Layout, pins: Pins, ties: Ties, net: Ints) -> Flags:
    """(n,) emitters that a transient of a supply can forward-bias.

    p+ on any net that is neither its well's rail nor a ground, n+ on any that is neither its
    body's rail nor a supply: those two can only be reverse-biased.
    """
    emitters = layout.emitters
    kind = np.append(pins.net_kind, "unknown")[net]
    rail = ties.rail[emitters.body]
    pin = np.append(pins.net_pin, -1)
    held = (net == rail) | ((pin[net] >= 0) & (pin[net] == pin[rail]))
    harmless = np.where(emitters.kind == P_IN_NWELL, "ground", "supply")
    found: Flags = (net >= 0) & ~held & (kind != harmless)
    return found


def _undriven(emitter: Ints, reason: int, layout: Layout, net: Ints) -> _Rows:
    """Emitters that no pin drives."""
    count = len(emitter)
    return _Rows(
        reason=np.full(count, reason),
        pin=np.full(count, -1),
        polarity=_polarity(layout.emitters, emitter),
        emitter=emitter,
        body=layout.emitters.body[emitter],
        net=net[emitter],
        resistance_ohm=np.full(count, np.nan),
        area_um2=layout.emitters.area_um2[emitter],
    )


def _ordered(parts: Sequence[_Rows]) -> Injectors:
    """All rows, sorted by (reason, pin, polarity, emitter, body)."""
    reason = np.concatenate([part.reason for part in parts])
    pin = np.concatenate([part.pin for part in parts])
    polarity = np.concatenate([part.polarity for part in parts])
    emitter = np.concatenate([part.emitter for part in parts])
    body = np.concatenate([part.body for part in parts])
    net = np.concatenate([part.net for part in parts])
    resistance = np.concatenate([part.resistance_ohm for part in parts])
    area = np.concatenate([part.area_um2 for part in parts])
    order = np.lexsort((body, emitter, polarity, pin, reason))
    return Injectors(
        reason=frozen(reason[order]),
        pin=frozen(pin[order]),
        polarity=frozen(polarity[order]),
        emitter=frozen(emitter[order]),
        body=frozen(body[order]),
        net=frozen(net[order]),
        resistance_ohm=frozen(resistance[order]),
        area_um2=frozen(area[order]),
        share=frozen(np.full(len(order), np.nan)),
    )
