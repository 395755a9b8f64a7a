"""Windows of the substrate: a group of n+ emitters with all that shapes their potential.

In go the layout and the pairs, out come tasks in coordinates of their own, equal windows
joined into one task.  A window reaches a few times as far as the taps that serve its
emitters; taps beyond it are left out, which can only raise a resistance.
"""

from __future__ import annotations

import hashlib
from dataclasses import dataclass, field
from typing import Any

import numpy as np
import shapely

from latchscan.layout.model import N_OUTSIDE_NWELL, SUBSTRATE_TAP, Floats, Ints, Layout, Pairs
from latchscan.parasitics.clusters import cluster_emitters
from latchscan.parasitics.pieces import rectangle_pieces

_ROUND = 4
"""Decimals of um kept in window coordinates; drawn coordinates are multiples of 1 nm."""
_HALO_TAP_DISTANCES = 3.0
_LEAST_HALO_UM = 20.0
MOST_HALO_UM = 120.0
_MOST_TAPS = 60


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Shapes:
    """Polygons as rectangles.

    Attributes
    ----------
    boxes
        (m, 4) x0, y0, x1, y1 [um].
    owner
        (m,) polygon of each rectangle, ascending from 0.
    count
        Number of polygons.
    """

    boxes: Floats
    owner: Ints
    count: int

    @property
    def shares(self) -> Floats:
        """Each rectangle's share of its polygon's area, (m, count)."""
        area = (self.boxes[:, 2] - self.boxes[:, 0]) * (self.boxes[:, 3] - self.boxes[:, 1])
        total = np.bincount(self.owner, weights=area, minlength=self.count)
        matrix = np.zeros((len(self.owner), self.count))
        matrix[np.arange(len(self.owner)), self.owner] = area / total[self.owner]
        return matrix

    @property
    def areas(self) -> Floats:
        """Areas of the polygons [um2], (count,)."""
        area = (self.boxes[:, 2] - self.boxes[:, 0]) * (self.boxes[:, 3] - self.boxes[:, 1])
        total = np.bincount(self.owner, weights=area, minlength=self.count)
        return total.astype(np.float64)

    def take(self, polygons: Ints) -> Shapes:
        """Return the shapes of some polygons, in that order."""
        first = np.searchsorted(self.owner, polygons, side="left")
        last = np.searchsorted(self.owner, polygons, side="right")
        count = last - first
        rows = np.arange(count.sum()) + np.repeat(first - np.cumsum(count) + count, count)
        owner = np.repeat(np.arange(len(polygons), dtype=np.int64), last - first)
        return Shapes(boxes=self.boxes[rows], owner=owner, count=len(polygons))

    def moved(self, anchor: Floats) -> Shapes:
        """Return the same shapes with the anchor as origin, rounded."""
        boxes = np.round(self.boxes - np.tile(anchor, 2), _ROUND) + 0.0
        return Shapes(boxes=boxes, owner=self.owner, count=self.count)


def shapes_of(polygons: Any) -> Shapes:
    """Rectangles of a column of polygons."""
    boxes, owner = rectangle_pieces(polygons)
    return Shapes(boxes=boxes, owner=owner, count=len(polygons))


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Window:
    """One group of emitters and its surroundings, in the window's own coordinates.

    Attributes
    ----------
    core
        Emitters to be solved.
    others
        Emitters near enough to be driven together with one of the core.
    taps
        Contacted taps of the window, clipped to it.
    series_ohm
        (t,) contact resistance of each tap [ohm].
    box_um
        (4,) x0, y0, x1, y1 of the window [um].
    halo_um
        How far the window reaches beyond its core.
    sheet, holes
        (n, 4) rectangles of the p-well sheet without regard to its holes, and of these [um];
        empty where there is no sheet.
    """

    core: Shapes
    others: Shapes
    taps: Shapes
    series_ohm: Floats
    box_um: Floats
    halo_um: float
    sheet: Floats
    holes: Floats

    def key(self) -> bytes:
        """Digest that equal windows share."""
        digest = hashlib.sha256()
        for shapes in (self.core, self.others, self.taps):
            digest.update(repr((shapes.count, shapes.boxes.shape)).encode())
            digest.update(shapes.owner.tobytes())
            digest.update(shapes.boxes.tobytes())
        digest.update(self.series_ohm.tobytes() + self.box_um.tobytes())
        for boxes in (self.sheet, self.holes):
            digest.update(repr(boxes.shape).encode() + boxes.tobytes())
        return digest.digest()


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Arrivals:
    """Where the partners' holes come down, for one place where a window is used.

    Attributes
    ----------
    emitters
        (c,) the layout's indices of the core emitters.
    pairs
        (a,) the pairs' indices.
    cathode
        (a,) core emitter of each pair.
    points_um
        (a, 2) points in the window's coordinates [um].
    """

    emitters: Ints
    pairs: Ints
    cathode: Ints
    points_um: Floats


