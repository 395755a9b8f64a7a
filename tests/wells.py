"""Layouts of wells built from shapes, and a finite-element solution of the same wells."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace
from typing import Any

import numpy as np
import scipy.sparse.linalg
import shapely
from skfem import Basis, BilinearForm, ElementQuad0, ElementQuad2, LinearForm, MeshQuad

from latchscan.layout.model import (
    N_OUTSIDE_NWELL,
    P_IN_NWELL,
    SUBSTRATE_TAP,
    WELL_TAP,
    Body,
    Emitters,
    Layout,
    Pairs,
    Regions,
    Taps,
)
from latchscan.tasks import Workers


def objects(shapes: Sequence[Any]) -> Any:
    """Shapes as an object array."""
    result = np.empty(len(shapes), dtype=object)
    result[:] = list(shapes)
    return result


def layout_of(
    bodies: Sequence[Body],
    taps: Sequence[tuple[Any, int, int]],
    emitters: Sequence[tuple[Any, int]],
) -> Layout:
    """A layout of bodies, (polygon, body, contacts) taps and (polygon, body) emitters."""
    body_of_tap = np.array([body for _, body, _ in taps], dtype=np.int64)
    body_of = np.array([body for _, body in emitters], dtype=np.int64)
    in_well = np.array([bodies[k].kind == "nwell" for k in body_of])
    count = np.array([contacts for _, _, contacts in taps], dtype=np.int64)
    polygons = objects([p for p, _ in emitters])
    return Layout(
        regions=Regions(
            bbox_um=(0, 0, 1, 1), shapes={}, contact_box_um=np.empty((0, 4)), labels=()
        ),
        bodies=tuple(bodies),
        taps=Taps(
            polygons=objects([p for p, _, _ in taps]),
            kind=np.array(
                [WELL_TAP if bodies[k].kind == "nwell" else SUBSTRATE_TAP for k in body_of_tap]
            ),
            body=body_of_tap,
            contact_count=count,
            contact_first=np.concatenate([[0], np.cumsum(count)]),
            contact_box_um=np.zeros((int(count.sum()), 4)),
        ),
        emitters=Emitters(
            ids=np.array([f"e-{k}" for k in range(len(emitters))]),
            polygons=polygons,
            kind=np.where(in_well, P_IN_NWELL, N_OUTSIDE_NWELL),
            body=body_of,
            box_um=shapely.bounds(polygons),
            area_um2=shapely.area(polygons),
            over_buried=np.zeros(len(emitters), dtype=bool),
            injector=np.array([""] * len(emitters)),
        ),
    )


def nwell(sheets: Sequence[tuple[Any, Any]], number: int = 0) -> Body:
    """An n-well body of (sheet kind, polygon) parts."""
    outline = shapely.union_all([p for _, p in sheets])
    return Body(
        id=f"nwell-{number}", kind="nwell", polygons=objects([outline]), sheets=tuple(sheets)
    )


def pairs_of(rows: Sequence[tuple[int, int, int, int, tuple[float, float]]]) -> Pairs:
    """Pairs (anode, cathode, well, base, place), the place taken for edge and arrival."""
    anode, cathode, well, base = (
        np.array([row[k] for row in rows], dtype=np.int64) for k in range(4)
    )
    place = np.array([row[4] for row in rows], dtype=float).reshape(-1, 2)
    return Pairs(
        anode=anode,
        cathode=cathode,
        well=well,
        base=base,
        spacing_um=np.ones(len(rows)),
        base_width_um=np.ones(len(rows)),
        edge_um=place,
        arrival_um=place,
    )


def moved(layout: Layout, change: Any) -> Layout:
    """The layout with every coordinate array put through `change`."""

    def shift(shapes: Any) -> Any:
        return shapely.transform(shapes, change)

    return replace(
        layout,
        bodies=tuple(
            replace(
                body,
                polygons=shift(body.polygons),
                sheets=tuple((kind, shift(polygon)) for kind, polygon in body.sheets),
            )
            for body in layout.bodies
        ),
        taps=replace(layout.taps, polygons=shift(layout.taps.polygons)),
        emitters=replace(layout.emitters, polygons=shift(layout.emitters.polygons)),
    )


ALONE = Workers()


def graded(marks: Sequence[float], smallest: float, largest: float) -> Any:
    """Grid lines through all marks, close beside each and growing by 1.7 away from it."""
    lines = [np.unique(np.round(marks, 6))]
    for a, b in zip(lines[0][:-1], lines[0][1:], strict=True):
        half, step, at = 0.5 * (b - a), smallest, smallest
        while at < half:
            lines.append(np.array([a + at, b - at]))
            step = min(1.7 * step, largest)
            at += step
        lines.append(np.array([a + half]))
    every = np.unique(np.round(np.concatenate(lines), 9))
    keep = np.concatenate([[True], np.diff(every) > 0.3 * smallest])
    return every[keep]


def finite_elements(
    sheets: Sequence[tuple[float, Any]],
    taps: Sequence[Any],
    tap_resistance_ohm: Sequence[float],
    sources: Sequence[Any],
    *,
    smallest_um: float = 0.05,
    largest_um: float = 0.6,
) -> tuple[Any, Any]:
    """Mean (n, n) and largest (n,) potentials by quadratic elements (scikit-fem).

    The grid is a tensor product whose lines follow every edge; each tap is one unknown.
    """
    corners = np.concatenate(
        [shapely.get_coordinates(p) for p in [*(p for _, p in sheets), *taps, *sources]]
    )
    mesh = MeshQuad.init_tensor(
        graded(corners[:, 0], smallest_um, largest_um),
        graded(corners[:, 1], smallest_um, largest_um),
    )
    centres = shapely.points(mesh.p[:, mesh.t].mean(axis=1).T)
    conductance = np.zeros(len(centres))
    for value, polygon in sheets:
        conductance[shapely.contains(polygon, centres)] = value
    inside = (conductance > 0) & ~shapely.contains(shapely.union_all(taps), centres)
    mesh, conductance, centres = (
        mesh.restrict(np.flatnonzero(inside)),
        conductance[inside],
        centres[inside],
    )
    basis = Basis(mesh, ElementQuad2())
    flat = basis.with_element(ElementQuad0())

    @BilinearForm
    def stiffness(u: Any, v: Any, w: Any) -> Any:
        return w["g"] * (u.grad[0] * v.grad[0] + u.grad[1] * v.grad[1])

    @LinearForm
    def load(v: Any, w: Any) -> Any:
        return w["s"] * v

    matrix = stiffness.assemble(basis, g=flat.interpolate(conductance))
    right = np.stack(
        [
            load.assemble(basis, s=flat.interpolate(shapely.contains(p, centres) / shapely.area(p)))
            for p in sources
        ],
        axis=1,
    )
    places = shapely.points(basis.doflocs.T)
    tied = np.full(basis.N, -1)
    for k, tap in enumerate(taps):
        tied[shapely.dwithin(tap, places, 1e-7)] = k
    free = np.flatnonzero(tied < 0)
    column = np.empty(basis.N, dtype=int)
    column[free] = np.arange(len(free))
    column[tied >= 0] = len(free) + tied[tied >= 0]
    size = len(free) + len(taps)
    join = scipy.sparse.csr_matrix(
        (np.ones(basis.N), (np.arange(basis.N), column)), (basis.N, size)
    )
    ground = np.zeros(size)
    ground[len(free) :] = 1.0 / np.asarray(tap_resistance_ohm)
    joined = (join.T @ matrix @ join + scipy.sparse.diags(ground)).tocsc()
    potential = join @ scipy.sparse.linalg.splu(joined).solve(join.T @ right)
    largest = [potential[shapely.dwithin(p, places, 1e-7), k].max() for k, p in enumerate(sources)]
    return right.T @ potential, np.array(largest)
