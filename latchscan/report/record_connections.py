"""The part of ``scan.json`` that tells what is connected to what.

Every list keeps the order of the scan and ends after `LARGEST_ROW_COUNT` rows; `totals` says
how many there are in all, so that a reader sees when a list was cut off.
"""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import numpy as np

from latchscan.layout.connections import (
    INJECTOR_CLASSES,
    POLARITIES,
    RING_KINDS,
    STRAP,
    Connections,
)
from latchscan.layout.model import Ints
from latchscan.report.digits import box, box_around, drawn, known, solved
from latchscan.report.plain import plain_text
from latchscan.report.relations import (
    body_box,
    diffusion_counts,
    gap_middles,
    injector_place,
    nets_of_nodes,
    nets_of_pin,
    nets_with_pad,
    ring_gaps,
    ring_members,
)
from latchscan.rules.model import Evidence

LARGEST_ROW_COUNT = 20_000
LARGEST_MEMBER_COUNT = 200
"""Injectors that one ring lists."""

Record = dict[str, Any]
Rows = tuple[int, list[Record]]
"""How many rows there are in all, and those that are listed."""


def connection_records(evidence: Evidence) -> Record:
    """Lists of nets, pins, injectors, rings, bodies and resistors, and their whole lengths."""
    makers: dict[str, Callable[[Evidence], Rows]] = {
        "nets": _nets,
        "pins": _pins,
        "injectors": _injectors,
        "rings": _rings,
        "bodies": _bodies,
        "resistors": _resistors,
    }
    made = {name: make(evidence) for name, make in makers.items()}
    totals = {name: total for name, (total, _) in made.items()}
    return {"totals": totals} | {name: rows for name, (_, rows) in made.items()}


def _listed_nets(connections: Connections) -> Ints:
    """Nets that carry a name, a pad or a pin, in order."""
    named = np.array([bool(names) for names in connections.nets.names], dtype=np.bool_)
    listed = named | (connections.pins.net_pin >= 0)
    listed[nets_with_pad(connections.nets)] = True
    return np.flatnonzero(listed)


def _nets(evidence: Evidence) -> Rows:
    nets, pins = evidence.connections.nets, evidence.connections.pins
    listed = _listed_nets(evidence.connections)
    diffusions = diffusion_counts(nets)
    return len(listed), [
        {
            "id": str(nets.ids[net]),
            "names": [plain_text(name) for name in nets.names[net]],
            "pin": _pin_name(evidence.connections, int(pins.net_pin[net])),
            "kind": str(pins.net_kind[net]),
            "low_v": drawn(pins.net_low_v[net]),
            "high_v": drawn(pins.net_high_v[net]),
            "bbox_um": box(nets.box_um[net]),
            "shape_counts": {
                name: int(count)
                for name, count in zip(nets.layers, nets.shape_count[net], strict=True)
                if count
            },
            "diffusion_count": int(diffusions[net]),
        }
        for net in listed[:LARGEST_ROW_COUNT].tolist()
    ]


def _pins(evidence: Evidence) -> Rows:
    pins, injectors = evidence.connections.pins, evidence.connections.injectors
    driven = injectors.pin >= 0
    counts = np.zeros((len(pins.names), len(POLARITIES)), dtype=np.int64)
    np.add.at(counts, (injectors.pin[driven], injectors.polarity[driven]), 1)
    return len(pins.names), [
        {
            "name": plain_text(str(pins.names[pin])),
            "kind": str(pins.kind[pin]),
            "nets": [_net_id(evidence.connections, net) for net in nets_of_pin(pins, pin).tolist()],
            "x_um": drawn(pins.x_um[pin]),
            "y_um": drawn(pins.y_um[pin]),
            "has_pad": bool(pins.has_pad[pin]),
            "joined_names": [plain_text(name) for name in pins.joined_names[pin]],
            "low_v": drawn(pins.low_v[pin]),
            "high_v": drawn(pins.high_v[pin]),
            "test_current_a": drawn(pins.test_current_a[pin]),
            "injector_counts": dict(zip(POLARITIES, counts[pin].tolist(), strict=True)),
        }
        for pin in range(min(len(pins.names), LARGEST_ROW_COUNT))
    ]


def _injectors(evidence: Evidence) -> Rows:
    injectors = evidence.connections.injectors
    bodies = evidence.layout.bodies
    records = []
    for row in range(min(len(injectors.pin), LARGEST_ROW_COUNT)):
        x_um, y_um = injector_place(evidence, row)
        records.append(
            {
                "class": INJECTOR_CLASSES[injectors.reason[row]],
                "pin": _pin_name(evidence.connections, int(injectors.pin[row])),
                "polarity": POLARITIES[injectors.polarity[row]],
                "emitter": _emitter_id(evidence, int(injectors.emitter[row])),
                "body": bodies[injectors.body[row]].id,
                "net": _net_id(evidence.connections, int(injectors.net[row])),
                "resistance_ohm": solved(injectors.resistance_ohm[row]),
                "area_um2": drawn(injectors.area_um2[row]),
                "share": solved(injectors.share[row]),
                "x_um": drawn(x_um),
                "y_um": drawn(y_um),
            }
        )
    return len(injectors.pin), records


