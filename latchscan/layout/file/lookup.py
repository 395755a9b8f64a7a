"""Which boxes of a cell meet a window: by comparison for few, by an R-tree for many.

Polygons of a large flat cell share tree entries in blocks of neighbours (the tables are in
such an order), which keeps the tree small enough to be built in a moment even for a million
polygons.
"""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray
from rtree.index import Index

from latchscan.layout.file.outlines import narrowed
from latchscan.layout.model import Floats, Ints

INDEX_FROM = 512
"""Cells with more references, or more polygons, than this get an R-tree."""
CHUNK = 1 << 18
"""Most (window, row) pairs compared at once, to bound the memory."""


class BoxLookup:
    """Boxes grouped by the cell they belong to, looked up by windows in local coordinates."""

    def __init__(self, rows: Ints, owner: Ints, boxes: Floats | Ints, *, block: int) -> None:
        # rows of one cell are neighbours in the tables already
        self._rows = narrowed(rows)
        cells = owner[rows]
        starts = np.flatnonzero(np.diff(cells, prepend=-1))
        ends = np.append(starts, len(rows))[1:]
        self._span = {
            cell: (low, high)
            for cell, low, high in zip(
                cells[starts].tolist(), starts.tolist(), ends.tolist(), strict=True
            )
        }
        self._boxes = boxes
        self._block = block
        self._trees: dict[int, tuple[Ints, Index]] = {}

    def meeting(self, cell: int, local: Floats) -> list[tuple[Ints, Ints]]:
        """(window, row) index pairs whose boxes meet, in parts of bounded size."""
        if cell not in self._span:
            return []
        low, high = self._span[cell]
        if high - low > INDEX_FROM:
            return self._from_tree(cell, local)
        rows = self._rows[low:high]
        boxes = self._boxes[rows]
        step = max(1, CHUNK // len(rows))
        found = []
        for start in range(0, len(local), step):
            copy, hit = np.nonzero(boxes_meet(local[start : start + step, None], boxes[None]))
            if len(copy):
                found.append((copy + start, rows[hit]))
        return found

    def _from_tree(self, cell: int, local: Floats) -> list[tuple[Ints, Ints]]:
        if cell not in self._trees:
            self._trees[cell] = self._plant(cell)
        rows, tree = self._trees[cell]
        found = []
        step = max(1, CHUNK // len(rows))
        for start in range(0, len(local), step):
            part = local[start : start + step]
            # rtree leaves this method untyped
            ask: Any = tree.intersection_v
            ids, counts = ask(part[:, :2].copy(), part[:, 2:].copy())
            copy = np.repeat(np.arange(len(part)), counts.astype(np.int64))
            hit = np.asarray(ids, dtype=np.int64)
            if self._block > 1:
                copy = np.repeat(copy, self._block)
                hit = (hit[:, None] * self._block + np.arange(self._block)).reshape(-1)
                real = hit < len(rows)
                copy, hit = copy[real], hit[real]
            near = boxes_meet(part[copy], self._boxes[rows[hit]])
            copy, hit = copy[near], hit[near]
            # the tree's own order is an accident of its build
            order = np.lexsort((rows[hit], copy))
            if len(order):
                found.append((copy[order] + start, rows[hit[order]]))
        return found

    def _plant(self, cell: int) -> tuple[Ints, Index]:
        low, high = self._span[cell]
        rows = self._rows[low:high]
        starts = np.arange(0, len(rows), self._block)
        # a side at a time: copies of all boxes of a large cell would be large themselves
        sides = [
            best.reduceat(self._boxes[:, side][rows], starts).astype(np.float64)
            for side, best in enumerate((np.minimum, np.minimum, np.maximum, np.maximum))
        ]
        ids = np.arange(len(starts), dtype=np.int64)
        return rows, Index((ids, np.column_stack(sides[:2]), np.column_stack(sides[2:])))


def boxes_meet(left: Floats | Ints, right: Floats | Ints) -> NDArray[np.bool_]:
    """Whether boxes (..., 4) meet; touching counts."""
    return (
        (left[..., 0] <= right[..., 2])
        & (right[..., 0] <= left[..., 2])
        & (left[..., 1] <= right[..., 3])
        & (right[..., 1] <= left[..., 3])
    )
