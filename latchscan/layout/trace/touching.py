"""Which boxes touch: candidates out of grids of bins, thousands at once.

Boxes of one set are told apart by their shape: small, large, lying and standing ones each have
a grid of their own whose cells suit them.  Two kinds meet in the coarser of both grids along
each axis, so that a long thin wire is in few cells and yet has few others beside it there.

Where shapes that touch are one, a rectangle that covers a cell touches all that is in it, and
may stand for it: shapes stacked on one another by the thousand make no more pairs than shapes.
"""

from __future__ import annotations

from collections.abc import Iterator

import numpy as np
from numpy.typing import NDArray

from latchscan.layout.model import Ints
from latchscan.layout.runs import within_runs

LONG = 4
"""A box is lying or standing if one side is more than so many times the other."""
LARGE = 16
"""A box is large if a side is more than so many times the usual one of its set."""
ENTRIES = 4
"""Cells that a box may lie in on average."""
FEW = 20_000
"""Pairs that are compared one by one without any grid."""
CROWD = 64
"""Candidates a box beyond which finer cells are tried."""
FINER = 5
"""How often cells may be halved then."""
CHUNK = 1 << 21
"""Candidates compared at once, to bound the memory."""

Cells = tuple[Ints, Ints]
"""Cells, sorted, and the box in each, by its place in the kind."""
Pairs = tuple[Ints, Ints]
"""Rows of both partners."""


class BoxSet:
    """Boxes of one kind of shape in a tile, ready to be asked which of them touch what.

    Parameters
    ----------
    boxes
        (n, 4) x0, y0, x1, y1 of all elements of the tile [grid steps].
    rows
        Those of `boxes` that belong to the set.
    tile
        Box that all of them meet; what they do outside it needs no cell.
    plain
        (rows,) whether each fills its box, which only rectangles do; None where all do.
    """

    def __init__(
        self, boxes: Ints, rows: Ints, tile: Ints, plain: NDArray[np.bool_] | None = None
    ) -> None:
        self.boxes = boxes
        chosen = boxes[rows]
        low = np.maximum(chosen[:, :2], tile[:2]) - tile[:2]
        high = np.minimum(chosen[:, 2:], tile[2:]) - tile[:2]
        full = np.ones(len(rows), dtype=np.bool_) if plain is None else plain
        self.kinds = [
            _Kind(rows[which], low[which], high[which], full[which])
            for which in _by_shape(high - low)
        ]


