"""Strips between an injector and the opposite half of a thyristor.

In: injectors, their rings, and the emitters.  Out: `Crossings`.  The opposite half is looked
for twice: among the injectors, and among the emitters that are none and stand outside the
innermost ring around the injector.
"""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import numpy as np
import shapely

from latchscan.layout.connections import BY_MARKER, BY_PIN, Crossings, Flags, Injectors
from latchscan.layout.enclose.search import Enclosure
from latchscan.layout.enclose.strips import Wells, boxes_of
from latchscan.layout.model import (
    SUBSTRATE_TAP,
    WELL_TAP,
    Emitters,
    Geometries,
    Ints,
    Layout,
    frozen,
)

TIE_UM = 1e-6
"""Distances nearer to each other than this are equal [um]."""


def find_crossings(
    layout: Layout,
    wells: Wells,
    injectors: Injectors,
    rings: Sequence[Enclosure],
    collects: Flags,
    *,
    driver_within_um: float,
    core_within_um: float,
) -> Crossings:
    """Strips on the way from every driven or marked emitter to the nearest opposite ones.

    Parameters
    ----------
    layout, wells
        What is drawn.
    injectors
        Of which the emitters driven by a pin or under a marker count.
    rings
        All rings; emitters in the innermost room of an injector are not its core.
    collects
        (n,) emitters that are collector strips: n+ on a supply.
    driver_within_um, core_within_um
        Farthest opposite emitter that is asked for [um].

    Returns
    -------
    Crossings
        Sorted by (injector, driver); no row where no such emitter is near enough.
    """
    emitters = layout.emitters
    asking = (injectors.emitter >= 0) & np.isin(injectors.reason, (BY_PIN, BY_MARKER))
    rows = np.flatnonzero(asking)
    drives = np.zeros(len(emitters.kind), dtype=np.bool_)
    drives[injectors.emitter[injectors.emitter >= 0]] = True
    own = np.zeros(len(emitters.kind), dtype=np.bool_)
    own[injectors.emitter[rows]] = True
    core = _core(emitters, ~drives, injectors, rows, rings, core_within_um)
    driver = _nearest(emitters, own, injectors, rows, driver_within_um)
    found = [(row, other, False) for row, other in core]
    found += [(row, other, True) for row, other in driver]
    found.sort(key=lambda row: (row[0], row[2]))
    injector = np.array([row for row, _, _ in found], dtype=np.int64)
    other = np.array([target for _, target, _ in found], dtype=np.int64)
    lines = _ways(emitters.polygons[injectors.emitter[injector]], emitters.polygons[other])
    ends = shapely.get_coordinates(lines).reshape(-1, 2, 2)
    return Crossings(
        injector=frozen(injector),
        other=frozen(other),
        driver=frozen(np.array([drive for _, _, drive in found], dtype=np.bool_)),
        spacing_um=frozen(np.asarray(shapely.length(lines), dtype=np.float64)),
        from_um=frozen(ends[:, 0].copy()),
        to_um=frozen(ends[:, 1].copy()),
        p_strips=frozen(_crossed(lines, _contacted(layout, SUBSTRATE_TAP))),
        n_strips=frozen(_n_strips(layout, wells, collects, lines, other)),
    )


def _ways(shapes: Geometries, others: Geometries) -> Geometries:
    """(c,) shortest line between two shapes, in the middle of where they face each other.

    Between parallel edges there are many; whichever an overlay hits upon would change when
    the drawing is turned, and so would what it crosses.
    """
    lines = np.asarray(shapely.shortest_line(shapes, others), dtype=np.object_).reshape(-1)
    length = shapely.length(lines)
    facing = shapely.intersection(others, shapely.buffer(shapes, length + TIE_UM))
    starts = shapely.get_point(shapely.shortest_line(shapes, shapely.centroid(facing)), 0)
    middle = np.asarray(shapely.shortest_line(starts, others), dtype=np.object_).reshape(-1)
    as_short = np.round(shapely.length(middle) - length, 9) <= 0.0
    return np.asarray(np.where(as_short, middle, lines), dtype=np.object_)


