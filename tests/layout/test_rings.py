"""Guard rings against hand-worked drawings; every expected number follows from the drawing."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
import pytest
import shapely
from layout.ring_sites import LARCH, frame, site, technology
from layouts import block
from shapely import affinity

from latchscan.layout.bodies import assemble_layout
from latchscan.layout.connections import MAJORITY, MINORITY
from latchscan.layout.model import N_OUTSIDE_NWELL, P_IN_NWELL
from latchscan.layout.regions import derive_regions
from latchscan.layout.rings import find_rings
from latchscan.layout.source import open_layout
from latchscan.layout.unconnected import no_nets, no_pins, no_ties
from latchscan.tasks import Workers
from latchscan.technology.load import load_technology

INJECTOR = shapely.box(-1, -2, 1, 2)
RING = frame(-10, -10, 10, 10, 1)
"""Its hole reaches 9 um from the origin: 8 um from the injector's sides, 7 from its ends."""


def test_a_closed_tap_ring_on_ground_is_a_majority_ring_that_suits() -> None:
    rings, _ = site().n("pin", INJECTOR).ptap("vss", RING).find()
    assert rings.ids.tolist() == ["ring-1"]
    assert rings.kind.tolist() == [MAJORITY]
    assert rings.material.tolist() == ["substrate_tap"]
    assert rings.closed.tolist() == [True]
    assert rings.net_suits.tolist() == [1]
    assert rings.width_um.tolist() == [1.0]
    assert rings.member_injector.tolist() == [0]
    assert rings.member_distance_um.tolist() == [7.0]
    assert rings.polygons[0].equals(RING)


def test_four_strips_that_part_at_the_corners_have_four_openings() -> None:
    strips = [
        shapely.box(-9, 9, 9, 10),
        shapely.box(-9, -10, 9, -9),
        shapely.box(-10, -8.7, -9.3, 8.7),
        shapely.box(9.4, -8.7, 10, 8.7),
    ]
    rings, _ = site().n("pin", INJECTOR).ptap("vss", shapely.MultiPolygon(strips)).find()
    # corner to corner: 0.3 um in y, 0.3 or 0.4 um in x
    assert rings.gap_um == pytest.approx([0.5, 0.5, 0.3 * 2**0.5, 0.3 * 2**0.5])
    assert rings.width_um == pytest.approx([0.6])
    assert rings.gap_from_um[0] == pytest.approx([9, -9])
    assert rings.gap_to_um[0] == pytest.approx([9.4, -8.7])


def test_strips_that_touch_in_a_corner_are_closed() -> None:
    strips = [
        shapely.box(-9, 9, 9, 10),
        shapely.box(-9, -10, 9, -9),
        shapely.box(-10, -9, -9, 9),
        shapely.box(9, -9, 10, 9),
    ]
    rings, _ = site().n("pin", INJECTOR).ptap("vss", shapely.MultiPolygon(strips)).find()
    assert rings.closed.tolist() == [True]


def test_a_corner_on_the_side_of_another_strip_closes_too() -> None:
    tip = shapely.Polygon([(9, 3.3), (10, 2.3), (10, 9), (9, 9)])
    lower = shapely.Polygon([(9, 3.3), (8, 2.9), (8.5, -10), (10, -10), (10, 1)])
    strips = [
        shapely.box(-10, 9, 9, 10),
        shapely.box(-10, -10, -9, 9),
        shapely.box(-9, -10, 8.5, -9),
        tip,
        lower,
    ]
    merged = shapely.union_all(strips[:3])
    parts = shapely.MultiPolygon([merged.difference(lower.union(tip)), tip, lower])
    rings, _ = site().n("pin", INJECTOR).ptap("vss", parts).find()
    assert rings.closed.tolist() == [True]


def test_parallel_rails_and_scattered_taps_are_no_ring() -> None:
    rails = shapely.MultiPolygon([shapely.box(-200, 3, 200, 3.5), shapely.box(-200, -4, 200, -3)])
    assert not len(site().n("pin", INJECTOR).ptap("vss", rails).find()[0].ids)
    taps = [shapely.box(x, y, x + 0.4, y + 0.4) for x in range(-20, 20, 7) for y in (-8, 7)]
    scattered = shapely.MultiPolygon([*taps, shapely.box(-9, 0, -8.6, 0.4)])
    assert not len(site().n("pin", INJECTOR).ptap("vss", scattered).find()[0].ids)


