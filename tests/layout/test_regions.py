"""Regions against shapely's own booleans, worked examples, and all ways to cut the work."""

from __future__ import annotations

import gdstk
import numpy as np
import pytest
import shapely
from drawn_blocks import (
    LAYERS,
    DrawnBlock,
    random_block,
    rectangle,
    technology,
    union,
)

from latchscan.errors import LayoutError, OptionError
from latchscan.layout.model import Label, Regions
from latchscan.layout.regions import Sizes, derive_regions, region_statistics
from latchscan.layout.source import open_layout
from latchscan.tasks import Silent, Workers, open_workers

OFFSETS = {
    "derived": {"deep_layer": "grow(wider(nwell, 1.5), 0.5)"},
    "buried": "(deep_layer or deep) and not marker",
    "n_diffusion_outside_nwell": "active and not (pplus or poly) and not shrink(nwell, 0.3)",
}


def derive(block, tech=None, **sizes) -> Regions:
    tech = tech or technology()
    return derive_regions(block, tech, None, Workers(), sizes=Sizes(**sizes))


def as_bytes(regions: Regions) -> dict[str, list[bytes]]:
    found = {
        name: [shapely.to_wkb(shape) for shape in shapes] for name, shapes in regions.shapes.items()
    }
    return {**found, "contact": [regions.contact_box_um.tobytes()]}


def only(shapes, side=20_000, **options) -> DrawnBlock:
    return DrawnBlock(shapes=shapes, bbox_dbu=(0, 0, side, side), **options)


def boxes_of(shapes) -> list[list[float]]:
    return np.round(shapely.bounds(shapes), 9).tolist()


@pytest.mark.parametrize("slanted", [False, True])
@pytest.mark.parametrize("seed", [1, 2, 3])
def test_booleans_equal_those_of_shapely(seed, slanted):
    block = random_block(seed, slanted=slanted)
    layer = {name: union(block, name) for name in LAYERS}
    nwell, active = layer["nwell"], layer["active"]
    expected = {
        "nwell": nwell,
        "pwell": shapely.box(*block.bbox_dbu) - nwell,
        "well_tap": active & layer["nplus"] & nwell,
        "substrate_tap": (active & layer["pplus"]) - nwell,
        "p_diffusion_in_nwell": (active & layer["pplus"] & nwell) - layer["poly"],
        "n_diffusion_outside_nwell": (active & layer["nplus"]) - (nwell | layer["poly"]),
        "buried": layer["deep"],
    }
    regions = derive(block, window_um=5.0)
    for name, shape in expected.items():
        found = regions.shapes[name]
        wanted = shapely.transform(shape, lambda points: points * block.database_unit_um)
        pieces = [part for part in shapely.get_parts(wanted) if part.area > 1e-9]
        assert shapely.is_valid(found).all()
        assert len(found) == len(pieces), name
        assert shapely.area(found).sum() == pytest.approx(wanted.area, abs=1e-6)
        assert shapely.area(shapely.union_all(found) ^ wanted) < 1e-6


@pytest.mark.parametrize(("seed", "slanted"), [(4, False), (5, True)])
def test_sizes_of_windows_and_tiles_change_no_byte(seed, slanted):
    block = random_block(seed, slanted=slanted)
    tech = technology(**OFFSETS)
    whole = as_bytes(derive(block, tech, window_um=500.0, tile_um=500.0))
    for window_um, tile_um in [(7.0, 500.0), (20.0, 11.0), (3.1, 11.0), (1.3, 24.0)]:
        assert as_bytes(derive(block, tech, window_um=window_um, tile_um=tile_um)) == whole


def test_shapes_at_any_angle_do_not_depend_on_windows():
    random = np.random.default_rng(8)
    wells = []
    for x, y in random.integers(2_000, 38_000, size=(12, 2)).tolist():
        corners = sorted(random.uniform(0.0, 2.0 * np.pi, size=7))
        wells.append([(x + round(3e3 * np.cos(a)), y + round(3e3 * np.sin(a))) for a in corners])
    block = only({"nwell": wells}, side=40_000)
    exact = shapely.transform(union(block, "nwell"), lambda points: points / 1000.0)
    whole = derive(block, window_um=500.0, tile_um=500.0).shapes["nwell"]
    for window_um in (7.0, 20.0):
        cut = derive(block, window_um=window_um, tile_um=20.0).shapes["nwell"]
        assert len(cut) == len(whole)
        # crossings off the grid round to a sixteenth of a database unit
        assert shapely.area(cut).sum() == pytest.approx(exact.area, abs=1e-2)
        assert shapely.hausdorff_distance(cut, whole).max() < 2e-4


