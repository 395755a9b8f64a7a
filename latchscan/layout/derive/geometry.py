"""Polygons between three worlds: gdstk's booleans, integer rings, shapely's polygons.

Everything is computed on a grid `SUBGRID` times finer than the database's, window-relative
and in whole steps, so that 45 degree edges that cross between two database points are exact
too.  gdstk gives polygons whose holes hang on a slit; `stitch` takes the slits out again.
"""

from __future__ import annotations

from itertools import pairwise
from typing import Any

import gdstk
import numpy as np
import shapely

from latchscan.layout.derive.stitching import Rings, select_rings, signed_areas
from latchscan.layout.model import Floats, Geometries, Ints, frozen

SUBGRID = 16
"""Grid steps in one database unit."""
SNAP = 2
"""Offsets of slanted edges round; points this near to half a database unit lie on it."""

Drawn = list[Any]
"""gdstk polygons in whole grid steps."""


def draw_boxes(boxes: Ints) -> Drawn:
    """Rectangles (n, 4) x0, y0, x1, y1 [grid steps] as gdstk polygons."""
    return [gdstk.rectangle((x0, y0), (x1, y1)) for x0, y0, x1, y1 in boxes.tolist()]


def draw_rings(rings: Rings) -> Drawn:
    """Rings as gdstk polygons."""
    points = rings.points.tolist()
    first = rings.first.tolist()
    return [gdstk.Polygon(points[a:b]) for a, b in pairwise(first)]


def to_rings(drawn: Drawn) -> Rings:
    """Polygons of gdstk as integer rings [grid steps]."""
    columns = [polygon.points for polygon in drawn]
    sizes = [len(points) for points in columns]
    points = np.concatenate(columns) if columns else np.zeros((0, 2))
    return Rings(
        points=np.rint(points).astype(np.int64), first=np.cumsum([0, *sizes], dtype=np.int64)
    )


def both(one: Drawn, other: Drawn) -> Drawn:
    """What two sets of polygons have in common, merged."""
    return gdstk.boolean(one, other, "and", precision=1) if one and other else []


def without(one: Drawn, other: Drawn) -> Drawn:
    """What the second set leaves of the first, merged."""
    return gdstk.boolean(one, other, "not", precision=1) if one else []


def merged(drawn: Drawn) -> Drawn:
    """The union of polygons."""
    return gdstk.boolean(drawn, [], "or", precision=1) if drawn else []


def grown(drawn: Drawn, distance: int, mitre_limit: int) -> Drawn:
    """Every edge of the union moved outwards by `distance` steps (inwards if negative)."""
    if not drawn or distance == 0:
        return merged(drawn)
    return list(
        gdstk.offset(
            drawn, distance, join="miter", tolerance=mitre_limit, precision=1, use_union=True
        )
    )


def wide_parts(drawn: Drawn, width: float, mitre_limit: int) -> Drawn:
    """The parts of the union that are at least `width` steps wide.

    Shrinking by a step less than half the width leaves a strip of exactly that width alive
    and kills one that is a database unit narrower; growing by the same restores the edges.
    """
    half = int(np.ceil(width / 2.0 - 1e-6)) - 1
    if half <= 0:
        return merged(drawn)
    core = grown(drawn, -half, mitre_limit)
    back = grown(core, half, mitre_limit)
    if any(not _is_upright(polygon.points) for polygon in back):
        back = _snapped(back)
    return both(back, drawn)


def _is_upright(points: Floats) -> bool:
    turn = np.roll(points, -1, axis=0) - points
    return bool(np.all((turn[:, 0] == 0) | (turn[:, 1] == 0)))


def _snapped(drawn: Drawn) -> Drawn:
    """Points within `SNAP` steps of a half database unit put onto it."""
    half = SUBGRID // 2
    moved = []
    for polygon in drawn:
        points = polygon.points
        near = half * np.rint(points / half)
        moved.append(gdstk.Polygon(np.where(np.abs(near - points) <= SNAP, near, points)))
    return moved


def bounding_boxes(rings: Rings) -> Ints:
    """(r, 4) boxes x0, y0, x1, y1 of rings."""
    if not rings.count:
        return np.zeros((0, 4), dtype=np.int64)
    heads = rings.first[:-1]
    low = np.minimum.reduceat(rings.points, heads)
    return np.hstack([low, np.maximum.reduceat(rings.points, heads)])


def rings_to_polygons(rings: Rings, database_unit_um: float) -> Geometries:
    """Shapely polygons [um] of canonical rings, sorted by (y0, x0) of their boxes.

    Equal grid points give equal coordinates: each is its whole number of steps, exactly
    divided by `SUBGRID`, times the database unit.
    """
    if not rings.count:
        return frozen(np.empty(0, dtype=np.object_))
    areas = signed_areas(rings)
    outer = select_rings(rings, areas > 0)
    holes = select_rings(rings, areas < 0)
    boxes = bounding_boxes(outer)
    heads = outer.points[outer.first[:-1]]
    keys = (heads[:, 0], heads[:, 1], boxes[:, 3], boxes[:, 2], boxes[:, 0], boxes[:, 1])
    rank = np.empty(outer.count, dtype=np.int64)
    rank[np.lexsort(keys)] = np.arange(outer.count)
    shells = _linear_rings(outer, database_unit_um)
    owner = _hole_owners(shells, areas[areas > 0], holes, areas[areas < 0], database_unit_um)
    every = np.concatenate([shells, _linear_rings(holes, database_unit_um)])
    place = np.concatenate([rank, rank[owner]])
    order = np.argsort(place, kind="stable")
    return frozen(np.asarray(shapely.polygons(every[order], indices=place[order])))


def _linear_rings(rings: Rings, database_unit_um: float) -> Geometries:
    if not rings.count:
        return np.empty(0, dtype=np.object_)
    owner = np.repeat(np.arange(rings.count), np.diff(rings.first))
    points = rings.points / SUBGRID * database_unit_um
    return np.asarray(shapely.linearrings(points, indices=owner))


def _hole_owners(
    shells: Geometries, shell_areas: Floats, holes: Rings, hole_areas: Floats, unit_um: float
) -> Ints:
    """Index of the smallest shell around each hole that is larger than the hole."""
    if not holes.count:
        return np.zeros(0, dtype=np.int64)
    if len(shells) == 1:
        return np.zeros(holes.count, dtype=np.int64)
    inside = shapely.point_on_surface(shapely.polygons(_linear_rings(holes, unit_um)))
    shell, hole = shapely.STRtree(inside).query(shapely.polygons(shells), predicate="contains")
    fits = shell_areas[shell] > -hole_areas[hole]
    shell, hole = shell[fits], hole[fits]
    order = np.lexsort((shell_areas[shell], hole))
    _, leading = np.unique(hole[order], return_index=True)
    return np.asarray(shell[order][leading])
