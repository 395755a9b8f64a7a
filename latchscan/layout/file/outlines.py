"""Outlines as columns: vertices of many polygons in one array, with offsets.

Here raw outlines in user units become whole database units, counter-clockwise, without
repeated vertices and without outlines that enclose nothing.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from latchscan.layout.model import Floats, Ints
from latchscan.layout.runs import offsets, successors

LARGEST_COORDINATE = 2.0**51
"""Largest coordinate that is taken [database units]: sums of two stay exact in float64."""
BATCH = 1 << 16
"""Outlines that are turned into columns at once; bounds the memory spent on small arrays."""
BLOCK = 64
"""Outlines of one cell and pair that are kept close together, see `_strip_order`."""


class OutOfRangeError(ValueError):
    """A coordinate is too large or no number."""


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class SortedOutlines:
    """Outlines sorted by (cell, pair), and within by place: columns of `Tables`."""

    points: Ints
    first: Ints
    box: Ints
    cell: Ints
    pair: Ints


class OutlineColumns:
    """Grows columns of outlines, a batch at a time."""

    def __init__(self, units: float) -> None:
        self._units = units
        self._points: list[Floats] = []
        self._cells: list[int] = []
        self._pairs: list[int] = []
        self._batches: list[_Batch] = []
        self.dropped_count = 0

    def add(self, points: Floats, cell: int, pair: int) -> None:
        """Add one outline (n, 2) in the library's user unit."""
        self.extend([points], cell, [pair])

    def extend(self, points: list[Floats], cell: int, pairs: list[int]) -> None:
        """Add outlines of one cell, each with its pair; lists of bounded length."""
        self._points += points
        self._cells += [cell] * len(points)
        self._pairs += pairs
        if len(self._points) >= BATCH:
            self.flush()

    def flush(self) -> None:
        """Turn what was added into columns, and let go of it."""
        points, lengths, kept = _normalised(self._points, self._units)
        self.dropped_count += len(self._points) - len(kept)
        self._batches.append(
            _Batch(
                points=narrowed(points),
                lengths=narrowed(lengths),
                box=narrowed(_boxes(points, lengths)),
                cell=narrowed(np.array(self._cells, dtype=np.int64)[kept]),
                pair=narrowed(np.array(self._pairs, dtype=np.int64)[kept]),
            )
        )
        self._points, self._cells, self._pairs = [], [], []

    def finish(self) -> SortedOutlines:
        """All outlines, sorted."""
        self.flush()
        batches, self._batches = self._batches, []
        cell = np.concatenate([batch.cell for batch in batches])
        pair = np.concatenate([batch.pair for batch in batches])
        box = np.concatenate([batch.box for batch in batches])
        lengths = np.concatenate([batch.lengths for batch in batches])
        points = np.concatenate([batch.points for batch in batches])
        del batches
        order = np.lexsort((pair, cell))
        cell, pair = cell[order], pair[order]
        _gather_places(order, box, cell, pair)
        first, old_first = offsets(lengths[order]), offsets(lengths)
        sorted_points = np.empty_like(points)
        for start in range(0, len(order), BATCH):
            rows = order[start : start + BATCH]
            source, _ = vertex_rows(old_first, rows, np.zeros(len(rows), dtype=np.bool_))
            sorted_points[first[start] : first[start + len(rows)]] = points[source]
        return SortedOutlines(
            points=sorted_points, first=first, box=box[order], cell=cell, pair=pair
        )


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class _Batch:
    """Some outlines as they came."""

    points: Ints
    lengths: Ints
    box: Ints
    cell: Ints
    pair: Ints


def narrowed(values: Ints) -> Ints:
    """The same numbers in half the memory where they fit."""
    fits = values.size == 0 or np.abs(values).max() < 2**31
    narrow: Any = values.astype(np.int32) if fits else values
    return np.asarray(narrow)


def _boxes(points: Ints, lengths: Ints) -> Ints:
    """(n, 4) bounding boxes."""
    if len(lengths) == 0:
        return np.zeros((0, 4), np.int64)
    starts = offsets(lengths)[:-1]
    sides = [np.ascontiguousarray(side) for side in points.T]
    return np.column_stack(
        [best.reduceat(side, starts) for best in (np.minimum, np.maximum) for side in sides]
    )


def _gather_places(order: Ints, box: Ints, cell: Ints, pair: Ints) -> None:
    """Order the outlines of each large run of one cell and pair by place, in place."""
    if len(order) == 0:
        return
    changes = np.flatnonzero((np.diff(cell) != 0) | (np.diff(pair) != 0)) + 1
    starts = np.concatenate([[0], changes])
    stops = np.concatenate([changes, [len(order)]])
    large = stops - starts > BLOCK
    for low, high in zip(starts[large].tolist(), stops[large].tolist(), strict=True):
        rows = order[low:high]
        order[low:high] = rows[_strip_order(box[rows])]


