"""Paths of nets: what they cover, how long they get, and what becomes of too much.

Sources: shapely for what shapes cover; the nonzero rule of SVG 1.1, 11.3.  The bounds of size
are the project's own.
"""

from __future__ import annotations

import re
from dataclasses import replace
from typing import Any

import numpy as np
import pytest
import shapely
from hypothesis import given, settings
from hypothesis import strategies as st
from named_nets import named_nets

from latchscan.layout.connections import Nets
from latchscan.report import svg_nets
from latchscan.report.frame import Frame
from latchscan.report.svg_nets import fair_share, net_paths, net_wiring, pixel_path, wiring_words

FRAME = Frame(box_um=(0.0, 0.0, 200.0, 100.0), left=10.0, top=20.0, scale=4.0)
"""A page unit is 0.25 um."""


def wired(shapes: list[tuple[int, Any]], *, nets: int = 2, total: int | None = None) -> Nets:
    """Nets with shapes in metal; of the first one `total` where given."""
    rows = sorted(shapes, key=lambda one: one[0])
    polygons = np.empty(len(rows), dtype=np.object_)
    for row, (_, shape) in enumerate(rows):
        polygons[row] = None if shapely.area(shape) == shapely.box(*shape.bounds).area else shape
    net = np.array([one for one, _ in rows], dtype=np.int64)
    count = np.bincount(net, minlength=nets)
    count[0] = total or count[0]
    return replace(
        named_nets([[f"n{row}"] for row in range(nets)]),
        shape_net=net,
        shape_layer=np.zeros(len(rows), dtype=np.int64),
        shape_box_um=np.array([shape.bounds for _, shape in rows]).reshape(-1, 4),
        shape_polygon=polygons,
        shape_total=count,
    )


def covered_by(path: str) -> Any:
    """What a path covers whose rings all turn the same way, by the nonzero rule [um]."""
    found = []
    for ring in re.findall(r"M(-?\d+) (-?\d+)([^M]*)z", path):
        x, y = int(ring[0]), int(ring[1])
        points = [(x, y)]
        for kind, values in re.findall(r"([hvl])([-\d ]+)", ring[2]):
            numbers = [int(value) for value in values.split()]
            pairs = {
                "h": [(numbers[0], 0)],
                "v": [(0, numbers[0])],
                "l": list(zip(numbers[::2], numbers[1::2], strict=len(numbers) % 2 == 0)),
            }[kind]
            for dx, dy in pairs:
                x, y = x + dx, y + dy
                points.append((x, y))
        assert shapely.is_ccw(shapely.LinearRing(points))
        found.append(shapely.Polygon(points))
    return shapely.transform(shapely.union_all(found), lambda at: at / 1000)


def only(nets: Nets, *members: int) -> str:
    """Path of the wiring of some nets."""
    return net_paths(nets, [np.array(members, dtype=np.int64)], FRAME)[0][0]


def test_few_shapes_are_drawn_as_they_are() -> None:
    slanted = shapely.Polygon([(50, 50), (60, 50), (70, 60), (60, 60)])
    shapes = [shapely.box(0, 0, 80, 2), shapely.box(10, 0, 12, 60), slanted]
    nets = wired([*((0, shape) for shape in shapes), (1, shapely.box(0, 90, 9, 99))])
    covered = covered_by(only(nets, 0))
    assert shapely.symmetric_difference(covered, shapely.union_all(shapes)).area < 1e-6
    both = shapely.union_all([*shapes, shapely.box(0, 90, 9, 99)])
    assert shapely.symmetric_difference(covered_by(only(nets, 0, 1)), both).area < 1e-6
    assert only(nets) == ""


