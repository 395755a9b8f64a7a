"""Bodies, taps and emitters on small blocks whose answers are counted by hand."""

from __future__ import annotations

import numpy as np
import pytest
import shapely
from drawn_blocks import DrawnBlock, random_block, rectangle, technology

from latchscan.layout.bodies import assemble_layout
from latchscan.layout.model import (
    N_OUTSIDE_NWELL,
    P_IN_NWELL,
    SUBSTRATE_TAP,
    WELL_TAP,
    Label,
    Layout,
)
from latchscan.layout.regions import derive_regions
from latchscan.tasks import Workers
from latchscan.technology.load import load_technology

SIDE = 40_000


def ring(x0, y0, x1, y1, width, gap=0):
    """Four bars around a box; the right one may leave a gap at the top."""
    return [
        rectangle(x0, y0, x1, y0 + width),
        rectangle(x0, y1 - width, x1, y1),
        rectangle(x0, y0, x0 + width, y1),
        rectangle(x1 - width, y0, x1, y1 - width - gap),
    ]


def layout(shapes, tech=None, texts=()) -> Layout:
    block = DrawnBlock(shapes=shapes, bbox_dbu=(0, 0, SIDE, SIDE), texts=tuple(texts))
    tech = tech or technology()
    return assemble_layout(derive_regions(block, tech, None, Workers()), tech)


def sheet_areas(body) -> dict[str, float]:
    found: dict[str, float] = {}
    for kind, polygon in body.sheets:
        found[kind] = round(found.get(kind, 0.0) + polygon.area, 6)
    return found


def test_wells_are_numbered_by_place_and_the_substrate_is_one():
    found = layout(
        {
            "nwell": [
                rectangle(20_000, 1000, 30_000, 5000),
                rectangle(1000, 1000, 9000, 5000),
                rectangle(0, 20_000, SIDE, 25_000),
            ]
        }
    )
    assert [body.id for body in found.bodies] == ["nwell-1", "nwell-2", "nwell-3", "substrate"]
    assert found.bodies[0].polygons[0].bounds == (1.0, 1.0, 9.0, 5.0)
    assert found.bodies[1].polygons[0].bounds == (20.0, 1.0, 30.0, 5.0)
    substrate = found.bodies[-1]
    assert len(substrate.polygons) == 2
    assert sheet_areas(substrate) == {"pwell": 1600.0 - 40.0 - 32.0 - 200.0}


def test_wells_on_one_buried_layer_are_one_body():
    shapes = {
        "nwell": [rectangle(1000, 1000, 9000, 9000), rectangle(15_000, 1000, 20_000, 9000)],
        "deep": [rectangle(5000, 2000, 17_000, 8000)],
    }
    found = layout(shapes)
    assert [body.id for body in found.bodies] == ["nwell-1", "substrate"]
    assert sheet_areas(found.bodies[0]) == {
        "nwell": 64.0 - 24.0 + 40.0 - 12.0,
        "nwell_over_buried": 36.0,
        "buried": 36.0,
    }
    shapes["deep"] = [rectangle(5000, 2000, 15_000, 8000)]  # touches the second only
    apart = layout(shapes)
    assert [body.id for body in apart.bodies] == ["nwell-1", "nwell-2", "substrate"]
    assert sheet_areas(apart.bodies[0]) == {"nwell": 40.0, "nwell_over_buried": 24.0}


def test_the_fringe_of_a_buried_layer_around_one_well_is_left_out():
    found = layout(
        {
            "nwell": [rectangle(5000, 5000, 15_000, 15_000)],
            "deep": [rectangle(4000, 4000, 16_000, 16_000)],
        }
    )
    assert sheet_areas(found.bodies[0]) == {"nwell_over_buried": 100.0}


@pytest.mark.parametrize("without", ["over", "buried"])
def test_kinds_without_a_value_fall_back_to_the_plain_well(without):
    tech = technology()
    name = {
        "over": "nwell_over_buried_sheet_resistance_ohm_sq",
        "buried": "buried_sheet_resistance_ohm_sq",
    }[without]
    tech = tech.model_copy(update={"wells": tech.wells.model_copy(update={name: None})})
    shapes = {
        "nwell": [rectangle(0, 0, 10_000, 10_000), rectangle(12_000, 0, 22_000, 10_000)],
        "deep": [rectangle(0, 0, 22_000, 10_000)],
    }
    expected = {
        "over": {"nwell": 200.0, "buried": 20.0},
        "buried": {"nwell_over_buried": 200.0, "nwell": 20.0},
    }
    assert sheet_areas(layout(shapes, tech).bodies[0]) == expected[without]


