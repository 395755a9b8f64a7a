"""What bodies hang on, on small drawn wells over wiring written by hand.

Expected resistances are sums along the only path, or the shorter of two, counted by hand;
openings and spacings are those drawn.
"""

from __future__ import annotations

import math
from dataclasses import replace

import networkx
import numpy as np
import pytest
import shapely
import shapely.affinity
from connected import Wiring
from drawn_blocks import DrawnBlock, rectangle, technology
from hypothesis import given, settings
from hypothesis import strategies as st

from latchscan.layout.bodies import assemble_layout
from latchscan.layout.model import Layout
from latchscan.layout.naming.paths import gather_wires, least_resistance, reached_from
from latchscan.layout.pins import name_nets
from latchscan.layout.regions import derive_regions
from latchscan.layout.ties import tie_bodies
from latchscan.tasks import Workers
from latchscan.technology.load import load_technology

SIDE = 60_000
TECHNOLOGY = load_technology("larch180").technology


def drawn(shapes) -> Layout:
    tech = technology().model_copy(update={"conductors": None})
    block = DrawnBlock(shapes=shapes, bbox_dbu=(0, 0, SIDE, SIDE))
    return assemble_layout(derive_regions(block, tech, None, Workers()), tech)


def wells(*boxes, taps=(), contacts=()) -> Layout:
    """N-wells with n+ taps and contacts, all in um."""

    def scaled(found):
        return [rectangle(*(round(1000 * value) for value in box)) for box in found]

    return drawn(
        {
            "nwell": scaled(boxes),
            "active": scaled(taps),
            "nplus": scaled(taps),
            "contact": scaled(contacts),
        }
    )


def tied(layout: Layout, wiring: Wiring, tech=TECHNOLOGY):
    nets, links = wiring.nets(), wiring.links()
    pins, _ = name_nets(nets, TECHNOLOGY, None)
    return tie_bodies(layout, nets, links, pins, tech)


ONE_WELL = {
    "taps": [(1, 1, 2, 2), (5, 1, 6, 2)],
    "contacts": [(1.2, 1.2, 1.4, 1.4), (5.2, 1.2, 5.4, 1.4), (5.6, 1.2, 5.8, 1.4)],
}


def one_well() -> Layout:
    return wells((0, 0, 10, 4), **ONE_WELL)


def test_a_well_on_its_rail_is_held_directly():
    wiring = Wiring()
    wiring.node("VDD", pieces=[(1, 1, 2, 2), (5, 1, 6, 2)])
    ties = tied(one_well(), wiring)
    assert ties.tap_net.tolist() == [0, 0]
    assert ties.net.tolist() == [0]
    assert ties.net_contacts.tolist() == [3]
    assert ties.rail.tolist() == [0, -1]
    assert ties.resistance_ohm.tolist() == [0.0, math.inf]
    supply = TECHNOLOGY.loop.supply_v
    assert ties.low_v[0] == pytest.approx(0.9 * supply)
    assert ties.high_v[0] == pytest.approx(1.1 * supply)
    assert np.isnan(ties.high_v[1])


def test_a_well_behind_poly_hangs_on_its_rail_through_the_strap():
    wiring = Wiring()
    rail = wiring.node("VDD")
    far = wiring.node(beside=rail, pieces=[(1, 1, 2, 2)])
    wiring.strap(rail, far, 300.0)
    ties = tied(one_well(), wiring)
    assert ties.rail.tolist() == [0, -1]
    assert ties.resistance_ohm[0] == 300.0
    assert ties.tap_net.tolist() == [0, -1]


def test_a_rail_starts_at_its_bond_pad_whatever_labels_lie_beyond():
    wiring = Wiring()
    rail = wiring.node("VDD", pads=[(90, 90, 99, 99)])
    far = wiring.node("VDD", beside=rail, pieces=[(1, 1, 2, 2)])
    wiring.strap(rail, far, 300.0)
    assert tied(one_well(), wiring).resistance_ohm[0] == 300.0