def test_an_open_side_is_an_opening_as_wide_as_the_ring_inside() -> None:
    rings, _ = site().n("pin", INJECTOR).ptap("vss", RING - shapely.box(8, -11, 11, 11)).find()
    assert rings.gap_um == pytest.approx([18])
    line = shapely.linestrings([rings.gap_from_um[0], rings.gap_to_um[0]])
    assert not line.crosses(INJECTOR)


def test_two_open_rings_in_each_other_are_two_rings() -> None:
    outer = frame(-12, -12, 12, 12, 0.5) - shapely.box(-13, -4, -11, 2)
    inner = RING - shapely.box(9, -1, 11, 2)
    strips = shapely.MultiPolygon([inner, outer])
    rings, _ = site().n("pin", INJECTOR).ptap("vss", strips).find()
    # the way between them is 1.5 um wide, narrower than both openings
    assert sorted(rings.gap_um.tolist()) == pytest.approx([3, 6])
    assert len(rings.ids) == 2


def test_a_bar_in_the_mouth_of_a_ring_belongs_to_it() -> None:
    mouth = RING - shapely.box(8, -2, 11, 2)
    bar = shapely.box(9.2, -1.8, 9.9, 1.7)
    strips = shapely.MultiPolygon([mouth, bar])
    rings, _ = site().n("pin", INJECTOR).ptap("vss", strips).find()
    assert rings.gap_um == pytest.approx([0.3, 0.2])
    assert rings.polygons[0].equals(strips)


def test_at_most_three_rings_the_innermost() -> None:
    site_ = site().n("pin", INJECTOR)
    for size in (4, 6, 8, 10, 12):
        site_.ptap("vss", frame(-size, -size, size, size, 0.6))
    rings, _ = site_.find()
    assert [shapely.bounds(p)[2] for p in rings.polygons] == [8, 6, 4]


def test_drains_of_one_room_share_a_ring_and_an_own_ring_stays_their_own() -> None:
    fingers = [shapely.box(x, -2, x + 0.5, 2) for x in range(-6, 3)]
    alone = shapely.box(6, -1, 6.5, 1)
    own = frame(5, -2, 7.5, 2, 0.4)
    site_ = site().n("pin", *fingers).n("other", alone).ptap("vss", RING).ptap("vss", own)
    rings, _ = site_.find()
    members = [
        rings.member_injector[rings.member_first[row] : rings.member_first[row + 1]].tolist()
        for row in range(len(rings.ids))
    ]
    assert members == [list(range(10)), [9]]
    assert rings.between_emitters.tolist() == [0, 0]


def test_a_slot_in_a_slim_ring_is_found_though_the_ring_is_narrower_inside() -> None:
    slim = frame(-40, -2.5, 40, 2.5, 0.5)
    slot = shapely.box(20, 1, 29, 3)
    fingers = [shapely.box(x, -1, x + 0.5, 1) for x in range(-30, 30)]
    rings, _ = site().n("pin", *fingers).ptap("vss", slim - slot).find()
    # the inside is 4 um high, the slot 9 um wide
    assert rings.gap_um == pytest.approx([9])
    assert len(rings.member_injector) == 60


def test_an_injector_beyond_reach_is_no_member() -> None:
    wide = frame(-60, -60, 60, 60, 1)
    middle, edge = INJECTOR, affinity.translate(INJECTOR, 40, 0)
    rings, _ = site().n("a", middle).n("b", edge).ptap("vss", wide).find()
    assert rings.member_injector.tolist() == [1]
    rings, _ = site().n("a", middle).n("b", edge).ptap("vss", wide).find(reach_um=60.0)
    assert rings.member_injector.tolist() == [0, 1]


def test_a_guard_well_collects_if_it_holds_no_p_diffusion() -> None:
    well = frame(-10, -10, 10, 10, 2)
    tap = frame(-9.2, -9.2, 9.2, 9.2, 0.4)
    drawn = site().nwell(well).n("pin", INJECTOR).ntap("vdd", tap)
    rings, _ = drawn.find()
    assert rings.kind.tolist() == [MINORITY]
    assert rings.material.tolist() == ["nwell"]
    assert rings.net_suits.tolist() == [1]
    assert rings.width_um.tolist() == [2.0]