def test_workers_change_no_byte():
    block = random_block(6)
    tech = technology(**OFFSETS)
    alone = derive(block, tech, tile_um=10.0)
    with open_workers(2, Silent()) as workers:
        shared = derive_regions(block, tech, None, workers, sizes=Sizes(tile_um=10.0))
    assert as_bytes(shared) == as_bytes(alone)


def test_repeated_windows_give_the_same_as_single_ones():
    cells = {name: [] for name in ("nwell", "active", "pplus", "contact")}
    for i in range(30):
        for j in range(20):
            x, y = 1900 * i, 900 * j
            cells["nwell"].append(rectangle(x + 600, y, x + 1300, y + 900))
            cells["active"].append(rectangle(x + 100, y - 100, x + 300, y + 400))
            cells["active"].append(
                [(x + 700, y), (x + 900, y), (x + 900, y + 300), (x + 850, y + 350), (x + 700, y)]
            )
            cells["pplus"].append(rectangle(x + 50, y, x + 1000, y + 900))
            cells["contact"].append(rectangle(x + 150, y + 100, x + 250, y + 200))
    options = {"shapes": cells, "bbox_dbu": (0, -100, 57_000, 18_000)}
    keyed = as_bytes(derive(DrawnBlock(**options, pitch_dbu=(1900, 900)), tile_um=29.0))
    plain = as_bytes(derive(DrawnBlock(**options), window_um=1000.0, tile_um=1000.0))
    assert keyed == plain
    assert len(plain["p_diffusion_in_nwell"]) == 600


def test_hierarchy_equals_flat_and_mirrored_equals_mirror(tmp_path):
    block = random_block(7, side=8_000, shapes=12)
    library = gdstk.Library(unit=1e-6, precision=1e-9)
    leaf, tree, flat = (library.new_cell(name) for name in ("leaf", "tree", "flat"))
    for name, shapes in block.shapes.items():
        for shape in shapes:
            points = np.array(shape) / 1000.0
            leaf.add(gdstk.Polygon(points, layer=LAYERS[name][0], datatype=LAYERS[name][1]))
    places = [((0, 0), 0.0, False), ((30, 0), np.pi / 2, False), ((0, 30), np.pi, True)]
    for origin, turn, flip in places:
        tree.add(gdstk.Reference(leaf, origin, rotation=turn, x_reflection=flip))
    flat.add(*tree.get_polygons())
    library.write_gds(tmp_path / "block.gds")
    tech = technology()
    found = [
        derive(open_layout(tmp_path / "block.gds", technology=tech, top=top), tech)
        for top in ("tree", "flat", "leaf")
    ]
    assert as_bytes(found[0]) == as_bytes(found[1])
    one, three = region_statistics(found[2]), region_statistics(found[0])
    assert one["well_tap"].count > 0
    for name in ("well_tap", "p_diffusion_in_nwell"):
        assert three[name].area_um2 == pytest.approx(3.0 * one[name].area_um2)
        assert three[name].count == 3 * one[name].count


def test_touching_in_a_point_is_not_connected():
    corner = only({"nwell": [rectangle(0, 0, 5000, 5000), rectangle(5000, 5000, 9000, 9000)]})
    for window_um in (2.5, 5.0, 100.0):
        assert len(derive(corner, window_um=window_um).shapes["nwell"]) == 2
    edge = only({"nwell": [rectangle(0, 0, 5000, 5000), rectangle(5000, 4999, 9000, 9000)]})
    assert len(derive(edge, window_um=2.5).shapes["nwell"]) == 1


def test_ring_drawn_on_a_slit_is_a_ring():
    slit = [
        (1000, 1000), (9000, 1000), (9000, 9000), (1000, 9000), (1000, 1000),
        (3000, 3000), (3000, 7000), (7000, 7000), (7000, 3000), (3000, 3000),
    ]  # fmt: skip
    regions = derive(only({"nwell": [slit]}), window_um=2.5)
    (ring,) = regions.shapes["nwell"]
    assert ring.area == pytest.approx(64.0 - 16.0)
    assert len(ring.interiors) == 1
    assert len(ring.exterior.coords) == 5
    assert sorted(np.round(shapely.area(regions.shapes["pwell"]), 9)) == [16.0, 336.0]


def test_a_lobe_that_winds_backwards_does_not_cancel_what_it_crosses():
    bow = [(0, 0), (8000, 8000), (8000, 0), (0, 8000)]
    block = only({"nwell": [bow, rectangle(5000, 2000, 8000, 6000)]})
    expected = shapely.union_all(
        [
            shapely.Polygon([(0, 0), (4, 4), (0, 8)]),
            shapely.Polygon([(4, 4), (8, 0), (8, 8)]),
            shapely.box(5, 2, 8, 6),
        ]
    )
    assert shapely.area(derive(block).shapes["nwell"]).sum() == pytest.approx(expected.area)