def test_the_better_of_two_taps_holds_the_well():
    wiring = Wiring()
    rail = wiring.node("VDD", pieces=[(5, 1, 6, 2)])
    far = wiring.node(beside=rail, pieces=[(1, 1, 2, 2)])
    wiring.strap(rail, far, 300.0)
    assert tied(one_well(), wiring).resistance_ohm[0] == 0.0


def test_a_well_on_another_net_is_held_through_resistors():
    wiring = Wiring()
    rail = wiring.node("VDD")
    end = wiring.node(beside=rail)
    bias = wiring.node("bias", pieces=[(1, 1, 2, 2)])
    wiring.strap(rail, end, 40.0)
    wiring.resistor(end, bias, 1000.0)
    wiring.resistor(bias, rail, 5000.0)
    ties = tied(one_well(), wiring)
    assert ties.net.tolist() == [1]
    assert ties.rail.tolist() == [0, -1]
    assert ties.resistance_ohm[0] == 1040.0


def test_nothing_holds_a_well_on_a_signal():
    wiring = Wiring()
    wiring.node("VDD")
    wiring.node("OUT", pieces=[(1, 1, 2, 2)])
    ties = tied(one_well(), wiring)
    assert ties.rail.tolist() == [-1, -1]
    assert ties.net.tolist() == [1]
    assert math.isinf(ties.resistance_ohm[0])


def test_a_resistance_that_is_not_known_holds_but_is_not_told():
    wiring = Wiring()
    wiring.node("VDD")
    wiring.node("bias", pieces=[(1, 1, 2, 2)])
    wiring.resistor(0, 1, math.nan)
    ties = tied(one_well(), wiring)
    assert ties.rail[0] == 0
    assert np.isnan(ties.resistance_ohm[0])


def test_a_tap_without_contacts_ties_nothing():
    wiring = Wiring()
    wiring.node("VDD", pieces=[(1, 1, 2, 2), (5, 1, 6, 2)])
    ties = tied(wells((0, 0, 10, 4), taps=ONE_WELL["taps"]), wiring)
    assert ties.tap_net.tolist() == [-1, -1]
    assert ties.rail.tolist() == [-1, -1]


def test_nets_of_a_body_come_with_most_contacts_first():
    wiring = Wiring()
    wiring.node("VSS", pieces=[(1, 1, 2, 2)])
    wiring.node("VDD", pieces=[(5, 1, 6, 2)])
    ties = tied(one_well(), wiring)
    assert ties.net.tolist() == [1, 0]
    assert ties.net_contacts.tolist() == [2, 1]
    assert ties.net_first.tolist() == [0, 2, 2]
    assert ties.rail[0] == 1


def test_a_tap_on_two_pieces_is_on_both_and_mostly_on_one():
    wiring = Wiring()
    wiring.node("VDD", pieces=[(1, 1, 1.5, 2)])
    wiring.node("OUT", pieces=[(1.5, 1, 2, 2)])
    layout = wells(
        (0, 0, 10, 4),
        taps=[(1, 1, 2, 2)],
        contacts=[(1.1, 1.1, 1.3, 1.3), (1.6, 1.1, 1.8, 1.3), (1.6, 1.6, 1.8, 1.8)],
    )
    ties = tied(layout, wiring)
    assert ties.tap_net.tolist() == [1]
    assert ties.net.tolist() == [1, 0]
    assert ties.rail[0] == 0


@pytest.mark.parametrize(
    ("names", "found"),
    [(("VDD", "VDDIO"), 1), (("VDD", "VDD"), 0), (("A", "B"), 1), (("VDD", "A"), 1)],
)
def test_close_wells_count_where_they_hang_on_different_things(names, found):
    layout = wells(
        (0, 0, 4, 4),
        (6.5, 0, 10, 4),
        (20, 0, 24, 4),
        taps=[(1, 1, 2, 2), (7, 1, 8, 2)],
        contacts=[(1.2, 1.2, 1.4, 1.4), (7.2, 1.2, 7.4, 1.4)],
    )
    wiring = Wiring()
    wiring.node(names[0], pieces=[(1, 1, 2, 2)])
    wiring.node(names[1], pieces=[(7, 1, 8, 2)])
    ties = tied(layout, wiring)
    assert ties.spacing_first.tolist() == [0] + [found] * 4
    assert ties.neighbour.tolist() == [1] * found
    assert ties.spacing_um.tolist() == [2.5] * found
    for start, end in zip(ties.spacing_from_um, ties.spacing_to_um, strict=True):
        assert (start[0], end[0]) == (4.0, 6.5)


