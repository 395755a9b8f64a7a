"""The farthest point of every shape from the nearest of its targets, by branch and bound.

In go shapes and targets, both in groups (a shape sees the targets of its own group only);
out come, for each shape, the point of it whose nearest target is farthest away, and the
target's point nearest to it.  The farthest point is mostly not a corner: a bar between two
targets is farthest halfway.

The one idea: shapes and targets are cut into convex pieces.  The distance to ONE convex
target piece is a convex function, so over a convex piece it is largest at a corner; that
bounds the piece from above, while every measured point bounds its shape from below.  A piece
that stays undecided is cut along the tangent of the line where two target pieces are equally
far, which is where the distance has its ridges; cuts through the middle are only the way out
when that does not help.  All pieces of all shapes go through each level together, as arrays.

Source: A. H. Land and A. G. Doig, "An automatic method of solving discrete programming
problems", Econometrica 28 (1960) 497 (branch and bound); the bound is elementary.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from latchscan.errors import ResolutionError
from latchscan.layout.measure.convex import (
    Pieces,
    add_crossings,
    box_corners,
    cut_convex,
    nearest_on_pieces,
    upper_part,
)
from latchscan.layout.measure.crowds import cut_crowds
from latchscan.layout.measure.targets import Targets, place_pieces, place_targets
from latchscan.layout.model import Floats, Geometries, Ints, frozen

RESOLUTION_UM = 5e-9
"""A piece is decided when its largest distance is known this well [um]."""
TIE_UM = 1e-8
"""Points this close to the largest distance count as equally far [um]."""
POSITION_STEP_UM = 1e-6
"""Equally far points are ordered by (y, x) in whole steps, so that rounding orders none [um]."""
STALL = 0.9
"""A cut that leaves more than this share of a piece's uncertainty is followed by halving."""
MAX_LEVELS = 500
ROOT_STEPS = 60
ROOT_UM = 1e-11
"""Difference of two distances at which they count as equal [um]."""


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Farthest:
    """The farthest point of each of n shapes.

    Attributes
    ----------
    distance_um
        (n,) its distance from the nearest target; NaN where the group has no target.
    at_um
        (n, 2) that point (x, y); the smallest (y, x) of equally far ones.
    nearest_um
        (n, 2) the nearest point (x, y) of the nearest target.
    """

    distance_um: Floats
    at_um: Floats
    nearest_um: Floats


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class _Front:
    """The undecided pieces of one level.

    Attributes
    ----------
    corners
        (n, k, 2) convex pieces.
    near, value
        (n, k) nearest target piece of each corner and its distance.
    shape
        (n,) the shape each piece belongs to.
    gap
        (n,) uncertainty of the piece it was cut from.
    """

    corners: Floats
    near: Ints
    value: Floats
    shape: Ints
    gap: Floats

    def take(self, rows: NDArray[np.bool_] | Ints) -> _Front:
        """The same front with some rows only."""
        return _Front(
            corners=self.corners[rows],
            near=self.near[rows],
            value=self.value[rows],
            shape=self.shape[rows],
            gap=self.gap[rows],
        )


class _Records:
    """The best distance of each shape so far and every point that may hold it."""

    def __init__(self, count: int) -> None:
        self.best = np.full(count, -np.inf)
        self._rows: list[tuple[Ints, Floats, Floats, Ints]] = []

    def add(self, shape: Ints, value: Floats, points: Floats, near: Ints) -> None:
        """Take in measured points: (n,) shape, distance, (n, 2) place, (n,) target piece."""
        np.maximum.at(self.best, shape, value)
        good = value >= self.best[shape] - TIE_UM
        self._rows.append((shape[good], value[good], points[good], near[good]))

    def choose(self) -> tuple[Floats, Floats, Ints]:
        """Distance (n,), point (n, 2) and target piece (n,) of each shape's farthest point."""
        shape, value, points, near = (
            np.concatenate(column) for column in zip(*self._rows, strict=True)
        )
        tied = value >= self.best[shape] - TIE_UM
        shape, value, points, near = shape[tied], value[tied], points[tied], near[tied]
        step = np.rint(points / POSITION_STEP_UM)
        order = np.lexsort((near, points[:, 0], points[:, 1], step[:, 0], step[:, 1], shape))
        first = order[np.searchsorted(shape[order], np.arange(len(self.best)))]
        return value[first], points[first], near[first]


