"""The place on a body's drawn outline that is nearest to a shape, for thousands of shapes.

Where a straight side of the shape faces a wall in parallel, many points are equally near;
the middle of the facing stretch is taken, which moving, mirroring and turning leave alone.
"""

from __future__ import annotations

import numpy as np
import shapely

from latchscan.layout.measure.convex import is_rectangle
from latchscan.layout.model import Floats, Geometries

TIE_UM = 1e-6
"""Walls this much farther than the nearest count as equally near [um]."""


def nearest_on_walls(outlines: Geometries, shapes: Geometries) -> tuple[Floats, Floats]:
    """Distance of each shape from the outlines, and the outlines' nearest point.

    Parameters
    ----------
    outlines
        (w,) polygons, w > 0; their rings, holes included, are the walls [um].
    shapes
        (n,) shapely polygons [um].

    Returns
    -------
    distance
        (n,) smallest distance between shape and walls, 0 where they meet [um].
    point
        (n, 2) point (x, y) on the wall; of equally near walls the one with the longest
        facing stretch, then the smallest (y, x) [um].

    Examples
    --------
    >>> well, shape = shapely.box(0, 0, 10, 10), shapely.box(12, 2, 13, 6)
    >>> distance, point = nearest_on_walls(np.array([well]), np.array([shape]))
    >>> float(distance[0]), point[0].tolist()
    (2.0, [10.0, 4.0])
    """
    walls = _walls(outlines)
    tree = shapely.STRtree(shapely.linestrings(walls), node_capacity=2)
    _, distance = tree.query_nearest(shapes, return_distance=True, all_matches=False)
    shape, wall = tree.query(shapes, predicate="dwithin", distance=distance + TIE_UM)
    point, stretch = _facing(shapes[shape], walls[wall])
    x_step, y_step = np.rint(point / TIE_UM).T
    order = np.lexsort((*point.T, x_step, y_step, -np.rint(stretch / TIE_UM), shape))
    first = order[np.searchsorted(shape[order], np.arange(len(shapes)))]
    return distance, point[first]


def _walls(outlines: Geometries) -> Floats:
    """Straight pieces (w, 2, 2) of all rings."""
    points, ring = shapely.get_coordinates(shapely.get_rings(outlines), return_index=True)
    joined = ring[1:] == ring[:-1]
    return np.stack([points[:-1][joined], points[1:][joined]], axis=1)


def _facing(shapes: Geometries, walls: Floats) -> tuple[Floats, Floats]:
    """Point (n, 2) of each wall (n, 2, 2) nearest to its shape, and the length (n,) that faces it.

    Facing stretches are known for boxes beside axis-parallel walls; elsewhere they count 0.
    """
    lines = shapely.shortest_line(shapely.linestrings(walls), shapes)
    point = shapely.get_coordinates(lines).reshape(-1, 2, 2)[:, 0].copy()
    stretch = np.zeros(len(point))
    upright = np.any(walls[:, 0] == walls[:, 1], axis=1) & is_rectangle(shapes)
    box = shapely.bounds(shapes[upright]).reshape(-1, 2, 2)
    wall_low, wall_high = walls[upright].min(axis=1), walls[upright].max(axis=1)
    low, high = np.maximum(box[:, 0], wall_low), np.minimum(box[:, 1], wall_high)
    end = np.where(box[:, 1] < wall_low, wall_low, wall_high)
    point[upright] = np.where(low <= high, 0.5 * (low + high), end)
    stretch[upright] = np.maximum(high - low, 0.0).max(axis=1)
    return point, stretch
