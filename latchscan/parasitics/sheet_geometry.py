"""From the shapes of a body to the sheet that the field solver takes.

In go sheets (conductance, polygon), contacted taps and a window; out come the boundary
segments of the sheet minus its taps, each told apart by what lies behind it: a tap, another
domain, the body's own edge, or the cut of the window.

Everything is snapped to a grid of 1 nm and cut at every vertex that touches it, so that two
shapes that share an edge share it exactly.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
import shapely
from numpy.typing import NDArray

from latchscan.fields.sheet import SheetProblem, SheetSources
from latchscan.layout.model import Box, Floats, Geometries, Ints

GRID_UM = 1.0e-3
_TOUCH_UM = 1.1e-3
_MARGIN_UM = 0.1
_SMALLEST_AREA_UM2 = 1.0e-5


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class SheetOutline:
    """A body's sheet inside a window, with its taps taken out.

    Attributes
    ----------
    problem
        The sheet; each of its domains is one connected polygon.
    parts
        (d,) those polygons.
    component
        (d,) number of the connected piece of sheet a domain belongs to.
    tied
        (d,) True where that piece reaches a tap inside the window.
    whole
        True where the window cuts nothing.
    """

    problem: SheetProblem
    parts: Geometries
    component: Ints
    tied: NDArray[np.bool_]
    whole: bool

    def keep(self, domains: NDArray[np.bool_]) -> SheetOutline:
        """Return the outline of the chosen domains alone; they must be whole components."""
        number = np.where(domains, np.cumsum(domains) - 1, -1)
        p = self.problem
        left = np.where(p.left >= 0, number[p.left], -1)
        right = np.where(p.right >= 0, number[p.right], -1)
        real = (left >= 0) | (right >= 0)
        return SheetOutline(
            problem=SheetProblem(
                conductance_s=p.conductance_s[domains],
                start_um=p.start_um[real],
                end_um=p.end_um[real],
                left=left[real],
                right=right[real],
                node=p.node[real],
                cut=p.cut[real],
                node_resistance_ohm=p.node_resistance_ohm,
            ),
            parts=self.parts[domains],
            component=self.component[domains],
            tied=self.tied[domains],
            whole=not bool(np.any(p.cut[real])),
        )


def outline_sheet(
    sheets: Sequence[tuple[float, Any]],
    taps: Geometries,
    tap_resistance_ohm: Floats,
    window_um: Box | None = None,
) -> SheetOutline:
    """Outline of a body's sheet.

    Parameters
    ----------
    sheets
        (conductance per square [S], polygon) of the disjoint parts of the body's sheet.
    taps
        (t,) polygons of its contacted taps; taps that touch or overlap become one node.
    tap_resistance_ohm
        (t,) resistance of each tap's contacts to the rail.
    window_um
        Box to cut out of the body; None for all of it.
    """
    conductance, polygons = _clip(sheets, window_um)
    merged, resistance = _merge_taps(taps, tap_resistance_ohm, window_um)
    parts, owner = _parts(polygons, merged, window_um)
    start, end, part = _directed_edges(parts)
    tap_start, tap_end, tap_node = _directed_edges(merged)
    vertices = np.unique(np.concatenate([start, tap_start]), axis=0)
    start, end, part = _split(start, end, part, vertices)
    tap_start, tap_end, tap_node = _split(tap_start, tap_end, tap_node, vertices)
    right = _match(start, end, start, end, part)
    node = _match(start, end, tap_start, tap_end, tap_node)
    cut = _on_window(start, end, window_um, polygons) & (right < 0) & (node < 0)
    once = (right < 0) | (part < right)
    problem = SheetProblem(
        conductance_s=conductance[owner],
        start_um=(start[once] * GRID_UM).astype(np.float64),
        end_um=(end[once] * GRID_UM).astype(np.float64),
        left=part[once],
        right=right[once],
        node=np.where(right[once] >= 0, -1, node[once]),
        cut=cut[once],
        node_resistance_ohm=resistance,
    )
    component = _components(problem)
    tied = np.zeros(len(parts), dtype=bool)
    tied[np.unique(problem.left[problem.node >= 0])] = True
    tied = np.isin(component, component[tied])
    return SheetOutline(
        problem=problem, parts=parts, component=component, tied=tied, whole=not bool(cut.any())
    )


def _clip(sheets: Sequence[tuple[float, Any]], window_um: Box | None) -> tuple[Floats, Geometries]:
    """Conductances and polygons near the window."""
    conductance = np.array([value for value, _ in sheets], dtype=np.float64)
    polygons = np.array([polygon for _, polygon in sheets], dtype=object)
    if window_um is not None:
        polygons = shapely.intersection(polygons, _grown(window_um, _MARGIN_UM))
    return conductance, polygons


def _grown(box: Box, by: float) -> Any:
    return shapely.box(box[0] - by, box[1] - by, box[2] + by, box[3] + by)


def _merge_taps(
    taps: Geometries, resistance: Floats, window_um: Box | None
) -> tuple[Geometries, Floats]:
    """Connected unions of the taps near the window and the resistance of each to the rail."""
    if window_um is not None and len(taps):
        near = shapely.intersects(taps, _grown(window_um, 0.0))
        taps, resistance = taps[near], resistance[near]
    if len(taps) == 0:
        return np.empty(0, dtype=object), np.empty(0)
    union = shapely.set_precision(shapely.union_all(taps), GRID_UM)
    merged = np.array([g for g in _polygons(union) if g.area > _SMALLEST_AREA_UM2], dtype=object)
    tree = shapely.STRtree(merged)
    inner = shapely.point_on_surface(taps)
    tap, node = tree.query(inner, predicate="dwithin", distance=_TOUCH_UM)
    # contacts of one node work in parallel; a single one without resistance grounds it
    with np.errstate(divide="ignore"):
        conductance = np.bincount(node, weights=1.0 / resistance[tap], minlength=len(merged))
        return merged, 1.0 / conductance


def _polygons(geometry: Any) -> list[Any]:
    """Polygons of a geometry, whatever else it holds."""
    return [g for g in shapely.get_parts(geometry) if g.geom_type == "Polygon" and not g.is_empty]


def _parts(
    polygons: Geometries, merged: Geometries, window_um: Box | None
) -> tuple[Geometries, Ints]:
    """Connected polygons of the sheets minus taps, and the sheet each comes from."""
    metal = shapely.multipolygons(merged) if len(merged) else shapely.Polygon()
    left = shapely.difference(polygons, metal, grid_size=GRID_UM)
    if window_um is not None:
        left = shapely.intersection(left, _grown(window_um, 0.0), grid_size=GRID_UM)
    parts, owner = [], []
    for index, geometry in enumerate(left):
        for polygon in _polygons(geometry):
            if polygon.area > _SMALLEST_AREA_UM2:
                parts.append(polygon)
                owner.append(index)
    result = np.empty(len(parts), dtype=object)
    result[:] = parts
    return result, np.array(owner, dtype=np.int64)


def _directed_edges(polygons: Geometries) -> tuple[Ints, Ints, Ints]:
    """Edges on the grid with the polygon on their left, and the polygon of each."""
    starts, ends, owners = [], [], []
    for index, polygon in enumerate(shapely.orient_polygons(polygons)):
        for ring in (polygon.exterior, *polygon.interiors):
            points = np.rint(shapely.get_coordinates(ring) / GRID_UM).astype(np.int64)
            real = np.any(points[1:] != points[:-1], axis=1)
            starts.append(points[:-1][real])
            ends.append(points[1:][real])
            owners.append(np.full(int(real.sum()), index))
    if not starts:
        nothing = np.empty((0, 2), dtype=np.int64)
        return nothing, nothing, np.empty(0, dtype=np.int64)
    return np.concatenate(starts), np.concatenate(ends), np.concatenate(owners)


def _split(start: Ints, end: Ints, owner: Ints, vertices: Ints) -> tuple[Ints, Ints, Ints]:
    """Cut every edge at the vertices that touch it between its ends."""
    if len(start) == 0:
        return start, end, owner
    tolerance = _TOUCH_UM / GRID_UM
    edges, points, places = [], [], []
    step = end - start
    square = (step**2).sum(axis=1)
    block = max(1, 200_000 // len(vertices))
    for first in range(0, len(start), block):
        rows = slice(first, first + block)
        dx = vertices[None, :, 0] - start[rows, None, 0]
        dy = vertices[None, :, 1] - start[rows, None, 1]
        sx, sy = step[rows, 0, None], step[rows, 1, None]
        along = dx * sx + dy * sy
        across = dx * sy - dy * sx
        s2 = square[rows, None]
        on = (along > 0) & (along < s2) & (np.abs(across) <= tolerance * np.sqrt(s2))
        edge, vertex = np.nonzero(on)
        edges.append(edge + first)
        points.append(vertex)
        places.append(along[edge, vertex] / square[edge + first])
    edge, vertex = np.concatenate(edges), np.concatenate(points)
    count = len(start)
    every = np.arange(count)
    # all stops of an edge in order: its start, the vertices on it, its end
    stop_edge = np.concatenate([every, edge, every])
    stop = np.concatenate([start, vertices[vertex], end])
    at = np.concatenate([np.zeros(count), np.concatenate(places), np.ones(count)])
    order = np.lexsort((at, stop_edge))
    stop_edge, stop = stop_edge[order], stop[order]
    same = (stop_edge[1:] == stop_edge[:-1]) & np.any(stop[1:] != stop[:-1], axis=1)
    return stop[:-1][same], stop[1:][same], owner[stop_edge[:-1][same]]


def _match(start: Ints, end: Ints, other_start: Ints, other_end: Ints, value: Ints) -> Ints:
    """For every edge the value of the other edge that runs the opposite way, or -1."""
    table = {
        key: int(v)
        for key, v in zip(
            map(tuple, np.concatenate([other_end, other_start], axis=1).tolist()),
            value,
            strict=True,
        )
    }
    keys = map(tuple, np.concatenate([start, end], axis=1).tolist())
    return np.array([table.get(key, -1) for key in keys], dtype=np.int64)


def _on_window(
    start: Ints, end: Ints, window_um: Box | None, polygons: Geometries
) -> NDArray[np.bool_]:
    """Edges on the window's outline behind which the sheet goes on."""
    result = np.zeros(len(start), dtype=bool)
    if window_um is None:
        return result
    x0, y0, x1, y1 = (round(value / GRID_UM) for value in window_um)
    middle = 0.5 * (start + end)
    behind = middle.copy()
    for axis, low, high in ((0, x0, x1), (1, y0, y1)):
        level = start[:, axis] == end[:, axis]
        for line, away in ((low, -1), (high, 1)):
            on = level & (start[:, axis] == line)
            result |= on
            behind[on, axis] += 5 * away
    chosen = np.flatnonzero(result)
    points = shapely.points(behind[chosen] * GRID_UM)
    beyond = np.zeros(len(chosen), dtype=bool)
    for polygon in polygons:
        beyond |= shapely.intersects(polygon, points)
    result[chosen] = beyond
    return result