class _Kind:
    """Boxes of like shape, and the cells they lie in by the size of the cells."""

    def __init__(self, rows: Ints, low: Ints, high: Ints, full: NDArray[np.bool_]) -> None:
        self.rows = rows
        self._full = full
        self._low = low
        self._high = high
        self._cells: dict[tuple[int, int], Cells] = {}
        self._leading: dict[tuple[int, int], tuple[Cells, Pairs]] = {}
        middle = np.median(high - low, axis=0)
        kx, ky = (int(np.ceil(np.log2(2.0 * side + 1.0))) for side in middle.tolist())
        while self._spans((kx, ky)).prod(axis=1).sum() > ENTRIES * len(rows) + 1024:
            kx, ky = kx + 1, ky + 1
        self.size = (kx, ky)

    def _spans(self, size: tuple[int, int]) -> Ints:
        shift = np.array(size)
        return np.asarray((self._high >> shift) - (self._low >> shift) + 1)

    def bears(self, size: tuple[int, int]) -> bool:
        """Whether the boxes lie in no more cells than memory bears."""
        entries = int(self._spans(size).prod(axis=1).sum())
        return entries <= CROWD * len(self.rows) + 1024

    def cells(self, size: tuple[int, int]) -> Cells:
        """Cell and row of every box in every cell it touches, sorted by cell."""
        if size not in self._cells:
            span = self._spans(size)
            total = span[:, 0] * span[:, 1]
            begin = self._low >> np.array(size)
            if (total == 1).all():
                row, cell = np.arange(len(total)), (begin[:, 0] << 32) + begin[:, 1]
            else:
                row = np.repeat(np.arange(len(total)), total)
                across, up = np.divmod(within_runs(total), span[row, 1])
                cell = ((begin[row, 0] + across) << 32) + begin[row, 1] + up
            order = np.argsort(cell, kind="stable")
            self._cells[size] = (cell[order], row[order])
        return self._cells[size]

    def leading(self, size: tuple[int, int]) -> tuple[Cells, Pairs]:
        """The same, of covered cells only a box that covers them, and its pairs with the rest."""
        if size not in self._leading:
            cell, row = self.cells(size)
            cover = self._covering(size, cell, row)
            covered, first = np.unique(cell[cover], return_index=True)
            lead = cover[first]
            if not len(lead):
                self._leading[size] = ((cell, row), (lead, lead))
                return self._leading[size]
            place = np.searchsorted(covered, cell)
            beneath = np.zeros(len(cell), dtype=np.bool_)
            inside = place < len(covered)
            beneath[inside] = covered[place[inside]] == cell[inside]
            star = (row[lead[place[beneath]]], row[beneath])
            kept = ~beneath
            kept[lead] = True
            self._leading[size] = ((cell[kept], row[kept]), star)
        return self._leading[size]

    def _covering(self, size: tuple[int, int], cell: Ints, row: Ints) -> Ints:
        """Places in `cell` and `row` where the box covers all of the cell that any box reaches."""
        ends = self._low.min(axis=0), self._high.max(axis=0)
        could = self._full.copy()
        for axis in (0, 1):
            # what is smaller than a cell covers one at most where the outermost boxes end
            low, high = self._low[:, axis], self._high[:, axis]
            could &= (
                (high - low >= 1 << size[axis]) | (low == ends[0][axis]) | (high == ends[1][axis])
            )
        entry = np.flatnonzero(could[row])
        covers = np.ones(len(entry), dtype=np.bool_)
        for axis, place in ((0, cell[entry] >> 32), (1, cell[entry] & 0xFFFFFFFF)):
            begin = place << size[axis]
            end = np.minimum(begin + (1 << size[axis]), ends[1][axis])
            covers &= self._low[row[entry], axis] <= np.maximum(begin, ends[0][axis])
            covers &= self._high[row[entry], axis] >= end
        return entry[covers]


def _by_shape(sides: Ints) -> Iterator[Ints]:
    """Rows of the lying, the standing, the large and the other boxes, as far as there are any."""
    if not len(sides):
        return
    lying = sides[:, 0] > LONG * sides[:, 1]
    standing = sides[:, 1] > LONG * sides[:, 0]
    other = np.flatnonzero(~lying & ~standing)
    longest = sides[other].max(axis=1)
    large = longest > LARGE * np.median(longest) if len(other) else np.zeros(0, dtype=np.bool_)
    for rows in (np.flatnonzero(lying), np.flatnonzero(standing), other[large], other[~large]):
        if len(rows):
            yield rows


def touching_between(one: BoxSet, other: BoxSet) -> Pairs:
    """Rows of `one` and of `other` whose boxes have a point in common; a pair may come again."""
    return _joined(
        [pair for a in one.kinds for b in other.kinds for pair in _between(one.boxes, a, b)]
    )


def joining_between(one: BoxSet, other: BoxSet) -> Iterator[Pairs]:
    """Pairs, in parts, that join `one` and `other` as far as all that touch do.

    Of boxes of one set that are joined anyway, some may stand for others.
    """
    for a in one.kinds:
        for b in other.kinds:
            yield from _between(one.boxes, a, b, led=True)


def joining_within(one: BoxSet) -> Iterator[Pairs]:
    """Pairs, in parts, that join the boxes of one set as far as all that touch do."""
    for index, kind in enumerate(one.kinds):
        yield from _within(one.boxes, kind)
        for later in one.kinds[index + 1 :]:
            yield from _between(one.boxes, kind, later, led=True)


