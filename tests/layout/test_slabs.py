"""Rectangles of upright polygons against shapely's areas and overlays."""

from __future__ import annotations

import numpy as np
import pytest
import shapely

from latchscan.layout.derive.slabs import cut_upright, upright_parts, upright_rings


def upright_union(rng: np.random.Generator, boxes: int) -> np.ndarray:
    """Polygons of the union of random boxes, with holes now and then."""
    low = rng.integers(0, 60, (boxes, 2))
    high = low + rng.integers(1, 25, (boxes, 2))
    return shapely.get_parts(shapely.union_all(shapely.box(*low.T, *high.T)))


@pytest.mark.parametrize("seed", [1, 2, 3, 4])
def test_rectangles_cover_each_polygon_once(seed: int) -> None:
    rng = np.random.default_rng(seed)
    polygons = np.concatenate([upright_union(rng, count) for count in (3, 12, 40)])
    boxes, owner, others = upright_parts(polygons)
    assert not len(others)
    parts = shapely.box(*boxes.T)
    for index, polygon in enumerate(polygons):
        mine = parts[owner == index]
        # shapely: areas add up, so nothing is covered twice, and nothing else is covered
        assert shapely.area(mine).sum() == shapely.area(polygon)
        assert shapely.area(shapely.symmetric_difference(shapely.union_all(mine), polygon)) == 0
    assert np.array_equal(np.lexsort((boxes[:, 0], boxes[:, 1], owner)), np.arange(len(owner)))


def test_a_hole_on_a_slit_stays_a_hole() -> None:
    # outline, in along a slit, once around the hole, out again
    ring = [(0, 0), (9, 0), (9, 9), (0, 9), (0, 5), (3, 5), (3, 6), (6, 6), (6, 3), (3, 3), (3, 5),
            (0, 5)]  # fmt: skip
    points = np.array(ring, dtype=np.int64)
    boxes, _ = cut_upright(points, np.array([0, len(ring)]), np.array([0]))
    expected = shapely.box(0, 0, 9, 9) - shapely.box(3, 3, 6, 6)
    found = shapely.box(*boxes.T)
    assert shapely.area(found).sum() == shapely.area(expected)
    assert shapely.union_all(found).equals(expected)


def test_slanted_polygons_are_left_to_others() -> None:
    slanted = shapely.Polygon([(0, 0), (4, 0), (4, 2), (2, 4), (0, 4)])
    crossed = shapely.Polygon([(0, 0), (4, 0), (4, 4), (2, 4), (2, -2), (0, -2)])
    polygons = np.array([shapely.box(0, 0, 1, 1), slanted, crossed, shapely.box(5, 5, 6, 7)])
    boxes, owner, others = upright_parts(polygons)
    assert boxes.tolist() == [[0, 0, 1, 1], [5, 5, 6, 7]]
    assert owner.tolist() == [0, 3]
    assert others.tolist() == [1, 2]


def test_no_polygons_have_no_rectangles() -> None:
    boxes, owner, others = upright_parts(np.empty(0, dtype=object))
    assert boxes.shape == (0, 4)
    assert not len(owner)
    assert not len(others)
    assert not len(upright_rings(np.zeros((0, 2), dtype=np.int64), np.zeros(1, dtype=np.int64)))