def farthest_points(
    shapes: Geometries, shape_group: Ints, targets: Geometries, target_group: Ints
) -> Farthest:
    """Farthest point of every shape from the nearest target of its group.

    Parameters
    ----------
    shapes
        (n,) valid shapely polygons [um].
    shape_group
        (n,) group of each shape, any integers >= 0.
    targets
        (m,) valid shapely polygons [um].
    target_group
        (m,) group of each target.

    Returns
    -------
    Farthest
        Distances exact to `TIE_UM`; the same for any order of shapes and targets.

    Raises
    ------
    GeometryError
        If a polygon crosses itself.
    ResolutionError
        If the bounds do not meet within `MAX_LEVELS` cuts.

    Examples
    --------
    A bar of 10 um between two targets is farthest in its middle, not at a corner:

    >>> import shapely
    >>> bar = np.array([shapely.box(0, 0, 10, 1)])
    >>> ends = np.array([shapely.box(-2, 0, -1, 1), shapely.box(11, 0, 12, 1)])
    >>> found = farthest_points(bar, np.array([0]), ends, np.array([0, 0]))
    >>> float(found.distance_um[0]), found.at_um[0].tolist()
    (6.0, [5.0, 0.0])
    """
    distance = np.full(len(shapes), np.nan)
    at, nearest = np.full((len(shapes), 2), np.nan), np.full((len(shapes), 2), np.nan)
    measured = np.flatnonzero(np.isin(shape_group, target_group))
    if len(measured):
        groups, members = np.unique(shape_group[measured], return_inverse=True)
        wanted = np.flatnonzero(np.isin(target_group, groups))
        placed = place_targets(
            shapes[measured],
            members,
            targets[wanted],
            np.searchsorted(groups, target_group[wanted]),
        )
        pieces = cut_convex(shapes[measured])
        unknown = np.full(len(pieces.owner), -1)
        distance[measured], at[measured], piece = _search(pieces, members, placed, unknown)
        nearest[measured] = nearest_on_pieces(at[measured], placed.corners[piece])[1]
    return Farthest(distance_um=frozen(distance), at_um=frozen(at), nearest_um=frozen(nearest))


def farthest_in_crowds(shapes: Geometries, boxes: Floats, owner: Ints) -> Farthest:
    """The same for shapes that are full of small boxes, each shape seeing its own only.

    Parameters
    ----------
    shapes
        (n,) valid shapely polygons [um].
    boxes
        (m, 4) x0, y0, x1, y1 [um], sorted by shape.
    owner
        (m,) the shape of each.

    Raises
    ------
    GeometryError, ResolutionError
        As `farthest_points`.
    """
    distance = np.full(len(shapes), np.nan)
    at, nearest = np.full((len(shapes), 2), np.nan), np.full((len(shapes), 2), np.nan)
    measured, group = np.unique(owner, return_inverse=True)
    if len(measured):
        members = np.arange(len(measured))
        placed = place_pieces(shapes[measured], members, box_corners(boxes), group)
        pieces, near = cut_crowds(shapes[measured], boxes, group)
        distance[measured], at[measured], piece = _search(pieces, members, placed, near)
        nearest[measured] = nearest_on_pieces(at[measured], placed.corners[piece])[1]
    return Farthest(distance_um=frozen(distance), at_um=frozen(at), nearest_um=frozen(nearest))


def _search(
    pieces: Pieces, members: Ints, targets: Targets, near: Ints
) -> tuple[Floats, Floats, Ints]:
    """Run the branch and bound; distance, point and target piece of each shape.

    `near` holds for each piece some target piece of its group that is not far, or -1.
    """
    records = _Records(len(members))
    front = _first_front(pieces, members, targets, near, records)
    for _ in range(MAX_LEVELS):
        # nearest to one target at every corner: the distance is convex, the corners decide
        front = front.take(np.any(front.near != front.near[:, :1], axis=1))
        if not len(front.shape):
            return records.choose()
        front = _next_level(front, members, targets, records)
        _record_corners(records, front)
    raise ResolutionError(
        f"farthest points: {len(front.shape)} pieces still undecided after {MAX_LEVELS} cuts; "
        f"expected bounds to meet within {RESOLUTION_UM} um"
    )


