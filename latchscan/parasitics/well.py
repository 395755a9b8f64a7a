"""Resistances in wells: p+ emitters and isolated p-wells in n-wells, n+ in isolated p-wells.

In go a layout, its candidate pairs and the technology; out come `BodyFields`.  A well is a
thin sheet whose contacted taps are single nodes tied to the rail through their contacts
(physics: -div(g grad phi) = s, 1 A spread evenly over the source).  Sources that lie together
share a window of the well; a window grows until what lies beyond it no longer matters, which
the solution itself tells (see `latchscan.fields.sheet`).  Equal windows are solved once.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np
import shapely

from latchscan.errors import TechnologyError
from latchscan.layout.model import (
    N_OUTSIDE_NWELL,
    P_IN_NWELL,
    Body,
    Box,
    Floats,
    Geometries,
    Ints,
    Layout,
    Pairs,
    frozen,
)
from latchscan.parasitics.clusters import cluster_emitters
from latchscan.parasitics.material import pwell_temperature_factor, sheet_temperature_factor
from latchscan.parasitics.model import BodyFields, Resistances, Transfers
from latchscan.parasitics.well_windows import WellWindow, WindowResult, solve_window
from latchscan.tasks import Workers
from latchscan.technology.model import Technology

ACCEPTED_CUT_ERROR = 0.01
LEAST_HALO_UM = 8.0
HALO_PER_TAP_DISTANCE = 2.5
_GRID_PER_UM = 1000.0


def solve_wells(
    layout: Layout,
    pairs: Pairs,
    technology: Technology,
    temperature_k: float,
    workers: Workers,
) -> BodyFields:
    """Resistances of every source in a well and transfers of the pairs.

    Parameters
    ----------
    layout, pairs
        Bodies, taps, emitters and candidate thyristors.
    technology
        Sheet resistances, contact resistances and the patch radius.
    temperature_k
        Temperature of the wells [K].
    workers
        Where the windows are solved.

    Returns
    -------
    BodyFields
        Rows: emitters of n-wells and of isolated p-wells, and the isolated p-wells (as anodes)
        themselves; all others NaN, and so are those of a window without a trustworthy
        solution.  A body without a contacted tap has infinite resistances.

    Notes
    -----
    The patch of an emitter are the emitters of its body; an isolated p-well is never part of
    an emitter's patch and is a patch of its own.

    Raises
    ------
    TechnologyError
        When the layout holds a kind of sheet for which the technology gives no resistance.
    """
    rows = len(layout.emitters.kind) + len(layout.bodies)
    columns = {name: np.full(rows, np.nan) for name in ("mean", "max", "patch", "error")}
    well, substrate = np.full(len(pairs.anode), np.nan), np.full(len(pairs.anode), np.nan)
    jobs: list[_Job] = []
    for index, body in enumerate(layout.bodies):
        if body.kind != "substrate":
            task = _body_sources(layout, pairs, technology, temperature_k, index)
            if len(task.row) == 0:
                continue
            if len(task.taps) == 0:
                for values in columns.values():
                    values[task.row] = np.inf
                columns["error"][task.row] = 0.0
                (well if body.kind == "nwell" else substrate)[task.pair] = np.inf
            else:
                jobs.extend(_Job(body=task, members=group) for group in _groups(task))
    _run(jobs, workers, columns, {"nwell": well, "isolated_pwell": substrate})
    return BodyFields(
        resistances=Resistances(
            mean_ohm=frozen(columns["mean"]),
            max_ohm=frozen(columns["max"]),
            patch_ohm=frozen(columns["patch"]),
            relative_error=frozen(columns["error"]),
        ),
        transfers=Transfers(well_ohm=frozen(well), substrate_ohm=frozen(substrate)),
    )


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class _BodySources:
    """One body with its sheet, taps, sources and the points asked of them.

    Attributes
    ----------
    row
        (s,) row of each source in the results; emitters first.
    emitters
        How many of the sources are emitters.
    pair, pair_source, point_um
        (m,) pairs of this body, their source and (m, 2) place.
    near
        (first, member): for every source the members of its patch, as offsets and indices.
    """

    kind: str
    sheets: tuple[tuple[float, Any], ...]
    bounds_um: Box
    taps: Geometries
    tap_tree: Any
    tap_resistance_ohm: Floats
    row: Ints
    polygons: Geometries
    emitters: int
    near: tuple[Ints, Ints]
    pair: Ints
    pair_source: Ints
    point_um: Floats


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class _Job:
    """A group of a body's sources and the window's reach beyond them; 0 to be chosen."""

    body: _BodySources
    members: Ints
    halo_um: float = 0.0


def _body_sources(
    layout: Layout, pairs: Pairs, technology: Technology, temperature_k: float, index: int
) -> _BodySources:
    body, emitters, taps = layout.bodies[index], layout.emitters, layout.taps
    kind = P_IN_NWELL if body.kind == "nwell" else N_OUTSIDE_NWELL
    own = np.flatnonzero((emitters.body == index) & (emitters.kind == kind))
    inner = np.array(
        [
            number
            for number, other in enumerate(layout.bodies)
            if other.kind == "isolated_pwell" and other.enclosing == index
        ],
        dtype=np.int64,
    )
    wells = [shapely.union_all(layout.bodies[number].polygons) for number in inner]
    polygons = np.concatenate([emitters.polygons[own], np.array(wells, dtype=object)])
    row = np.concatenate([own, len(emitters.kind) + inner])
    if body.kind == "nwell":
        pair = np.flatnonzero(pairs.well == index)
        asked, point = pairs.anode[pair], pairs.edge_um[pair]
    else:
        pair = np.flatnonzero(pairs.base == index)
        asked, point = pairs.cathode[pair], pairs.arrival_um[pair]
    chosen = np.flatnonzero((taps.body == index) & (taps.contact_count > 0))
    contact = (
        technology.wells.well_tap_contact_resistance_ohm
        if body.kind == "nwell"
        else technology.substrate.substrate_tap_contact_resistance_ohm
    )
    sheets = _sheets(body, _conductances(technology, temperature_k))
    return _BodySources(
        kind=body.kind,
        sheets=sheets,
        bounds_um=tuple(shapely.total_bounds([p for _, p in sheets]).tolist()),
        taps=taps.polygons[chosen],
        tap_tree=shapely.STRtree(taps.polygons[chosen]),
        tap_resistance_ohm=contact.typical / taps.contact_count[chosen],
        row=row,
        polygons=polygons,
        emitters=len(own),
        near=_patches(polygons, len(own), technology.loop.patch_radius_um),
        pair=pair,
        pair_source=np.searchsorted(row, asked),
        point_um=point,
    )


def _conductances(technology: Technology, temperature_k: float) -> Mapping[str, float | None]:
    """Conductance per square [S] of every kind of sheet, None where the technology is mute."""
    wells = technology.wells
    hot_n = sheet_temperature_factor(technology, temperature_k)
    hot_p = pwell_temperature_factor(technology, temperature_k)
    values = {
        "nwell": (wells.nwell_sheet_resistance_ohm_sq, hot_n),
        "nwell_over_buried": (wells.nwell_over_buried_sheet_resistance_ohm_sq, hot_n),
        "buried": (wells.buried_sheet_resistance_ohm_sq, hot_n),
        "isolated_pwell": (wells.isolated_pwell_sheet_resistance_ohm_sq, hot_p),
    }
    return {
        kind: None if value is None else 1.0 / (value.typical * factor)
        for kind, (value, factor) in values.items()
    }


def _sheets(body: Body, conductance: Mapping[str, float | None]) -> tuple[tuple[float, Any], ...]:
    result = []
    for kind, polygon in body.sheets:
        value = conductance.get(kind)
        if value is None:
            raise TechnologyError(
                f"wells: {body.id} has a sheet of kind {kind}; expected the key"
                f" wells.{kind}_sheet_resistance_ohm_sq"
            )
        result.append((value, polygon))
    return tuple(result)


def _patches(polygons: Geometries, emitters: int, radius_um: float) -> tuple[Ints, Ints]:
    """Offsets (s + 1,) and members of every source's patch."""
    tree = shapely.STRtree(polygons[:emitters])
    source, member = tree.query(polygons[:emitters], predicate="dwithin", distance=radius_um)
    alone = np.arange(emitters, len(polygons))
    source, member = np.concatenate([source, alone]), np.concatenate([member, alone])
    order = np.lexsort((member, source))
    first = np.concatenate([[0], np.cumsum(np.bincount(source, minlength=len(polygons)))])
    return first, member[order]