@dataclass(slots=True, kw_only=True)
class WindowUses:
    """A window and every place that looks like it."""

    window: Window
    uses: list[Arrivals] = field(default_factory=list)


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class SubstrateScene:
    """The substrate body's emitters and taps, ready to be cut into windows."""

    emitter_index: Ints
    emitters: Shapes
    boxes_um: Floats
    taps: Shapes
    series_ohm: Floats
    sheet: Floats
    holes: Floats


def substrate_scene(layout: Layout, contact_ohm: float, *, with_sheet: bool) -> SubstrateScene:
    """Collect what belongs to the substrate body."""
    body = next((i for i, b in enumerate(layout.bodies) if b.kind == "substrate"), -1)
    emitters, taps = layout.emitters, layout.taps
    mine = np.flatnonzero((emitters.kind == N_OUTSIDE_NWELL) & (emitters.body == body))
    tied = np.flatnonzero(
        (taps.kind == SUBSTRATE_TAP) & (taps.body == body) & (taps.contact_count > 0)
    )
    polygons = taps.polygons[tied]
    sheets = layout.bodies[body].sheets if with_sheet and body >= 0 else ()
    # a block's sheet is one polygon with thousands of holes: apart, both are cut quickly
    shells = [shapely.Polygon(polygon.exterior) for polygon in _polygons([p for _, p in sheets])]
    holes = [
        shapely.Polygon(ring)
        for polygon in _polygons([p for _, p in sheets])
        for ring in polygon.interiors
    ]
    return SubstrateScene(
        emitter_index=mine.astype(np.int64),
        emitters=shapes_of(emitters.polygons[mine]),
        boxes_um=emitters.box_um[mine],
        taps=shapes_of(polygons),
        series_ohm=contact_ohm / taps.contact_count[tied],
        sheet=rectangle_pieces(_column(shells))[0],
        holes=rectangle_pieces(_column(holes))[0],
    )


def box_distances(a: Floats, b: Floats) -> Floats:
    """Distances between rectangles (m, 4) and (n, 4), (m, n)."""
    dx = np.maximum(a[:, None, 0] - b[None, :, 2], b[None, :, 0] - a[:, None, 2])
    dy = np.maximum(a[:, None, 1] - b[None, :, 3], b[None, :, 1] - a[:, None, 3])
    return np.hypot(np.maximum(dx, 0.0), np.maximum(dy, 0.0))


class WindowCutter:
    """Cuts the scene into windows, each with the pairs that ask for it."""

    def __init__(self, scene: SubstrateScene, pairs: Pairs, patch_um: float) -> None:
        self._scene = scene
        self._pairs = pairs
        self._cutter = _Cutter(scene=scene, patch_um=patch_um)
        place = np.full(int(scene.emitter_index.max(initial=-1)) + 1, -1, dtype=np.int64)
        place[scene.emitter_index] = np.arange(len(scene.emitter_index))
        known = pairs.cathode < len(place)
        row = np.full(len(pairs.cathode), -1, dtype=np.int64)
        row[known] = place[pairs.cathode[known]]
        self._order = np.argsort(row, kind="stable")
        self._first = np.searchsorted(row[self._order], np.arange(len(scene.emitter_index) + 1))

    def all_windows(self) -> list[WindowUses]:
        """Every distinct window with its uses, in the order of their first use."""
        return self._cut([(group, 0.0) for group in cluster_emitters(self._scene.boxes_um)])

    def wider(self, windows: list[WindowUses]) -> list[WindowUses]:
        """Windows around the same emitters that reach twice as far, as far as that is allowed."""
        return self._cut(
            [
                (
                    np.searchsorted(self._scene.emitter_index, use.emitters),
                    min(2.0 * window.window.halo_um, MOST_HALO_UM),
                )
                for window in windows
                for use in window.uses
            ]
        )

    def _cut(self, groups: list[tuple[Ints, float]]) -> list[WindowUses]:
        found: dict[bytes, WindowUses] = {}
        for group, halo_um in groups:
            window, anchor = self._cutter.cut(group, halo_um)
            chosen = [self._order[self._first[i] : self._first[i + 1]] for i in group]
            indices = np.concatenate(chosen).astype(np.int64)
            cathode = np.repeat(np.arange(len(group)), [len(c) for c in chosen])
            arrivals = Arrivals(
                emitters=self._scene.emitter_index[group],
                pairs=indices,
                cathode=cathode.astype(np.int64),
                points_um=np.round(self._pairs.arrival_um[indices] - anchor, _ROUND) + 0.0,
            )
            found.setdefault(window.key(), WindowUses(window=window)).uses.append(arrivals)
        return list(found.values())