def _first_front(
    pieces: Pieces, members: Ints, targets: Targets, near: Ints, records: _Records
) -> _Front:
    """Measure, for each shape, its most promising piece and then those that can beat it."""
    corners, shape = pieces.corners_um, pieces.owner
    guess = near.copy()
    unknown = guess < 0
    guess[unknown] = targets.nearest(corners[unknown].mean(axis=1), members[shape[unknown]])[0]
    if len(shape) == len(members):
        front = _measured(pieces, np.arange(len(shape)), guess, members, targets)
        _record_corners(records, front)
        return front
    reach = nearest_on_pieces(corners.reshape(-1, 2), np.repeat(targets.corners[guess], 4, axis=0))
    upper = reach[0].reshape(-1, 4).max(axis=1)
    order = np.lexsort((-upper, shape))
    leading = order[np.searchsorted(shape[order], np.arange(len(members)))]
    first = _measured(pieces, leading, guess, members, targets)
    _record_corners(records, first)
    waiting = upper >= records.best[shape] - TIE_UM
    waiting[leading] = False
    rest = _measured(pieces, np.flatnonzero(waiting), guess, members, targets)
    _record_corners(records, rest)
    return _Front(
        corners=np.concatenate([first.corners, rest.corners]),
        near=np.concatenate([first.near, rest.near]),
        value=np.concatenate([first.value, rest.value]),
        shape=np.concatenate([first.shape, rest.shape]),
        gap=np.concatenate([first.gap, rest.gap]),
    )


def _measured(pieces: Pieces, rows: Ints, guess: Ints, members: Ints, targets: Targets) -> _Front:
    """Some of the pieces with the nearest target piece of every corner."""
    corners, shape = pieces.corners_um[rows], pieces.owner[rows]
    near, value = targets.nearer(
        corners.reshape(-1, 2), np.repeat(members[shape], 4), np.repeat(guess[rows], 4)
    )
    return _Front(
        corners=corners,
        near=near.reshape(-1, 4),
        value=value.reshape(-1, 4),
        shape=shape,
        gap=np.full(len(shape), np.inf),
    )


def _record_corners(records: _Records, front: _Front) -> None:
    k = front.near.shape[1]
    records.add(
        np.repeat(front.shape, k),
        front.value.reshape(-1),
        front.corners.reshape(-1, 2),
        front.near.reshape(-1),
    )


def _next_level(front: _Front, members: Ints, targets: Targets, records: _Records) -> _Front:
    """Drop decided pieces, cut the others in two and measure the new corners."""
    centre = front.corners.mean(axis=1)
    guess = front.near[np.arange(len(centre)), np.argmin(front.value, axis=1)]
    near, value = targets.nearer(centre, members[front.shape], guess)
    records.add(front.shape, value, centre, near)
    n, k = front.near.shape
    reach = nearest_on_pieces(
        front.corners.reshape(-1, 2), np.repeat(targets.corners[near], k, axis=0)
    )[0].reshape(n, k)
    upper = reach.max(axis=1)
    gap = upper - np.maximum(front.value.max(axis=1), value)
    open_ = (upper >= records.best[front.shape] - TIE_UM) & (gap > RESOLUTION_UM)
    stalled = (gap > STALL * front.gap)[open_]
    front = replace(front, gap=gap).take(open_)
    worst = np.argmax(reach[open_], axis=1)
    height = _ridge(front, centre[open_], near[open_], worst, targets)
    height = np.where(stalled[:, None] | _misses(height), _halving(front.corners), height)
    return _cut(front, height, members, targets)


def _ridge(front: _Front, centre: Floats, near: Ints, worst: Ints, targets: Targets) -> Floats:
    """Height (n, k) of the corners over the tangent of the ridge between two target pieces.

    The two are the piece nearest to the centre and the one nearest to the corner that is
    worst for it; the ridge is met on the way from that centre to that corner.
    """
    rows = np.arange(len(near))
    here, there = targets.corners[near], targets.corners[front.near[rows, worst]]
    way = front.corners[rows, worst] - centre
    point = centre + _meeting(centre, way, here, there)[:, None] * way
    normal = _slope(point, here) - _slope(point, there)
    return np.asarray(np.einsum("nkd,nd->nk", front.corners - point[:, None, :], normal))