def _strip_order(boxes: Ints) -> Ints:
    """Order by strips so that runs of `BLOCK` boxes stay close together."""
    twice_x = boxes[:, 0].astype(np.int64) + boxes[:, 2]
    strips = max(1, int(np.sqrt(len(boxes) / BLOCK)))
    edges = np.sort(twice_x)[np.arange(1, strips) * len(boxes) // strips]
    strip = np.searchsorted(edges, twice_x, side="right")
    return np.lexsort((boxes[:, 1].astype(np.int64) + boxes[:, 3], strip))


def vertex_rows(first: Ints, rows: Ints, backwards: NDArray[np.bool_]) -> tuple[Ints, Ints]:
    """Vertex indices of some polygons, walked backwards where asked.

    Parameters
    ----------
    first
        (n + 1,) offsets of all polygons.
    rows, backwards
        (m,) polygons to take and whether to turn them round.

    Returns
    -------
    indices, lengths
        Vertices in order, and how many each polygon has.
    """
    lengths = first[rows + 1] - first[rows]
    starts = np.cumsum(lengths) - lengths
    begin = first[rows] - starts
    count = np.arange(int(lengths.sum()))
    if not backwards.any():
        return count + np.repeat(begin, lengths), lengths
    begin = np.where(backwards, first[rows + 1] - 1 + starts, begin)
    return count * np.repeat(np.where(backwards, -1, 1), lengths) + np.repeat(
        begin, lengths
    ), lengths


def whole(values: Floats) -> Ints:
    """Nearest database units, halves upwards so that a shifted shape keeps its size."""
    check_range(values)
    return np.floor(values + 0.5).astype(np.int64)


def check_range(values: Floats) -> None:
    """Raise `OutOfRangeError` unless every value is a number of bearable size."""
    if values.size and not (np.abs(values) <= LARGEST_COORDINATE).all():
        raise OutOfRangeError(
            f"a coordinate lies beyond {LARGEST_COORDINATE:.3g} database units or is no number"
        )


def _normalised(outlines: list[Floats], units: float) -> tuple[Ints, Ints, Ints]:
    """Vertices, lengths and indices of the outlines that enclose an area."""
    lengths = np.fromiter(map(len, outlines), np.int64, len(outlines))
    kept = np.arange(len(outlines))
    if lengths.sum() == 0:
        return np.zeros((0, 2), np.int64), lengths[:0], kept[:0]
    values = np.concatenate(outlines)
    # sides apart: short rows are slow to go through
    x, y = whole(values[:, 0] * units), whole(values[:, 1] * units)
    before = _previous(offsets(lengths))
    distinct = (x != x[before]) | (y != y[before])
    if not distinct.all() or lengths.min() < 3:
        owner = np.repeat(kept, lengths)
        lengths = np.bincount(owner[distinct], minlength=len(lengths))
        kept = np.flatnonzero(lengths > 2)
        rows = distinct & (lengths > 2)[owner]
        x, y, lengths = x[rows], y[rows], lengths[kept]
    first = offsets(lengths)
    area = _twice_area(x, y, first)
    points = np.column_stack([x, y])
    encloses = area != 0
    if not encloses.all():
        # lobes of opposite winding cancel in the sum of areas and are there all the same
        doubtful = np.flatnonzero(~encloses)
        encloses[doubtful] = _winds(points, first, doubtful)
    if encloses.all() and not (area < 0).any():
        return points, lengths, kept
    chosen = np.flatnonzero(encloses)
    source, lengths = vertex_rows(first, chosen, area[chosen] < 0)
    return points[source], lengths, kept[chosen]


def _winds(points: Ints, first: Ints, rows: Ints) -> NDArray[np.bool_]:
    """Which of the outlines `rows` wind around any area (nonzero rule), exactly.

    An outline winds around nothing if and only if its directed edges cancel: along every
    line, each stretch is walked as often forth as back.  Counted along a line from end to
    end, the balance of a stretch changes only at ends of edges; so at every point, edges that
    leave along the line must be as many as edges that arrive along it.
    """
    source, lengths = vertex_rows(first, rows, np.zeros(len(rows), dtype=np.bool_))
    start = points[source].astype(np.int64)
    owner = np.repeat(np.arange(len(rows)), lengths)
    stop = start[successors(offsets(lengths))]
    step = stop - start
    step //= np.gcd(step[:, 0], step[:, 1])[:, None]
    # a line has one direction, whichever way it is walked
    step[(step[:, 0] < 0) | ((step[:, 0] == 0) & (step[:, 1] < 0))] *= -1
    ends = np.concatenate(
        [np.column_stack([owner, start, step]), np.column_stack([owner, stop, step])]
    )
    sign = np.repeat([1, -1], len(owner))
    order = np.lexsort(ends.T)
    ends, sign = ends[order], sign[order]
    new = np.concatenate([[True], (ends[1:] != ends[:-1]).any(axis=1)])
    balance = np.add.reduceat(sign, np.flatnonzero(new))
    found = np.zeros(len(rows), dtype=np.bool_)
    found[ends[new][balance != 0, 0]] = True
    return found


def _previous(first: Ints) -> Ints:
    """Index of the vertex before each vertex, cyclic within its outline."""
    # an outline without vertices starts where the next one does
    first = first[np.append(np.diff(first) > 0, True)]
    previous = np.arange(-1, int(first[-1]) - 1)
    previous[first[:-1]] = first[1:] - 1
    return previous


def _twice_area(x: Ints, y: Ints, first: Ints) -> Floats:
    """Twice the signed area of each outline (shoelace formula) about its first vertex."""
    if len(x) == 0:
        return np.zeros(0)
    starts, lengths = first[:-1], np.diff(first)
    before = _previous(first)
    # subtracting first keeps small shapes far from the origin exact
    x_local = (x - np.repeat(x[starts], lengths)).astype(np.float64)
    y_local = (y - np.repeat(y[starts], lengths)).astype(np.float64)
    cross = x_local[before] * y_local - x_local * y_local[before]
    return np.asarray(np.add.reduceat(cross, starts), dtype=np.float64)
