"""Which boxes of a cell meet a window: by comparison for few, by an R-tree for many.

Polygons of a large flat cell share tree entries in blocks of neighbours, which keeps the
tree small enough to be built in a moment even for a million polygons.
"""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray
from rtree.index import Index

from latchscan.layout.model import Floats, Ints

INDEX_FROM = 512
"""Cells with more references, or more polygons, than this get an R-tree."""
BLOCK = 64
"""Polygons of a large cell that share one entry of its R-tree."""
CHUNK = 1 << 18
"""Most (window, row) pairs compared at once, to bound the memory."""


class BoxLookup:
    """Boxes grouped by the cell they belong to, looked up by windows in local coordinates."""

    def __init__(self, rows: Ints, owner: Ints, boxes: Floats, *, spatial: bool) -> None:
        # rows of one cell are neighbours in the tables already
        self._rows = rows
        cells, starts = np.unique(owner[rows], return_index=True)
        ends = np.append(starts, len(rows))[1:]
        self._span = {
            cell: (low, high)
            for cell, low, high in zip(cells.tolist(), starts.tolist(), ends.tolist(), strict=True)
        }
        self._boxes = boxes
        self._block = BLOCK if spatial else 1
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
        boxes = self._boxes[rows]
        if self._block > 1:
            rows = rows[_strip_order(boxes, self._block)]
            starts = np.arange(0, len(rows), self._block)
            boxes = self._boxes[rows]
            boxes = np.concatenate(
                [
                    np.minimum.reduceat(boxes[:, :2], starts, axis=0),
                    np.maximum.reduceat(boxes[:, 2:], starts, axis=0),
                ],
                axis=1,
            )
        ids = np.arange(len(boxes), dtype=np.int64)
        return rows, Index((ids, boxes[:, :2].copy(), boxes[:, 2:].copy()))


def _strip_order(boxes: Floats, block: int) -> Ints:
    """Order by strips so that runs of `block` boxes stay close together."""
    centre = (boxes[:, :2] + boxes[:, 2:]) / 2
    by_x = np.argsort(centre[:, 0], kind="stable")
    strips = max(1, int(np.sqrt(len(boxes) / block)))
    strip = np.empty(len(boxes), dtype=np.int64)
    strip[by_x] = np.arange(len(boxes)) * strips // len(boxes)
    return np.lexsort((centre[:, 1], strip))


def boxes_meet(left: Floats, right: Floats) -> NDArray[np.bool_]:
    """Whether boxes (..., 4) meet; touching counts."""
    return (
        (left[..., 0] <= right[..., 2])
        & (right[..., 0] <= left[..., 2])
        & (left[..., 1] <= right[..., 3])
        & (right[..., 1] <= left[..., 3])
    )