class _Cutter:
    """Finds what surrounds a group of emitters."""

    def __init__(self, *, scene: SubstrateScene, patch_um: float) -> None:
        self._scene = scene
        self._patch_um = patch_um
        self._emitters = shapely.STRtree(shapely.box(*scene.boxes_um.T))
        tap_shapes = shapely.box(*scene.taps.boxes.T)
        self._taps = shapely.STRtree(tap_shapes)
        self._tap_shapes = tap_shapes
        self._sheet = shapely.STRtree(shapely.box(*scene.sheet.T))
        self._holes = shapely.STRtree(shapely.box(*scene.holes.T))

    def cut(self, group: Ints, halo_um: float) -> tuple[Window, Floats]:
        """Return the window around a group and its anchor (x, y) [um].

        It reaches `halo_um` beyond the group, or as far as the taps' distances ask for where
        that is 0.
        """
        scene = self._scene
        boxes = scene.boxes_um[group]
        core_box = np.concatenate([boxes[:, :2].min(axis=0), boxes[:, 2:].max(axis=0)])
        anchor = np.round(core_box[:2], _ROUND)
        near = self._emitters.query(shapely.box(*_grown(core_box, self._patch_um)))
        near = np.setdiff1d(near, group)
        near = near[(box_distances(scene.boxes_um[near], boxes) <= self._patch_um).any(axis=1)]
        halo_um = halo_um or self._halo(boxes)
        box = _grown(core_box, halo_um)
        taps, series = self._tap_pieces(box, core_box)
        window = Window(
            core=scene.emitters.take(group).moved(anchor),
            others=scene.emitters.take(near.astype(np.int64)).moved(anchor),
            taps=taps.moved(anchor),
            series_ohm=series,
            box_um=np.round(box - np.tile(anchor, 2), _ROUND) + 0.0,
            halo_um=halo_um,
            sheet=_clipped(scene.sheet, self._sheet, box, anchor),
            holes=_clipped(scene.holes, self._holes, box, anchor),
        )
        return window, anchor

    def _halo(self, boxes: Floats) -> float:
        """Some times the largest distance of the group from a tap, in steps of 5 um.

        The steps keep equal groups in equal windows where only a far tap differs.
        """
        if len(self._tap_shapes) == 0:
            return _LEAST_HALO_UM
        shapes = shapely.box(*boxes.T)
        _, distance = self._taps.query_nearest(shapes, all_matches=False, return_distance=True)
        wanted = _HALO_TAP_DISTANCES * float(distance.max())
        halo = min(max(wanted, _LEAST_HALO_UM), MOST_HALO_UM)
        return 5.0 * float(np.ceil(max(halo, 1.1 * float(distance.min()) + 1.0) / 5.0))

    def _tap_pieces(self, box: Floats, core_box: Floats) -> tuple[Shapes, Floats]:
        """Parts of the nearest taps inside the window, and their contact resistance."""
        scene = self._scene
        rows = np.sort(self._taps.query(shapely.box(*box)))
        clipped = scene.taps.boxes[rows].copy()
        clipped[:, :2] = np.maximum(clipped[:, :2], box[:2])
        clipped[:, 2:] = np.minimum(clipped[:, 2:], box[2:])
        solid = np.all(clipped[:, 2:] - clipped[:, :2] > 1e-3, axis=1)
        rows, clipped = rows[solid], clipped[solid]
        owner, index = np.unique(scene.taps.owner[rows], return_inverse=True)
        distance = np.full(len(owner), np.inf)
        np.minimum.at(distance, index, box_distances(clipped, core_box[None])[:, 0])
        keep = np.sort(np.argsort(np.round(distance, _ROUND), kind="stable")[:_MOST_TAPS])
        shapes = Shapes(boxes=clipped, owner=index.astype(np.int64), count=len(owner))
        return shapes.take(keep.astype(np.int64)), scene.series_ohm[owner[keep]]


def _polygons(geometry: Any) -> list[Any]:
    """Polygons of a geometry or of several, whatever else they hold."""
    parts = shapely.get_parts(geometry)
    return [g for g in shapely.get_parts(parts) if g.geom_type == "Polygon" and not g.is_empty]


def _column(polygons: list[Any]) -> Any:
    column = np.empty(len(polygons), dtype=object)
    column[:] = polygons
    return column


def _clipped(boxes: Floats, tree: Any, box: Floats, anchor: Floats) -> Floats:
    """Rectangles inside a box, sorted, with the anchor as origin."""
    near = boxes[tree.query(shapely.box(*box))]
    low, high = np.maximum(near[:, :2], box[:2]), np.minimum(near[:, 2:], box[2:])
    cut = np.concatenate([low, high], axis=1)[np.all(high - low > 1e-6, axis=1)]
    moved = np.round(cut - np.tile(anchor, 2), _ROUND) + 0.0
    return moved[np.lexsort(moved.T)]


def _grown(box: Floats, by: float) -> Floats:
    return box + by * np.array([-1.0, -1.0, 1.0, 1.0])