def pocket_block(gap_um: float, *, fringe_um: float, item=(18, 18, 20, 20), side="right"):
    """A 2 um wide n-well ring from 10 to 30 um with one gap, buried layer beneath."""

    def um(*box):
        return rectangle(*(round(1000 * value) for value in box))

    bars = {
        "left": [um(10, 10, 12, 30)],
        "right": [um(28, 10, 30, 30)],
        "low": [um(10, 10, 30, 12)],
        "high": [um(10, 28, 30, 30)],
    }
    if gap_um:
        bars["right"] = [um(28, 10, 30, 20), um(28, 20 + gap_um, 30, 30)]
    if side == "apart":
        # four separate n-wells: two of them stand off the others by the gap
        bars["low"] = [um(10, 10 - gap_um, 30, 12 - gap_um)]
        bars["left"], bars["right"] = [um(10, 12, 12, 30)], [um(28, 12, 30, 30)]
    reach = 30 + fringe_um
    shapes = {
        "nwell": [bar for bar_list in bars.values() for bar in bar_list],
        "deep": [um(10 - fringe_um, 10 - fringe_um, reach, reach)],
        "active": [um(*item)],
        "nplus": [um(*item)],
    }
    return drawn(shapes)


@pytest.mark.parametrize("gap_um", [0.02, 0.6, 1.7, 5.0])
@pytest.mark.parametrize("fringe_um", [-0.5, 0.0, 1.0])
def test_an_opening_in_a_ring_is_found_at_its_place_and_width(gap_um, fringe_um):
    ties = tied(pocket_block(gap_um, fringe_um=fringe_um), Wiring())
    assert ties.gap_um.tolist() == pytest.approx([gap_um])
    assert ties.gap_body.tolist() == [0]
    (start,), (end,) = ties.gap_from_um, ties.gap_to_um
    assert sorted([start[1], end[1]]) == pytest.approx([20.0, 20.0 + gap_um])
    assert 28.0 <= start[0] <= 30.0
    assert 28.0 <= end[0] <= 30.0


def test_a_closed_ring_has_no_opening():
    layout = pocket_block(0.0, fringe_um=1.0)
    assert [body.kind for body in layout.bodies] == ["nwell", "isolated_pwell", "substrate"]
    assert len(tied(layout, Wiring()).gap_um) == 0


def test_both_openings_of_a_ring_of_several_wells_are_found():
    ties = tied(pocket_block(0.8, fringe_um=1.0, side="apart"), Wiring())
    # the low bar stands off both uprights
    assert sorted(ties.gap_um.tolist()) == pytest.approx([0.8, 0.8])


def test_an_empty_pocket_needs_no_isolation():
    ties = tied(pocket_block(1.0, fringe_um=1.0, item=(40, 40, 42, 42)), Wiring())
    assert len(ties.gap_um) == 0


def test_the_fringe_of_a_buried_layer_makes_no_opening():
    def um(*box):
        return rectangle(*(round(1000 * value) for value in box))

    diffusions = [um(20.3, 10, 20.8, 14), um(9.3, 10, 9.8, 14), um(12, 20.3, 16, 20.8)]
    layout = drawn(
        {
            # two rows of wells, their buried layers merged by the fringe
            "nwell": [um(10, 10, 20, 20), um(21.5, 10, 30, 20), um(10, 21.5, 20, 30)],
            "deep": [um(9, 9, 21, 21), um(20.5, 9, 31, 21), um(9, 20.5, 21, 31)],
            "active": diffusions,
            "nplus": diffusions,
        }
    )
    assert len(tied(layout, Wiring()).gap_um) == 0


