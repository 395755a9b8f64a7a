"""Join neighbours that break the same limit for the same reason into one group.

Two members are neighbours when they concern the same body, break the limit for the same
reason and their boxes come within `Breaks.grouping_um` of each other; a group is everything
reachable from neighbour to neighbour.  The result does not depend on the members' order or on
where the block lies.

A block in which every emitter fails has millions of neighbour pairs.  Members whose lower
left corners share a square with a diagonal of the grouping distance are neighbours for
certain, so they are joined first and only whole squares are compared with each other.
"""

from __future__ import annotations

import math

import numpy as np
import shapely
from numpy.typing import NDArray

from latchscan.layout.model import Floats, Ints
from latchscan.rules.breaks import Breaks


def group(breaks: Breaks) -> tuple[Ints, ...]:
    """Rows of `breaks` by group, the worst row of each group first, worst group first.

    Parameters
    ----------
    breaks
        Members (k) of one rule.

    Returns
    -------
    tuple of integer arrays
        Every row of `breaks` exactly once.  Equal measures are ordered by (y, x, subject).
    """
    if len(breaks) == 0:
        return ()
    label = _connected(breaks)
    order = np.lexsort((breaks.subject, breaks.x_um, breaks.y_um, -breaks.excess))
    rank = np.empty(len(order), dtype=np.int64)
    rank[order] = np.arange(len(order))
    best = np.full(int(label.max()) + 1, len(order), dtype=np.int64)
    np.minimum.at(best, label, rank)
    by_group = order[np.argsort(best[label[order]], kind="stable")]
    ends = np.flatnonzero(np.diff(best[label[by_group]])) + 1
    return tuple(np.split(by_group, ends))


def _connected(breaks: Breaks) -> Ints:
    """(k,) label of the connected group of every row."""
    pitch = breaks.grouping_um / math.sqrt(2.0)
    square = np.floor(breaks.box_um[:, :2] / pitch).astype(np.int64)
    key = np.column_stack((breaks.body, breaks.reason, square))
    keys, cell = np.unique(key, axis=0, return_inverse=True)
    cell = cell.reshape(-1)
    shapes = _square_shapes(breaks.box_um, cell)
    first, second = shapely.STRtree(shapes).query(
        shapes, predicate="dwithin", distance=breaks.grouping_um
    )
    same = (first < second) & (keys[first, :2] == keys[second, :2]).all(axis=1)
    return _union(len(keys), first[same], second[same])[cell]


def _square_shapes(box_um: Floats, cell: Ints) -> NDArray[np.object_]:
    """One multipolygon a square, made of the boxes of its members."""
    order = np.argsort(cell, kind="stable")
    boxes = shapely.box(*box_um[order].T)
    return np.asarray(shapely.multipolygons(boxes, indices=cell[order]), dtype=np.object_)


def _union(count: int, first: Ints, second: Ints) -> Ints:
    """(count,) smallest index of the component of each node under the given links."""
    parent = list(range(count))

    def root(node: int) -> int:
        while parent[node] != node:
            parent[node] = parent[parent[node]]
            node = parent[node]
        return node

    for one, other in zip(first.tolist(), second.tolist(), strict=True):
        low, high = sorted((root(one), root(other)))
        parent[high] = low
    return np.array([root(node) for node in range(count)], dtype=np.int64)
