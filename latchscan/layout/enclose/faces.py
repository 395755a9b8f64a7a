"""The exact shortest distance across an opening.

In: a door of the mesh, whose ends are only sampled.  Out: the shortest line between the two
faces at its ends, which may belong to one strip.
"""

from __future__ import annotations

import numpy as np
import shapely

from latchscan.layout.enclose.mesh import Mesh
from latchscan.layout.model import Floats, Geometries

POINTS_EACH_WAY = 3
"""Neighbours on either side of a door's end that its face is made of."""
MOST_MOVES = 40
LEAST_GAIN_UM = 1e-9
PARALLEL = 1e-6
"""Largest sine between faces that count as parallel."""


def narrowest(strips: Geometries, obstacles: Geometries, mesh: Mesh, one: int, two: int) -> Floats:
    """Ends (2, 2) of the shortest line between the faces around two points of the mesh.

    Starts at the door between the points and moves along the faces as long as it gets
    shorter.  Between parallel faces the line is taken in their middle, unless it would cross
    an obstacle there.
    """
    ends = mesh.points_um[[one, two]]
    width = float(np.hypot(*(ends[1] - ends[0])))
    for _ in range(MOST_MOVES):
        faces = [_face(mesh, point, other) for point, other in ((one, two), (two, one))]
        lines = [shapely.linestrings(mesh.points_um[face]) for face in faces]
        found = shapely.get_coordinates(shapely.shortest_line(*lines))
        shorter = float(np.hypot(*(found[1] - found[0])))
        if shorter >= width - LEAST_GAIN_UM:
            break
        ends, width = found, shorter
        one, two = (
            face[int(np.argmin(np.hypot(*(mesh.points_um[face] - end).T)))]
            for face, end in zip(faces, found, strict=True)
        )
    middle = _in_the_middle(strips, mesh, one, two, ends)
    line = shapely.linestrings(middle)
    inner = shapely.intersects(obstacles, line) & ~shapely.touches(obstacles, line)
    return ends if inner.any() else middle


def _face(mesh: Mesh, point: int, other: int) -> list[int]:
    """Points along the strip's edge around a point, in order, without the other one."""
    sides: list[list[int]] = []
    for first in (int(mesh.face_before[point]), int(mesh.face_after[point])):
        side: list[int] = []
        last, now = point, first
        while len(side) < POINTS_EACH_WAY and now not in (point, other):
            side.append(now)
            before, after = int(mesh.face_before[now]), int(mesh.face_after[now])
            last, now = now, after if before == last else before
        sides.append(side)
    return [*sides[0][::-1], point, *sides[1]]


def _in_the_middle(strips: Geometries, mesh: Mesh, one: int, two: int, ends: Floats) -> Floats:
    """The same line moved to the middle of the two drawn edges, if those are parallel."""
    edges = [
        _drawn_edge(strips[mesh.strip[point]], end, ends)
        for point, end in zip((one, two), ends, strict=True)
    ]
    if edges[0] is None or edges[1] is None:
        return ends
    along = edges[0][1] - edges[0][0]
    along = along / np.hypot(*along)
    other = edges[1][1] - edges[1][0]
    if abs(along[0] * other[1] - along[1] * other[0]) > PARALLEL * np.hypot(*other):
        return ends
    place = [np.sort((edge - ends[0]) @ along) for edge in edges]
    low, high = max(p[0] for p in place), min(p[1] for p in place)
    if high <= low:
        return ends
    shift = (low + high) / 2 * along
    across = ends[1] - ends[0]
    across = across - (across @ along) * along
    return np.asarray(np.stack([ends[0] + shift, ends[0] + shift + across]))


def _drawn_edge(strip: object, end: Floats, ends: Floats) -> Floats | None:
    """The drawn edge (2, 2) at the end of a line that stands upright on it, or None."""
    rings = shapely.get_rings(strip)
    across = ends[1] - ends[0]
    for ring in rings:
        points = shapely.get_coordinates(ring)
        along = points[1:] - points[:-1]
        length = np.hypot(*along.T)
        offset = end - points[:-1]
        away = np.abs(along[:, 0] * offset[:, 1] - along[:, 1] * offset[:, 0]) / length
        place = (along * offset).sum(axis=1) / length
        upright = np.abs(along @ across) <= PARALLEL * length * max(np.hypot(*across), 1e-12)
        at = (away < PARALLEL) & (place > -PARALLEL) & (place < length + PARALLEL) & upright
        if at.any():
            row = int(np.flatnonzero(at)[0])
            return np.asarray(points[row : row + 2])
    return None