@pytest.mark.parametrize("grid", [1, 5, 10])
@pytest.mark.parametrize("turned", [False, True])
def test_wider_keeps_exactly_the_width(grid, turned):
    at_least, below = 3000, 3000 - grid
    shapes = [rectangle(0, 0, at_least, 15_000), rectangle(7000, 0, 7000 + below, 15_000)]
    if turned:
        shapes = [[(y, x) for x, y in shape] for shape in shapes]
    tech = technology(buried="wider(nwell, 3.0)")
    (kept,) = derive(only({"nwell": shapes}), tech, window_um=4.0).shapes["buried"]
    assert kept.area == pytest.approx(45.0, abs=1e-9)


def test_wider_cuts_off_a_narrow_arm_at_its_root():
    shape = [(0, 0), (5000, 0), (5000, 2000), (12_000, 2000), (12_000, 4000), (5000, 4000),
             (5000, 6000), (0, 6000)]  # fmt: skip
    tech = technology(buried="wider(nwell, 3.0)")
    (kept,) = derive(only({"nwell": [shape]}), tech).shapes["buried"]
    assert kept.bounds == pytest.approx((0.0, 0.0, 5.0, 6.0))


def test_wider_leaves_a_slanted_well_as_it_is():
    diamond = [(10_000, 2000), (18_000, 10_000), (10_000, 18_000), (2000, 10_000)]
    octagon = [(4000, 2000), (9000, 2000), (11_000, 4000), (11_000, 9000), (9000, 11_000),
               (4000, 11_000), (2000, 9000), (2000, 4000)]  # fmt: skip
    tech = technology(buried="wider(nwell, 3.0)")
    for shape in (diamond, octagon):
        regions = derive(only({"nwell": [shape]}), tech, window_um=5.0)
        (drawn,), (kept,) = regions.shapes["nwell"], regions.shapes["buried"]
        assert kept.area == pytest.approx(drawn.area, rel=1e-6)


def test_grow_and_shrink_keep_corners_sharp():
    block = only({"nwell": [rectangle(5000, 5000, 9000, 8000)]})
    tech = technology(buried="grow(nwell, 1.0)", injector="shrink(nwell, 0.5)")
    regions = derive(block, tech, window_um=3.0)
    assert boxes_of(regions.shapes["buried"]) == [[4.0, 4.0, 10.0, 9.0]]
    assert shapely.area(regions.shapes["buried"]) == pytest.approx([30.0])
    assert boxes_of(regions.shapes["injector"]) == [[5.5, 5.5, 8.5, 7.5]]


def test_only_contacts_on_taps_are_carried_and_each_once():
    tap = rectangle(4000, 4000, 8000, 6000)
    bent = [(10_000, 10_000), (16_000, 10_000), (16_000, 11_000), (11_000, 11_000),
            (11_000, 16_000), (10_000, 16_000)]  # fmt: skip
    shapes = {
        "active": [tap, bent],
        "pplus": [rectangle(0, 0, 20_000, 20_000)],
        "contact": [
            rectangle(4900, 4900, 5100, 5100),  # in the middle of four windows
            rectangle(4900, 4900, 5100, 5100),  # drawn twice
            rectangle(6000, 4500, 6200, 4700),
            rectangle(6100, 4600, 6300, 4800),  # overlaps the one before
            rectangle(8000, 4500, 8200, 4700),  # touches the tap from outside
            rectangle(14_000, 14_000, 14_200, 14_200),  # in the bend's box, not on it
            rectangle(10_400, 14_000, 10_600, 14_200),
            rectangle(1000, 1000, 1200, 1200),
        ],
    }
    expected = [[4.9, 4.9, 5.1, 5.1], [6.0, 4.5, 6.3, 4.8], [10.4, 14.0, 10.6, 14.2]]
    expected.sort(key=lambda box: (box[1], box[0]))
    for window_um in (5.0, 100.0):
        for contact in ("contact", "contact and not poly"):
            regions = derive(only(shapes), technology(contact=contact), window_um=window_um)
            assert regions.contact_box_um.round(9).tolist() == expected


