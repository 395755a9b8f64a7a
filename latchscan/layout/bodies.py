"""The layout's bodies, and every tap and emitter with the body it lies in.

In: `Regions` and the technology.  Out: `Layout`.  A body is what one well resistance
belongs to: an n-well with all n-wells on the same buried layer, an isolated p-well, or the
one substrate.  Everything is asked of spatial indexes in bulk; the large wells are always
the prepared side of a question, so that a well with ten thousand emitters costs no more
than ten thousand small wells.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import shapely

from latchscan.layout.components import connected
from latchscan.layout.members import Members, gather_emitters, gather_taps
from latchscan.layout.model import Body, Geometries, Ints, Layout, Regions, SheetKind, frozen
from latchscan.technology.model import Technology

LEAST_AREA_UM2 = 1e-6
"""Areas below one square nanometre are rounding, not overlap."""


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class _Wells:
    """Wells and what joins them.

    Attributes
    ----------
    nwell_group
        (n,) group of every n-well polygon; groups are numbered by (y0, x0).
    buried_group
        (b,) group of every buried polygon, -1 where it lies under no n-well.
    isolated
        (p,) group that encloses a p-well polygon, -1 where it is part of the substrate.
    """

    nwell_group: Ints
    buried_group: Ints
    isolated: Ints


def assemble_layout(regions: Regions, technology: Technology) -> Layout:
    """Bodies, taps and emitters of the block.

    Parameters
    ----------
    regions
        The block's regions.
    technology
        Tells which sheets are distinguished and which labels are supplies.

    Returns
    -------
    Layout
        Bodies in the order n-wells, isolated p-wells, substrate, each by (y0, x0).

    Notes
    -----
    An isolated p-well is a connected p-well inside a closed n-well ring that lies wholly
    over one buried region.  Of the buried layer outside n-wells only the pieces under an
    isolated p-well or between two n-wells conduct here; the fringe that a buried layer has
    around a single well is left out, which makes that well's resistance a little too high.
    """
    wells = _join_wells(regions)
    bodies = _make_bodies(regions, technology, wells)
    members = _members(regions, wells)
    return Layout(
        regions=regions,
        bodies=bodies,
        taps=gather_taps(regions, members),
        emitters=gather_emitters(regions, technology, members),
    )


def _join_wells(regions: Regions) -> _Wells:
    nwell, buried = regions.shapes["nwell"], regions.shapes["buried"]
    well, layer = _overlaps(nwell, buried)
    nodes = connected(len(nwell) + len(buried), well, layer + len(nwell))
    order = _by_place(nwell, nodes[: len(nwell)])
    number = np.full(len(nwell) + len(buried), -1, dtype=np.int64)
    number[order] = np.arange(len(order))
    group = number[nodes]
    nwell_group = group[: len(nwell)]
    return _Wells(
        nwell_group=nwell_group,
        buried_group=group[len(nwell) :],
        isolated=_isolated(regions.shapes["pwell"], nwell, buried, nwell_group),
    )


def _overlaps(one: Geometries, other: Geometries) -> tuple[Ints, Ints]:
    """Pairs of polygons that overlap with area."""
    if not len(one) or not len(other):
        return np.zeros(0, dtype=np.int64), np.zeros(0, dtype=np.int64)
    second, first = shapely.STRtree(one).query(other, predicate="intersects")[:, :]
    area = shapely.area(shapely.intersection(one[first], other[second]))
    kept = area > LEAST_AREA_UM2
    return first[kept], second[kept]


def _by_place(polygons: Geometries, group: Ints) -> Ints:
    """The distinct groups, sorted by (y0, x0) of the box around their polygons."""
    names, place = np.unique(group, return_inverse=True)
    low = np.full((len(names), 2), np.inf)
    np.minimum.at(low, place, shapely.bounds(polygons)[:, :2].reshape(-1, 2))
    return names[np.lexsort((names, low[:, 0], low[:, 1]))]


def _isolated(pwell: Geometries, nwell: Geometries, buried: Geometries, nwell_group: Ints) -> Ints:
    """(p,) n-well group around each p-well that is cut off from the substrate, else -1."""
    enclosing = np.full(len(pwell), -1, dtype=np.int64)
    rings, owner = shapely.get_rings(nwell, return_index=True)
    inner = np.ones(len(rings), dtype=np.bool_)
    inner[np.searchsorted(owner, np.arange(len(nwell)))] = False
    if not inner.any() or not len(buried) or not len(pwell):
        return enclosing
    holes, hole_owner = shapely.polygons(rings[inner]), owner[inner]
    size = shapely.area(holes)
    # one connected p-well never crosses the ring, so one of its points decides
    points = shapely.point_on_surface(pwell)
    hole, piece = shapely.STRtree(points).query(holes, predicate="contains")
    order = np.lexsort((-size[hole], piece))
    inside = np.full(len(pwell), -1, dtype=np.int64)
    inside[piece[order]] = hole[order]
    candidates = np.flatnonzero(inside >= 0)
    if not len(candidates):
        return enclosing
    under, place = shapely.STRtree(points[candidates]).query(buried, predicate="intersects")
    row = candidates[place]
    open_area = shapely.area(shapely.difference(pwell[row], buried[under]))
    closed = row[open_area <= LEAST_AREA_UM2]
    enclosing[closed] = nwell_group[hole_owner[inside[closed]]]
    return enclosing


def _make_bodies(regions: Regions, technology: Technology, wells: _Wells) -> tuple[Body, ...]:
    pwell = regions.shapes["pwell"]
    groups = int(wells.nwell_group.max(initial=-1)) + 1
    sheets = _nwell_sheets(regions, technology, wells, groups)
    bodies = [
        Body(
            id=f"nwell-{group + 1}",
            kind="nwell",
            polygons=frozen(polygons),
            sheets=tuple(sheets[group]),
        )
        for group, polygons in enumerate(_grouped(regions.shapes["nwell"], wells, groups))
    ]
    for number, piece in enumerate(np.flatnonzero(wells.isolated >= 0), start=1):
        bodies.append(
            Body(
                id=f"pwell-{number}",
                kind="isolated_pwell",
                polygons=frozen(pwell[piece : piece + 1].copy()),
                sheets=(("isolated_pwell", pwell[piece]),),
                enclosing=int(wells.isolated[piece]),
            )
        )
    rest = pwell[wells.isolated < 0]
    everywhere: tuple[tuple[SheetKind, object], ...] = tuple(("pwell", part) for part in rest)
    return (
        *bodies,
        Body(id="substrate", kind="substrate", polygons=frozen(rest), sheets=everywhere),
    )


def _grouped(nwell: Geometries, wells: _Wells, groups: int) -> list[Geometries]:
    order = np.argsort(wells.nwell_group, kind="stable")
    edges = np.searchsorted(wells.nwell_group[order], np.arange(1, groups))
    return [nwell[rows] for rows in np.split(order, edges)][:groups]


def _nwell_sheets(
    regions: Regions, technology: Technology, wells: _Wells, groups: int
) -> list[list[tuple[SheetKind, object]]]:
    """Sheets of every n-well group."""
    nwell, buried = regions.shapes["nwell"], regions.shapes["buried"]
    values = technology.wells
    over: SheetKind = "nwell_over_buried"
    if values.nwell_over_buried_sheet_resistance_ohm_sq is None:
        over = "nwell"
    below: SheetKind = "buried" if values.buried_sheet_resistance_ohm_sq is not None else "nwell"
    sheets: list[list[tuple[SheetKind, object]]] = [[] for _ in range(groups)]
    well, layer = _overlaps(nwell, buried)
    split: dict[int, list[int]] = {}
    for row, under in zip(well.tolist(), layer.tolist(), strict=True):
        split.setdefault(row, []).append(under)
    for row, group in enumerate(wells.nwell_group.tolist()):
        if row not in split or over == "nwell":
            sheets[group].append(("nwell", nwell[row]))
            continue
        cover = shapely.union_all(buried[split[row]])
        plain = _parts(shapely.difference(nwell[row], cover))
        doubled = _parts(shapely.intersection(nwell[row], cover))
        sheets[group].extend(("nwell", part) for part in plain)
        sheets[group].extend((over, part) for part in doubled)
    for group, part in _bridges(regions, wells, well, layer):
        sheets[group].append((below, part))
    return sheets


def _bridges(regions: Regions, wells: _Wells, well: Ints, layer: Ints) -> list[tuple[int, object]]:
    """(group, polygon) of the buried pieces that join what lies above them."""
    nwell, buried = regions.shapes["nwell"], regions.shapes["buried"]
    isolated = regions.shapes["pwell"][wells.isolated >= 0]
    tree = shapely.STRtree(isolated)
    found: list[tuple[int, object]] = []
    for under in np.unique(layer).tolist():
        above = np.sort(well[layer == under])
        free = _parts(shapely.difference(buried[under], shapely.union_all(nwell[above])))
        group = int(wells.buried_group[under])
        for part in free:
            shared = shapely.length(shapely.intersection(part, nwell[above]))
            near = tree.query(part, predicate="intersects")
            carried = shapely.area(shapely.intersection(part, isolated[near]))
            if np.count_nonzero(shared > 0) > 1 or np.any(carried > LEAST_AREA_UM2):
                found.append((group, part))
    return found


def _parts(geometry: object) -> Geometries:
    """Polygons of an overlay's result with a real area, sorted by (y0, x0)."""
    parts = shapely.get_parts(geometry)
    parts = parts[(shapely.get_type_id(parts) == 3) & (shapely.area(parts) > LEAST_AREA_UM2)]
    x0, y0, x1, y1 = shapely.bounds(parts).reshape(-1, 4).T
    return np.asarray(parts[np.lexsort((x1, y1, x0, y0))])


def _members(regions: Regions, wells: _Wells) -> Members:
    groups = int(wells.nwell_group.max(initial=-1)) + 1
    apart = wells.isolated >= 0
    return Members(
        nwell=regions.shapes["nwell"],
        nwell_body=wells.nwell_group,
        isolated=regions.shapes["pwell"][apart],
        isolated_body=np.arange(np.count_nonzero(apart)) + groups,
        substrate_body=groups + int(np.count_nonzero(apart)),
    )
