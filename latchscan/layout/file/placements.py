"""Placements of cells: the transforms by which copies of a cell come to lie in the top.

A placement is x' = a x + b y + s, y' = c x + d y + t, kept as columns: (k, 4) matrices and
(k, 2) shifts in database units.  Regular arrays are unrolled here and nowhere else.
"""

from __future__ import annotations

from collections.abc import Collection
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from latchscan.errors import LayoutError
from latchscan.layout.file.hierarchy import child_lists, turned_box
from latchscan.layout.file.tables import Pair, Tables
from latchscan.layout.model import Floats, Ints
from latchscan.layout.runs import within_runs

LARGEST_PART = 2.0e7
"""Most instances of one cell's children that are unrolled at once."""


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Placements:
    """Copies of one cell: (k, 4) matrices a, b, c, d and (k, 2) shifts.

    `window` (k,) tells for which of the windows that are asked together a copy stands.
    """

    matrix: Floats
    shift: Floats
    window: Ints

    def __len__(self) -> int:
        return len(self.shift)

    def take(self, rows: Ints) -> Placements:
        """Some of the copies."""
        return Placements(
            matrix=self.matrix[rows], shift=self.shift[rows], window=self.window[rows]
        )


def identity(windows: int = 1) -> Placements:
    """One copy exactly where it is for each of some windows."""
    return Placements(
        matrix=np.tile([[1.0, 0.0, 0.0, 1.0]], (windows, 1)),
        shift=np.zeros((windows, 2)),
        window=np.arange(windows),
    )


def joined(parts: list[Placements]) -> Placements:
    """Several columns of placements as one."""
    if len(parts) == 1:
        return parts[0]
    return Placements(
        matrix=np.concatenate([part.matrix for part in parts]),
        shift=np.concatenate([part.shift for part in parts]),
        window=np.concatenate([part.window for part in parts]),
    )


def _product(outer: Floats, inner: Floats) -> Floats:
    """Matrices outer * inner, row by row."""
    a, b, c, d = outer.T
    e, f, g, h = inner.T
    return np.stack([a * e + b * g, a * f + b * h, c * e + d * g, c * f + d * h], axis=1)


def turned(matrix: Floats, points: Floats) -> Floats:
    """Points (n, 2) under matrices (n, 4), row by row."""
    a, b, c, d = matrix.T
    x, y = points.T
    return np.stack([a * x + b * y, c * x + d * y], axis=1)


def unrolled(
    tables: Tables, outer: Placements, copy: Ints, row: Ints, low: Ints, count: Ints
) -> tuple[Placements, Ints]:
    """Placements of the children of references, some part of each array.

    Parameters
    ----------
    outer
        Placements of the parent cell.
    copy, row
        (m,) pairs of a placement of the parent and a reference in it.
    low, count
        (m, 2) first (column, row) of the array and how many of each.

    Returns
    -------
    placements, rows
        One placement for each instance, and the reference it comes from.

    Raises
    ------
    LayoutError
        If they are more than fit.
    """
    total = count[:, 0] * count[:, 1]
    if total.sum(dtype=np.float64) > LARGEST_PART:
        raise LayoutError(
            f"cell {tables.cell_names[tables.reference_child[row[0]]]!r} and others of its level"
            f" stand more than {LARGEST_PART:.0e} times in one window"
        )
    source = np.repeat(np.arange(len(row)), total)
    within = within_runs(total)
    line_count = count[source, 1]
    column = low[source, 0] + within // line_count
    line = low[source, 1] + within % line_count
    copy, row = copy[source], row[source]
    vectors = tables.reference_vectors[row]
    place = (
        tables.reference_origin[row]
        + column[:, None] * vectors[:, :2]
        + line[:, None] * vectors[:, 2:]
    )
    matrix = outer.matrix[copy]
    copies = Placements(
        matrix=_product(matrix, tables.reference_matrix[row]),
        shift=turned(matrix, place) + outer.shift[copy],
        window=outer.window[copy],
    )
    return copies, row


def split_by_child(tables: Tables, copies: Placements, rows: Ints) -> list[tuple[int, Placements]]:
    """Sort placements by the cell they place."""
    if len(rows) == 0:
        return []
    child = tables.reference_child[rows]
    by_child = np.argsort(child, kind="stable")
    names, starts = np.unique(child[by_child], return_index=True)
    return [
        (name, copies.take(part))
        for name, part in zip(names.tolist(), np.split(by_child, starts[1:]), strict=True)
    ]


