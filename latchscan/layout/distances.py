"""Straight-line distances of the layout: emitters to taps, taps to contacts, injectors to wells.

In goes a `Layout`; out come `Distances` for every emitter and tap and `Spacings` for every
injector.  Tap distance and tap reach are the same question asked of different shapes (which
point of this shape is farthest from the nearest of those?) and share
`latchscan.layout.measure.farthest`; spacings are smallest distances between whole polygons.
"""

from __future__ import annotations

from collections.abc import Iterator
from itertools import pairwise

import numpy as np
import shapely

from latchscan.layout.connections import Injectors, Rings
from latchscan.layout.measure.farthest import Farthest, farthest_in_crowds, farthest_points
from latchscan.layout.model import (
    N_OUTSIDE_NWELL,
    P_IN_NWELL,
    Distances,
    Floats,
    Geometries,
    Ints,
    Layout,
    Spacings,
    Taps,
    frozen,
)
from latchscan.tasks import Workers

TAP_DISTANCE_STAGE = "tap distances"
TAP_REACH_STAGE = "tap reach"
EMITTERS_PER_TASK = 20_000
CONTACTS_PER_TASK = 10_000
"""Sizes of a task; fixed, so that results do not depend on the number of workers."""

NO_COLLECTORS: Ints = np.zeros((0, 2), dtype=np.int64)
NO_COLLECTORS.setflags(write=False)

_Task = tuple[Geometries, Ints, Geometries, Ints]
_TapTask = tuple[Geometries, Floats, Ints]


def measure_distances(layout: Layout, workers: Workers) -> Distances:
    """Tap distance of every emitter and reach of every tap.

    Parameters
    ----------
    layout
        Bodies, taps with their contacts, and emitters.
    workers
        Where the measuring runs.

    Returns
    -------
    Distances
        The tap distance is taken over all points of the emitter, in a straight line, to
        contacted taps of its own body only; NaN without one.  The reach of a tap is taken
        from the edges of its own contacts.

    Raises
    ------
    GeometryError
        If a polygon crosses itself.
    ResolutionError
        If a distance cannot be bounded.

    Notes
    -----
    A straight line may leave the body where that is concave: the distance is what a layout
    engineer measures, not the path of the current, which the resistances are for.
    """
    # emitters are measured faster here than their polygons travel to another process
    here = Workers(progress=workers.progress)
    emitter = _joined(here.map(TAP_DISTANCE_STAGE, _measure, _emitter_tasks(layout)))
    tap = _joined(workers.map(TAP_REACH_STAGE, _reach, _tap_tasks(layout.taps)))
    return Distances(
        tap_distance_um=emitter.distance_um,
        farthest_um=emitter.at_um,
        nearest_tap_um=emitter.nearest_um,
        tap_reach_um=tap.distance_um,
        tap_reach_at_um=tap.at_um,
    )


def _emitter_tasks(layout: Layout) -> list[_Task]:
    """Emitters in runs, each with the contacted taps of its bodies."""
    taps, emitters = layout.taps, layout.emitters
    contacted = np.flatnonzero(taps.contact_count > 0)
    polygons, body = taps.polygons[contacted], taps.body[contacted]
    tasks = []
    for first in range(0, len(emitters.polygons), EMITTERS_PER_TASK):
        rows = slice(first, first + EMITTERS_PER_TASK)
        seen = np.isin(body, emitters.body[rows])
        tasks.append((emitters.polygons[rows], emitters.body[rows], polygons[seen], body[seen]))
    return tasks


def _tap_tasks(taps: Taps) -> list[_TapTask]:
    """Taps in runs with about as many contacts each, and the tap of each contact."""
    offsets = taps.contact_first
    run = offsets[:-1] // CONTACTS_PER_TASK
    limits = np.flatnonzero(np.diff(run, prepend=-1, append=np.iinfo(np.int64).max))
    tasks = []
    for first, end in pairwise(limits):
        contacts = taps.contact_box_um[offsets[first] : offsets[end]]
        owner = np.repeat(np.arange(end - first), np.diff(offsets[first : end + 1]))
        tasks.append((taps.polygons[first:end], contacts, owner))
    return tasks


def _measure(task: _Task) -> Farthest:
    return farthest_points(*task)


def _reach(task: _TapTask) -> Farthest:
    return farthest_in_crowds(*task)


def _joined(parts: list[Farthest]) -> Farthest:
    return Farthest(
        distance_um=frozen(np.concatenate([np.empty(0), *(p.distance_um for p in parts)])),
        at_um=frozen(np.concatenate([np.empty((0, 2)), *(p.at_um for p in parts)])),
        nearest_um=frozen(np.concatenate([np.empty((0, 2)), *(p.nearest_um for p in parts)])),
    )


