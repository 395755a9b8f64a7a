"""Openings in n-well rings over a buried layer that keep a p-well from being isolated.

In: the layout's n-wells, buried layer, and the diffusions of its substrate.  Out: `Openings`.

A pocket is what becomes a hole when the n-wells over one buried layer grow by some radius
(a morphological closing, Serra 1982): every opening narrower than twice the radius is shut
then.  It counts where a diffusion of the substrate lies in it, wholly over the buried layer,
and where the pocket itself lies over it: the fringe that a buried layer has around every well
makes no pocket.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from typing import Any

import numpy as np
import shapely

from latchscan.layout.model import (
    N_OUTSIDE_NWELL,
    SUBSTRATE_TAP,
    Floats,
    Geometries,
    Ints,
    Layout,
)

WIDEST_OPENING_UM = 50.0
"""Wider openings are no openings of a ring."""
LEAST_RADIUS_UM = 0.05
RADIUS_STEP = 1.15
"""An opening must be narrower than the pocket behind it by at least this factor."""
LEAST_AREA_UM2 = 1e-6
SLACK = 0.02
"""Deviation of a grown edge drawn in chords from the true one, of the radius, at most."""


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Openings:
    """Openings (g), sorted by (body, y, x): columns of `Ties`."""

    body: Ints
    width_um: Floats
    from_um: Floats
    to_um: Floats


def find_openings(layout: Layout) -> Openings:
    """Openings of n-well rings that would isolate a p-well if they were closed.

    Parameters
    ----------
    layout
        Regions, bodies, taps and emitters.

    Returns
    -------
    Openings
        The n-well body, the width [um] and both ends (x, y) [um] of every opening.
    """
    buried = layout.regions.shapes["buried"]
    wells, body = _wells(layout)
    items = _substrate_items(layout)
    rows: set[tuple[int, float, tuple[float, ...]]] = set()
    if len(buried) and len(wells) and len(items):
        layer, item = shapely.STRtree(items).query(buried, predicate="covers")
        near, well = shapely.STRtree(wells).query(buried, predicate="intersects")
        for under in np.unique(layer).tolist():
            above = well[near == under]
            above = above[shapely.area(shapely.intersection(wells[above], buried[under])) > 0.0]
            if len(above):
                wall = shapely.union_all(wells[above])
                for line in _search(wall, buried[under], items[item[layer == under]]):
                    rows.add((int(body[above].min()), *line))
    ordered = sorted(rows, key=lambda row: (row[0], row[2][1], row[2][0], row))
    ends = np.array([row[2] for row in ordered], dtype=np.float64).reshape(-1, 2, 2)
    return Openings(
        body=np.array([row[0] for row in ordered], dtype=np.int64),
        width_um=np.array([row[1] for row in ordered], dtype=np.float64),
        from_um=ends[:, 0].copy(),
        to_um=ends[:, 1].copy(),
    )


def _wells(layout: Layout) -> tuple[Geometries, Ints]:
    """N-well polygons and their bodies."""
    found = [
        (shape, row)
        for row, body in enumerate(layout.bodies)
        if body.kind == "nwell"
        for shape in body.polygons
    ]
    wells = np.empty(len(found), dtype=np.object_)
    wells[:] = [shape for shape, _ in found]
    return wells, np.array([row for _, row in found], dtype=np.int64)


def _substrate_items(layout: Layout) -> Geometries:
    """Diffusions whose body is the substrate: what an isolated p-well would hold."""
    substrate = len(layout.bodies) - 1
    emitters, taps = layout.emitters, layout.taps
    return np.concatenate(
        [
            emitters.polygons[(emitters.kind == N_OUTSIDE_NWELL) & (emitters.body == substrate)],
            taps.polygons[(taps.kind == SUBSTRATE_TAP) & (taps.body == substrate)],
        ]
    )


def _search(wall: Any, buried: Any, items: Geometries) -> Iterator[tuple[float, tuple[float, ...]]]:
    """Width and ends of every opening that keeps some of the items from being isolated."""
    rooms = shapely.get_parts(shapely.difference(buried, wall))
    held = shapely.STRtree(rooms).query(items, predicate="intersects")[1]
    rooms = rooms[np.unique(held)]
    circles = [shapely.maximum_inscribed_circle(room) for room in rooms]
    largest = max((float(shapely.length(circle)) for circle in circles), default=0.0)
    radius = LEAST_RADIUS_UM
    points = shapely.point_on_surface(items)
    while radius <= min(largest, 0.5 * WIDEST_OPENING_UM) and len(points):
        pockets = _pockets(wall, radius)
        pocket, item = shapely.STRtree(points).query(pockets, predicate="contains")
        found = np.zeros(len(points), dtype=np.bool_)
        for row in np.unique(pocket).tolist():
            pieces = _open_sides(pockets[row], wall, radius)
            if pieces and _lies_over(pockets[row], pieces, buried):
                yield from (_across(wall, piece) for piece in pieces)
                found[item[pocket == row]] = True
        points = points[~found]
        radius *= RADIUS_STEP


def _pockets(wall: Any, radius: float) -> Geometries:
    """What the wall encloses once it has grown by a radius, grown back to the wall."""
    grown = shapely.get_parts(shapely.buffer(wall, radius))
    rings, owner = shapely.get_rings(grown, return_index=True)
    inner = np.ones(len(rings), dtype=np.bool_)
    inner[np.searchsorted(owner, np.arange(len(grown)))] = False
    pockets = shapely.buffer(shapely.polygons(rings[inner]), radius)
    return np.asarray(shapely.difference(pockets, wall), dtype=np.object_)


def _open_sides(pocket: Any, wall: Any, radius: float) -> list[Any]:
    """Lines of a pocket's edge along which it is open to the outside.

    A grown-back edge also cuts the corners of the wall; those bits border on no outside.
    """
    slack = SLACK * radius + 1e-4
    window = shapely.bounds(shapely.buffer(pocket, 2.0 * radius + 1.0))
    thick = shapely.buffer(shapely.clip_by_rect(wall, *window), slack)
    edge = shapely.difference(shapely.boundary(pocket), thick)
    pieces = shapely.get_parts(shapely.line_merge(edge))
    pieces = pieces[shapely.length(pieces) > slack]
    frame = shapely.box(*window)
    free = shapely.get_parts(shapely.difference(frame, shapely.union(thick, pocket)))
    outside = free[shapely.intersects(free, shapely.boundary(frame))]
    return [
        piece
        for piece in pieces
        if not shapely.is_closed(piece) and (shapely.distance(outside, piece) <= slack).any()
    ]


def _lies_over(pocket: Any, pieces: list[Any], buried: Any) -> bool:
    """Whether a pocket, cut straight at its openings, lies over the buried layer."""
    bulges = [
        shapely.polygons(shapely.get_coordinates(piece))
        for piece in pieces
        if shapely.get_num_points(piece) > 2
    ]
    core = shapely.difference(pocket, shapely.union_all(shapely.make_valid(bulges)))
    beyond = shapely.area(shapely.difference(core, buried))
    return bool(beyond <= 1e-4 * shapely.area(core) + LEAST_AREA_UM2)


def _across(wall: Any, piece: Any) -> tuple[float, tuple[float, ...]]:
    """Width of an opening and its two ends: the shortest line between its two faces."""
    ends = shapely.get_coordinates(piece)[[0, -1]]
    span = float(np.hypot(*(ends[1] - ends[0])))
    line = shapely.linestrings(ends)
    # the largest disc in which the two faces are not one piece of wall
    for reach in (1.5, 1.2, 1.0, 0.8, 0.65, 0.55):
        disc = shapely.buffer(shapely.points(ends.mean(axis=0)), reach * span)
        parts = shapely.get_parts(shapely.intersection(wall, disc))
        faces = [int(np.argmin(shapely.distance(parts, end))) for end in shapely.points(ends)]
        if len(parts) and faces[0] != faces[1]:
            line = shapely.shortest_line(parts[faces[0]], parts[faces[1]])
            break
    found = sorted(map(tuple, np.round(shapely.get_coordinates(line), 6).tolist()))
    (x0, y0), (x1, y1) = found
    return round(float(shapely.length(line)), 6), (x0, y0, x1, y1)