def _components(problem: SheetProblem) -> Ints:
    """(d,) smallest domain of the connected piece each domain belongs to."""
    label = np.arange(len(problem.conductance_s))
    shared = (problem.left >= 0) & (problem.right >= 0)
    pairs = np.unique(np.stack([problem.left[shared], problem.right[shared]], 1), axis=0)
    changed = True
    while changed:
        before = label.copy()
        for a, b in pairs:
            label[a] = label[b] = min(label[a], label[b])
        changed = not np.array_equal(before, label)
    return label


def spread_sources(polygons: Geometries, parts: Geometries) -> SheetSources:
    """Sources spread evenly over polygons, split where they lie in several domains.

    A polygon that meets no part becomes a source without pieces; its owner number is skipped.
    """
    pieces: list[Any] = []
    owner: list[int] = []
    domain: list[int] = []
    weight: list[float] = []
    shapely.prepare(parts)
    tree = shapely.STRtree(parts)
    whose, where = tree.query(polygons, predicate="intersects")
    inside = shapely.covers(parts[where], polygons[whose])
    order = np.lexsort((where, whose))
    for source in np.split(order, np.flatnonzero(np.diff(whose[order])) + 1):
        whole = source[inside[source]]
        if len(whole):
            index = int(whole[0])
            pieces.append(polygons[whose[index]])
            owner.append(int(whose[index]))
            domain.append(int(where[index]))
            weight.append(1.0)
            continue
        found = [
            (int(where[k]), piece)
            for k in source
            for piece in _polygons(shapely.intersection(parts[where[k]], polygons[whose[k]]))
            if piece.area > _SMALLEST_AREA_UM2
        ]
        total = sum(piece.area for _, piece in found)
        for part, piece in found:
            pieces.append(piece)
            owner.append(int(whose[source[0]]))
            domain.append(part)
            weight.append(piece.area / total)
    return _columns(pieces, owner, domain, weight)


def _columns(
    pieces: list[Any], owner: list[int], domain: list[int], weight: list[float]
) -> SheetSources:
    oriented = shapely.orient_polygons(np.array(pieces, dtype=object))
    rings, piece = shapely.get_rings(oriented, return_index=True)
    points, ring = shapely.get_coordinates(rings, return_index=True)
    real = (ring[1:] == ring[:-1]) & np.any(points[1:] != points[:-1], axis=1)
    count = np.bincount(piece[ring[:-1][real]], minlength=len(pieces))
    return SheetSources(
        edge_start_um=points[:-1][real],
        edge_end_um=points[1:][real],
        first=np.concatenate([[0], np.cumsum(count)]).astype(np.int64),
        owner=np.array(owner, dtype=np.int64),
        domain=np.array(domain, dtype=np.int64),
        weight=np.array(weight, dtype=np.float64),
    )