@pytest.mark.parametrize(
    ("gap", "deep", "isolated"),
    [
        (0, rectangle(10_000, 10_000, 30_000, 30_000), True),
        (0, rectangle(8000, 8000, 32_000, 32_000), True),
        (1000, rectangle(10_000, 10_000, 30_000, 30_000), False),
        (0, rectangle(10_000, 10_000, 27_000, 30_000), False),
        (0, None, False),
    ],
)
def test_an_isolated_pwell_needs_a_closed_ring_and_a_whole_floor(gap, deep, isolated):
    found = layout(
        {
            "nwell": ring(10_000, 10_000, 30_000, 30_000, 2000, gap),
            "deep": [] if deep is None else [deep],
            "active": [rectangle(18_000, 18_000, 20_000, 20_000)],
            "nplus": [rectangle(17_000, 17_000, 21_000, 21_000)],
        }
    )
    kinds = [body.kind for body in found.bodies]
    assert kinds == (["nwell", "isolated_pwell"] if isolated else ["nwell"]) + ["substrate"]
    assert found.bodies[int(found.emitters.body[0])].id == ("pwell-1" if isolated else "substrate")
    if isolated:
        well, inner, substrate = found.bodies
        assert inner.enclosing == 0
        assert inner.id == "pwell-1"
        assert sheet_areas(inner) == {"isolated_pwell": 256.0}
        assert sheet_areas(well) == {"nwell_over_buried": 144.0, "buried": 256.0}
        assert sheet_areas(substrate) == {"pwell": 1200.0}


def test_a_well_inside_an_isolated_pwell_is_on_the_same_floor():
    found = layout(
        {
            "nwell": [
                *ring(5000, 5000, 35_000, 35_000, 2000),
                rectangle(15_000, 15_000, 20_000, 20_000),
            ],
            "deep": [rectangle(5000, 5000, 35_000, 35_000)],
        }
    )
    assert [body.kind for body in found.bodies] == ["nwell", "isolated_pwell", "substrate"]
    assert len(found.bodies[0].polygons) == 2


def test_taps_know_their_body_and_contacts():
    contact = rectangle(3000, 3000, 3200, 3200)
    found = layout(
        {
            "nwell": [rectangle(0, 0, 10_000, 10_000)],
            "active": [rectangle(2000, 2000, 6000, 4000), rectangle(20_000, 2000, 24_000, 4000)],
            "nplus": [rectangle(1000, 1000, 7000, 5000)],
            "pplus": [rectangle(19_000, 1000, 25_000, 5000)],
            "contact": [contact, rectangle(5900, 3000, 6100, 3200)],
        }
    )
    taps = found.taps
    assert taps.kind.tolist() == [WELL_TAP, SUBSTRATE_TAP]
    assert [found.bodies[body].id for body in taps.body] == ["nwell-1", "substrate"]
    assert taps.contact_count.tolist() == [2, 0]
    assert taps.contact_first.tolist() == [0, 2, 2]
    assert taps.contact_box_um.round(9).tolist() == [[3.0, 3.0, 3.2, 3.2], [5.9, 3.0, 6.1, 3.2]]


def test_a_tap_across_two_bodies_belongs_to_each_with_its_part():
    found = layout(
        {
            "nwell": ring(10_000, 10_000, 30_000, 30_000, 2000),
            "deep": [rectangle(10_000, 10_000, 30_000, 30_000)],
            "active": [rectangle(5000, 19_000, 15_000, 20_000)],
            "pplus": [rectangle(0, 0, SIDE, SIDE)],
            "contact": [rectangle(6000, 19_400, 6200, 19_600)],
        },
        technology(substrate_tap="active and pplus"),
    )
    taps = found.taps
    by_body = {found.bodies[b].id: t for t, b in enumerate(taps.body.tolist())}
    inner = taps.polygons[by_body["pwell-1"]]
    assert inner.bounds == (12.0, 19.0, 15.0, 20.0)
    outer = [t for t, b in enumerate(taps.body) if found.bodies[b].id == "substrate"]
    assert taps.contact_count[by_body["pwell-1"]] == 0
    assert sum(taps.contact_count[outer]) == 1


