"""Which diffusions and wells a pin's current reaches, over wiring written by hand.

Expected rows follow from the drawing: n+ outside n-wells and n-wells conduct when a pin is
pulled below ground, p+ in n-wells and isolated p-wells when it is driven above the supply.
Resistances are counted by hand.
"""

from __future__ import annotations

import math
from dataclasses import replace

import numpy as np
import pytest
from connected import Wiring
from drawn_blocks import DrawnBlock, rectangle, technology

from latchscan.layout.bodies import assemble_layout
from latchscan.layout.connections import ABOVE_SUPPLY, BELOW_GROUND, BY_MARKER, BY_PIN, BY_SUPPLY
from latchscan.layout.injectors import find_injectors, mark_injectors
from latchscan.layout.model import Layout
from latchscan.layout.pins import name_nets
from latchscan.layout.regions import derive_regions
from latchscan.layout.ties import tie_bodies
from latchscan.layout.unconnected import no_links, no_nets, no_pins
from latchscan.tasks import Workers
from latchscan.technology.load import load_technology

TECHNOLOGY = load_technology("larch180").technology

N_PLUS = ((1, 20, 2, 21), (5, 20, 6, 22), (9, 20, 10, 23))
P_PLUS = ((1, 2, 2, 3), (5, 2, 6, 4))
WELL_TAP = (8, 2, 9, 3)
FAR_TAP = (41, 2, 42, 3)
POCKET_TAP = (46, 36, 47, 37)


def um(*box):
    return rectangle(*(round(1000 * value) for value in box))


@pytest.fixture(scope="module")
def layout() -> Layout:
    """p+ and a tap in one n-well, a second n-well with a tap, an isolated p-well, three n+."""
    contacts = [
        (x + 0.4, y + 0.4, x + 0.6, y + 0.6) for x, y, *_ in (WELL_TAP, FAR_TAP, POCKET_TAP)
    ]
    ring = [um(40, 30, 54, 33), um(40, 40, 54, 43), um(40, 30, 43, 43), um(51, 30, 54, 43)]
    tech = technology().model_copy(update={"conductors": None})
    shapes = {
        "nwell": [um(0, 0, 10, 5), um(40, 0, 44, 5), *ring],
        "deep": [um(41, 31, 53, 42)],
        "active": [um(*box) for box in (*N_PLUS, *P_PLUS, WELL_TAP, FAR_TAP, POCKET_TAP)],
        "nplus": [um(*box) for box in (*N_PLUS, WELL_TAP, FAR_TAP)],
        "pplus": [um(*box) for box in (*P_PLUS, POCKET_TAP)],
        "contact": [um(*box) for box in contacts],
        "marker": [um(*N_PLUS[2])],
    }
    block = DrawnBlock(shapes=shapes, bbox_dbu=(0, 0, 60_000, 60_000))
    return assemble_layout(derive_regions(block, tech, None, Workers()), tech)


def found(layout: Layout, wiring: Wiring, *, internal: bool = False):
    nets, links = wiring.nets(), wiring.links()
    pins, _ = name_nets(nets, TECHNOLOGY, None)
    ties = tie_bodies(layout, nets, links, pins, TECHNOLOGY)
    return pins, find_injectors(layout, nets, links, pins, ties, internal=internal)


def rows(layout: Layout, pins, injectors, reason: int = BY_PIN) -> list[tuple[object, ...]]:
    """(pin, polarity, emitter or body id, resistance) of every row of a reason."""
    told = []
    for row in np.flatnonzero(injectors.reason == reason).tolist():
        emitter = int(injectors.emitter[row])
        told.append(
            (
                pins.names[injectors.pin[row]] if injectors.pin[row] >= 0 else "",
                int(injectors.polarity[row]),
                layout.emitters.ids[emitter]
                if emitter >= 0
                else layout.bodies[injectors.body[row]].id,
                float(injectors.resistance_ohm[row]),
            )
        )
    return told