def _joined(found: list[Pairs]) -> Pairs:
    if not found:
        none = np.zeros(0, dtype=np.int64)
        return none, none
    first, second = zip(*found, strict=True)
    return np.concatenate(first), np.concatenate(second)


def _between(boxes: Ints, one: _Kind, other: _Kind, *, led: bool = False) -> Iterator[Pairs]:
    if len(one.rows) * len(other.rows) <= FEW:
        first = np.repeat(one.rows, len(other.rows))
        yield _meeting(boxes, first, np.tile(other.rows, len(one.rows)))
        return
    size = (max(one.size[0], other.size[0]), max(one.size[1], other.size[1]))
    if led:
        size = _led_size(one, other, size)
        (cell, row), (other_cell, other_row) = one.leading(size)[0], other.leading(size)[0]
    else:
        (cell, row), (other_cell, other_row) = one.cells(size), other.cells(size)
    low = np.searchsorted(other_cell, cell, side="left")
    high = np.searchsorted(other_cell, cell, side="right")
    yield from _expanded(boxes, one.rows[row], other.rows[other_row], low, high)


def _led_size(one: _Kind, other: _Kind, size: tuple[int, int]) -> tuple[int, int]:
    """Size of cells: a finer one where so many boxes share cells that some may cover them."""
    crowd = CROWD * (len(one.rows) + len(other.rows))
    best, least = size, _candidates(one.leading(size)[0], other.leading(size)[0])
    for _ in range(FINER):
        size = (max(0, size[0] - 1), max(0, size[1] - 1))
        if least <= crowd or not (one.bears(size) and other.bears(size)):
            break
        count = _candidates(one.leading(size)[0], other.leading(size)[0])
        if count < least:
            best, least = size, count
    return best


def _candidates(one: Cells, other: Cells) -> int:
    low = np.searchsorted(other[0], one[0], side="left")
    return int((np.searchsorted(other[0], one[0], side="right") - low).sum())


def _within(boxes: Ints, kind: _Kind) -> Iterator[Pairs]:
    count = len(kind.rows)
    if count * count <= FEW:
        first, second = np.triu_indices(count, 1)
        yield _meeting(boxes, kind.rows[first], kind.rows[second])
        return
    size = _led_size(kind, kind, kind.size)
    (cell, row), (lead, beneath) = kind.leading(size)
    yield kind.rows[lead], kind.rows[beneath]
    rows = kind.rows[row]
    high = np.searchsorted(cell, cell, side="right")
    yield from _expanded(boxes, rows, rows, np.arange(1, len(rows) + 1), high)


def _expanded(boxes: Ints, row: Ints, other: Ints, low: Ints, high: Ints) -> Iterator[Pairs]:
    """Pairs of row[i] and other[low[i]:high[i]] that touch, in parts of bounded size."""
    real = np.flatnonzero(high > low)
    row, low, count = row[real], low[real], (high - low)[real]
    ends = np.cumsum(count)
    start = 0
    while start < len(row):
        done = ends[start - 1] if start else 0
        stop = max(start + 1, int(np.searchsorted(ends, done + CHUNK, side="right")))
        part = count[start:stop]
        first = np.repeat(row[start:stop], part)
        second = other[np.repeat(low[start:stop], part) + within_runs(part)]
        yield _meeting(boxes, first, second)
        start = stop


def _meeting(boxes: Ints, first: Ints, second: Ints) -> Pairs:
    one, two = boxes[first], boxes[second]
    meets = (
        (one[:, 0] <= two[:, 2])
        & (two[:, 0] <= one[:, 2])
        & (one[:, 1] <= two[:, 3])
        & (two[:, 1] <= one[:, 3])
    )
    return first[meets], second[meets]
