"""Joining pieces of a region along shared edges, and naming each result in one way only.

In: rings of polygons with disjoint insides (window pieces, rings joined to their holes by a
slit).  Out: the rings of their union: outer rings counter-clockwise, holes clockwise.

The one idea: where two pieces share an edge they run along it in opposite directions, and
so do the two sides of a slit.  Adding up the directions along every horizontal and vertical
line leaves exactly the edges of the union; no coordinate is ever computed, so nothing is
rounded.  The remaining edges are chained into rings; where rings touch in a point they turn
so that each ring stays around one connected inside.
"""

from __future__ import annotations

import math
from collections import Counter
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from latchscan.layout.model import Ints
from latchscan.layout.runs import offsets, successors, within_runs

NEAR_LINE = 1.0
"""A corner between two slanted edges that lies closer to the line through its neighbours
than this is a rounded cut of one edge, not a corner [grid steps]."""


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Rings:
    """Closed rings of integer points, without the repeated last point.

    Attributes
    ----------
    points
        (n, 2) points (x, y) of all rings, one ring after the other [grid steps].
    first
        (r + 1,) offsets of the rings into `points`.
    """

    points: Ints
    first: Ints

    @property
    def count(self) -> int:
        """Number of rings."""
        return len(self.first) - 1


def no_rings() -> Rings:
    """Rings of an empty region."""
    return Rings(points=np.zeros((0, 2), dtype=np.int64), first=np.zeros(1, dtype=np.int64))


def join_rings(parts: list[Rings]) -> Rings:
    """All rings of several values, in order."""
    parts = [part for part in parts if part.count]
    if not parts:
        return no_rings()
    starts = np.cumsum([0, *(len(part.points) for part in parts)])
    heads = [part.first[:-1] + start for part, start in zip(parts, starts[:-1], strict=True)]
    return Rings(
        points=np.concatenate([part.points for part in parts]),
        first=np.concatenate([*heads, starts[-1:]]),
    )


def select_rings(rings: Rings, chosen: NDArray[np.bool_]) -> Rings:
    """The rings for which `chosen`, (r,), is true."""
    sizes = np.diff(rings.first)
    return Rings(
        points=rings.points[np.repeat(chosen, sizes)],
        first=offsets(sizes[chosen]),
    )


def pick_rings(rings: Rings, order: Ints) -> Rings:
    """The rings with the indices `order`, in that order; an index may come again."""
    sizes = np.diff(rings.first)[order]
    first = offsets(sizes)
    inside = within_runs(sizes)
    return Rings(points=rings.points[np.repeat(rings.first[order], sizes) + inside], first=first)


def stitch(rings: Rings) -> Rings:
    """Rings of the union of polygons with disjoint insides, in canonical form.

    Parameters
    ----------
    rings
        Polygons as rings with the inside on the left; holes may be rings of their own
        (clockwise) or hang on a slit.

    Returns
    -------
    Rings
        Canonical rings (see `canonical_rings`), sorted by their first point.
    """
    edges = _remaining_edges(rings)
    if not len(edges):
        return no_rings()
    return canonical_rings(_chain(edges))


def canonical_rings(rings: Rings) -> Rings:
    """The same rings without points on straight lines, each begun at its lowest left point.

    Rings come sorted by their first two points.
    """
    rings = _without_straight_points(rings)
    if not rings.count:
        return no_rings()
    sizes = np.diff(rings.first)
    owner = np.repeat(np.arange(rings.count), sizes)
    by_place = np.lexsort((rings.points[:, 0], rings.points[:, 1], owner))
    lead = by_place[rings.first[:-1]] - rings.first[:-1]
    place = np.arange(len(rings.points)) - rings.first[:-1][owner]
    turned = rings.first[:-1][owner] + (place + lead[owner]) % sizes[owner]
    return sort_rings(Rings(points=rings.points[turned], first=rings.first))


def sort_rings(rings: Rings) -> Rings:
    """The rings sorted by their first two points, (y, x) each."""
    if not rings.count:
        return rings
    head, after = rings.points[rings.first[:-1]], rings.points[rings.first[:-1] + 1]
    return pick_rings(rings, np.lexsort((after[:, 0], after[:, 1], head[:, 0], head[:, 1])))