def _nearest(
    emitters: Emitters, chosen: Flags, injectors: Injectors, rows: Ints, within_um: float
) -> list[tuple[int, int]]:
    """(injector, emitter) of the nearest chosen emitter of the opposite kind, first of equals."""
    found: list[tuple[int, int]] = []
    for kind in (0, 1):
        targets = np.flatnonzero(chosen & (emitters.kind != kind))
        asking = rows[emitters.kind[injectors.emitter[rows]] == kind]
        if not len(targets) or not len(asking):
            continue
        tree = shapely.STRtree(emitters.polygons[targets])
        shapes = emitters.polygons[injectors.emitter[asking]]
        (row, target), distance = tree.query_nearest(
            shapes, max_distance=within_um + TIE_UM, return_distance=True
        )
        order = np.lexsort((target, np.rint(distance / TIE_UM), row))
        row, first = np.unique(row[order], return_index=True)
        found += zip(asking[row].tolist(), targets[target[order][first]].tolist(), strict=True)
    return found


def _core(
    emitters: Emitters,
    idle: Flags,
    injectors: Injectors,
    rows: Ints,
    rings: Sequence[Enclosure],
    within_um: float,
) -> list[tuple[int, int]]:
    """The nearest opposite emitter that drives nothing, outside the injector's room."""
    innermost: dict[int, tuple[float, int]] = {}
    for number, ring in enumerate(rings):
        for row in ring.quest.injector[ring.rows].tolist():
            size = (round(ring.outline.room.area, 6), number)
            innermost[row] = min(innermost.get(row, size), size)
    free = rows[[row not in innermost for row in rows.tolist()]]
    found = _nearest(emitters, idle, injectors, free, within_um)
    members: dict[int, list[int]] = {}
    for row in rows.tolist():
        if row in innermost:
            members.setdefault(innermost[row][1], []).append(row)
    points = shapely.point_on_surface(emitters.polygons)
    tree = shapely.STRtree(emitters.polygons)
    for number, inside in sorted(members.items()):
        room = rings[number].outline.room
        shapely.prepare(room)
        near = np.zeros(len(idle), dtype=np.bool_)
        shapes = emitters.polygons[injectors.emitter[inside]]
        near[tree.query(_grown(shapes, within_um))] = True
        near &= idle
        near[near] = ~np.asarray(shapely.intersects(room, points[near]))
        found += _nearest(emitters, near, injectors, np.array(inside), within_um)
    return found


def _grown(shapes: Geometries, by_um: float) -> Any:
    box = boxes_of(shapes)
    low, high = box[:, :2].min(axis=0) - by_um, box[:, 2:].max(axis=0) + by_um
    return shapely.box(*low, *high)


def _contacted(layout: Layout, kind: int) -> Geometries:
    taps = layout.taps
    return np.asarray(taps.polygons[(taps.kind == kind) & (taps.contact_count > 0)])


def _crossed(lines: Geometries, strips: Geometries) -> Ints:
    """(c,) how many of the strips each line crosses."""
    line, _ = shapely.STRtree(strips).query(lines, predicate="intersects")
    return np.asarray(np.bincount(line, minlength=len(lines)), dtype=np.int64)


def _n_strips(
    layout: Layout, wells: Wells, collects: Flags, lines: Geometries, other: Ints
) -> Ints:
    """Well taps crossed, collectors, and tied guard wells that are crossed beside their taps."""
    taps = layout.taps
    count = _crossed(lines, _contacted(layout, WELL_TAP))
    collectors = np.flatnonzero(collects)
    line, strip = shapely.STRtree(layout.emitters.polygons[collectors]).query(
        lines, predicate="intersects"
    )
    # a line to a collector ends there
    count += np.bincount(line[collectors[strip] != other[line]], minlength=len(lines))
    tied = np.flatnonzero((taps.kind == WELL_TAP) & (taps.contact_count > 0))
    guard = np.flatnonzero(wells.guard & np.isin(wells.body, taps.body[tied]))
    line, well = shapely.STRtree(wells.polygons[guard]).query(lines, predicate="intersects")
    seen, tap = shapely.STRtree(taps.polygons[tied]).query(lines, predicate="intersects")
    bodies = len(layout.bodies)
    counted = seen * bodies + taps.body[tied][tap]
    extra = np.setdiff1d(line * bodies + wells.body[guard][well], counted) // bodies
    return np.asarray(count + np.bincount(extra, minlength=len(lines)), dtype=np.int64)
