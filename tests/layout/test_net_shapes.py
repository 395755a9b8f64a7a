"""What is drawn of named nets: against brute force (gdstk, shapely, networkx) and by hand."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
import shapely
from hypothesis import given, settings
from hypothesis import strategies as st
from net_layouts import Wiring, conductors, drawn_of, random_wiring, technology, traced
from net_reference import reference_shapes

from latchscan.layout.connections import Nets
from latchscan.layout.trace import drawn as drawn_module
from latchscan.layout.trace.rectangles import joined_runs

AREA_UM2 = 1e-9
"""A thousandth of a square of ten database units: rounding of slanted edges, nothing drawn."""


def columns(nets: Nets) -> list[object]:
    """The columns of shapes as bytes."""
    return [
        *(c.tobytes() for c in (nets.shape_net, nets.shape_layer, nets.shape_box_um)),
        nets.shape_total.tolist(),
        [shapely.to_wkb(shape) for shape in nets.shape_polygon],
    ]


@pytest.mark.parametrize("seed", range(12))
def test_shapes_are_those_of_brute_force(tmp_path: Path, seed: int) -> None:
    drawn = random_wiring(seed)
    path = drawn.write(tmp_path / "wiring.gds")
    expected = reference_shapes(path, "wiring", technology(), drawn.labels)
    assert len(expected) > 5
    for tile_um in (None, 0.7, 2.0):
        sizes = {} if tile_um is None else {"tile_um": tile_um}
        nets = traced(path, technology(), top="wiring", **sizes)
        found: dict[object, list[object]] = {}
        for (net, layer), shape in drawn_of(nets).items():
            found.setdefault((nets.names[net], nets.layers[layer]), []).append(shape)
        assert set(found) == set(expected)
        for key, shapes in found.items():
            known = shapely.transform(expected[key], lambda points: points / 1000)
            assert shapely.symmetric_difference(shapely.union_all(shapes), known).area < AREA_UM2
        assert np.bincount(nets.shape_net, minlength=len(nets.ids)).tolist() == (
            nets.shape_total.tolist()
        )


def test_a_wire_over_many_tiles_comes_once_and_whole(tmp_path: Path) -> None:
    """Seams show nowhere; twice drawn counts once; parts in a row are one; worked by hand."""
    drawn = Wiring().label("A", "metal1", 50, 50)
    for x in range(0, 9000, 1000):
        drawn.rect("metal1", x, 0, x + 1000, 100)
    drawn.rect("metal1", 2000, 0, 2500, 100)
    for y in range(100, 900, 200):
        drawn.rect("metal1", 4000, y, 4200, y + 200)
    drawn.rect("metal1", 0, 2000, 100, 2100)
    path = drawn.write(tmp_path / "a.gds")
    for tile_um in (None, 0.3, 1.0):
        sizes = {} if tile_um is None else {"tile_um": tile_um}
        nets = traced(path, technology(), **sizes)
        assert np.round(nets.shape_box_um, 6).tolist() == [[0, 0, 9, 0.1], [4, 0.1, 4.2, 0.9]]
        assert nets.shape_net.tolist() == [0, 0]
        assert nets.shape_total.tolist() == [2]
        assert nets.shape_polygon.tolist() == [None, None]
        assert [nets.layers[layer] for layer in nets.shape_layer] == ["metal1", "metal1"]


def test_slanted_shapes_keep_their_outline(tmp_path: Path) -> None:
    """Drawn twice, from another corner, it is still one shape; worked by hand."""
    points = [(0, 0), (400, 0), (800, 400), (400, 400)]
    drawn = Wiring().label("A", "metal2", 200, 50).polygon("metal2", points)
    drawn.polygon("metal2", points[2:] + points[:2])
    nets = traced(drawn.write(tmp_path / "a.gds"), technology(), tile_um=0.3)
    (shape,) = nets.shape_polygon
    assert shape.equals_exact(
        shapely.normalize(shapely.Polygon([(x / 1000, y / 1000) for x, y in points])), 1e-9
    )
    assert np.round(nets.shape_box_um, 6).tolist() == [[0, 0, 0.8, 0.4]]
    assert nets.shape_total.tolist() == [1]


def test_poly_and_metal_behind_it_belong_to_a_net(tmp_path: Path) -> None:
    """Metals that poly straps, far from the label and in other tiles; vias are no shapes."""
    drawn = Wiring().rect("poly", 0, 0, 3000, 100).label("A", "metal1", 10, 10)
    for x in (0, 2900):
        drawn.rect("metal1", x, 0, x + 100, 100).rect("contact", x + 20, 20, x + 80, 80)
    drawn.rect("metal2", 2900, 0, 3000, 1000).rect("via1", 2920, 20, 2980, 80)
    drawn.rect("metal1", 1000, 500, 1100, 600).rect("active", 1000, 500, 1100, 600)
    drawn.rect("contact", 1020, 520, 1080, 580)
    path = drawn.write(tmp_path / "a.gds")
    for tile_um in (None, 0.5):
        sizes = {} if tile_um is None else {"tile_um": tile_um}
        nets = traced(path, technology(), **sizes)
        assert nets.names == (("A",), ())
        told = zip(nets.shape_layer.tolist(), nets.shape_box_um.tolist(), strict=True)
        assert [(nets.layers[layer], np.round(box, 6).tolist()) for layer, box in told] == [
            ("poly", [0, 0, 3, 0.1]),
            ("metal1", [0, 0, 0.1, 0.1]),
            ("metal1", [2.9, 0, 3, 0.1]),
            ("metal2", [2.9, 0, 3, 1]),
        ]
        assert nets.shape_total.tolist() == [4, 0]


def test_a_pad_alone_makes_the_shapes_of_its_net_known(tmp_path: Path) -> None:
    """A pad without a label, and the same wire without either; worked by hand."""
    drawn = Wiring().rect("metal3", 0, 0, 500, 500).rect("pad_recognition", 100, 100, 300, 300)
    drawn.rect("metal3", 0, 1000, 500, 1500).rect("metal2", 0, 2000, 10, 2010)
    section = conductors(pads={"shape": "pad_recognition", "on": "metal3"})
    path = drawn.write(tmp_path / "a.gds")
    for tile_um in (None, 0.2):
        sizes = {} if tile_um is None else {"tile_um": tile_um}
        nets = traced(path, technology(section), **sizes)
        assert np.round(nets.shape_box_um, 6).tolist() == [[0, 0, 0.5, 0.5]]
        assert nets.shape_total.tolist() == [1]


def test_of_too_many_shapes_the_largest_are_kept(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """Of five shapes three: the two largest and the lower, leftmost of equals."""
    monkeypatch.setattr(drawn_module, "MOST_SHAPES", 3)
    drawn = Wiring().rect("metal1", 0, 0, 1000, 100).label("A", "metal1", 10, 10)
    drawn.rect("metal1", 0, 100, 100, 300).rect("metal1", 400, 100, 500, 300)
    drawn.rect("metal1", 800, 100, 900, 300).polygon("metal1", [(600, 100), (1500, 900), (700, 99)])
    drawn.rect("metal1", 0, 2000, 100, 2100).label("B", "metal1", 10, 2010)
    path = drawn.write(tmp_path / "a.gds")
    whole = traced(path, technology())
    assert whole.shape_total.tolist() == [5, 1]
    assert np.round(whole.shape_box_um, 6).tolist() == [
        [0, 0, 1, 0.1],
        [0.6, 0.099, 1.5, 0.9],
        [0, 0.1, 0.1, 0.3],
        [0, 2, 0.1, 2.1],
    ]
    assert columns(traced(path, technology(), tile_um=0.4)) == columns(whole)


RECTANGLES = st.lists(
    st.tuples(*(st.integers(0, 6) for _ in range(2)), *(st.integers(1, 4) for _ in range(2))),
    min_size=1,
    max_size=25,
)


@settings(max_examples=80, deadline=None)
@given(rectangles=RECTANGLES, axis=st.sampled_from([0, 1]), data=st.data())
def test_joined_runs_cover_the_same_whatever_is_joined_first(
    rectangles: list[tuple[int, int, int, int]], axis: int, data: st.DataObject
) -> None:
    """The union stays (shapely), no two of what is left go on in each other."""
    box = np.array([(x, y, x + w, y + h) for x, y, w, h in rectangles])
    key = np.array(data.draw(st.lists(st.integers(0, 1), min_size=len(box), max_size=len(box))))
    found, found_key = joined_runs(box, key, axis)
    for one in (0, 1):
        before = shapely.union_all(shapely.box(*box[key == one].T))
        after = shapely.union_all(shapely.box(*found[found_key == one].T))
        assert shapely.equals(before, after)
    across = np.column_stack([found_key, found[:, 1 - axis], found[:, 3 - axis]])
    same = (across[1:] == across[:-1]).all(axis=1)
    assert (found[1:, axis] > found[:-1, axis + 2])[same].all()
    part = len(box) // 2
    halves = [joined_runs(box[run], key[run], axis) for run in (slice(part), slice(part, None))]
    both = (np.concatenate(columns) for columns in zip(*halves, strict=True))
    again, again_key = joined_runs(*both, axis)
    assert np.array_equal(again, found)
    assert np.array_equal(again_key, found_key)