def signed_areas(rings: Rings) -> NDArray[np.float64]:
    """Area of every ring, positive counter-clockwise [grid steps squared]."""
    if not rings.count:
        return np.zeros(0)
    following = rings.points[successors(rings.first)]
    # about each ring's first point, so that products stay small
    origin = np.repeat(rings.points[rings.first[:-1]], np.diff(rings.first), axis=0)
    (x0, y0), (x1, y1) = (rings.points - origin).T, (following - origin).T
    return np.add.reduceat(x0 * y1 - x1 * y0, rings.first[:-1]) / 2.0


def _previous_index(first: Ints) -> Ints:
    before = np.arange(-1, first[-1] - 1)
    before[first[:-1]] = first[1:] - 1
    return before


def _remaining_edges(rings: Rings) -> Ints:
    """(m, 4) edges x0, y0, x1, y1 that are left when opposite ones have cancelled."""
    if not rings.count:
        return np.zeros((0, 4), dtype=np.int64)
    edges = np.hstack([rings.points, rings.points[successors(rings.first)]])
    flat, upright = edges[:, 1] == edges[:, 3], edges[:, 0] == edges[:, 2]
    across = _cancel(edges[flat & ~upright])
    along = _cancel(edges[upright & ~flat][:, [1, 0, 3, 2]])[:, [1, 0, 3, 2]]
    slanted = _cancel_slanted(edges[~flat & ~upright])
    return np.concatenate([across, along, slanted])


def _cancel(edges: Ints) -> Ints:
    """Net edges along horizontal lines, cut at every end point on the line."""
    if not len(edges):
        return edges
    low = np.minimum(edges[:, 0], edges[:, 2])
    high = np.maximum(edges[:, 0], edges[:, 2])
    sign = np.sign(edges[:, 2] - edges[:, 0])
    x, y = np.concatenate([low, high]), np.tile(edges[:, 1], 2)
    order = np.lexsort((x, y))
    x, y, net = x[order], y[order], np.cumsum(np.concatenate([sign, -sign])[order])
    kept = np.flatnonzero((net[:-1] != 0) & (x[1:] != x[:-1]))
    start, end = x[kept], x[kept + 1]
    forward = net[kept] > 0
    return np.column_stack(
        [np.where(forward, start, end), y[kept], np.where(forward, end, start), y[kept]]
    )


def _cancel_slanted(edges: Ints) -> Ints:
    """Slanted edges without exactly opposite pairs (cuts and slits are never slanted)."""
    if len(edges) < 2:
        return edges
    backwards = (edges[:, 0] > edges[:, 2])[:, np.newaxis]
    lines = np.where(backwards, edges[:, [2, 3, 0, 1]], edges)
    _, owner, count = np.unique(lines, axis=0, return_inverse=True, return_counts=True)
    if count.max() == 1:
        return edges
    net = np.bincount(owner.ravel(), weights=np.where(backwards[:, 0], -1, 1))
    return np.asarray(edges[net[owner.ravel()] != 0])


def _chain(edges: Ints) -> Rings:
    """Rings of directed edges, each turning towards its own inside at shared points."""
    ends = np.concatenate([edges[:, :2], edges[:, 2:]])
    order = np.lexsort((ends[:, 0], ends[:, 1]))
    ranked = ends[order]
    fresh = np.concatenate([[0], np.any(ranked[1:] != ranked[:-1], axis=1)])
    vertex = np.empty(len(ends), dtype=np.int64)
    vertex[order] = np.cumsum(fresh)
    start, end = vertex[: len(edges)], vertex[len(edges) :]
    by_start = np.argsort(start, kind="stable")
    first = np.searchsorted(start[by_start], end)
    following = by_start[np.minimum(first, len(edges) - 1)]
    busy = np.bincount(start)[end] > 1
    _turn_at_shared(edges, following, np.flatnonzero(busy), start, end)
    chosen, sizes = _walk(following, start, busy)
    return Rings(points=edges[chosen, :2], first=offsets(sizes))


