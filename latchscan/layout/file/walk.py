"""The window walk: polygons of a box out of the hierarchy, without ever flattening it.

The walk goes down from the top cell by cell, parents first.  It carries for each cell all
placements that meet the box as columns (a matrix and a shift each), expands arrays only
where they meet the box, and turns a cell's polygons for all placements at once.  Cells with
many references, or many polygons, are looked up in an R-tree.
"""

from __future__ import annotations

import heapq
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from latchscan.layout.file.hierarchy import cell_boxes, turned_box
from latchscan.layout.file.lookup import BoxLookup, boxes_meet
from latchscan.layout.file.outlines import BLOCK, vertex_rows
from latchscan.layout.file.placements import (
    Placements,
    array_inverses,
    array_ranges,
    identity,
    joined,
    split_by_child,
    turned,
    unrolled,
)
from latchscan.layout.file.tables import Pair, Tables
from latchscan.layout.model import Floats, Ints
from latchscan.layout.runs import offsets

MARGIN = 1.0
"""Rounding moves a vertex by at most half a database unit; boxes are widened by this."""


@dataclass(frozen=True, slots=True, eq=False)
class PolygonColumns:
    """Polygons as columns.

    Attributes
    ----------
    points
        (N, 2) vertices (x, y) [database units], counter-clockwise.
    first
        (n + 1,) offsets of the polygons in `points`.
    """

    points: Ints
    first: Ints

    def __len__(self) -> int:
        return len(self.first) - 1


class Walker:
    """Window queries on the hierarchy of one top cell for one set of layer pairs."""

    def __init__(self, tables: Tables, *, top: int, order: Ints, pairs: tuple[Pair, ...]) -> None:
        self._tables = tables
        self._top = top
        self._order = order
        self._pairs = pairs
        self._rank = np.empty(len(order), dtype=np.int64)
        self._rank[order] = np.arange(len(order))
        wanted = np.array([pair in set(pairs) for pair in tables.pairs], dtype=np.bool_)
        chosen = wanted[tables.polygon_pair]
        cells, references = cell_boxes(tables, order, chosen)
        self._polygons = BoxLookup(
            np.flatnonzero(chosen), tables.polygon_cell, tables.polygon_box, block=BLOCK
        )
        live = np.flatnonzero(references[:, 0] <= references[:, 2])
        self._references = BoxLookup(live, tables.reference_parent, references, block=1)
        self._base_box = np.zeros_like(references)
        self._base_box[live] = turned_box(
            cells[tables.reference_child[live]], tables.reference_matrix[live]
        ) + np.tile(tables.reference_origin[live], 2)
        self._inverse = array_inverses(tables)

    def window(self, box: tuple[float, float, float, float]) -> dict[Pair, PolygonColumns]:
        """Polygons whose bounding box meets the box (touching counts), unclipped."""
        return self.windows(np.array([box], dtype=np.float64))

    def windows(self, boxes: Floats) -> dict[Pair, PolygonColumns]:
        """The same for many boxes (k, 4) in one walk; what meets several comes several times."""
        wide = boxes + np.array([-MARGIN, -MARGIN, MARGIN, MARGIN])
        found = _Pieces(boxes)
        waiting: dict[int, list[Placements]] = {}
        heap: list[int] = []
        self._send(waiting, heap, self._top, identity(len(boxes)))
        while heap:
            cell = int(self._order[heapq.heappop(heap)])
            placements = joined(waiting.pop(cell))
            local = _local_boxes(wide[placements.window], placements)
            self._gather(cell, placements, local, found)
            self._descend(cell, placements, local, waiting, heap)
        number = {pair: index for index, pair in enumerate(self._tables.pairs)}
        return {pair: found.of_pair(number.get(pair, -1)) for pair in self._pairs}

    def _send(
        self, waiting: dict[int, list[Placements]], heap: list[int], cell: int, copies: Placements
    ) -> None:
        if cell not in waiting:
            waiting[cell] = []
            heapq.heappush(heap, int(self._rank[cell]))
        waiting[cell].append(copies)

    def _descend(
        self,
        cell: int,
        placements: Placements,
        local: Floats,
        waiting: dict[int, list[Placements]],
        heap: list[int],
    ) -> None:
        for copy, row in self._references.meeting(cell, local):
            low, count = array_ranges(
                local[copy],
                self._base_box[row],
                self._inverse[row],
                self._tables.reference_counts[row],
            )
            copies, rows = unrolled(self._tables, placements, copy, row, low, count)
            for child, part in split_by_child(self._tables, copies, rows):
                self._send(waiting, heap, child, part)

    def _gather(self, cell: int, placements: Placements, local: Floats, found: _Pieces) -> None:
        tables = self._tables
        for copy, row in self._polygons.meeting(cell, local):
            by_pair = np.argsort(tables.polygon_pair[row], kind="stable")
            chosen, copies = row[by_pair], copy[by_pair]
            matrix = placements.matrix[copies]
            mirrored = matrix[:, 0] * matrix[:, 3] - matrix[:, 1] * matrix[:, 2] < 0
            source, lengths = vertex_rows(tables.polygon_first, chosen, mirrored)
            owner = np.repeat(np.arange(len(chosen)), lengths)
            points = _placed(tables.polygon_points[source], matrix, placements.shift[copies], owner)
            window = placements.window[copies]
            found.add(points, lengths, tables.polygon_pair[chosen], window)


