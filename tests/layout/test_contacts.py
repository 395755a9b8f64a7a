"""Boxes of contacts: overlaps and mergers against pair-by-pair tables and shapely."""

from __future__ import annotations

from itertools import pairwise

import numpy as np
import pytest
import shapely

from latchscan.layout.derive.contacts import distinct_boxes, meets_any, merged_across, merged_boxes


def scattered(rng: np.random.Generator, count: int, largest: int) -> np.ndarray:
    low = rng.integers(-300, 300, (count, 2))
    return np.hstack([low, low + rng.integers(3, largest, (count, 2))])


def by_pairs(boxes: list[list[int]]) -> list[list[int]]:
    """Merge the first pair that overlaps or shares an edge until there is none."""
    boxes = [list(box) for box in boxes]
    while True:
        for i, one in enumerate(boxes):
            for j in range(i):
                two = boxes[j]
                dx = min(one[2], two[2]) - max(one[0], two[0])
                dy = min(one[3], two[3]) - max(one[1], two[1])
                if min(dx, dy) >= 0 and max(dx, dy) > 0:
                    del boxes[i]
                    boxes[j] = [min(one[0], two[0]), min(one[1], two[1]),
                                max(one[2], two[2]), max(one[3], two[3])]  # fmt: skip
                    break
            else:
                continue
            break
        else:
            return sorted(boxes)


@pytest.mark.parametrize("largest", [8, 40])
@pytest.mark.parametrize("long_bars", [0, 2])
@pytest.mark.parametrize("seed", [1, 2, 3])
def test_merged_boxes_are_those_of_merging_pair_by_pair(seed, long_bars, largest) -> None:
    rng = np.random.default_rng(seed)
    boxes = scattered(rng, 110, largest)
    # bars much longer than the rest are looked up in another way
    bars = np.array([[-250, -100, 260, -95], [17, -290, 20, 280]])[:long_bars]
    boxes = np.concatenate([boxes, bars.reshape(-1, 4)])
    expected = by_pairs(boxes.tolist())
    assert len(expected) < len(boxes)
    assert sorted(merged_boxes(boxes).tolist()) == expected
    assert sorted(merged_boxes(boxes[rng.permutation(len(boxes))]).tolist()) == expected


def test_a_regular_array_stays_as_it_is_and_corners_do_not_link() -> None:
    x, y = (axis.ravel() for axis in np.meshgrid(np.arange(40) * 36, np.arange(30) * 36))
    boxes = np.column_stack([x, y, x + 16, y + 16])
    assert np.array_equal(merged_boxes(boxes), boxes)
    corner_to_corner = np.column_stack([x, y, x + 36, y + 36])[(x // 36 + y // 36) % 2 == 0]
    assert np.array_equal(merged_boxes(corner_to_corner), corner_to_corner)


@pytest.mark.parametrize("seed", [1, 2, 3, 4, 5, 6])
def test_merging_tile_by_tile_and_then_across_seams_is_merging_at_once(seed) -> None:
    rng = np.random.default_rng(seed)
    boxes = scattered(rng, 120, 6 if seed % 2 else 25)
    seams = np.array([-90, 20, 110])
    edges = [-10_000, *seams.tolist(), 10_000]
    parts = []
    for x0, x1 in pairwise(edges):
        for y0, y1 in pairwise(edges):
            inside = (boxes[:, 0] < x1) & (boxes[:, 2] > x0)
            inside &= (boxes[:, 1] < y1) & (boxes[:, 3] > y0)
            parts.append(merged_boxes(distinct_boxes(boxes[inside])))
    found = merged_across(np.concatenate(parts), seams, seams)
    assert sorted(found.tolist()) == by_pairs(np.unique(boxes, axis=0).tolist())


def test_overlaps_need_area() -> None:
    rng = np.random.default_rng(3)
    boxes, others = scattered(rng, 400, 9), scattered(rng, 60, 30)
    shared = shapely.area(
        shapely.intersection(shapely.box(*boxes.T)[:, None], shapely.box(*others.T)[None])
    )
    expected = (shared > 0).any(axis=1)
    assert 0 < expected.sum() < len(boxes)
    assert np.array_equal(meets_any(boxes, others), expected)
    assert not meets_any(boxes, others[:0]).any()


def test_each_distinct_box_is_kept_once() -> None:
    rng = np.random.default_rng(4)
    boxes = np.repeat(scattered(rng, 50, 4), 3, axis=0)[rng.permutation(150)]
    found = distinct_boxes(boxes)
    assert sorted(found.tolist()) == np.unique(boxes, axis=0).tolist()
    assert np.array_equal(np.lexsort((found[:, 0], found[:, 1])), np.arange(len(found)))