def _turn_at_shared(edges: Ints, following: Ints, busy: Ints, start: Ints, end: Ints) -> None:
    """Set the successor of every edge that ends in a point with several outgoing edges."""
    outgoing: dict[int, list[int]] = {}
    shared = np.flatnonzero(np.isin(start, end[busy]))
    for edge in shared.tolist():
        outgoing.setdefault(int(start[edge]), []).append(edge)
    heading = {edge: _angle(edges[edge]) for edge in shared.tolist()}
    for edge in busy.tolist():
        back = _angle(edges[edge]) + math.pi
        # the inside lies left of the edge: the first edge clockwise from where it came
        choices = [
            ((back - heading[other] - 1e-12) % (2.0 * math.pi), other)
            for other in outgoing[int(end[edge])]
        ]
        following[edge] = min(choices)[1]


def _angle(edge: Ints) -> float:
    return math.atan2(float(edge[3] - edge[1]), float(edge[2] - edge[0]))


def _walk(following: Ints, start: Ints, busy: NDArray[np.bool_]) -> tuple[Ints, Ints]:
    """Edges in ring order and the size of each ring."""
    boxes = _four_edge_rings(following)
    successor, origin, shared = following.tolist(), start.tolist(), busy.tolist()
    marks = np.zeros(len(following), dtype=np.uint8)
    marks[boxes] = 1
    seen = bytearray(marks.tobytes())
    chosen: list[int] = boxes.ravel().tolist()
    sizes: list[int] = [4] * len(boxes)
    for seed in range(len(successor)):
        if seen[seed]:
            continue
        ring, edge, splits = [], seed, False
        while not seen[edge]:
            seen[edge] = 1
            ring.append(edge)
            splits = splits or shared[edge]
            edge = successor[edge]
        for part in _split(ring, origin) if splits else [ring]:
            chosen.extend(part)
            sizes.append(len(part))
    return np.array(chosen, dtype=np.int64), np.array(sizes, dtype=np.int64)


def _four_edge_rings(following: Ints) -> Ints:
    """(k, 4) edges of all rings of four: most rings by far, found without a loop."""
    second = following[following]
    edges = np.arange(len(following))
    four = (second[second] == edges) & (second != edges)
    lead = four & (edges < np.minimum(second, np.minimum(following, following[second])))
    first = np.flatnonzero(lead)
    return np.column_stack([first, following[first], second[first], following[second[first]]])


def _split(ring: list[int], origin: list[int]) -> list[list[int]]:
    """Rings without repeated points of a ring that passes some point more than once."""
    repeated = {point for point, count in Counter(origin[e] for e in ring).items() if count > 1}
    if not repeated:
        return [ring]
    parts: list[list[int]] = []
    path: list[int] = []
    for edge in ring:
        point = origin[edge]
        if point in repeated:
            held = next((i for i, e in enumerate(path) if origin[e] == point), None)
            if held is not None:
                parts.append(path[held:])
                del path[held:]
        path.append(edge)
    return [*parts, path]


def _without_straight_points(rings: Rings) -> Rings:
    while rings.count:
        before = rings.points - rings.points[_previous_index(rings.first)]
        after = rings.points[successors(rings.first)] - rings.points
        cross = before[:, 0] * after[:, 1] - before[:, 1] * after[:, 0]
        straight = cross == 0
        slanted = np.all(before != 0, axis=1) & np.all(after != 0, axis=1) & ~straight
        if np.any(slanted):
            chord = np.hypot(*(before + after)[slanted].T)
            onward = np.sum(before[slanted] * after[slanted], axis=1) > 0
            straight[slanted] = onward & (np.abs(cross[slanted]) < NEAR_LINE * chord)
        if not np.any(straight):
            return rings
        rings = _drop_points(rings, straight)
    return rings


def _drop_points(rings: Rings, dropped: NDArray[np.bool_]) -> Rings:
    kept = np.add.reduceat(~dropped, rings.first[:-1], dtype=np.int64)
    alive = kept > 2
    owner_alive = np.repeat(alive, np.diff(rings.first))
    return Rings(points=rings.points[~dropped & owner_alive], first=offsets(kept[alive]))