def _groups(body: _BodySources) -> list[Ints]:
    """Groups of sources that share a window; an isolated p-well has its own."""
    groups = cluster_emitters(shapely.bounds(body.polygons[: body.emitters]))
    alone = range(body.emitters, len(body.polygons))
    return [*groups, *(np.array([k], dtype=np.int64) for k in alone)]


def _run(
    jobs: list[_Job],
    workers: Workers,
    columns: Mapping[str, Floats],
    transfers: Mapping[str, Floats],
) -> None:
    """Solve the jobs, widening the windows of those whose cut matters, until none does."""
    while jobs:
        jobs = [_with_halo(job) for job in jobs]
        windows = [_window(job) for job in jobs]
        digests = [window.digest() for window in windows]
        number = {digest: k for k, digest in enumerate(dict.fromkeys(digests))}
        unique = dict(zip(digests, windows, strict=True))
        solved = workers.attempt("wells", solve_window, [unique[digest] for digest in number])
        again = []
        for job, window, digest in zip(jobs, windows, digests, strict=True):
            result = solved[number[digest]]
            if result is None:
                continue
            if np.any(result.cut_error > ACCEPTED_CUT_ERROR) and window.box_um is not None:
                again.append(_Job(body=job.body, members=job.members, halo_um=2.0 * job.halo_um))
            else:
                _store(job, result, columns, transfers[job.body.kind])
        jobs = again


