"""Upright polygons of any winding cut into rectangles, thousands at once; rectangles joined.

In: rings whose edges run along the axes; they may overlap, touch or cross themselves.  Out:
rectangles that together cover whatever a polygon winds around at all (the nonzero rule, as
layout tools fill polygons).  A polygon is cut along the heights of its corners into slabs; in
each slab the directions of its upright edges are added up from left to right, and a rectangle
stands wherever the sum is not zero.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from latchscan.layout.derive.slabs import ranked_levels
from latchscan.layout.model import Ints
from latchscan.layout.runs import successors, within_runs

MOST_PIECES = 64
"""Pieces that an edge may fall into on average before a polygon is left whole."""
ALWAYS_CUT = 20_000
"""Pieces that are borne whatever the number of edges."""
_STRIDE = 1 << 32
"""More than any coordinate of a block in grid steps, so that groups never mix."""


def cut_filled(points: Ints, first: Ints, owner: Ints) -> tuple[Ints, Ints, NDArray[np.bool_]]:
    """Rectangles of upright rings by the nonzero rule.

    Parameters
    ----------
    points
        (n, 2) points (x, y) of all rings, without the repeated last one.
    first
        (r + 1,) offsets of the rings.
    owner
        (r,) the polygon that each ring belongs to.

    Returns
    -------
    boxes, owner
        (m, 4) x0, y0, x1, y1 and the polygon (m,) of each, sorted by (owner, y0, x0).
    whole
        (largest owner + 1,) polygons that were left whole because they would fall into too
        many rectangles.
    """
    following = points[successors(first)]
    upright = np.flatnonzero(points[:, 1] != following[:, 1])
    ends = np.concatenate([points[upright, 1], following[upright, 1]])
    polygon = np.repeat(owner, np.diff(first))[upright]
    level_owner, level, rank = ranked_levels(np.tile(polygon, 2), ends)
    begin, end = rank.reshape(2, len(upright))
    low, count = np.minimum(begin, end), np.abs(end - begin)
    polygons = int(owner.max(initial=-1)) + 1
    pieces = np.bincount(polygon, weights=count, minlength=polygons)
    edges = np.bincount(polygon, minlength=polygons)
    whole = pieces > MOST_PIECES * edges + ALWAYS_CUT
    count = np.where(whole[polygon], 0, count)
    slab = np.repeat(low, count) + within_runs(count)
    x = np.repeat(points[upright, 0], count)
    turn = np.repeat(np.where(end < begin, 1, -1), count)
    order = np.lexsort((x, slab))
    slab, x = slab[order], x[order]
    # every slab's directions add up to zero, so one running sum serves all slabs
    inside = np.cumsum(turn[order]) != 0
    left = np.flatnonzero(inside[:-1] & (x[1:] > x[:-1])) if len(x) else np.zeros(0, np.int64)
    boxes = np.column_stack([x[left], level[slab[left]], x[left + 1], level[slab[left] + 1]])
    return boxes, level_owner[slab[left]], np.asarray(whole, dtype=np.bool_)


def joined_runs(box: Ints, key: Ints, axis: int) -> tuple[Ints, Ints]:
    """Rectangles of equal keys and equal width that continue each other along an axis as one.

    Parameters
    ----------
    box
        (n, 4) x0, y0, x1, y1.
    key
        (n,) only rectangles of one key are joined.
    axis
        0 along x, 1 along y.

    Returns
    -------
    box, key
        What is left, by (key, place across the axis, place along it).  Joining parts of the
        rectangles first and what is left of all parts then comes to the same.
    """
    if not len(box):
        return box, key
    low, high = box[:, axis], box[:, axis + 2]
    begin, end = box[:, 1 - axis], box[:, 3 - axis]
    order = np.lexsort((low, end, begin, key))
    low, high, begin, end, key = low[order], high[order], begin[order], end[order], key[order]
    apart = np.ones(len(order), dtype=np.bool_)
    apart[1:] = (key[1:] != key[:-1]) | (begin[1:] != begin[:-1]) | (end[1:] != end[:-1])
    shift = np.cumsum(apart) * _STRIDE
    reach = np.maximum.accumulate(high + shift)
    apart[1:] |= (low + shift)[1:] > reach[:-1]
    first = np.flatnonzero(apart)
    found = np.empty((len(first), 4), dtype=np.int64)
    found[:, axis], found[:, axis + 2] = low[first], np.maximum.reduceat(high, first)
    found[:, 1 - axis], found[:, 3 - axis] = begin[first], end[first]
    return found, key[first]