def own_collectors(layout: Layout, injectors: Injectors, rings: Rings) -> Ints:
    """Wells that stand around an injector to collect what it emits, not to be fired by it.

    Parameters
    ----------
    layout
        Bodies and emitters.
    injectors, rings
        Guard wells are rings of the material ``nwell``.

    Returns
    -------
    Ints
        (k, 2) emitter and n-well body, sorted: the guard wells around each injector, and the
        well around its isolated p-well where that well holds no p+ emitter.
    """
    emitters, bodies = layout.emitters, layout.bodies
    polygons, owner = _wells(layout)
    pairs = []
    tree = shapely.STRtree(polygons)
    for ring in np.flatnonzero(rings.material == "nwell").tolist():
        wells = np.unique(owner[tree.query(rings.polygons[ring], predicate="covers")])
        first, last = rings.member_first[ring], rings.member_first[ring + 1]
        members = injectors.emitter[rings.member_injector[first:last]]
        pairs += [(emitter, well) for emitter in members[members >= 0] for well in wells]
    holds_anode = np.zeros(len(bodies), dtype=np.bool_)
    holds_anode[emitters.body[emitters.kind == P_IN_NWELL]] = True
    around = np.array([body.enclosing for body in bodies], dtype=np.int64)[emitters.body]
    inside = np.flatnonzero((emitters.injector != "") & (around >= 0))
    inside = inside[~holds_anode[around[inside]]]
    pairs += list(zip(inside.tolist(), around[inside].tolist(), strict=True))
    return np.asarray(np.unique(np.array(pairs, dtype=np.int64).reshape(-1, 2), axis=0))


def measure_spacings(layout: Layout, collectors: Ints = NO_COLLECTORS) -> Spacings:
    """Distance of every injector from the nearest other half of a thyristor.

    Parameters
    ----------
    layout
        Bodies and emitters; an injector is an emitter with a name in `injector`.
    collectors
        (k, 2) n+ emitters and n-well bodies that are no target for them, as
        `own_collectors` gives them.

    Returns
    -------
    Spacings
        For an n+ injector to the nearest drawn n-well polygon of any other body, for a p+
        injector to the nearest n+ emitter outside wells; one row for each injector, in the
        emitters' order, with the ends of the shortest line.
    """
    emitters = layout.emitters
    injectors = np.flatnonzero(emitters.injector != "")
    wells = _wells(layout)
    n_plus = np.flatnonzero(emitters.kind == N_OUTSIDE_NWELL)
    diffusions = (emitters.polygons[n_plus], emitters.body[n_plus])
    body = np.full(len(injectors), -1, dtype=np.int64)
    spacing = np.full(len(injectors), np.nan)
    ends = np.full((len(injectors), 2, 2), np.nan)
    for rows, ignored in _with_equal_targets(injectors, emitters.kind, collectors):
        polygons, owner = wells
        if emitters.kind[injectors[rows[0]]] == P_IN_NWELL:
            polygons, owner = diffusions
        elif ignored:
            other = ~np.isin(owner, ignored)
            polygons, owner = polygons[other], owner[other]
        if len(polygons):
            target, ends[rows] = _shortest(emitters.polygons[injectors[rows]], polygons)
            body[rows] = owner[target]
            spacing[rows] = np.hypot(*(ends[rows, 1] - ends[rows, 0]).T)
    return Spacings(
        emitter=frozen(injectors),
        body=frozen(body),
        spacing_um=frozen(spacing),
        from_um=frozen(ends[:, 0].copy()),
        to_um=frozen(ends[:, 1].copy()),
    )


def _wells(layout: Layout) -> tuple[Geometries, Ints]:
    """All n-well polygons and the body of each."""
    wells = [(i, body.polygons) for i, body in enumerate(layout.bodies) if body.kind == "nwell"]
    polygons = np.concatenate([np.empty(0, dtype=object), *(p for _, p in wells)])
    owner = np.repeat(
        np.array([i for i, _ in wells], dtype=np.int64),
        np.array([len(p) for _, p in wells], dtype=np.int64),
    )
    return polygons, owner


def _with_equal_targets(
    injectors: Ints, kind: Ints, collectors: Ints
) -> Iterator[tuple[Ints, tuple[int, ...]]]:
    """Rows of injectors of one kind that leave out the same bodies, and these bodies."""
    ignored: dict[int, list[int]] = {}
    for emitter, well in collectors.tolist():
        ignored.setdefault(emitter, []).append(well)
    groups: dict[tuple[int, tuple[int, ...]], list[int]] = {}
    for row, emitter in enumerate(injectors.tolist()):
        key = (int(kind[emitter]), tuple(sorted(ignored.get(emitter, ()))))
        groups.setdefault(key, []).append(row)
    for (_, wells), rows in groups.items():
        yield np.array(rows, dtype=np.int64), wells


def _shortest(sources: Geometries, targets: Geometries) -> tuple[Ints, Floats]:
    """Index (n,) of the nearest target of each source, the first of equals, and both ends."""
    source, target = shapely.STRtree(targets).query_nearest(sources)
    order = np.lexsort((target, source))
    first = order[np.searchsorted(source[order], np.arange(len(sources)))]
    nearest = target[first]
    lines = shapely.shortest_line(sources, targets[nearest])
    return nearest, shapely.get_coordinates(lines).reshape(-1, 2, 2)