def _with_halo(job: _Job) -> _Job:
    """Choose the first halo from the distance of the nearest taps."""
    if job.halo_um > 0:
        return job
    body = job.body
    polygons = body.polygons[job.members]
    _, distance = body.tap_tree.query_nearest(polygons, return_distance=True, all_matches=False)
    halo = max(LEAST_HALO_UM, HALO_PER_TAP_DISTANCE * float(distance.max()))
    return _Job(body=body, members=job.members, halo_um=float(np.ceil(halo)))


def _window(job: _Job) -> WellWindow:
    """Shapes within the halo, relative to the corner of the group's box."""
    body, members = job.body, job.members
    first, member = body.near
    patch_count = first[members + 1] - first[members]
    patch_source = np.repeat(np.arange(len(members)), patch_count)
    offset = np.concatenate([[0], np.cumsum(patch_count)[:-1]])
    patch_member = member[
        np.arange(len(patch_source)) - offset[patch_source] + first[members][patch_source]
    ]
    others = np.setdiff1d(patch_member, members)
    everything = np.concatenate([members, others])
    place = {int(k): i for i, k in enumerate(everything)}
    asked = np.flatnonzero(np.isin(body.pair_source, members))
    points = body.point_um[asked]
    core = shapely.total_bounds(body.polygons[members])
    box = _box(core, job.halo_um, shapely.bounds(body.polygons[others]), points)
    whole = bool(
        np.all(box[:2] <= np.array(body.bounds_um[:2]))
        and np.all(box[2:] >= np.array(body.bounds_um[2:]))
    )
    corner = np.floor(core[:2] * _GRID_PER_UM + 0.5) / _GRID_PER_UM
    area = shapely.area(body.polygons[patch_member])
    total = np.bincount(patch_source, weights=area, minlength=len(members))
    region = shapely.box(*box)
    tap = np.sort(body.tap_tree.query(region, predicate="intersects"))
    return WellWindow(
        sheets=tuple(
            (value, piece)
            for value, polygon in body.sheets
            if not (piece := _moved(_inside(polygon, region, whole), corner)).is_empty
        ),
        taps=_moved(_inside(body.taps[tap], region, whole), corner),
        tap_resistance_ohm=body.tap_resistance_ohm[tap],
        box_um=None if whole else tuple(np.round(box - np.tile(corner, 2), 3).tolist()),
        polygons=_moved(body.polygons[everything], corner),
        count=len(members),
        patch_source=patch_source,
        patch_member=np.array([place[int(k)] for k in patch_member], dtype=np.int64),
        patch_share=area / total[patch_source],
        points_um=np.round(points - corner, 4),
        point_source=np.array([place[int(k)] for k in body.pair_source[asked]], dtype=np.int64),
    )


def _box(core: Floats, halo: float, neighbours: Floats, points: Floats) -> Floats:
    """Window around the group's box that also holds the patches and the points."""
    low, high = core[:2] - halo, core[2:] + halo
    if len(neighbours):
        low = np.minimum(low, neighbours[:, :2].min(axis=0) - 1.0)
        high = np.maximum(high, neighbours[:, 2:].max(axis=0) + 1.0)
    if len(points):
        low = np.minimum(low, points.min(axis=0) - 1.0)
        high = np.maximum(high, points.max(axis=0) + 1.0)
    return np.round(np.concatenate([low, high]), 3)


def _inside(shapes: Any, region: Any, whole: bool) -> Any:
    if whole:
        return shapes
    # a margin of 0.2 um: the outline looks just behind the window's edge
    return shapely.intersection(shapes, shapely.buffer(region, 0.2, join_style="mitre"))


def _moved(shapes: Any, corner: Floats) -> Any:
    """Shapes relative to the corner, rounded so that equal ones become equal numbers."""
    return shapely.transform(shapes, lambda points: np.round(points - corner, 4))


def _store(
    job: _Job, result: WindowResult, columns: Mapping[str, Floats], transfer: Floats
) -> None:
    row = job.body.row[job.members]
    columns["mean"][row] = result.mean_ohm
    columns["max"][row] = result.max_ohm
    columns["patch"][row] = result.patch_ohm
    columns["error"][row] = result.panel_error + result.cut_error
    asked = np.flatnonzero(np.isin(job.body.pair_source, job.members))
    transfer[job.body.pair[asked]] = result.point_ohm