def test_a_driver_injects_by_both_polarities(layout):
    wiring = Wiring()
    wiring.node("OUT", pieces=[N_PLUS[0], P_PLUS[1]])
    wiring.node("VDD", pieces=[P_PLUS[0], WELL_TAP])
    wiring.node("VSS", pieces=[N_PLUS[1]])
    pins, injectors = found(layout, wiring)
    assert rows(layout, pins, injectors) == [
        ("OUT", BELOW_GROUND, "n-1", 0.0),
        ("OUT", ABOVE_SUPPLY, "p-2", 0.0),
    ]
    assert injectors.area_um2[:2].tolist() == [1.0, 2.0]
    assert injectors.net[:2].tolist() == [0, 0]
    assert np.isnan(injectors.share).all()


def test_wells_inject_by_their_taps(layout):
    wiring = Wiring()
    wiring.node("IN", pieces=[FAR_TAP, POCKET_TAP])
    wiring.node("VDD", pieces=[WELL_TAP])
    pins, injectors = found(layout, wiring)
    assert rows(layout, pins, injectors) == [
        ("IN", BELOW_GROUND, "nwell-2", 0.0),
        ("IN", ABOVE_SUPPLY, "pwell-1", 0.0),
    ]
    assert injectors.area_um2[:2].tolist() == [20.0, 56.0]


def test_resistors_and_straps_limit_but_do_not_excuse(layout):
    wiring = Wiring()
    pad = wiring.node("IN")
    behind = wiring.node(pieces=[N_PLUS[0]])
    strapped = wiring.node(beside=behind, pieces=[N_PLUS[1]])
    wiring.resistor(pad, behind, 200.0)
    wiring.strap(behind, strapped, 30.0)
    wiring.resistor(pad, strapped, 1000.0)
    pins, injectors = found(layout, wiring)
    assert rows(layout, pins, injectors) == [
        ("IN", BELOW_GROUND, "n-1", 200.0),
        ("IN", BELOW_GROUND, "n-2", 230.0),
    ]
    assert injectors.net[:2].tolist() == [1, 1]


def test_no_current_is_followed_through_a_rail(layout):
    wiring = Wiring()
    pad, rail = wiring.node("IN"), wiring.node("VSS", pieces=[N_PLUS[1]])
    beyond = wiring.node(pieces=[N_PLUS[0]])
    wiring.resistor(pad, rail, 10.0)
    wiring.resistor(rail, beyond, 10.0)
    pins, injectors = found(layout, wiring)
    assert rows(layout, pins, injectors) == []


def test_a_resistance_that_is_not_known_is_followed_and_told_so(layout):
    wiring = Wiring()
    wiring.node("IN")
    wiring.node(pieces=[N_PLUS[0]])
    wiring.resistor(0, 1, math.nan)
    pins, injectors = found(layout, wiring)
    ((_, _, emitter, ohm), *more) = rows(layout, pins, injectors)
    assert (emitter, more) == ("n-1", [])
    assert math.isnan(ohm)


def test_a_diffusion_resistor_is_reached_from_either_end(layout):
    wiring = Wiring()
    x0, y0, x1, y1 = N_PLUS[1]
    wiring.node("A", pieces=[(x0, y0, x1, y0 + 0.5)])
    wiring.node("B", pieces=[(x0, y1 - 0.5, x1, y1)])
    wiring.resistor(0, 1, 500.0)
    pins, injectors = found(layout, wiring)
    assert rows(layout, pins, injectors) == [
        ("A", BELOW_GROUND, "n-2", 0.0),
        ("B", BELOW_GROUND, "n-2", 0.0),
    ]


def test_markers_count_where_no_pin_reaches(layout):
    wiring = Wiring()
    wiring.node("OUT", pieces=[N_PLUS[0]])
    pins, injectors = found(layout, wiring)
    ((_, polarity, emitter, ohm),) = rows(layout, pins, injectors, BY_MARKER)
    assert (polarity, emitter) == (BELOW_GROUND, "n-3")
    assert math.isnan(ohm)
    wiring.node("IN", pieces=[N_PLUS[2]])
    pins, injectors = found(layout, wiring)
    assert rows(layout, pins, injectors, BY_MARKER) == []