def test_what_is_too_small_to_see_is_left_out_unless_it_is_all() -> None:
    specks = [(0, shapely.box(x, 5, x + 0.1, 5.1)) for x in range(10)]
    thin = (0, shapely.box(20, 5, 60, 5.1))
    assert only(wired([*specks, thin]), 0).count("M") == 1
    assert only(wired(specks), 0).count("M") == 10
    # nothing is drawn of what lies beside the map
    assert only(wired([(0, shapely.box(300, 5, 310, 6))]), 0) == ""


@pytest.mark.parametrize("count", [svg_nets.MOST_DRAWN + 500, 20_000])
def test_many_shapes_take_pixels_that_cover_them(count: int) -> None:
    rng = np.random.default_rng(count)
    corner = rng.uniform((0, 0), (190, 95), size=(count, 2))
    boxes = shapely.box(*corner.T, *(corner + rng.uniform(0.2, 4, size=(count, 2))).T)
    nets = wired([(0, box) for box in boxes])
    path = only(nets, 0)
    assert len(path) <= svg_nets.MOST_OF_ONE
    drawn, covered = shapely.union_all(boxes), covered_by_rectangles(path)
    assert shapely.difference(drawn, covered).area < 1e-6
    pixel = 4 / FRAME.scale
    assert shapely.difference(covered, shapely.buffer(drawn, 1.5 * pixel)).area < 1e-6


def covered_by_rectangles(path: str) -> Any:
    """What rectangles cover that do not overlap [um]."""
    found = re.findall(r"M(-?\d+) (-?\d+)h(\d+)v(\d+)h-\d+z", path)
    assert len(found) == path.count("M")
    x, y, width, height = np.array(found, dtype=np.int64).T / 1000
    boxes = shapely.box(x, y, x + width, y + height)
    whole = shapely.union_all(boxes)
    assert whole.area == pytest.approx(shapely.area(boxes).sum(), rel=1e-9)
    return whole


@settings(max_examples=60, deadline=None)
@given(
    points=st.lists(
        st.tuples(st.integers(1, 199), st.integers(1, 99)), min_size=3, max_size=3, unique=True
    )
)
def test_a_slanted_shape_takes_the_pixels_along_it(points: list[tuple[int, int]]) -> None:
    """A triangle in pixels covers it and reaches no farther than two pixels beyond."""
    shape = shapely.convex_hull(shapely.MultiPoint(points))
    if shape.area < 20:
        return
    path = pixel_path(np.zeros((0, 4)), np.array([shape]), FRAME, 10**9)
    covered = covered_by_rectangles(path)
    assert shapely.difference(shape, covered).area < 1e-2
    assert shapely.buffer(shape, 3 / FRAME.scale).covers(covered)


@settings(max_examples=100, deadline=None)
@given(
    lengths=st.lists(st.integers(0, 1000), min_size=1, max_size=30),
    total=st.integers(0, 10_000),
)
def test_the_share_is_fair(lengths: list[int], total: int) -> None:
    """All together keep to the total, and one more for each would not."""
    share = fair_share(lengths, total)
    assert sum(min(length, share) for length in lengths) <= total
    if sum(lengths) > total:
        assert sum(min(length, share + 1) for length in lengths) > total


def test_sixty_large_nets_stay_small_together() -> None:
    rng = np.random.default_rng(5)
    shapes = []
    for net in range(60):
        corner = rng.uniform((0, 0), (190, 95), size=(1200 if net % 2 else 900, 2))
        boxes = shapely.box(*corner.T, *(corner + rng.uniform(0.1, 1.5, size=corner.shape)).T)
        shapes += [(net, box) for box in boxes]
    nets = wired(shapes, nets=60)
    paths = net_paths(nets, [np.array([net]) for net in range(60)], FRAME)
    total = sum(len(path) for both in paths for path in both)
    assert svg_nets.MOST_CHARACTERS / 4 < total <= svg_nets.MOST_CHARACTERS
    assert all(wiring for wiring, _ in paths)


