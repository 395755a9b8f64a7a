"""Candidate thyristors: which anodes and cathodes stand close enough to be judged together.

In goes a `Layout`; out come `Pairs`: every anode with its nearest cathodes and every cathode
with its nearest anodes, within a reach.  An anode is a p+ emitter, or an isolated p-well that
acts on the n-well around it; a cathode is an n+ emitter outside wells.  A cathode in an
isolated p-well pairs only with anodes of the n-well around that p-well.
"""

from __future__ import annotations

from collections.abc import Iterable, Iterator
from dataclasses import dataclass

import numpy as np
import shapely

from latchscan.layout.measure.neighbours import Neighbours, first_few, joined, nearest_few
from latchscan.layout.measure.walls import nearest_on_walls
from latchscan.layout.model import (
    N_OUTSIDE_NWELL,
    P_IN_NWELL,
    Body,
    Emitters,
    Floats,
    Geometries,
    Ints,
    Layout,
    Pairs,
    frozen,
)

NEAREST = 6
"""Partners that each anode and each cathode keeps."""


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class _Halves:
    """Anodes or cathodes as columns.

    Attributes
    ----------
    index
        (n,) as in `Pairs`.
    polygons
        (n,) their shapes.
    body
        (n,) the body it is made of (an isolated p-well) or lies in (an emitter).
    host
        (n,) the n-well body it acts on: an anode's own; for a cathode the one around its
        isolated p-well, -1 in the substrate.
    """

    index: Ints
    polygons: Geometries
    body: Ints
    host: Ints


def find_pairs(layout: Layout, reach_um: float) -> Pairs:
    """Candidate pairs of a layout.

    Parameters
    ----------
    layout
        Bodies and emitters.
    reach_um
        Largest anode-to-cathode distance [um], > 0.

    Returns
    -------
    Pairs
        Sorted by (anode, cathode), without doubles: for each p+ emitter and each isolated
        p-well its `NEAREST` nearest cathodes, for each cathode its `NEAREST` nearest p+
        emitters; equally near ones in the order of their indices.  An isolated p-well never
        pairs with a cathode inside itself.
    """
    emitters, bodies = layout.emitters, layout.bodies
    p_plus, wells = _p_emitters(emitters), _isolated_wells(bodies, len(emitters.kind))
    cathodes = _n_emitters(emitters, bodies)
    forward = [
        *_asked(p_plus, cathodes, _meetings(p_plus, cathodes), reach_um),
        *_asked(wells, cathodes, _well_meetings(wells, cathodes), reach_um),
    ]
    meetings = [(cathode, anode) for anode, cathode in _meetings(p_plus, cathodes)]
    backward = _few(_asked(cathodes, p_plus, meetings, reach_um))
    chosen = _few(forward)
    anode = np.concatenate([chosen.source, backward.target])
    cathode = np.concatenate([chosen.target, backward.source])
    spacing = np.concatenate([chosen.distance_um, backward.distance_um])
    _, first = np.unique(np.stack([anode, cathode]), axis=1, return_index=True)
    return _placed(layout, anode[first], cathode[first], spacing[first])


def _p_emitters(emitters: Emitters) -> _Halves:
    index = np.flatnonzero(emitters.kind == P_IN_NWELL)
    body = emitters.body[index]
    return _Halves(index=index, polygons=emitters.polygons[index], body=body, host=body)


def _n_emitters(emitters: Emitters, bodies: tuple[Body, ...]) -> _Halves:
    index = np.flatnonzero(emitters.kind == N_OUTSIDE_NWELL)
    body = emitters.body[index]
    host = np.array([body.enclosing for body in bodies], dtype=np.int64)[body]
    return _Halves(index=index, polygons=emitters.polygons[index], body=body, host=host)


def _isolated_wells(bodies: tuple[Body, ...], emitter_count: int) -> _Halves:
    body = np.array(
        [
            i
            for i, body in enumerate(bodies)
            if body.kind == "isolated_pwell" and body.enclosing >= 0 and len(body.polygons)
        ],
        dtype=np.int64,
    )
    return _Halves(
        index=emitter_count + body,
        polygons=_shapes_of(bodies, body),
        body=body,
        host=np.array([bodies[i].enclosing for i in body], dtype=np.int64),
    )