def test_internal_nets_count_only_when_asked(layout):
    wiring = Wiring()
    wiring.node("VDD", pieces=[P_PLUS[0], WELL_TAP, N_PLUS[1]])
    wiring.node("VDDIO")
    wiring.node("VSS", pieces=[])
    wiring.node(pieces=[N_PLUS[0], P_PLUS[1]])
    pins, injectors = found(layout, wiring)
    assert rows(layout, pins, injectors, BY_SUPPLY) == []
    pins, injectors = found(layout, wiring, internal=True)
    told = [row[1:3] for row in rows(layout, pins, injectors, BY_SUPPLY)]
    # the p+ on its own well's rail and the n+ on a supply stay reverse-biased
    assert told == [(BELOW_GROUND, "n-1"), (ABOVE_SUPPLY, "p-2")]


def test_a_foreign_supply_may_rise_above_the_well(layout):
    wiring = Wiring()
    wiring.node("VDD", pieces=[WELL_TAP])
    wiring.node("VDDIO", pieces=[P_PLUS[0]])
    wiring.node("VSS", pieces=[P_PLUS[1]])
    pins, injectors = found(layout, wiring, internal=True)
    told = [row[1:3] for row in rows(layout, pins, injectors, BY_SUPPLY)]
    assert told == [(ABOVE_SUPPLY, "p-1")]


def test_emitters_are_marked_by_the_first_reason(layout):
    wiring = Wiring()
    b, a = wiring.node("B"), wiring.node("A")
    inside = wiring.node(pieces=[N_PLUS[0]])
    wiring.node("VDD", pieces=[WELL_TAP])
    wiring.node(pieces=[P_PLUS[0]])
    wiring.resistor(b, inside, 1.0)
    wiring.resistor(a, inside, 9.0)
    pins, injectors = found(layout, wiring, internal=True)
    marked = mark_injectors(layout, pins, injectors).emitters
    told = dict(zip(marked.ids.tolist(), marked.injector.tolist(), strict=True))
    assert told == {"p-1": "internal", "p-2": "", "n-1": "A", "n-2": "", "n-3": "marker"}
    assert not marked.injector.flags.writeable


def test_rows_are_sorted_and_every_pin_is_told_apart(layout):
    wiring = Wiring()
    for name in ("C", "A", "B"):
        wiring.node(name)
    inside = wiring.node(pieces=[*N_PLUS, *P_PLUS, FAR_TAP])
    for pin in range(3):
        wiring.resistor(pin, inside, 10.0 * (pin + 1))
    pins, injectors = found(layout, wiring)
    keys = list(
        zip(
            injectors.reason, injectors.pin, injectors.polarity, injectors.emitter, injectors.body,
            strict=True,
        )
    )  # fmt: skip
    assert keys == sorted(keys)
    assert len(set(keys)) == len(keys) == 3 * 6
    assert sorted(set(injectors.resistance_ohm.tolist())) == [10.0, 20.0, 30.0]
    assert injectors.resistance_ohm[injectors.pin == pins.names.tolist().index("C")][0] == 10.0


def test_without_nets_only_markers_are_known(layout):
    pins, nets, links = no_pins(), no_nets(), no_links()
    ties = tie_bodies(layout, nets, links, pins, TECHNOLOGY)
    assert ties.rail.tolist() == [-1] * len(layout.bodies)
    injectors = find_injectors(layout, nets, links, pins, ties, internal=True)
    assert rows(layout, pins, injectors) == []
    assert injectors.reason.tolist() == [BY_MARKER]
    marked = mark_injectors(layout, pins, injectors)
    assert marked.emitters.injector.tolist() == layout.emitters.injector.tolist()


def test_a_name_found_before_any_net_stays(layout):
    named = layout.emitters.injector.astype("<U9").copy()
    named[0] = "PAD_A"
    before = replace(layout, emitters=replace(layout.emitters, injector=named))
    pins, nets, links = no_pins(), no_nets(), no_links()
    ties = tie_bodies(before, nets, links, pins, TECHNOLOGY)
    injectors = find_injectors(before, nets, links, pins, ties, internal=False)
    assert len(injectors.emitter) == 2
    assert mark_injectors(before, pins, injectors).emitters.injector[0] == "PAD_A"
