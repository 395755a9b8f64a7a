"""Outlines as columns: vertices of many polygons in one array, with offsets.

Here raw outlines in user units become whole database units, counter-clockwise, without
repeated vertices and without outlines that enclose nothing.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from latchscan.layout.model import Floats, Ints
from latchscan.layout.runs import offsets

LARGEST_COORDINATE = 2.0**51
"""Largest coordinate that is taken [database units]: sums of two stay exact in float64."""
BATCH = 1 << 16
"""Outlines that are turned into columns at once; bounds the memory spent on small arrays."""


class OutOfRangeError(ValueError):
    """A coordinate is too large or no number."""


class OutlineColumns:
    """Grows columns of outlines, a batch at a time."""

    def __init__(self, units: float) -> None:
        self._units = units
        self._points: list[Floats] = []
        self._keys: list[tuple[int, int]] = []
        self._batches: list[tuple[Ints, Ints, Ints]] = []
        self.dropped_count = 0

    def add(self, points: Floats, cell: int, pair: int) -> None:
        """Add one outline (n, 2) in the library's user unit."""
        self._points.append(points)
        self._keys.append((cell, pair))
        if len(self._points) >= BATCH:
            self._flush()

    def _flush(self) -> None:
        points, lengths, kept = _normalised(self._points, self._units)
        keys = np.array(self._keys, dtype=np.int64).reshape(-1, 2)[kept]
        self.dropped_count += len(self._points) - len(kept)
        self._batches.append((points, lengths, keys))
        self._points, self._keys = [], []

    def finish(self) -> tuple[Ints, Ints, Ints, Ints]:
        """Points, offsets, cell and pair of all outlines, sorted by (cell, pair)."""
        self._flush()
        points = np.concatenate([batch[0] for batch in self._batches])
        first = offsets(np.concatenate([batch[1] for batch in self._batches]))
        keys = np.concatenate([batch[2] for batch in self._batches])
        self._batches = []
        order = np.lexsort((keys[:, 1], keys[:, 0]))
        source, lengths = vertex_rows(first, order, np.zeros(len(order), dtype=np.bool_))
        return points[source], offsets(lengths), keys[order, 0], keys[order, 1]


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
    lengths = np.fromiter((len(outline) for outline in outlines), np.int64, len(outlines))
    if lengths.sum() == 0:
        return np.zeros((0, 2), np.int64), np.zeros(0, np.int64), np.zeros(0, np.int64)
    points = whole(np.concatenate(outlines) * units)
    owner = np.repeat(np.arange(len(lengths)), lengths)
    repeated = (points == points[_previous(owner)]).all(axis=1)
    points, owner = points[~repeated], owner[~repeated]
    first = offsets(np.bincount(owner, minlength=len(lengths)))
    area = _twice_area(points, owner, first)
    kept = np.flatnonzero(area != 0)
    source, lengths = vertex_rows(first, kept, area[kept] < 0)
    return points[source], lengths, kept


def _previous(owner: Ints) -> Ints:
    """Index of the vertex before each vertex, cyclic within its outline."""
    previous = np.arange(len(owner)) - 1
    starts = np.flatnonzero(np.concatenate([[True], owner[1:] != owner[:-1]]))
    previous[starts] = np.concatenate([starts[1:], [len(owner)]]) - 1
    return previous


def _twice_area(points: Ints, owner: Ints, first: Ints) -> Floats:
    """Twice the signed area of each outline (shoelace formula) about its first vertex."""
    if len(points) == 0:
        return np.zeros(len(first) - 1)
    # subtracting first keeps small shapes far from the origin exact
    local = (points - points[first[owner]]).astype(np.float64)
    before = local[_previous(owner)]
    cross = before[:, 0] * local[:, 1] - local[:, 0] * before[:, 1]
    return np.asarray(np.bincount(owner, weights=cross, minlength=len(first) - 1), np.float64)
