"""Convex pieces: polygons cut into triangles and rectangles, and points measured to them.

A piece is a row of corners in counter-clockwise order, padded by repeating its last corner,
so that thousands of pieces are one array.  Distances to a convex piece are convex functions
of the point; `latchscan.layout.measure.farthest` rests on that.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import shapely
from numpy.typing import NDArray

from latchscan.errors import GeometryError
from latchscan.layout.model import Floats, Geometries, Ints, frozen

AREA_TOLERANCE = 1e-9
"""Relative difference of area between a polygon and its pieces that rounding can explain."""


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Pieces:
    """Convex pieces that together cover some polygons.

    Attributes
    ----------
    corners_um
        (m, 4, 2) corners (x, y), counter-clockwise; a triangle repeats its last corner.
    owner
        (m,) index of the polygon each piece belongs to, ascending.
    """

    corners_um: Floats
    owner: Ints


def cut_convex(polygons: Geometries) -> Pieces:
    """Cut polygons into convex pieces without adding a corner.

    Parameters
    ----------
    polygons
        (n,) valid shapely polygons or multipolygons, holes allowed [um].

    Returns
    -------
    Pieces
        One rectangle for an axis-parallel rectangle, else the triangles of a constrained
        Delaunay triangulation; the order depends on the polygons' shapes alone.

    Raises
    ------
    GeometryError
        If the pieces of a polygon do not add up to its area (it crosses itself).
    """
    rectangular = is_rectangle(polygons)
    boxes = np.flatnonzero(rectangular)
    others = np.flatnonzero(~rectangular)
    triangles, parent = _triangulate(polygons[others])
    corners = np.concatenate([box_corners(shapely.bounds(polygons[boxes])), triangles])
    owner = np.concatenate([boxes, others[parent]]).astype(np.int64)
    order = np.argsort(owner, kind="stable")
    return Pieces(corners_um=frozen(corners[order]), owner=frozen(owner[order]))


def is_rectangle(polygons: Geometries) -> NDArray[np.bool_]:
    """Which of (n,) polygons are exactly their own bounding box."""
    bounds = shapely.bounds(polygons)
    coordinates, index = shapely.get_coordinates(polygons, return_index=True)
    on_x = (coordinates[:, 0] == bounds[index, 0]) | (coordinates[:, 0] == bounds[index, 2])
    on_y = (coordinates[:, 1] == bounds[index, 1]) | (coordinates[:, 1] == bounds[index, 3])
    corners = np.bincount(index, weights=on_x & on_y, minlength=len(polygons))
    # a valid closed ring of five points that are all corners of the box is the box
    count = np.bincount(index, minlength=len(polygons))
    return np.asarray((corners == 5) & (count == 5))


def box_corners(boxes: Floats) -> Floats:
    """Corners (n, 4, 2) of (n, 4) boxes x0, y0, x1, y1, counter-clockwise."""
    return np.asarray(boxes, dtype=float)[:, [0, 1, 2, 1, 2, 3, 0, 3]].reshape(-1, 4, 2)


def _triangulate(polygons: Geometries) -> tuple[Floats, Ints]:
    """Triangles (m, 4, 2) of polygons and the index (m,) of each one's polygon."""
    _refuse(polygons, ~shapely.is_valid(polygons))
    parts, parent = shapely.get_parts(
        # the triangulation follows the order of the corners, which a file is free to choose
        shapely.constrained_delaunay_triangles(shapely.normalize(polygons)),
        return_index=True,
    )
    whole = shapely.area(polygons)
    covered = np.bincount(parent, weights=shapely.area(parts), minlength=len(polygons))
    _refuse(polygons, np.abs(covered - whole) > AREA_TOLERANCE * whole)
    corners = shapely.get_coordinates(parts).reshape(-1, 4, 2)[:, [0, 1, 2, 2]]
    side, other = corners[:, 1] - corners[:, 0], corners[:, 2] - corners[:, 0]
    clockwise = side[:, 0] * other[:, 1] < side[:, 1] * other[:, 0]
    corners[clockwise] = corners[clockwise][:, [0, 2, 1, 1]]
    return corners, parent


def _refuse(polygons: Geometries, wrong: NDArray[np.bool_]) -> None:
    """Raise the error that names the first of the wrong polygons, if there is one."""
    for polygon in polygons[wrong][:1]:
        x0, y0, x1, y1 = shapely.bounds(polygon)
        raise GeometryError(
            f"polygon at {x0:.3f} {y0:.3f} {x1:.3f} {y1:.3f} um: cannot be cut into triangles; "
            "expected an outline that does not cross itself"
        )


