"""The shortest way around an injector over strips, and the openings left in it.

In: strips and an injector.  Out: `Outline`: which strips close around the injector and where
openings remain.  An opening is a matter of topology: whatever closed curve runs around the
injector has to cross bare silicon somewhere, and the curve that crosses the least of it
crosses at the openings.  Ways inside strips are free, ways over silicon cost their length, and
the cheapest closed curve is a shortest path in the double cover of the mesh: every point
stands there twice, and an edge that crosses a ray from the injector outwards changes sides, so
that a path from a point to its double runs around the injector an odd number of times.  (A
minimum cut of a planar graph as a shortest cycle of its dual: Itai and Shiloach, "Maximum
flow in planar networks", SIAM J. Comput. 8, 1979.)
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
import shapely
from scipy.sparse import csr_array
from scipy.sparse.csgraph import dijkstra

from latchscan.layout.connections import Flags
from latchscan.layout.enclose.faces import narrowest
from latchscan.layout.enclose.mesh import Mesh, far_side, triangulate
from latchscan.layout.model import Floats, Geometries, Ints

SHARE_INSIDE = 1e-5
"""Cost of a way inside a strip in that of bare silicon: of equal curves the shorter is taken."""
COST_OF_A_DOOR_UM = 1e-6
"""Added to every door: of equal curves the one with fewer openings is taken [um]."""
CLOSED_UM = 1e-5
"""Openings below this are none: strips that touch in a corner conduct round it [um]."""
SAMPLED = 0.7
"""Part of the coverage that the curve must have before its doors are made exact."""
DIGITS = 9
"""Widths are rounded to this many digits [um]: what moving a drawing changes is noise."""
DIRECTIONS = 16
"""Rays that are tried; the one that crosses least makes the smallest problem."""
FIRST_ANGLE = 0.0371
"""Angle of the first ray: drawn edges are seldom along any of them [rad]."""


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Outline:
    """Strips around an injector.

    Attributes
    ----------
    strips
        Sorted indices of the strips that make up the ring.
    gap_um
        (g,) widths of its openings, widest first.
    gap_ends_um
        (g, 2, 2) both ends (x, y) of each, sorted by (y, x).
    covered_um
        Length of the curve that runs inside strips.
    room
        Polygon around the injector: all that the ring encloses.
    """

    strips: tuple[int, ...]
    gap_um: Floats
    gap_ends_um: Floats
    covered_um: float
    room: Any

    @property
    def coverage(self) -> float:
        """Share of the curve that runs inside strips."""
        return self.covered_um / (self.covered_um + float(self.gap_um.sum()))


def whole_ring(hole: Any, index: int) -> Outline:
    """The outline of one strip that holds something in a hole."""
    return Outline(
        strips=(index,),
        gap_um=np.zeros(0),
        gap_ends_um=np.zeros((0, 2, 2)),
        covered_um=float(hole.length),
        room=hole,
    )


def shortest_outline(
    strips: Geometries,
    index: Ints,
    obstacles: Geometries,
    links: Geometries,
    least_coverage: float,
) -> Outline | None:
    """The closed curve around the obstacles that crosses the least bare silicon.

    Parameters
    ----------
    strips
        (n,) polygons that do not overlap.
    index
        (n,) their numbers, ascending, for the answer.
    obstacles
        Polygons in one room that the curve must not cross.
    links
        Lines between them that it must not cross either, so that it encloses all.
    least_coverage
        Share of the curve below which it is of no interest.

    Returns
    -------
    Outline or None
        None where no curve over these strips encloses the obstacles with that coverage.
    """
    if not len(strips):
        return None
    mesh = triangulate(strips, obstacles, links)
    if mesh is None:
        return None
    origin = shapely.get_coordinates(shapely.point_on_surface(obstacles[0]))[0]
    path = _odd_cycle(mesh, _least_crossed(mesh, origin))
    if path is None:
        return None
    edge = _edges_of(mesh, path)
    bare, length = mesh.open[edge], mesh.length_um[edge]
    if length[~bare].sum() < SAMPLED * least_coverage * length.sum():
        return None
    outline = _measured(strips, index, obstacles, mesh, path)
    return None if outline.coverage < least_coverage else outline


def _least_crossed(mesh: Mesh, origin: Floats) -> Flags:
    """(e,) whether an edge crosses a ray from the origin, for the ray with fewest crossings."""
    best = np.ones(len(mesh.edge), dtype=np.bool_)
    for number in range(DIRECTIONS):
        angle = FIRST_ANGLE + 2 * np.pi * number / DIRECTIONS
        direction = np.array([np.cos(angle), np.sin(angle)])
        side = far_side(mesh.points_um, origin, direction)
        left = (side >= 0)[mesh.edge]
        crossing = np.flatnonzero(left[:, 0] != left[:, 1])
        one, two = mesh.points_um[mesh.edge[crossing]].transpose(1, 0, 2)
        apart = side[mesh.edge[crossing]]
        part = (apart[:, 0] / (apart[:, 0] - apart[:, 1]))[:, None]
        ahead = ((one + part * (two - one) - origin) * direction).sum(axis=1) > 0
        if np.count_nonzero(ahead) < np.count_nonzero(best):
            best = np.zeros(len(mesh.edge), dtype=np.bool_)
            best[crossing[ahead]] = True
    return best


def _odd_cycle(mesh: Mesh, odd: Flags) -> Ints | None:
    """Points of the cheapest closed path that crosses the ray an odd number of times."""
    count = len(mesh.points_um)
    if not odd.any():
        return None
    cost = np.where(mesh.open, mesh.length_um + COST_OF_A_DOOR_UM, SHARE_INSIDE * mesh.length_um)
    a, b = mesh.edge.T
    across = np.where(odd, count, 0)
    rows = np.concatenate([a, a + count])
    columns = np.concatenate([b + across, (b + count - across)])
    graph = csr_array((np.tile(cost, 2), (rows, columns)), shape=(2 * count, 2 * count))
    sources = np.unique(a[odd])
    reached, before = dijkstra(graph, directed=False, indices=sources, return_predecessors=True)
    total = reached[np.arange(len(sources)), sources + count]
    best = int(np.argmin(total))
    if not np.isfinite(total[best]):
        return None
    path = [int(sources[best]) + count]
    while path[-1] != sources[best]:
        path.append(int(before[best, path[-1]]))
    return np.array(path, dtype=np.int64) % count


def _edges_of(mesh: Mesh, path: Ints) -> Ints:
    """Edges along a path."""
    pairs = np.sort(np.stack([path[:-1], path[1:]], axis=1), axis=1)
    count = len(mesh.points_um)
    keys = mesh.edge[:, 0] * count + mesh.edge[:, 1]
    return np.asarray(np.searchsorted(keys, pairs @ np.array([count, 1])), dtype=np.int64)


def _measured(
    strips: Geometries, index: Ints, obstacles: Geometries, mesh: Mesh, path: Ints
) -> Outline:
    """The outline of a closed path, its doors made exact."""
    edge = _edges_of(mesh, path)
    ends, width = [], []
    for row in edge[mesh.open[edge]].tolist():
        one, two = mesh.edge[row].tolist()
        line = narrowest(strips, obstacles, mesh, one, two)
        length = float(np.hypot(*(line[1] - line[0])))
        if length > CLOSED_UM:
            ends.append(line[np.lexsort((line[:, 0], line[:, 1]))])
            width.append(length)
    gap, places = np.round(np.array(width), DIGITS), np.array(ends).reshape(-1, 2, 2)
    order = np.lexsort((places[:, 0, 0], places[:, 0, 1], -np.rint(gap / 1e-6)))
    room = shapely.Polygon(mesh.points_um[path])
    return Outline(
        strips=tuple(np.unique(index[mesh.strip[path]]).tolist()),
        gap_um=gap[order],
        gap_ends_um=places[order],
        covered_um=float(mesh.length_um[edge[~mesh.open[edge]]].sum()),
        room=room if room.is_valid else room.buffer(0),
    )