@pytest.mark.parametrize("seed", [1, 2])
def test_contacts_on_taps_of_any_shape_are_those_of_shapely(seed):
    rng = np.random.default_rng(seed)
    ring = [(2000, 2000), (18_000, 2000), (18_000, 18_000), (2000, 18_000), (2000, 9000),
            (3000, 9000), (3000, 17_000), (17_000, 17_000), (17_000, 3000), (3000, 3000),
            (3000, 9000), (2000, 9000)]  # fmt: skip
    slanted = [(5000, 5000), (12_000, 5000), (14_000, 7000), (14_000, 12_000), (7000, 12_000)]
    thin = rectangle(15_000, 6000, 15_001, 12_000)
    low = rng.integers(0, 19_800, (2500, 2))
    bent = [(8000, 15_800), (8600, 15_800), (8600, 16_000), (8200, 16_000), (8200, 17_100),
            (8000, 17_100)]  # fmt: skip
    shapes = {
        "active": [ring, slanted, thin],
        "pplus": [rectangle(0, 0, 20_000, 20_000)],
        "contact": [rectangle(x, y, x + 70, y + 70) for x, y in low.tolist()] + [bent],
    }
    found = [
        derive(only(shapes), window_um=window_um, tile_um=tile_um)
        for window_um, tile_um in ((4.0, 7.0), (100.0, 500.0))
    ]
    assert as_bytes(found[0]) == as_bytes(found[1])
    taps = shapely.union_all(found[0].shapes["substrate_tap"])
    drawn = shapely.box(*np.hstack([low, low + 70]).T / 1000.0)
    on_tap = np.append(drawn, shapely.box(8.0, 15.8, 8.6, 17.1))
    on_tap = on_tap[shapely.area(shapely.intersection(on_tap, taps)) > 1e-9]
    groups = shapely.get_parts(shapely.union_all(on_tap))
    # touching groups merge to their boxes; where boxes of groups meet in turn is rare
    boxes = shapely.box(*shapely.bounds(groups).T)
    while len(merged := shapely.get_parts(shapely.union_all(boxes))) < len(boxes):
        boxes = shapely.box(*shapely.bounds(merged).T)
    expected = np.round(shapely.bounds(boxes), 6)
    expected = expected[np.lexsort((expected[:, 0], expected[:, 1]))]
    assert np.array_equal(found[0].contact_box_um.round(6), expected)


def test_a_window_limits_the_box_and_the_labels():
    texts = tuple(
        Label(text=t, layer=60, texttype=0, x_um=x, y_um=5.0) for t, x in [("IN", 3.0), ("B", 15.0)]
    )
    block = only({"nwell": [rectangle(0, 0, 20_000, 4000)]}, texts=texts)
    regions = derive_regions(block, technology(), (2.0, 1.0, 8.0, 90.0), Workers())
    assert regions.bbox_um == (2.0, 1.0, 8.0, 20.0)
    assert boxes_of(regions.shapes["nwell"]) == [[2.0, 1.0, 8.0, 4.0]]
    assert [label.text for label in regions.labels] == ["IN"]


@pytest.mark.parametrize("window_um", [(2.0, 10.0, 8.0, 15.0), (50.0, 50.0, 60.0, 60.0)])
def test_an_empty_window_is_refused_with_the_blocks_box(window_um):
    block = only({"nwell": [rectangle(0, 0, 20_000, 4000)]})
    with pytest.raises(OptionError, match="no shape") as caught:
        derive_regions(block, technology(), window_um, Workers())
    assert "0 0 20 20" in caught.value.hint


def test_an_empty_block_is_refused():
    with pytest.raises(LayoutError, match="no shape"):
        derive(only({}))


def test_a_block_far_too_large_is_refused():
    block = DrawnBlock(
        shapes={"nwell": [rectangle(0, 0, 5000, 5000)]}, bbox_dbu=(0, 0, 5000, 10**9)
    )
    with pytest.raises(LayoutError, match="at most"):
        derive(block)


def test_a_large_sparse_block_is_one_substrate():
    far = rectangle(50_000_000, 30_000_000, 50_002_000, 30_001_000)
    shapes = {"nwell": [rectangle(0, 0, 1000, 1000), far]}
    regions = derive(DrawnBlock(shapes=shapes, bbox_dbu=(0, 0, 50_002_000, 30_001_000)))
    assert boxes_of(regions.shapes["nwell"])[0] == [0.0, 0.0, 1.0, 1.0]
    (pwell,) = regions.shapes["pwell"]
    assert pwell.area == pytest.approx(50_002.0 * 30_001.0 - 3.0, rel=1e-12)


def test_statistics_count_and_measure():
    block = only({"nwell": [rectangle(0, 0, 2000, 1000), rectangle(5000, 0, 6000, 1000)]})
    statistics = region_statistics(derive(block))
    assert statistics["nwell"].count == 2
    assert statistics["nwell"].area_um2 == pytest.approx(3.0)
    assert statistics["pwell"].area_um2 == pytest.approx(397.0)
    assert statistics["well_tap"].count == 0
