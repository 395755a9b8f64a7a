"""The nearest few polygons around each polygon, within a reach, for thousands at once.

The one idea: everything within a radius is listed, and a polygon that has enough neighbours
well inside its radius is complete; the others are asked again with a larger radius.  The
first radius comes from the distance of one near neighbour, so that polygons far from
everything do not list a whole block.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
import shapely
from numpy.typing import NDArray

from latchscan.layout.measure.convex import is_rectangle
from latchscan.layout.model import Floats, Geometries, Ints, frozen

TIE_UM = 1e-6
"""Distances are ordered in steps of this size, so that rounding decides no order [um]."""
FIRST_SHARE = 0.7
"""Share of the expected radius that is asked first: it starts at the nearest target (measured)."""
FEW_IN_A_SQUARE = 4
MOST_SQUARES_A_SIDE = 32
"""Squares in which it is seen where targets are at all; coarse, so that few stay empty."""
SOURCES_AT_ONCE = 4_000
"""Polygons asked together: bounds the memory of one answer."""


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Neighbours:
    """Neighbours, one row each, sorted by source, distance and target.

    Attributes
    ----------
    source, target
        (m,) indices into the two sets of polygons.
    distance_um
        (m,) smallest distance between the two.
    """

    source: Ints
    target: Ints
    distance_um: Floats


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class _Set:
    """Polygons with their bounding boxes (n, 4) and whether each is its box."""

    polygons: Geometries
    box: Floats
    rectangular: NDArray[np.bool_]


def nearest_few(
    sources: Geometries, targets: Geometries, *, count: int, reach_um: float
) -> Neighbours:
    """The `count` nearest targets of each source among those within reach.

    Parameters
    ----------
    sources, targets
        (n,), (m,) shapely polygons [um].
    count
        Neighbours wanted, at least 1.
    reach_um
        Largest distance, inclusive to `TIE_UM`.

    Returns
    -------
    Neighbours
        Fewer than `count` rows for a source only where no more are within reach; equally
        near targets come in the order of their indices.

    Examples
    --------
    >>> at = lambda x: shapely.box(x, 0, x + 1, 1)
    >>> found = nearest_few(np.array([at(0)]), np.array([at(9), at(3), at(5)]),
    ...                     count=2, reach_um=6.0)
    >>> found.target.tolist(), found.distance_um.tolist()
    ([1, 2], [2.0, 4.0])
    """
    if not len(sources) or not len(targets):
        return joined([])
    asking, asked = _set_of(sources), _set_of(targets)
    # two to a node answers nearest queries twice as fast as the default of ten (measured)
    tree = shapely.STRtree(targets, node_capacity=2)
    found: list[Neighbours] = []
    for first in range(0, len(sources), SOURCES_AT_ONCE):
        rows = np.arange(first, min(first + SOURCES_AT_ONCE, len(sources)))
        found += _search(asking, asked, tree, rows, count, reach_um + TIE_UM)
    return first_few(joined(found), count)


def joined(found: Sequence[Neighbours]) -> Neighbours:
    """All rows of several answers, as they come."""
    return Neighbours(
        source=np.concatenate([np.empty(0, dtype=np.int64), *(f.source for f in found)]),
        target=np.concatenate([np.empty(0, dtype=np.int64), *(f.target for f in found)]),
        distance_um=np.concatenate([np.empty(0), *(f.distance_um for f in found)]),
    )


def first_few(found: Neighbours, count: int) -> Neighbours:
    """The `count` nearest rows of each source, sorted by source, distance and target."""
    source, distance = found.source, found.distance_um
    order = np.lexsort((found.target, np.rint(distance / TIE_UM), source))
    source = source[order]
    first = np.arange(len(source)) - np.searchsorted(source, source) < count
    return Neighbours(
        source=frozen(source[first]),
        target=frozen(found.target[order][first]),
        distance_um=frozen(distance[order][first]),
    )


def _search(
    sources: _Set, targets: _Set, tree: shapely.STRtree, rows: Ints, count: int, limit: float
) -> list[Neighbours]:
    """Ask with growing radius until every source in `rows` is complete."""
    centre = 0.5 * (sources.box[rows, :2] + sources.box[rows, 2:])
    # the target nearest to the centre is near enough for a start, and found much faster
    nearest = _distances(sources, rows, targets, tree.nearest(shapely.points(centre)))
    margin = np.full(len(rows), max(_margin(targets.box, count), 10 * TIE_UM))
    wanted = min(count, len(targets.polygons))
    found = []
    while len(rows):
        radius = np.minimum(nearest + margin, limit)
        x0, y0, x1, y1 = sources.box[rows].T
        around = shapely.box(x0 - radius, y0 - radius, x1 + radius, y1 + radius)
        near, target = tree.query(around)
        distance = _distances(sources, rows[near], targets, target)
        within = distance <= radius[near]
        near, target, distance = near[within], target[within], distance[within]
        # a target on the rim may have an equal just outside: count only what is clear of it
        inner = np.bincount(near[distance < radius[near] - 2 * TIE_UM], minlength=len(rows))
        complete = (inner >= wanted) | (radius >= limit)
        done = complete[near]
        ready = Neighbours(source=rows[near[done]], target=target[done], distance_um=distance[done])
        found.append(first_few(ready, count))
        rows, nearest, margin = rows[~complete], nearest[~complete], 2.0 * margin[~complete]
    return found


def _set_of(polygons: Geometries) -> _Set:
    return _Set(polygons=polygons, box=shapely.bounds(polygons), rectangular=is_rectangle(polygons))


def _distances(sources: _Set, source: Ints, targets: _Set, target: Ints) -> Floats:
    """Smallest distance (m,) of each pair of polygons, by coordinates between rectangles."""
    one, two = sources.box[source], targets.box[target]
    gap = np.maximum(one[:, :2] - two[:, 2:], two[:, :2] - one[:, 2:])
    distance = np.hypot(*np.maximum(gap, 0.0).T)
    other = ~(sources.rectangular[source] & targets.rectangular[target])
    distance[other] = shapely.distance(
        sources.polygons[source[other]], targets.polygons[target[other]]
    )
    return np.asarray(distance)


def _margin(boxes: Floats, count: int) -> float:
    """Radius within which `count` targets lie where targets are spread evenly [um]."""
    low, high = boxes[:, :2].min(axis=0), boxes[:, 2:].max(axis=0)
    width, height = high - low
    share = count / len(boxes)
    area = width * height * _occupied_share(boxes, low, high)
    # a single row of targets has next to no area
    radius = max(np.sqrt(area * share / np.pi), max(width, height) * share / 2.0)
    return float(FIRST_SHARE * radius)


def _occupied_share(boxes: Floats, low: Floats, high: Floats) -> float:
    """Share of the targets' bounding box where there are any, seen in coarse squares."""
    side = int(np.clip(np.sqrt(len(boxes) / FEW_IN_A_SQUARE), 1, MOST_SQUARES_A_SIDE))
    centre = 0.5 * (boxes[:, :2] + boxes[:, 2:]) - low
    square = np.minimum((centre * side / (high - low)).astype(np.int64), side - 1)
    return len(np.unique(square[:, 0] * side + square[:, 1])) / side**2