def test_a_pocket_beyond_the_buried_layer_is_none():
    layout = pocket_block(1.0, fringe_um=-0.5)
    shapes = dict(layout.regions.shapes)
    cut = shapely.difference(shapes["buried"][0], shapely.box(13, 13, 15, 15))
    shapes["buried"] = np.array([cut], dtype=np.object_)
    layout = replace(layout, regions=replace(layout.regions, shapes=shapes))
    assert len(tied(layout, Wiring()).gap_um) == 0


@settings(max_examples=25, deadline=None)
@given(
    size_um=st.integers(8, 20),
    wall_um=st.sampled_from([0.5, 1.5, 4.0]),
    gap_um=st.sampled_from([0.1, 0.9, 2.2, 4.0]),
    place=st.floats(0.0, 1.0),
    quarters=st.integers(0, 3),
    mirrored=st.booleans(),
)
def test_an_opening_anywhere_is_found_there(size_um, wall_um, gap_um, place, quarters, mirrored):
    """The opening is cut into one wall at any place; expected is where it was cut."""
    low, high = 10.0 + wall_um, 10.0 + wall_um + size_um
    outer = high + wall_um
    start = round(low + place * (size_um - gap_um), 3)
    gap = shapely.box(high - 0.1, start, outer + 1, start + gap_um)
    ring = shapely.box(10, 10, outer, outer) - shapely.box(low, low, high, high) - gap
    middle = 0.5 * (low + high)
    drawing = [ring, shapely.box(low - 0.2, low - 0.2, high + 0.2, high + 0.2)]
    drawing += [shapely.box(middle - 1, middle - 1, middle + 1, middle + 1), gap]
    if mirrored:
        drawing = [shapely.affinity.scale(shape, -1, 1, origin=(30, 30)) for shape in drawing]
    drawing = [shapely.affinity.rotate(shape, 90 * quarters, origin=(30, 30)) for shape in drawing]
    points = [
        [(round(1000 * x), round(1000 * y)) for x, y in shape.exterior.coords[:-1]]
        for shape in drawing
    ]
    layout = drawn(
        {"nwell": points[:1], "deep": points[1:2], "active": points[2:3], "nplus": points[2:3]}
    )
    ties = tied(layout, Wiring())
    assert ties.gap_um.tolist() == pytest.approx([gap_um])
    ends = shapely.linestrings([ties.gap_from_um[0], ties.gap_to_um[0]])
    assert shapely.buffer(drawing[3], 0.01).covers(ends)


LINKS = st.lists(
    st.tuples(
        st.integers(0, 9), st.integers(0, 9), st.sampled_from([0.0, 1.0, 7.5, 300.0, math.nan])
    ),
    max_size=20,
)


@given(links=LINKS, sources=st.sets(st.integers(0, 9), min_size=1, max_size=3))
def test_least_resistances_are_those_of_networkx(links, sources):
    """Source: Dijkstra's paths in networkx, an independent implementation."""
    node = np.array([(a, b) for a, b, _ in links], dtype=np.int64).reshape(-1, 2)
    ohm = np.array([ohm for *_, ohm in links], dtype=np.float64)
    expected = np.full(10, math.inf)
    for unknown in (False, True):
        graph = networkx.Graph()
        graph.add_nodes_from(range(10))
        for a, b, value in links:
            if unknown or not math.isnan(value):
                length = 0.0 if math.isnan(value) else value
                least = min(length, graph.get_edge_data(a, b, {"weight": math.inf})["weight"])
                graph.add_edge(a, b, weight=least)
        lengths = networkx.multi_source_dijkstra_path_length(graph, sources)
        for target, length in lengths.items():
            if math.isinf(expected[target]):
                expected[target] = math.nan if unknown else length
    found, source = least_resistance(10, node, ohm, np.array(sorted(sources)))
    np.testing.assert_allclose(found, expected)
    assert set(source[~np.isinf(found)].tolist()) <= sources
    members, through = reached_from(np.array(sorted(sources)), gather_wires(10, node, ohm))
    np.testing.assert_allclose(through, expected[members])
    assert members.tolist() == np.flatnonzero(~np.isinf(expected)).tolist()