@pytest.mark.parametrize(("net", "suits"), [("vdd", 1), ("vss", 0), ("-", 0), ("pin", 0), ("", -1)])
def test_a_guard_well_needs_a_supply(net: str, suits: int) -> None:
    well = frame(-10, -10, 10, 10, 2)
    drawn = site().nwell(well).n("pin", INJECTOR).ptap("vss", shapely.box(50, 50, 51, 51))
    rings, _ = drawn.ntap(net, frame(-9.2, -9.2, 9.2, 9.2, 0.4)).find()
    assert rings.net_suits.tolist() == [suits]


@pytest.mark.parametrize(("net", "suits"), [("vdd", 0), ("vss", 1), ("-", 0), ("pin", 0), ("", -1)])
def test_a_substrate_ring_needs_a_ground(net: str, suits: int) -> None:
    drawn = site().n("pin", INJECTOR).ptap("vss", shapely.box(50, 50, 51, 51)).ptap(net, RING)
    assert drawn.find()[0].net_suits.tolist() == [suits]


def test_without_any_supply_or_ground_nothing_is_said_of_nets() -> None:
    rings, _ = site().n("pin", INJECTOR).ptap("-", RING).find()
    assert rings.net_suits.tolist() == [-1]


def test_rings_of_a_p_injector() -> None:
    well = shapely.box(-10, -10, 10, 10)
    drawn = site().nwell(well).p("pin", INJECTOR)
    drawn.ntap("vdd", frame(-9, -9, 9, 9, 0.5)).ptap("vss", frame(-13, -13, 13, 13, 1))
    drawn.p("vss", *shapely.get_parts(frame(-6, -6, 6, 6, 0.5)))
    nets, pins, ties, injectors = drawn.connected()
    source: Any = _NoContacts()
    rings, _ = find_rings(
        source, drawn.layout(), nets, pins, ties, injectors, technology(reach_um=20.0)
    )
    assert rings.material.tolist() == ["well_tap", "substrate_tap", "p_strip"]
    assert rings.kind.tolist() == [MAJORITY, MINORITY, MINORITY]
    assert rings.net_suits.tolist() == [1, 1, 1]
    assert rings.member_distance_um.tolist() == [6.5, 10.0, 3.5]
    assert rings.contacted_share[2] == 0
    assert rings.body.tolist() == [0, 1, 0]


class _NoContacts:
    """A source on which no contacts are drawn."""

    database_unit_um = 0.001

    def near(self, boxes: Any, pairs: Any) -> dict[Any, Any]:
        assert boxes.shape[1] == 4
        assert pairs
        return {}


def test_a_well_ring_must_hang_on_the_rail_of_its_well() -> None:
    well = shapely.box(-10, -10, 10, 10)
    drawn = site().nwell(well).p("pin", INJECTOR).ptap("vss", shapely.box(20, 0, 21, 1))
    drawn.ntap("vdd", shapely.box(-9.9, -9.9, -9.5, -9.5)).ntap("vio", frame(-9, -9, 9, 9, 0.5))
    assert drawn.find()[0].net_suits.tolist() == [0]


def test_a_whole_well_is_enclosed_like_a_diffusion_and_is_no_ring_itself() -> None:
    well = frame(-5, -5, 5, 5, 2)
    drawn = site().nwell(well).ptap("vss", RING).inject_well("pin", 0)
    rings, _ = drawn.find()
    assert rings.material.tolist() == ["substrate_tap"]
    assert rings.member_distance_um.tolist() == [4.0]
    # an n+ inside the well sees the substrate ring alone: the well is no collector
    rings, _ = drawn.n("other", shapely.box(-1, -1, 1, 1)).find()
    assert rings.material.tolist() == ["substrate_tap"]


def test_what_lies_between_is_counted_if_it_is_foreign() -> None:
    drawn = site().n("pin", INJECTOR).ptap("vss", RING)
    drawn.n("pin", shapely.box(3, 0, 4, 1)).n("vss", shapely.box(5, 0, 6, 1))
    drawn.n("-", shapely.box(20, 0, 21, 1)).nwell(shapely.box(-8, 4, -4, 8))
    rings, _ = drawn.p("vdd", shapely.box(-7, 5, -6, 6)).find()
    assert rings.between_emitters.tolist() == [2]
    assert rings.between_wells.tolist() == [1]