def test_an_emitter_across_the_wells_edge_is_its_part_inside():
    found = layout(
        {
            "nwell": [rectangle(0, 0, 10_000, 10_000)],
            "active": [rectangle(8000, 2000, 14_000, 4000)],
            "pplus": [rectangle(7000, 1000, 15_000, 5000)],
        },
        technology(p_diffusion_in_nwell="active and pplus"),
    )
    emitters = found.emitters
    assert emitters.ids.tolist() == ["p-1"]
    assert emitters.box_um.tolist() == [[8.0, 2.0, 10.0, 4.0]]
    assert emitters.area_um2 == pytest.approx([4.0])


def test_emitters_are_numbered_within_their_kind_by_place():
    found = layout(
        {
            "nwell": [rectangle(0, 0, 10_000, SIDE)],
            "active": [
                rectangle(x, y, x + 1000, y + 1000)
                for x, y in [(5000, 9000), (2000, 9000), (2000, 1000), (20_000, 1000)]
            ],
            "pplus": [rectangle(0, 0, 10_000, SIDE)],
            "nplus": [rectangle(12_000, 0, SIDE, SIDE)],
        }
    )
    emitters = found.emitters
    assert emitters.ids.tolist() == ["p-1", "p-2", "p-3", "n-1"]
    assert emitters.kind.tolist() == [P_IN_NWELL] * 3 + [N_OUTSIDE_NWELL]
    assert emitters.box_um[:, :2].tolist() == [[2.0, 1.0], [2.0, 9.0], [5.0, 9.0], [20.0, 1.0]]


@pytest.mark.parametrize(("edge", "over"), [(4900, False), (5100, True)])
def test_over_buried_goes_by_most_of_the_area(edge, over):
    found = layout(
        {
            "nwell": [rectangle(0, 0, 10_000, 10_000)],
            "active": [rectangle(4000, 2000, 6000, 4000)],
            "pplus": [rectangle(0, 0, 10_000, 10_000)],
            "deep": [rectangle(0, 0, edge, 10_000)],
        }
    )
    assert found.emitters.over_buried.tolist() == [over]


@pytest.mark.parametrize(
    ("keep", "expected"),
    [(False, ["PAD_A", "", "", "", "marker", ""]), (True, ["", "", "", "", "marker", ""])],
)
def test_pins_and_markers_make_injectors_and_supplies_do_not(keep, expected):
    def text(name, x_um):
        return Label(text=name, layer=60, texttype=0, x_um=x_um, y_um=3.0)

    tech = technology()
    # with conductors it is nets that tell a pin's diffusions, and only markers stand here
    conductors = load_technology("larch180").technology.conductors if keep else None
    found = layout(
        {
            "active": [rectangle(1000 + 4000 * i, 2000, 3000 + 4000 * i, 4000) for i in range(6)],
            "nplus": [rectangle(0, 0, SIDE, SIDE)],
            "marker": [rectangle(17_500, 0, 19_000, SIDE), rectangle(23_000, 0, 24_000, SIDE)],
        },
        tech=tech.model_copy(update={"conductors": conductors}),
        texts=[text("PAD_A", 2.0), text("VSS", 6.0), text("vddio", 10.0), text("PAD_B", 12.0)],
    )
    # PAD_B lies beside the third diffusion; the last marker only touches the sixth
    assert found.emitters.injector.tolist() == expected


@pytest.mark.parametrize("seed", [11, 12, 13])
def test_memberships_equal_those_found_one_by_one(seed):
    block = random_block(seed)
    tech = technology()
    found = assemble_layout(derive_regions(block, tech, None, Workers()), tech)
    wells = [b for b in found.bodies if b.kind == "nwell"]
    regions = found.regions.shapes
    for body in found.bodies:
        whole = shapely.union_all([p for kind, p in body.sheets if kind != "buried"])
        assert shapely.area(whole ^ shapely.union_all(body.polygons)) < 1e-6
        total = sum(p.area for kind, p in body.sheets if kind != "buried")
        assert total == pytest.approx(whole.area)
    for one in wells:
        for other in wells:
            if one is not other:
                floors = [
                    floor
                    for floor in regions["buried"]
                    if all(
                        shapely.area(floor & shapely.union_all(w.polygons)) > 1e-6
                        for w in (one, other)
                    )
                ]
                assert floors == []
    for kind, name in [(P_IN_NWELL, "p_diffusion_in_nwell")]:
        assert np.count_nonzero(found.emitters.kind == kind) == len(regions[name])
    for polygon, body in zip(found.emitters.polygons, found.emitters.body, strict=True):
        home = shapely.union_all(found.bodies[body].polygons)
        assert shapely.area(polygon - home) < 1e-6