def test_what_is_not_drawn_is_told() -> None:
    one = [(0, shapely.box(0, 0, 1, 1)), (1, shapely.box(5, 5, 6, 6))]
    nets = wired(one, total=7)
    assert wiring_words(nets, np.array([0])) == "wiring shown: the 1 largest of 7 shapes"
    assert wiring_words(nets, np.array([0, 1])) == "wiring shown: the 2 largest of 8 shapes"
    assert wiring_words(nets, np.array([1])) == ""
    assert wiring_words(nets, np.array([], dtype=np.int64)) == ""


def test_wiring_is_parted_into_rectangles_and_the_rest() -> None:
    slanted = shapely.Polygon([(50, 50), (60, 50), (70, 60), (60, 60)])
    nets = wired([(0, shapely.box(0, 0, 1, 1)), (0, slanted), (1, shapely.box(5, 5, 6, 6))])
    boxes, polygons = net_wiring(nets, np.array([0]))
    assert boxes.tolist() == [[0, 0, 1, 1]]
    assert polygons.tolist() == [slanted]
    boxes, polygons = net_wiring(nets, np.array([1]))
    assert boxes.tolist() == [[5, 5, 6, 6]]
    assert len(polygons) == 0


def test_diffusions_and_pads_that_overlap_leave_no_hole() -> None:
    """A bond pad over diffusions of its net: all of it is filled."""
    nets = named_nets([["A"]], pads=[0], pieces=[0])
    piece, pad = shapely.box(10, 10, 20, 20), shapely.box(15, 15, 40, 40)
    nets = replace(nets, piece_polygons=np.array([piece]), pad_polygons=np.array([pad]))
    path = net_paths(nets, [np.array([0])], FRAME)[0][1]
    both = shapely.union(piece, pad)
    assert shapely.symmetric_difference(covered_by(path), both).area < 1e-6


def test_a_ring_among_many_diffusions_stays_open() -> None:
    """Where there are too many shapes to draw each, a frame is no filled rectangle."""
    ring = shapely.box(5, 5, 195, 95) - shapely.box(6, 6, 194, 94)
    corner = np.array([(x, y) for x in range(20, 180, 2) for y in range(20, 80, 2)])
    specks = shapely.box(*corner.T, *(corner + 1).T)
    assert len(specks) > svg_nets.MOST_DRAWN
    nets = named_nets([["A"]], pieces=[0] * (len(specks) + 1))
    nets = replace(nets, piece_polygons=np.array([*specks, ring], dtype=np.object_))
    covered = covered_by_rectangles(net_paths(nets, [np.array([0])], FRAME)[0][1])
    assert covered.covers(shapely.Point(5.5, 50))
    assert covered.covers(shapely.Point(100, 94.5))
    assert not covered.intersects(shapely.box(7, 7, 193, 19.5))


def test_a_hole_turns_the_other_way() -> None:
    """A frame drawn either way round: the nonzero rule leaves its hole open."""
    ring = shapely.box(5, 5, 195, 95) - shapely.box(6, 6, 194, 94)
    nets = named_nets([["A"]], pieces=[0])
    paths = [
        net_paths(replace(nets, piece_polygons=np.array([one])), [np.array([0])], FRAME)[0][1]
        for one in (ring, shapely.reverse(ring))
    ]
    for path in paths:
        turns = [
            np.sign(shapely.Polygon(outer).exterior.is_ccw - 0.5)
            for outer in (rings_of(path)[0], rings_of(path)[1])
        ]
        assert turns == [1, -1]


def rings_of(path: str) -> list[list[tuple[int, int]]]:
    """Points of the rings of a path that is written in steps."""
    found = []
    for x, y, steps in re.findall(r"M(-?\d+) (-?\d+)l([-\d ]+)z", path):
        moves = np.array([[int(x), int(y)], *np.array(steps.split(), np.int64).reshape(-1, 2)])
        found.append([tuple(point) for point in np.cumsum(moves, axis=0).tolist()])
    return found
