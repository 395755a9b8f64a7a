"""Polygons as rectangles, the only shape the layered kernel integrates.

An axis-parallel polygon comes apart exactly.  A slanted edge becomes a staircase of
rectangles that keep the area; the error falls with the square of the slab's width.
"""

from __future__ import annotations

import numpy as np
import shapely

from latchscan.layout.model import Floats, Geometries, Ints

_SLABS = 6
"""Slabs across a slanted edge."""
_FLAT = 1e-9


def rectangle_pieces(polygons: Geometries) -> tuple[Floats, Ints]:
    """Rectangles that cover polygons without overlap.

    Parameters
    ----------
    polygons
        (n,) shapely polygons [um], holes allowed.

    Returns
    -------
    boxes, owner
        (m, 4) x0, y0, x1, y1 [um] and (m,) index of the polygon, ascending.

    Examples
    --------
    >>> corner = shapely.box(0, 0, 2, 2) - shapely.box(1, 1, 2, 2)
    >>> boxes, owner = rectangle_pieces(np.array([corner], dtype=object))
    >>> boxes.tolist()
    [[0.0, 0.0, 1.0, 2.0], [1.0, 0.0, 2.0, 1.0]]
    """
    if len(polygons) == 0:
        return np.zeros((0, 4)), np.zeros(0, dtype=np.int64)
    bounds = shapely.bounds(polygons)
    box_area = (bounds[:, 2] - bounds[:, 0]) * (bounds[:, 3] - bounds[:, 1])
    whole = np.abs(shapely.area(polygons) - box_area) <= _FLAT * box_area
    parts, owner = [], []
    for index, polygon in enumerate(polygons):
        boxes = bounds[index : index + 1] if whole[index] else _slabs(polygon)
        parts.append(boxes)
        owner.append(np.full(len(boxes), index, dtype=np.int64))
    return np.concatenate(parts), np.concatenate(owner)


def _slabs(polygon: shapely.Geometry) -> Floats:
    """Rectangles of one polygon, cut at every corner's x."""
    x0, y0, x1, y1 = polygon.bounds
    points = shapely.get_coordinates(polygon)
    cuts = np.unique(np.round(points[:, 0], 6))
    rise = np.abs(np.diff(points, axis=0))
    slanted = np.any((rise[:, 0] > 1e-6) & (rise[:, 1] > 1e-6))
    if slanted:
        step = max(x1 - x0, y1 - y0) / (4 * _SLABS)
        counts = np.maximum(np.ceil(np.diff(cuts) / step), 1).astype(int)
        inner = [
            np.linspace(a, b, n + 1)[:-1]
            for a, b, n in zip(cuts[:-1], cuts[1:], counts, strict=True)
        ]
        cuts = np.append(np.concatenate(inner), cuts[-1])
    slabs = shapely.box(cuts[:-1], y0 - 1.0, cuts[1:], y1 + 1.0)
    pieces = shapely.get_parts(shapely.intersection(slabs, polygon))
    areas = shapely.area(pieces)
    pieces, areas = pieces[areas > _FLAT], areas[areas > _FLAT]
    return equal_area_boxes(pieces, areas)


def equal_area_boxes(pieces: Geometries, areas: Floats) -> Floats:
    """Rectangles about the pieces' centroids with their areas and proportions."""
    bounds = shapely.bounds(pieces)
    size = np.stack([bounds[:, 2] - bounds[:, 0], bounds[:, 3] - bounds[:, 1]], axis=1)
    exact = np.abs(areas - size.prod(axis=1)) <= _FLAT * areas
    half = size * np.sqrt(areas / size.prod(axis=1))[:, None] / 2.0
    middle = shapely.get_coordinates(shapely.centroid(pieces))
    boxes = np.concatenate([middle - half, middle + half], axis=1)
    boxes[exact] = bounds[exact]
    return boxes