def test_contacted_share_is_the_area_near_contacts() -> None:
    # one contact in the middle of the lower side: 2 um reach, box of 4.4 x 1 um of 76 um2
    contact = ((-0.2, -9.6, 0.2, -9.2),)
    rings, _ = site().n("pin", INJECTOR).ptap("vss", RING, contact).find()
    assert rings.contacted_share == pytest.approx([4.4 / 76])
    rings, _ = site().n("pin", INJECTOR).ptap("vss", RING, ()).find()
    assert rings.contacted_share.tolist() == [0]


def test_least_width_is_at_the_neck_whichever_way_it_runs() -> None:
    neck = shapely.Polygon([(3, 8), (3.7, 9.6), (4.2, 9.6), (5, 8)])
    ring = RING - neck
    rings, _ = site().n("pin", INJECTOR).ptap("vss", ring).find()
    assert rings.width_um == pytest.approx([0.4])
    assert 3.5 <= rings.width_at_um[0, 0] <= 4.4
    opened = affinity.rotate(ring - shapely.box(-3, 8, -2, 11), 30, origin=(0, 0))
    rings, _ = site().n("pin", INJECTOR).ptap("vss", opened).find()
    assert rings.width_um == pytest.approx([0.4], abs=0.0011)
    spur = RING | shapely.box(3, 10, 3.1, 10.4)
    assert site().n("pin", INJECTOR).ptap("vss", spur).find()[0].width_um.tolist() == [1.0]


def test_crossings_count_the_strips_between_opposite_halves() -> None:
    well = shapely.box(20, -10, 40, 10)
    drawn = site().nwell(well).n("pin", INJECTOR).ptap("vss", RING)
    drawn.ntap("vdd", frame(21, -9, 39, 9, 0.5)).p("out", shapely.box(25, -2, 27, 2))
    drawn.p("vdd", shapely.box(29, 2, 30, 3))
    _, crossings = drawn.find()
    rows = list(zip(crossings.injector.tolist(), crossings.driver.tolist(), strict=True))
    # n+: core at 28 um, driver at 24 um; p+: driver at 24 um, no core n+
    assert rows == [(0, False), (0, True), (1, True)]
    assert crossings.other.tolist() == [2, 1, 0]
    assert crossings.spacing_um.tolist() == [28.0, 24.0, 24.0]
    assert crossings.p_strips.tolist() == [1, 1, 1]
    assert crossings.n_strips.tolist() == [1, 1, 1]
    assert crossings.from_um[1].tolist()[0] == 1
    assert crossings.to_um[1].tolist()[0] == 25


def test_the_core_begins_outside_the_ring() -> None:
    well = shapely.box(4, -3, 8, 3)
    far = shapely.box(30, -5, 40, 5)
    drawn = site().nwell(well).nwell(far).n("pin", INJECTOR).ptap("vss", RING)
    drawn.p("vdd", shapely.box(5, -1, 6, 1), shapely.box(32, -1, 33, 1))
    _, crossings = drawn.find()
    assert crossings.other.tolist() == [2]
    # a ring around all of it changes nothing
    _, crossings = drawn.ptap("vss", frame(-25, -25, 45, 25, 1)).find()
    assert crossings.other.tolist() == [2]
    _, crossings = site().nwell(well).n("pin", INJECTOR).p("vdd", shapely.box(5, -1, 6, 1)).find()
    assert crossings.other.tolist() == [1]
    assert crossings.p_strips.tolist() == [0]


def test_a_guard_well_counts_as_one_strip() -> None:
    guard, core = frame(-10, -10, 10, 10, 2), shapely.box(20, -5, 30, 5)
    drawn = site().nwell(guard).nwell(core).n("pin", INJECTOR)
    drawn.p("vdd", shapely.box(22, -1, 23, 1)).ntap("vdd", shapely.box(8.5, 5, 9, 6))
    _, crossings = drawn.find()
    assert crossings.n_strips.tolist() == [1]
    _, crossings = drawn.ntap("vdd", shapely.box(8.5, -4, 9, 4)).find()
    assert crossings.n_strips.tolist() == [1]


