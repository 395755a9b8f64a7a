"""Ways between strips: a triangulation of points on their edges.

In: strips and what must not be crossed.  Out: `Mesh`: edges that run inside a strip, which
cost nothing, and edges over bare silicon between two places on strips' edges, the doors.
Every edge of every strip is an edge of the mesh, so no door passes through a strip.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
import shapely
from scipy.spatial import Delaunay, QhullError

from latchscan.layout.connections import Flags
from latchscan.layout.model import Floats, Geometries, Ints
from latchscan.layout.runs import successors

SHORTEST_STEP_UM = 0.5
"""Points on edges stand no farther apart, unless there would be too many [um]."""
USUAL_POINTS = 1_500
MOST_CORNERS = 20_000
"""Strips with more corners are not triangulated."""
GRID_UM = 1e-7
"""Points nearer than this are one [um]."""
FLAT_UM = 1e-6
"""Height below which a triangle is a line with a point on it [um]."""
MOST_SPLITS = 6


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Mesh:
    """Points on strips' edges and ways between them.

    Attributes
    ----------
    points_um
        (n, 2) places (x, y).
    strip
        (n,) a strip on whose edge each lies.
    face_before, face_after
        (n,) its neighbours along that edge.
    edge
        (e, 2) the two points of every way.
    length_um
        (e,) its length.
    open
        (e,) True for a door, False inside a strip.
    step_um
        Largest distance of neighbours along an edge.
    """

    points_um: Floats
    strip: Ints
    face_before: Ints
    face_after: Ints
    edge: Ints
    length_um: Floats
    open: Flags
    step_um: float


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class _Walls:
    """Sampled edges of strips: points, the strip of each, and pairs of neighbours."""

    points: Floats
    strip: Ints
    edge: Ints


def triangulate(strips: Geometries, obstacles: Geometries, links: Geometries) -> Mesh | None:
    """Ways between the strips.

    Parameters
    ----------
    strips
        (n,) polygons that do not overlap.
    obstacles, links
        Polygons and lines that no door may cross; it may run along a polygon's edge.

    Returns
    -------
    Mesh or None
        None where the strips have too many corners or lie on one line.
    """
    if int(shapely.get_num_coordinates(strips).sum()) > MOST_CORNERS:
        return None
    step = max(SHORTEST_STEP_UM, float(shapely.length(strips).sum()) / USUAL_POINTS)
    walls = _sampled(strips, step)
    for _ in range(MOST_SPLITS):
        try:
            ways, flat = _delaunay_edges(walls.points)
        except QhullError:
            return None
        walls = _bent(walls, flat)
        missing = ~_among(walls.edge, ways, len(walls.points))
        if not missing.any():
            break
        walls = _split(walls, missing)
    points = walls.points
    absent = walls.edge[~_among(walls.edge, ways, len(points))]
    ways = ways[~_crossed(points, ways, absent)]
    edge = np.unique(np.concatenate([ways, walls.edge]), axis=0)
    middle = points[edge].mean(axis=1)
    whole = shapely.multipolygons(strips)
    shapely.prepare(whole)
    bare = ~np.asarray(shapely.intersects_xy(whole, middle[:, 0], middle[:, 1]))
    bare &= ~_among(edge, walls.edge, len(points))
    blocked = np.zeros(len(edge), dtype=np.bool_)
    blocked[bare] = _blocked(_lines(points, edge[bare]), obstacles, links)
    edge, bare = edge[~blocked], bare[~blocked]
    before, after = _along(walls, len(points))
    return Mesh(
        points_um=points,
        strip=walls.strip,
        face_before=before,
        face_after=after,
        edge=edge,
        length_um=np.hypot(*(points[edge[:, 1]] - points[edge[:, 0]]).T),
        open=bare,
        step_um=step,
    )


def _sampled(strips: Geometries, step: float) -> _Walls:
    rings, owner = shapely.get_rings(strips, return_index=True)
    coordinates, ring = shapely.get_coordinates(shapely.segmentize(rings, step), return_index=True)
    first = np.searchsorted(ring, np.arange(len(rings) + 1))
    # the last point of a ring repeats its first
    kept = np.ones(len(ring), dtype=np.bool_)
    kept[first[1:] - 1] = False
    coordinates, strip = coordinates[kept], owner[ring[kept]]
    following = successors(first - np.arange(len(first)))
    _, seen, place = np.unique(
        np.rint(coordinates / GRID_UM), axis=0, return_index=True, return_inverse=True
    )
    place = place.reshape(-1)
    edge = np.sort(np.stack([place, place[following]], axis=1), axis=1)
    edge = np.unique(edge[edge[:, 0] != edge[:, 1]], axis=0)
    return _Walls(points=coordinates[seen], strip=strip[seen], edge=edge)


def _delaunay_edges(points: Floats) -> tuple[Ints, Ints]:
    """Edges (e, 2) of the Delaunay triangulation, and its flat triangles (f, 3).

    Each edge has its lower point first.  A flat triangle's longest edge runs along the two
    others and is no edge; its points come in order, the one between the others in the middle.
    """
    # centred: the test of a circle squares coordinates
    corners = np.asarray(Delaunay(points - points.mean(axis=0)).simplices, dtype=np.int64)
    side = points[corners] - points[np.roll(corners, 1, axis=1)]
    length = np.hypot(side[..., 0], side[..., 1])
    area = np.abs(side[:, 0, 0] * side[:, 1, 1] - side[:, 0, 1] * side[:, 1, 0])
    thin = area < FLAT_UM * length.max(axis=1)
    # side k joins corner k to the one before it; the one after it lies between them
    row, last = np.arange(len(corners)), np.argmax(length, axis=1)
    ordered = np.stack([corners[row, (last + k) % 3] for k in range(3)], axis=1)
    pairs = np.concatenate([ordered[:, [0, 1]], ordered[:, [1, 2]], ordered[~thin][:, [0, 2]]])
    pairs = np.unique(np.sort(pairs, axis=1), axis=0)
    flat = ordered[thin]
    flat[flat[:, 0] > flat[:, 2]] = flat[flat[:, 0] > flat[:, 2]][:, ::-1]
    along = _among(pairs, flat[:, [0, 2]], len(points))
    return np.asarray(pairs[~along]), np.asarray(flat)


def _bent(walls: _Walls, flat: Ints) -> _Walls:
    """The same with walls led through points that lie on them: corners of other strips."""
    count = len(walls.points)
    keys = flat[:, 0] * count + flat[:, 2]
    _, first = np.unique(keys, return_index=True)
    flat, keys = flat[first], keys[first]
    through = np.isin(walls.edge[:, 0] * count + walls.edge[:, 1], keys)
    if not through.any():
        return walls
    row = np.searchsorted(keys, walls.edge[through] @ [count, 1])
    parts = np.concatenate([walls.edge[~through], flat[row][:, :2], flat[row][:, 1:]])
    edge = np.unique(np.sort(parts, axis=1), axis=0)
    return _Walls(points=walls.points, strip=walls.strip, edge=edge)


def _among(edges: Ints, others: Ints, count: int) -> Flags:
    """(e,) whether each edge is one of the others."""
    return np.asarray(
        np.isin(edges[:, 0] * count + edges[:, 1], others[:, 0] * count + others[:, 1])
    )


def _split(walls: _Walls, chosen: Flags) -> _Walls:
    """The same with a point added in the middle of the chosen edges."""
    halved = walls.edge[chosen]
    new = len(walls.points) + np.arange(len(halved))
    edge = np.concatenate(
        [
            walls.edge[~chosen],
            np.stack([halved[:, 0], new], axis=1),
            np.stack([halved[:, 1], new], axis=1),
        ]
    )
    return _Walls(
        points=np.concatenate([walls.points, walls.points[halved].mean(axis=1)]),
        strip=np.concatenate([walls.strip, walls.strip[halved[:, 0]]]),
        edge=edge,
    )


def _lines(points: Floats, edges: Ints) -> Geometries:
    return np.asarray(shapely.linestrings(points[edges]), dtype=np.object_).reshape(-1)


def _crossed(points: Floats, ways: Ints, absent: Ints) -> Flags:
    """(e,) whether a way crosses a wall that is not itself a way."""
    found = np.zeros(len(ways), dtype=np.bool_)
    if len(absent):
        row, wall = shapely.STRtree(_lines(points, absent)).query(
            _lines(points, ways), predicate="intersects"
        )
        apart = (ways[row][:, :, None] != absent[wall][:, None, :]).all(axis=(1, 2))
        found[row[apart]] = True
    return found


def _blocked(lines: Geometries, obstacles: Geometries, links: Geometries) -> Flags:
    """(d,) whether a door crosses a link or the inside of an obstacle."""
    found = np.zeros(len(lines), dtype=np.bool_)
    if not len(lines):
        return found
    tree = shapely.STRtree(lines)
    obstacle, line = tree.query(obstacles, predicate="intersects")
    inner = ~np.asarray(shapely.touches(obstacles[obstacle], lines[line]))
    found[line[inner]] = True
    if len(links):
        found[tree.query(links, predicate="intersects")[1]] = True
    return found


def _along(walls: _Walls, count: int) -> tuple[Ints, Ints]:
    """(n,) both neighbours of every point along its strip's edge."""
    ends = np.concatenate([walls.edge, walls.edge[:, ::-1]])
    order = np.lexsort((ends[:, 1], ends[:, 0]))
    first = np.searchsorted(ends[order, 0], np.arange(count + 1))
    # where two strips touch in a corner a point has four; any two serve
    return ends[order[first[:-1]], 1], ends[order[first[1:] - 1], 1]


def far_side(points: Floats, origin: Any, direction: Any) -> Floats:
    """(n,) signed distance of points from the line through the origin along a direction."""
    offset = points - origin
    return np.asarray(direction[0] * offset[:, 1] - direction[1] * offset[:, 0])