def _shapes_of(bodies: tuple[Body, ...], index: Ints) -> Geometries:
    """Each body in `index` as one shape."""
    shapes = np.empty(len(index), dtype=object)
    for row, i in enumerate(index):
        polygons = bodies[i].polygons
        shapes[row] = polygons[0] if len(polygons) == 1 else shapely.multipolygons(polygons)
    return shapes


def _meetings(anodes: _Halves, cathodes: _Halves) -> Iterator[tuple[Ints, Ints]]:
    """Rows of anodes and of cathodes that may pair: all with the substrate, then by n-well."""
    yield np.arange(len(anodes.index)), np.flatnonzero(cathodes.host < 0)
    for host in np.unique(cathodes.host[cathodes.host >= 0]):
        yield np.flatnonzero(anodes.host == host), np.flatnonzero(cathodes.host == host)


def _well_meetings(wells: _Halves, cathodes: _Halves) -> Iterator[tuple[Ints, Ints]]:
    """The same for isolated p-wells as anodes, none of which meets its own cathodes."""
    yield np.arange(len(wells.index)), np.flatnonzero(cathodes.host < 0)
    for row, (body, host) in enumerate(zip(wells.body, wells.host, strict=True)):
        yield np.array([row]), np.flatnonzero((cathodes.host == host) & (cathodes.body != body))


def _asked(
    sources: _Halves,
    targets: _Halves,
    meetings: Iterable[tuple[Ints, Ints]],
    reach_um: float,
) -> list[Neighbours]:
    """Nearest targets of the sources in each meeting, with indices as in `Pairs`."""
    found = []
    for source, target in meetings:
        near = nearest_few(
            sources.polygons[source], targets.polygons[target], count=NEAREST, reach_um=reach_um
        )
        found.append(
            Neighbours(
                source=sources.index[source][near.source],
                target=targets.index[target][near.target],
                distance_um=near.distance_um,
            )
        )
    return found


def _placed(layout: Layout, anode: Ints, cathode: Ints, spacing: Floats) -> Pairs:
    """Pairs with their bodies and the places where carriers are collected and arrive."""
    emitters, bodies = layout.emitters, layout.bodies
    enclosing = np.array([body.enclosing for body in bodies], dtype=np.int64)
    count = len(emitters.kind)
    well = np.concatenate([emitters.body, enclosing])[anode]
    base = emitters.body[cathode]
    isolated = np.flatnonzero(enclosing[base] >= 0)
    used, anode_row = np.unique(anode, return_inverse=True)
    shapes = np.concatenate(
        [emitters.polygons[used[used < count]], _shapes_of(bodies, used[used >= count] - count)]
    )
    width, edge = _on_bodies(bodies, well, emitters.polygons, cathode)
    arrival = _inside(shapes)[anode_row]
    arrival[isolated] = _on_bodies(bodies, base[isolated], shapes, anode_row[isolated])[1]
    return Pairs(
        anode=frozen(anode),
        cathode=frozen(cathode),
        well=frozen(well),
        base=frozen(base),
        spacing_um=frozen(spacing),
        base_width_um=frozen(width),
        edge_um=frozen(edge),
        arrival_um=frozen(arrival),
    )


def _on_bodies(
    bodies: tuple[Body, ...], body: Ints, shapes: Geometries, row: Ints
) -> tuple[Floats, Floats]:
    """Distance (m,) and point (m, 2) on the outline of body[m] nearest to shapes[row[m]]."""
    distance, point = np.empty(len(body)), np.empty((len(body), 2))
    for index in np.unique(body):
        members = np.flatnonzero(body == index)
        used, back = np.unique(row[members], return_inverse=True)
        width, place = nearest_on_walls(bodies[index].polygons, shapes[used])
        distance[members], point[members] = width[back], place[back]
    return distance, point


def _inside(shapes: Geometries) -> Floats:
    """A point (n, 2) under each shape: its centroid, or a point of it where that is outside."""
    centre = shapely.centroid(shapes)
    return np.asarray(
        shapely.get_coordinates(
            np.where(shapely.intersects(shapes, centre), centre, shapely.point_on_surface(shapes))
        )
    )


def _few(found: list[Neighbours]) -> Neighbours:
    """The `NEAREST` nearest of each source over several answers."""
    return first_few(joined(found), NEAREST)