def test_a_collector_diffusion_is_a_ring_with_the_contacts_that_are_drawn(tmp_path: Path) -> None:
    drawn = block().emitter("n", 0, 0, 2, 4).nwell(40, 0, 50, 10).tap("n", 41, 1, 42, 2)
    for x0, y0, x1, y1 in ((-5, -5, 8, -4), (-5, 8, 8, 9), (-5, -4, -4, 8), (7, -4, 8, 8)):
        drawn.rect("active", x0, y0, x1, y1).rect("nplus", x0 - 0.1, y0 - 0.1, x1 + 0.1, y1 + 0.1)
    drawn.rect("contact", 7.4, 1, 7.62, 1.22).rect("contact", 0, 30, 0.22, 30.22)
    tech = technology(contact_reach_um=1.0)
    source = open_layout(drawn.write(tmp_path / "collector.gds"), technology=tech)
    layout = assemble_layout(derive_regions(source, tech, None, Workers()), tech)
    site_ = site().nwell(shapely.box(40, 0, 50, 10))
    for row, polygon in enumerate(layout.emitters.polygons):
        site_.n("pin" if polygon.area < 9 else "vdd", polygon)
        assert layout.emitters.kind[row] == 1
    site_.ptap("vss", shapely.box(30, 30, 31, 31))
    rings, _ = site_.find(source, contact_reach_um=1.0)
    assert rings.material.tolist() == ["n_strip"]
    assert rings.kind.tolist() == [MINORITY]
    assert rings.closed.tolist() == [True]
    assert rings.net_suits.tolist() == [1]
    # one contact: 2.22 um of the right side, which is 1 um wide, of 13 * 14 - 11 * 12 um2
    assert rings.contacted_share == pytest.approx([2.22 / 50])


def test_no_injectors_no_rings() -> None:
    rings, crossings = site().n("vss", INJECTOR).ptap("vss", RING).find()
    assert not len(rings.ids)
    assert not len(crossings.injector)
    assert len(rings.gap_first) == len(rings.member_first) == 1


def test_layout_of_which_no_net_is_known_has_rings_around_marked_diffusions() -> None:
    drawn = site().n("pin", INJECTOR).ptap("vss", RING)
    layout, injectors = drawn.layout(), drawn.connected()[3]
    source: Any = None
    bodies, taps = len(layout.bodies), len(layout.taps.kind)
    rings, _ = find_rings(
        source, layout, no_nets(), no_pins(), no_ties(bodies, taps), injectors, technology()
    )
    assert rings.closed.tolist() == [True]
    assert rings.net.tolist() == [-1]
    assert rings.net_suits.tolist() == [-1]
    assert np.isnan(injectors.share).all()


def test_diffusions_of_one_well_share_the_ring_around_it_whatever_their_nets() -> None:
    well = shapely.box(-10, -10, 10, 10)
    drawn = site().nwell(well).ptap("vss", frame(-13, -13, 13, 13, 1) - shapely.box(0, 11, 2, 14))
    for number in range(6):
        drawn.p(f"out{number}", shapely.box(3 * number - 9, -1, 3 * number - 8, 1))
    rings, _ = drawn.find()
    assert rings.gap_um.tolist() == [2]
    assert rings.member_injector.tolist() == list(range(6))


def test_rings_of_the_reference_library_s_diodes(open_layouts: Path) -> None:
    """Open 130 nm cells: a diode stands in a tap ring of its body and in a ring of the other kind.

    Source: the drawn cells, ``diodevss``/``diodevdd`` (names: diode to the ground, to the supply).
    """
    tech = load_technology(LARCH.with_name("open130.yaml")).technology
    for name, kinds, minority in (
        ("diodevss_2kv", N_OUTSIDE_NWELL, "nwell"),
        ("diodevdd_2kv", P_IN_NWELL, "substrate_tap"),
    ):
        source = open_layout(open_layouts / f"{name}.gds", technology=tech)
        layout = assemble_layout(derive_regions(source, tech, None, Workers()), tech)
        assert layout.emitters.kind.tolist() == [kinds]
        # the one diffusion of each cell
        injectors = replace(
            site().n("pin", INJECTOR).connected()[3], body=layout.emitters.body, net=np.array([-1])
        )
        ties = no_ties(len(layout.bodies), len(layout.taps.kind))
        rings, _ = find_rings(source, layout, no_nets(), no_pins(), ties, injectors, tech)
        majority = "substrate_tap" if kinds == N_OUTSIDE_NWELL else "well_tap"
        assert rings.material.tolist() == [majority, minority], name
        assert rings.closed.all(), name
        assert (rings.contacted_share > 0.9).all(), name


