"""Upright polygons cut into rectangles, thousands at once.

In: rings whose edges all run along the axes.  Out: rectangles with disjoint insides that
together cover the same area.  A polygon is cut along the heights of its corners into
horizontal slabs; in each slab its upright edges, from left to right, are in turn where a
rectangle begins and where it ends.  Holes need no care, and neither do slits, whose two
sides enclose a rectangle of no width.
"""

from __future__ import annotations

from typing import TypeVar

import numpy as np
import shapely
from numpy.typing import NDArray

from latchscan.layout.model import Floats, Geometries, Ints
from latchscan.layout.runs import successors, within_runs

Number = TypeVar("Number", np.int64, np.float64)


def upright_rings(points: NDArray[Number], first: Ints) -> NDArray[np.bool_]:
    """(r,) which rings have edges along the axes only.

    Parameters
    ----------
    points
        (n, 2) points (x, y) of all rings, without the repeated last one.
    first
        (r + 1,) offsets of the rings.
    """
    if len(first) < 2:
        return np.zeros(0, dtype=np.bool_)
    straight = (points[successors(first)] == points).any(axis=1)
    return np.asarray(np.logical_and.reduceat(straight, first[:-1]))


def cut_upright(points: NDArray[Number], first: Ints, owner: Ints) -> tuple[NDArray[Number], Ints]:
    """Rectangles of upright rings.

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
    boxes
        (m, 4) x0, y0, x1, y1, sorted by (owner, y0, x0).
    owner
        (m,) the polygon of each.
    """
    following = points[successors(first)]
    upright = np.flatnonzero(points[:, 1] != following[:, 1])
    ends = np.stack([points[upright, 1], following[upright, 1]])
    polygon = np.repeat(owner, np.diff(first))[upright]
    level_owner, level, rank = ranked_levels(np.tile(polygon, 2), ends.reshape(-1))
    low, high = np.sort(rank.reshape(2, len(upright)), axis=0)
    count = high - low
    slab = np.repeat(low, count) + within_runs(count)
    x = np.repeat(points[upright, 0], count)
    order = np.lexsort((x, slab))
    slab, sides = slab[order][::2], x[order].reshape(-1, 2)
    real = sides[:, 0] < sides[:, 1]
    slab, sides = slab[real], sides[real]
    boxes = np.column_stack([sides[:, 0], level[slab], sides[:, 1], level[slab + 1]])
    return boxes, level_owner[slab]


def upright_parts(polygons: Geometries) -> tuple[Floats, Ints, Ints]:
    """Rectangles of all shapely polygons whose edges run along the axes.

    Returns
    -------
    boxes, owner
        (m, 4) x0, y0, x1, y1 [um] and the polygon (m,) of each, sorted by (owner, y0, x0).
    others
        Indices of the polygons that are not upright or not valid.
    """
    rings, ring_owner = shapely.get_rings(polygons, return_index=True)
    if not len(rings):
        none = np.zeros(0, dtype=np.int64)
        return np.zeros((0, 4)), none, np.arange(len(polygons))
    points, ring = shapely.get_coordinates(rings, return_index=True)
    # the last point of a ring repeats its first
    closing = np.append(ring[1:] != ring[:-1], True)
    points, ring = points[~closing], ring[~closing]
    first = np.concatenate([[0], np.cumsum(np.bincount(ring, minlength=len(rings)))])
    upright = shapely.is_valid(polygons)
    np.logical_and.at(upright, ring_owner, upright_rings(points, first))
    kept = upright[ring_owner]
    sizes = np.diff(first)
    boxes, owner = cut_upright(
        points[np.repeat(kept, sizes)],
        np.concatenate([[0], np.cumsum(sizes[kept])]),
        ring_owner[kept],
    )
    return boxes, owner, np.flatnonzero(~upright)


def ranked_levels(owner: Ints, y: NDArray[Number]) -> tuple[Ints, NDArray[Number], Ints]:
    """Owner and height of the distinct (owner, y) in order, and the rank of each given one."""
    order = np.lexsort((y, owner))
    sorted_owner, sorted_y = owner[order], y[order]
    fresh = np.ones(len(order), dtype=np.bool_)
    fresh[1:] = (sorted_owner[1:] != sorted_owner[:-1]) | (sorted_y[1:] != sorted_y[:-1])
    rank = np.empty(len(order), dtype=np.int64)
    rank[order] = np.cumsum(fresh) - 1
    return sorted_owner[fresh], sorted_y[fresh], rank