class _Pieces:
    """Polygons found so far, each piece sorted by pair and cleared of near misses."""

    def __init__(self, boxes: Floats) -> None:
        self._boxes = boxes
        self._pieces: list[tuple[Ints, Ints, Ints]] = []

    def add(self, points: Ints, lengths: Ints, pair: Ints, window: Ints) -> None:
        """Add polygons, those whose own box meets the box of their window."""
        first = offsets(lengths)
        inside = _meets(points, first, self._boxes[window])
        if not inside.all():
            rows = np.flatnonzero(inside)
            source, lengths = vertex_rows(first, rows, np.zeros(len(rows), dtype=np.bool_))
            points, pair = points[source], pair[rows]
        self._pieces.append((points, lengths, pair))

    def of_pair(self, pair: int) -> PolygonColumns:
        """All polygons of one pair."""
        points = [np.zeros((0, 2), np.int64)]
        lengths = [np.zeros(0, np.int64)]
        for piece_points, piece_lengths, piece_pair in self._pieces:
            low, high = np.searchsorted(piece_pair, (pair, pair + 1))
            if high > low:
                start = int(piece_lengths[:low].sum())
                stop = start + int(piece_lengths[low:high].sum())
                points.append(piece_points[start:stop])
                lengths.append(piece_lengths[low:high])
        return PolygonColumns(np.concatenate(points), offsets(np.concatenate(lengths)))


def _local_boxes(boxes: Floats, placements: Placements) -> Floats:
    """The box (k, 4) of each placement seen from inside it: (k, 4)."""
    a, b, c, d = placements.matrix.T
    determinant = a * d - b * c
    inverse = np.stack([d, -b, -c, a], axis=1) / determinant[:, None]
    shifted = boxes - np.tile(placements.shift, 2)
    return turned_box(shifted, inverse)


def _placed(points: Ints, matrix: Floats, shift: Floats, owner: Ints) -> Ints:
    """Vertices in the top's coordinates, rounded to the database grid (halves upwards)."""
    plain = (matrix == (1.0, 0.0, 0.0, 1.0)).all()
    if plain and not shift.any():
        return points.astype(np.int64)
    place = shift[owner]
    if not plain:
        place = place + turned(matrix[owner], points.astype(np.float64))
    else:
        place = place + points
    return np.floor(place + 0.5).astype(np.int64)


def _meets(points: Ints, first: Ints, boxes: Floats) -> NDArray[np.bool_]:
    """(n,) whether each polygon's bounding box meets its own of the boxes (n, 4)."""
    starts = first[:-1]
    if len(starts) == 0:
        return np.zeros(0, dtype=np.bool_)
    low = np.minimum.reduceat(points, starts, axis=0)
    high = np.maximum.reduceat(points, starts, axis=0)
    return boxes_meet(np.concatenate([low, high], axis=1).astype(np.float64), boxes)