def _rings(evidence: Evidence) -> Rows:
    rings = evidence.connections.rings
    suits = {1: True, 0: False, -1: None}
    return len(rings.ids), [
        {
            "id": str(rings.ids[ring]),
            "kind": RING_KINDS[rings.kind[ring]],
            "material": str(rings.material[ring]),
            "body": _body_id(evidence, int(rings.body[ring])),
            "net": _net_id(evidence.connections, int(rings.net[ring])),
            "net_suits": suits[int(rings.net_suits[ring])],
            "closed": bool(rings.closed[ring]),
            "gaps": [
                {"x_um": drawn(x), "y_um": drawn(y), "width_um": drawn(width)}
                for (x, y), width in zip(
                    gap_middles(rings, ring).tolist(),
                    rings.gap_um[ring_gaps(rings, ring)].tolist(),
                    strict=True,
                )
            ],
            "width_um": drawn(rings.width_um[ring]),
            "width_at_um": known(box(rings.width_at_um[ring])),
            "contacted_share": solved(rings.contacted_share[ring]),
            "bbox_um": box_around(rings.polygons[ring : ring + 1]),
            "injector_count": int(rings.member_first[ring + 1] - rings.member_first[ring]),
            "injectors": _ring_injectors(evidence, ring),
            "between_emitters": int(rings.between_emitters[ring]),
            "between_wells": int(rings.between_wells[ring]),
        }
        for ring in range(min(len(rings.ids), LARGEST_ROW_COUNT))
    ]


def _ring_injectors(evidence: Evidence, ring: int) -> list[Record]:
    """The first injectors inside a ring, with their distances from it."""
    rings, injectors = evidence.connections.rings, evidence.connections.injectors
    run = ring_members(rings, ring)
    rows = rings.member_injector[run][:LARGEST_MEMBER_COUNT].tolist()
    distances = rings.member_distance_um[run][:LARGEST_MEMBER_COUNT].tolist()
    return [
        {
            "emitter": _emitter_id(evidence, int(injectors.emitter[row])),
            "body": evidence.layout.bodies[injectors.body[row]].id,
            "pin": _pin_name(evidence.connections, int(injectors.pin[row])),
            "distance_um": drawn(distance),
        }
        for row, distance in zip(rows, distances, strict=True)
    ]


def _bodies(evidence: Evidence) -> Rows:
    layout, connections = evidence.layout, evidence.connections
    ties = connections.ties
    contacted = layout.taps.body[layout.taps.contact_count > 0]
    taps = np.bincount(contacted, minlength=len(layout.bodies))
    emitters = np.bincount(layout.emitters.body, minlength=len(layout.bodies))
    records = []
    for index, body in enumerate(layout.bodies[:LARGEST_ROW_COUNT]):
        rail = int(ties.rail[index])
        run = slice(int(ties.net_first[index]), int(ties.net_first[index + 1]))
        records.append(
            {
                "id": body.id,
                "kind": body.kind,
                "bbox_um": known(box(body_box(evidence, index))),
                "tap_count": int(taps[index]),
                "emitter_count": int(emitters[index]),
                "nets": [
                    {"net": _net_id(connections, net), "contact_count": count}
                    for net, count in zip(
                        ties.net[run].tolist(), ties.net_contacts[run].tolist(), strict=True
                    )
                ],
                "rail": _net_id(connections, rail),
                "rail_pin": _pin_name(
                    connections, int(connections.pins.net_pin[rail]) if rail >= 0 else -1
                ),
                "tie_resistance_ohm": solved(ties.resistance_ohm[index]),
                "low_v": drawn(ties.low_v[index]),
                "high_v": drawn(ties.high_v[index]),
                "enclosing": _body_id(evidence, body.enclosing),
            }
        )
    return len(layout.bodies), records


def _resistors(evidence: Evidence) -> Rows:
    """One record a pair of terminals: marked resistors, and straps of nets that are listed."""
    connections = evidence.connections
    resistors, links = connections.nets.resistors, connections.links
    ends = np.stack(
        [nets_of_nodes(connections.nets, links.node[:, side]) for side in (0, 1)], axis=1
    )
    marked = resistors.kind[links.resistor] != STRAP
    rows = np.flatnonzero(marked | np.isin(ends, _listed_nets(connections)).any(axis=1))
    return len(rows), [
        {
            "kind": plain_text(str(resistors.kind[links.resistor[row]])),
            "conductor": plain_text(str(resistors.conductor[links.resistor[row]])),
            "nets": [_net_id(connections, net) for net in ends[row].tolist()],
            "ohm": solved(links.ohm[row]),
            "bbox_um": box_around(resistors.polygons[links.resistor[row] :][:1]),
        }
        for row in rows[:LARGEST_ROW_COUNT].tolist()
    ]


def _net_id(connections: Connections, net: int) -> str | None:
    return str(connections.nets.ids[net]) if net >= 0 else None


def _pin_name(connections: Connections, pin: int) -> str | None:
    return plain_text(str(connections.pins.names[pin])) if pin >= 0 else None


def _emitter_id(evidence: Evidence, emitter: int) -> str | None:
    return str(evidence.layout.emitters.ids[emitter]) if emitter >= 0 else None


def _body_id(evidence: Evidence, body: int) -> str | None:
    return evidence.layout.bodies[body].id if body >= 0 else None
