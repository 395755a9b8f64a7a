"""What may collect carriers around which injector: the strips of every material.

In: the layout, what it is connected to, and the injectors.  Out: `Quest`s: one material, its
strips, and the injectors around which they count.

An n+ diffusion in p-type silicon, and an n-well as a whole, inject electrons: taps of the
p-body take up the holes that go with them (majority), n-wells without p+ in them and n+
diffusions on a supply collect the electrons (minority).  A p+ diffusion in an n-well, and an
isolated p-well as a whole, inject holes into that n-well: its taps are the majority strips,
p+ diffusions on a ground in the same n-well and substrate taps around it collect the holes.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np
import shapely

from latchscan.layout.connections import MAJORITY, MINORITY, Flags, Injectors, Pins
from latchscan.layout.model import (
    N_OUTSIDE_NWELL,
    P_IN_NWELL,
    SUBSTRATE_TAP,
    WELL_TAP,
    Floats,
    Geometries,
    Ints,
    Layout,
)

SUBSTRATE_TAP_STRIP = "substrate_tap"
WELL_TAP_STRIP = "well_tap"
NWELL_STRIP = "nwell"
N_STRIP = "n_strip"
P_STRIP = "p_strip"
OF_TAPS = (SUBSTRATE_TAP_STRIP, WELL_TAP_STRIP)


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Quest:
    """One question: which of these strips enclose which of these injectors.

    Attributes
    ----------
    kind
        `MAJORITY` or `MINORITY`.
    material
        As in `Rings`.
    strips
        (n,) polygons, sorted by (y0, x0).
    strip_row
        (n,) tap, emitter or, for n-wells, number among `Wells` of each.
    strip_body
        (n,) body that each ties or is.
    injector
        (i,) rows of the injectors.
    place
        (i,) what has to be enclosed: the diffusion, or the well it lies in.
    own
        (i,) the diffusion or the well that injects.
    electrons
        Whether the injectors inject electrons (into p-type silicon) or holes.
    """

    kind: int
    material: str
    strips: Geometries
    strip_row: Ints
    strip_body: Ints
    injector: Ints
    place: Geometries
    own: Geometries
    electrons: bool


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Wells:
    """All drawn n-wells (w), sorted by (y0, x0).

    Attributes
    ----------
    polygons, body
        (w,) the wells and their bodies.
    guard
        (w,) True where the body holds no p+ diffusion.
    """

    polygons: Geometries
    body: Ints
    guard: Flags


def gather_wells(layout: Layout) -> Wells:
    """The n-wells of a layout."""
    wells = [(row, body.polygons) for row, body in enumerate(layout.bodies) if body.kind == "nwell"]
    polygons = np.concatenate([np.empty(0, dtype=np.object_), *(shapes for _, shapes in wells)])
    body = np.repeat(
        np.array([row for row, _ in wells], dtype=np.int64),
        np.array([len(shapes) for _, shapes in wells], dtype=np.int64),
    )
    order = by_place(polygons)
    emitters = layout.emitters
    holds = np.unique(emitters.body[emitters.kind == P_IN_NWELL])
    return Wells(
        polygons=polygons[order],
        body=body[order],
        guard=np.asarray(~np.isin(body[order], holds)),
    )


def by_place(polygons: Geometries) -> Ints:
    """Order of polygons by (y0, x0), then by (y1, x1)."""
    x0, y0, x1, y1 = shapely.bounds(polygons).reshape(-1, 4).T
    return np.asarray(np.lexsort((x1, y1, x0, y0)))


def collectors(
    layout: Layout, pins: Pins, emitter_net: Ints, injectors: Injectors
) -> tuple[Flags, Flags]:
    """(n,) emitters that collect electrons (n+ on a supply) and holes (p+ on a ground).

    None that injects itself is among them.
    """
    emitters = layout.emitters
    free = np.ones(len(emitters.kind), dtype=np.bool_)
    free[injectors.emitter[injectors.emitter >= 0]] = False
    electrons = free & _on(pins, emitter_net, "supply") & (emitters.kind == N_OUTSIDE_NWELL)
    holes = free & _on(pins, emitter_net, "ground") & (emitters.kind == P_IN_NWELL)
    return electrons, holes


def quests(
    layout: Layout, wells: Wells, collecting: tuple[Flags, Flags], injectors: Injectors
) -> Iterator[Quest]:
    """Every material with the injectors around which it counts.

    Parameters
    ----------
    layout, wells
        What is drawn.
    collecting
        From `collectors`.
    injectors
        Rows to be enclosed.
    """
    collects, drains = collecting
    seats = _seats(layout, wells, injectors)
    taps, emitters, bodies = layout.taps, layout.emitters, layout.bodies
    substrate = np.array([body.kind == "substrate" for body in bodies], dtype=np.bool_)
    p_taps, n_taps = taps.kind == SUBSTRATE_TAP, taps.kind == WELL_TAP
    rows = np.flatnonzero(seats.electrons)
    guard = wells.guard & ~np.isin(wells.body, injectors.body[injectors.emitter < 0])
    strips = _chosen(NWELL_STRIP, wells.polygons, wells.body, guard)
    yield _quest(MINORITY, strips, seats, rows, seats.own)
    for body in np.unique(seats.body[rows]).tolist():
        inside = rows[seats.body[rows] == body]
        chosen = p_taps & (taps.body == body)
        strips = _chosen(SUBSTRATE_TAP_STRIP, taps.polygons, taps.body, chosen)
        yield _quest(MAJORITY, strips, seats, inside, seats.own)
        chosen = collects & (emitters.body == body)
        strips = _chosen(N_STRIP, emitters.polygons, emitters.body, chosen)
        yield _quest(MINORITY, strips, seats, inside, seats.own)
    rows = np.flatnonzero(~seats.electrons)
    strips = _chosen(SUBSTRATE_TAP_STRIP, taps.polygons, taps.body, p_taps & substrate[taps.body])
    yield _quest(MINORITY, strips, seats, rows, seats.well)
    for body in np.unique(seats.body[rows]).tolist():
        inside = rows[seats.body[rows] == body]
        chosen = n_taps & (taps.body == body)
        strips = _chosen(WELL_TAP_STRIP, taps.polygons, taps.body, chosen)
        yield _quest(MAJORITY, strips, seats, inside, seats.own)
        chosen = drains & (emitters.body == body)
        strips = _chosen(P_STRIP, emitters.polygons, emitters.body, chosen)
        yield _quest(MINORITY, strips, seats, inside, seats.own)


_Chosen = tuple[str, Geometries, Ints, Ints]
"""Material, polygons, rows and bodies of strips."""


def _chosen(material: str, polygons: Geometries, body: Ints, chosen: Flags) -> _Chosen:
    row = np.flatnonzero(chosen)
    row = row[by_place(polygons[row])]
    return material, polygons[row], row, body[row]


def _quest(kind: int, strips: _Chosen, seats: _Seats, rows: Ints, place: Geometries) -> Quest:
    material, polygons, row, body = strips
    return Quest(
        kind=kind,
        material=material,
        strips=polygons,
        strip_row=row,
        strip_body=body,
        injector=rows,
        place=place[rows],
        own=seats.own[rows],
        electrons=bool(seats.electrons[rows].all()),
    )


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class _Seats:
    """Where every injector injects: body, own shape, and the n-well polygon around a p+."""

    electrons: Flags
    body: Ints
    own: Geometries
    well: Geometries


def _seats(layout: Layout, wells: Wells, injectors: Injectors) -> _Seats:
    bodies, emitters = layout.bodies, layout.emitters
    substrate = next(row for row, body in enumerate(bodies) if body.kind == "substrate")
    count = len(injectors.emitter)
    electrons = np.zeros(count, dtype=np.bool_)
    body = injectors.body.copy()
    own = np.empty(count, dtype=np.object_)
    drawn = np.flatnonzero(injectors.emitter >= 0)
    own[drawn] = emitters.polygons[injectors.emitter[drawn]]
    electrons[drawn] = emitters.kind[injectors.emitter[drawn]] == N_OUTSIDE_NWELL
    for row in np.flatnonzero(injectors.emitter < 0).tolist():
        whole = bodies[int(injectors.body[row])]
        polygons = whole.polygons
        own[row] = polygons[0] if len(polygons) == 1 else shapely.multipolygons(polygons)
        electrons[row] = whole.kind == "nwell"
        body[row] = substrate if whole.enclosing < 0 else whole.enclosing
    return _Seats(
        electrons=electrons, body=body, own=own, well=_wells_around(wells, own, body, ~electrons)
    )


def _wells_around(wells: Wells, own: Geometries, body: Ints, asked: Flags) -> Geometries:
    """(i,) the n-well polygon of the body that holds each shape, or has it in a hole."""
    found = own.copy()
    rows = np.flatnonzero(asked)
    if not len(rows) or not len(wells.polygons):
        return found
    filled = shapely.polygons(shapely.get_exterior_ring(wells.polygons))
    points = shapely.point_on_surface(own[rows])
    row, well = shapely.STRtree(filled).query(points, predicate="intersects")
    fits = wells.body[well] == body[rows[row]]
    row, well = row[fits], well[fits]
    size = shapely.area(filled[well])
    # written from the largest down, so that the innermost stays
    order = np.lexsort((well, -size))
    found[rows[row[order]]] = wells.polygons[well[order]]
    return found


def _on(pins: Pins, net: Ints, kind: str) -> Flags:
    """(n,) whether nets are known and of a kind."""
    found = np.zeros(len(net), dtype=np.bool_)
    known = net >= 0
    found[known] = pins.net_kind[net[known]] == kind
    return found


def boxes_of(shapes: Geometries) -> Floats:
    """(n, 4) boxes x0, y0, x1, y1."""
    return np.asarray(shapely.bounds(shapes), dtype=np.float64).reshape(-1, 4)