def test_an_isolated_p_well_is_enclosed_by_the_taps_of_the_well_around_it() -> None:
    inner = shapely.box(-6, -6, 6, 6)
    drawn = site().nwell(frame(-10, -10, 10, 10, 4)).ntap("vdd", frame(-9, -9, 9, 9, 0.5))
    drawn.ptap("vss", frame(-14, -14, 14, 14, 1)).inject_well("pin", 2)
    layout, (nets, pins, ties, injectors) = drawn.layout(), drawn.connected()
    isolated = replace(
        layout.bodies[1], kind="isolated_pwell", polygons=np.array([inner]), enclosing=0
    )
    layout = replace(layout, bodies=(*layout.bodies, isolated))
    source: Any = None
    rings, _ = find_rings(source, layout, nets, pins, ties, injectors, technology())
    assert rings.material.tolist() == ["well_tap", "substrate_tap"]
    assert rings.kind.tolist() == [MAJORITY, MINORITY]
    assert rings.net_suits.tolist() == [1, 1]
    assert rings.member_distance_um.tolist() == [2.5, 7.0]


def test_a_ring_of_many_short_taps_has_as_many_openings() -> None:
    side = [1.5 * step for step in range(-7, 8)]
    upright = [shapely.box(x, y, x + 1, y + 1) for x in (-10.5, 10.5) for y in side]
    level = [shapely.box(x, y, x + 1, y + 1) for x in side[1:-1] for y in (-10.5, 10.5)]
    taps = shapely.MultiPolygon([*upright, *level])
    rings, _ = site().n("pin", INJECTOR).ptap("vss", taps).find()
    # the closest way past a corner leaves the tap in the corner out
    expected = pytest.approx([0.5**0.5] * 4 + [0.5] * 48)
    assert rings.gap_um == expected
    assert rings.width_um.tolist() == [1]
    turned = affinity.rotate(taps, 45, origin=(0, 0))
    rings, _ = site().n("pin", INJECTOR).ptap("vss", turned).find()
    assert rings.gap_um == expected


def test_an_open_ring_of_two_pieces_is_found_inside_a_closed_one() -> None:
    """By hand: the seal ring of a chip hides no opening of the rings within."""
    outer = frame(-16, -16, 16, 16, 1)
    halves = RING - shapely.box(-1, -20, 1, 20)
    drawn = site().n("pin", INJECTOR).ptap("vss", outer)
    for half in shapely.get_parts(halves):
        drawn.ptap("vss", half)
    rings, _ = drawn.find()
    assert sorted(rings.closed.tolist()) == [False, True]
    assert rings.gap_um == pytest.approx([2.0, 2.0])


def test_a_crossing_runs_in_the_middle_of_edges_that_face_each_other() -> None:
    """By hand: every shortest line is 24 um long, only the one in the middle stays when turned."""
    well = shapely.box(20, -10, 40, 10)
    strip = shapely.box(10, -0.5, 11, 20)
    drawn = site().nwell(well).n("pin", shapely.box(-1, -4, 1, 4)).ptap("vss", strip)
    drawn.p("out", shapely.box(25, -2, 27, 8))
    _, crossings = drawn.find()
    assert crossings.from_um[0] == pytest.approx([1, 1], abs=1e-4)
    assert crossings.to_um[0] == pytest.approx([25, 1], abs=1e-4)
    assert crossings.p_strips.tolist() == [1, 1]


def test_an_opening_that_faces_another_diffusion_of_the_pin_is_found() -> None:
    """By hand: a slot of 2 um, through which a diffusion of the same pin is seen."""
    beyond = affinity.translate(INJECTOR, 0, 20)
    ring = RING - shapely.box(-1, 5, 1, 20)
    rings, _ = site().n("pin", INJECTOR, beyond).ptap("vss", ring).find()
    assert rings.gap_um == pytest.approx([2.0])
    assert rings.member_injector.tolist() == [0]