def _meeting(start: Floats, way: Floats, here: Floats, there: Floats) -> Floats:
    """Share (n,) of each way at which two target pieces are equally far.

    Regula falsi in the Illinois form (M. Dowell and P. Jarratt, BIT 11 (1971) 168), which
    keeps the root between its two ends; the pieces `here` are nearer at the start.
    """
    ends = np.stack([np.zeros(len(start)), np.ones(len(start))])
    at_ends = np.stack([_difference(start, here, there), _difference(start + way, here, there)])
    share = np.zeros(len(start))
    moved = np.full(len(start), -1)
    rows = np.arange(len(start))
    for _ in range(ROOT_STEPS):
        (low, high), (at_low, at_high) = ends[:, rows], at_ends[:, rows]
        rise = np.where(at_high > at_low, at_high - at_low, 1.0)
        share[rows] = low - at_low * (high - low) / rise
        points = start[rows] + share[rows, None] * way[rows]
        found = _difference(points, here[rows], there[rows])
        beyond = np.where(found > 0.0, 1, 0)
        # an end that stays twice running counts half, else it would stay for good
        at_ends[1 - beyond, rows] *= np.where(beyond == moved[rows], 0.5, 1.0)
        ends[beyond, rows], at_ends[beyond, rows] = share[rows], found
        moved[rows] = beyond
        rows = rows[np.abs(found) > ROOT_UM]
        if not len(rows):
            break
    return share


def _difference(points: Floats, here: Floats, there: Floats) -> Floats:
    return nearest_on_pieces(points, here)[0] - nearest_on_pieces(points, there)[0]


def _slope(points: Floats, pieces: Floats) -> Floats:
    """Gradient (n, 2) of the distance from a convex piece."""
    distance, nearest = nearest_on_pieces(points, pieces)
    return (points - nearest) / np.where(distance > 0.0, distance, 1.0)[:, None]


def _misses(height: Floats) -> NDArray[np.bool_]:
    """Whether (n, 1) a cut leaves next to nothing on one of its sides."""
    low, high = height.min(axis=1), height.max(axis=1)
    missed = np.minimum(-low, high) <= 1e-9 * np.maximum(-low, high)
    return np.asarray(missed[:, None])


def _halving(corners: Floats) -> Floats:
    """Height (n, k) of the corners over the middle of the bounding box's longer side."""
    low, high = corners.min(axis=1), corners.max(axis=1)
    longer = np.argmax(high - low, axis=1)
    rows = np.arange(len(corners))
    middle = 0.5 * (low + high)[rows, longer]
    return np.asarray(corners[rows, :, longer] - middle[:, None])


def _cut(front: _Front, height: Floats, members: Ints, targets: Targets) -> _Front:
    """Both parts of every piece, with the nearest target of every new corner."""
    corners, height, crossing = add_crossings(front.corners, height)
    near, value = np.repeat(front.near, 2, axis=1), np.repeat(front.value, 2, axis=1)
    added = np.zeros(near.shape, dtype=bool)
    added[:, 1::2] = crossing
    group = np.broadcast_to(members[front.shape][:, None], near.shape)
    near[added], value[added] = targets.nearer(corners[added], group[added], near[added])
    parts = [upper_part(corners, side) for side in (height, -height)]
    width = max(columns.shape[1] for _, columns in parts)
    source = np.concatenate([rows for rows, _ in parts])
    columns = np.concatenate([_widened(columns, width) for _, columns in parts])
    rows = source[:, None]
    return _Front(
        corners=corners[rows, columns],
        near=near[rows, columns],
        value=value[rows, columns],
        shape=front.shape[source],
        gap=front.gap[source],
    )


def _widened(columns: Ints, width: int) -> Ints:
    """Repeat the last column until there are `width` of them."""
    return columns[:, np.minimum(np.arange(width), columns.shape[1] - 1)]