def nearest_on_pieces(points: Floats, corners: Floats) -> tuple[Floats, Floats]:
    """Distance of each point from its own convex piece, and the piece's nearest point.

    Parameters
    ----------
    points
        (n, 2) points (x, y) [um].
    corners
        (n, k, 2) the piece of each point, counter-clockwise [um].

    Returns
    -------
    distance
        (n,) 0 inside the piece [um].
    nearest
        (n, 2) the nearest point, the point itself inside the piece [um].

    Examples
    --------
    >>> square = box_corners(np.array([[0.0, 0.0, 1.0, 1.0]]))
    >>> distance, nearest = nearest_on_pieces(np.array([[4.0, 5.0]]), square)
    >>> float(distance[0]), nearest[0].tolist()
    (5.0, [1.0, 1.0])
    """
    x, y = corners[:, :, 0], corners[:, :, 1]
    # most pieces are boxes, for which coordinates answer ten times faster
    boxed = (
        (x[:, 0] == x[:, 3]) & (x[:, 1] == x[:, 2]) & (y[:, 0] == y[:, 1]) & (y[:, 2] == y[:, 3])
    )
    if np.all(boxed):
        gap = points - np.clip(points, corners[:, 0], corners[:, 2])
    else:
        gap = np.empty_like(points)
        gap[boxed] = points[boxed] - np.clip(points[boxed], corners[boxed, 0], corners[boxed, 2])
        gap[~boxed] = _gap_from_sides(points[~boxed], corners[~boxed])
    return np.hypot(gap[:, 0], gap[:, 1]), points - gap


def _gap_from_sides(points: Floats, corners: Floats) -> Floats:
    """Vector (n, 2) from the nearest point of each convex piece to its point."""
    x, y = corners[..., 0], corners[..., 1]
    side_x, side_y = np.roll(x, -1, axis=1) - x, np.roll(y, -1, axis=1) - y
    off_x, off_y = points[:, :1] - x, points[:, 1:] - y
    length2 = side_x * side_x + side_y * side_y
    along = side_x * off_x + side_y * off_y
    share = np.clip(along / np.where(length2 > 0.0, length2, 1.0), 0.0, 1.0)
    gap_x, gap_y = off_x - share * side_x, off_y - share * side_y
    best = np.argmin(gap_x * gap_x + gap_y * gap_y, axis=1)
    rows = np.arange(len(points))
    gap = np.column_stack([gap_x[rows, best], gap_y[rows, best]])
    gap[np.all(side_x * off_y >= side_y * off_x, axis=1)] = 0.0
    return gap


def add_crossings(corners: Floats, height: Floats) -> tuple[Floats, Floats, NDArray[np.bool_]]:
    """Convex pieces with a corner added wherever a linear function crosses zero.

    Parameters
    ----------
    corners
        (n, k, 2) pieces [um].
    height
        (n, k) the linear function at each corner.

    Returns
    -------
    corners, height
        (n, 2 k, 2), (n, 2 k) each corner followed by the crossing on the side after it, or
        by itself where there is none; the height of a crossing is exactly 0.
    crossing
        (n, k) where a crossing was added.
    """
    n, k = height.shape
    following = np.roll(height, -1, axis=1)
    crossing = ((height > 0.0) & (following < 0.0)) | ((height < 0.0) & (following > 0.0))
    share = np.where(crossing, height / np.where(crossing, height - following, 1.0), 0.0)
    added = corners + share[..., None] * (np.roll(corners, -1, axis=1) - corners)
    return (
        np.stack([corners, added], axis=2).reshape(n, 2 * k, 2),
        np.stack([height, np.where(crossing, 0.0, height)], axis=2).reshape(n, 2 * k),
        crossing,
    )


def upper_part(corners: Floats, height: Floats) -> tuple[Ints, Ints]:
    """Which corners make the part of each piece where a function is not negative.

    Parameters
    ----------
    corners, height
        (n, k, 2), (n, k) as `add_crossings` returns them.

    Returns
    -------
    source
        (m,) the pieces of which a part with more than two corners remains.
    columns
        (m, j) the corners of that part in their order, the last one repeated as padding.
    """
    # a repeated corner is dropped here, else pieces would widen with every cut
    distinct = np.any(corners != np.roll(corners, 1, axis=1), axis=2)
    kept = distinct & (height >= 0.0)
    count = kept.sum(axis=1)
    source = np.flatnonzero(count > 2)
    order = np.argsort(~kept[source], axis=1, kind="stable")
    last = count[source, None] - 1
    columns = np.minimum(np.arange(count.max(initial=3)), last)
    return source, np.take_along_axis(order, columns, axis=1)
