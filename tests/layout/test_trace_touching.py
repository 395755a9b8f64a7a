"""Touching boxes and filled rectangles against plain comparison of all, and shapely."""

from __future__ import annotations

import random

import networkx
import numpy as np
import pytest
import shapely
from net_layouts import UPRIGHT, outline
from net_reference import filled

from latchscan.layout.components import connected
from latchscan.layout.trace.rectangles import cut_filled
from latchscan.layout.trace.touching import (
    BoxSet,
    joining_between,
    joining_within,
    touching_between,
)

TILE = np.array([0, 0, 4000, 4000])


def boxes_of(rng: np.random.Generator, kind: str, count: int) -> np.ndarray:
    """Random boxes that meet the tile."""
    corner = rng.integers(-200, 4000, (count, 2))
    if kind == "stacked":
        corner = rng.integers(0, 40, (count, 2))
    low, high = {
        "small": ((1, 1), (30, 30)),
        "lying": ((100, 1), (4000, 9)),
        "mixed": ((1, 1), (900, 900)),
        "stacked": ((900, 900), (1000, 1000)),
    }[kind]
    boxes = np.hstack([corner, corner + rng.integers(low, high, (count, 2))])
    if kind == "mixed":
        thin = rng.random(count) < 0.8
        boxes[thin, 2:] = boxes[thin, :2] + rng.integers(1, 25, (int(thin.sum()), 2))
    meets = (boxes[:, 2:] >= TILE[:2]).all(axis=1) & (boxes[:, :2] <= TILE[2:]).all(axis=1)
    return np.asarray(boxes[meets])


def all_pairs(boxes: np.ndarray) -> set[tuple[int, int]]:
    """Every pair that has a point in common in the tile, by comparing all with all."""
    low = np.maximum(np.maximum(boxes[:, None, :2], boxes[None, :, :2]), TILE[:2])
    high = np.minimum(np.minimum(boxes[:, None, 2:], boxes[None, :, 2:]), TILE[2:])
    one, other = np.nonzero((low <= high).all(axis=2))
    return set(zip(one.tolist(), other.tolist(), strict=True))


@pytest.mark.parametrize("kind", ["small", "lying", "mixed", "stacked"])
@pytest.mark.parametrize("other", ["small", "lying", "mixed", "stacked"])
def test_pairs_and_components_are_those_of_comparing_all(kind: str, other: str) -> None:
    rng = np.random.default_rng(3)
    left, right = boxes_of(rng, kind, 700), boxes_of(rng, other, 500)
    boxes = np.concatenate([left, right])
    one = BoxSet(boxes, np.arange(len(left)), TILE)
    two = BoxSet(boxes, np.arange(len(left), len(boxes)), TILE)
    real = all_pairs(boxes)
    across = {(a, b) for a, b in real if a < len(left) <= b}
    found = set(zip(*(side.tolist() for side in touching_between(one, two)), strict=True))
    assert across <= found
    # what touches outside the tile alone may be found or not, but nothing else is
    far = np.array(sorted(found - across), dtype=np.int64).reshape(-1, 2)
    a, b = boxes[far[:, 0]], boxes[far[:, 1]]
    assert (np.maximum(a[:, :2], b[:, :2]) <= np.minimum(a[:, 2:], b[:, 2:])).all()
    edges = [*joining_within(one), *joining_within(two), *joining_between(one, two)]
    name = connected(
        len(boxes), np.concatenate([e[0] for e in edges]), np.concatenate([e[1] for e in edges])
    )
    graph = networkx.Graph(list(real))
    for members in networkx.connected_components(graph):
        assert len(set(name[sorted(members)].tolist())) == 1


def test_stacked_boxes_make_no_more_pairs_than_a_few_each() -> None:
    """4 000 boxes on one another: 8 million pairs touch, of which few are needed."""
    shift = np.arange(4000)
    boxes = np.column_stack([shift // 10, shift % 10, 3000 + shift // 10, 3000 + shift % 10])
    held = BoxSet(boxes, np.arange(len(boxes)), TILE)
    edges = list(joining_within(held))
    assert sum(len(edge[0]) for edge in edges) < 70 * len(boxes)
    one, other = (np.concatenate(side) for side in zip(*edges, strict=True))
    assert len(set(connected(len(boxes), one, other).tolist())) == 1


@pytest.mark.parametrize("kind", UPRIGHT)
@pytest.mark.parametrize("turned", [False, True])
def test_rectangles_cover_what_a_ring_winds_around(kind: str, turned: bool) -> None:
    """Reference: faces of the ring's lines with a winding number, by shapely."""

    rng = random.Random(5)
    rings = [outline(rng, kind) for _ in range(20)]
    if turned:
        rings = [[(y, x) for x, y in ring] for ring in rings]
    sizes = [len(ring) for ring in rings]
    points = np.array([point for ring in rings for point in ring], dtype=np.int64)
    first = np.concatenate([[0], np.cumsum(sizes)])
    boxes, owner, whole = cut_filled(points, first, np.arange(len(rings)))
    assert not whole.any()
    for number, ring in enumerate(rings):
        mine = shapely.box(*boxes[owner == number].T.astype(float))
        expected = shapely.union_all(filled(np.array(ring, dtype=float)))
        assert shapely.equals(shapely.union_all(mine), expected)
        assert shapely.area(mine).sum() == expected.area


def test_a_comb_that_would_fall_into_too_many_pieces_stays_whole() -> None:
    """600 fingers of 600 heights: 180 000 rectangles where 1 200 edges are drawn."""
    ring = [(0, 0)]
    for finger in range(600):
        height = 1000 + 7 * ((finger * 251) % 600)
        ring += [(10 * finger, height), (10 * finger + 5, height)]
        ring += [(10 * finger + 5, 10), (10 * finger + 10, 10)]
    ring.append((6000, 0))
    points = np.array(ring, dtype=np.int64)
    boxes, _, whole = cut_filled(points, np.array([0, len(ring)]), np.array([0]))
    assert whole.tolist() == [True]
    assert not len(boxes)