def all_placements(
    tables: Tables, *, top: int, order: Ints, cells: Collection[int]
) -> dict[int, Placements]:
    """Every copy of the given cells under `top`, arrays unrolled."""
    on_the_way = _ancestors(tables, order, cells)
    first = np.searchsorted(tables.reference_parent, np.arange(len(order) + 1))
    waiting: dict[int, list[Placements]] = {top: [identity()]}
    found: dict[int, Placements] = {}
    for cell in order.tolist():
        if cell not in waiting:
            continue
        copies = joined(waiting.pop(cell))
        if cell in cells:
            found[cell] = copies
        rows = np.arange(first[cell], first[cell + 1])
        rows = rows[on_the_way[tables.reference_child[rows]]]
        if len(rows) == 0:
            continue
        copy = np.repeat(np.arange(len(copies)), len(rows))
        rows = np.tile(rows, len(copies))
        low = np.zeros((len(rows), 2), dtype=np.int64)
        placed, rows = unrolled(tables, copies, copy, rows, low, tables.reference_counts[rows])
        for child, part in split_by_child(tables, placed, rows):
            waiting.setdefault(child, []).append(part)
    return found


def placed_texts(
    tables: Tables, order: Ints, top: int, pairs: Collection[Pair]
) -> tuple[Floats, Floats, Ints]:
    """Every copy of the texts on some pairs under `top`: x, y [database units] and its row.

    Sorted by (y, x, text, pair); positions are whole numbers.
    """
    wanted = np.array([pair in pairs for pair in tables.pairs], dtype=np.bool_)
    rows = np.flatnonzero(wanted[tables.label_pair])
    rows = rows[np.argsort(tables.label_cell[rows], kind="stable")]
    cell = tables.label_cell[rows]
    placements = all_placements(tables, top=top, order=order, cells=set(cell.tolist()))
    parts = [placements[number] for number in sorted(placements)]
    copies = joined([*parts, identity(0)])
    # copies of one cell are neighbours, and so are its texts: all copies of each text
    count = np.zeros(len(order), dtype=np.int64)
    count[sorted(placements)] = [len(part) for part in parts]
    before = np.cumsum(count) - count
    source = np.repeat(rows, count[cell])
    copy = np.repeat(before[cell], count[cell]) + within_runs(count[cell])
    places = turned(copies.matrix[copy], tables.label_points[source].astype(np.float64))
    x, y = np.floor(places + copies.shift[copy] + 0.5).T
    texts = tables.label_texts
    rank_of = {
        text: rank for rank, text in enumerate(sorted({texts[row] for row in rows.tolist()}))
    }
    rank = np.zeros(len(texts), dtype=np.int64)
    rank[rows] = [rank_of[texts[row]] for row in rows.tolist()]
    by_place = np.lexsort((tables.label_pair[source], rank[source], x, y))
    return x[by_place], y[by_place], source[by_place]


def _ancestors(tables: Tables, order: Ints, cells: Collection[int]) -> NDArray[np.bool_]:
    """The cells themselves and all that lead to them."""
    children = child_lists(tables)
    marked = np.zeros(len(order), dtype=np.bool_)
    marked[list(cells)] = True
    for cell in order[::-1].tolist():
        marked[cell] |= bool(marked[children[cell]].any())
    return marked


def array_inverses(tables: Tables) -> Floats:
    """(r, 4) matrices that turn an offset into a (column, row) position in the array."""
    first = tables.reference_vectors[:, :2].copy()
    second = tables.reference_vectors[:, 2:].copy()
    one_column = tables.reference_counts[:, 0] == 1
    one_row = tables.reference_counts[:, 1] == 1
    # an absent direction gets a vector square to the other so that the inverse exists
    first[one_column & one_row] = (1.0, 0.0)
    only_first = one_row
    second[only_first] = np.stack([-first[only_first, 1], first[only_first, 0]], axis=1)
    only_second = one_column & ~one_row
    first[only_second] = np.stack([second[only_second, 1], -second[only_second, 0]], axis=1)
    determinant = first[:, 0] * second[:, 1] - first[:, 1] * second[:, 0]
    return (
        np.stack([second[:, 1], -second[:, 0], -first[:, 1], first[:, 0]], axis=1)
        / determinant[:, None]
    )


def array_ranges(local: Floats, base: Floats, inverse: Floats, counts: Ints) -> tuple[Ints, Ints]:
    """First (column, row) and their numbers for the instances that can meet the box."""
    span = np.concatenate([local[:, :2] - base[:, 2:], local[:, 2:] - base[:, :2]], axis=1)
    reach = turned_box(span, inverse)
    low = np.clip(np.ceil(reach[:, :2] - 1e-9), 0, counts)
    high = np.clip(np.floor(reach[:, 2:] + 1e-9), -1, counts - 1)
    single = counts == 1
    low = np.where(single, 0, low).astype(np.int64)
    high = np.where(single, 0, high).astype(np.int64)
    return low, np.maximum(high - low + 1, 0)
