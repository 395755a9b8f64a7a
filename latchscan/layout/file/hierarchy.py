"""The reference graph of a layout: order, cycles, tops, bounding boxes, counts.

Everything here works on the tables without expanding an instance.
"""

from __future__ import annotations

from collections.abc import Sequence
from itertools import pairwise
from typing import Any

import numpy as np
import shapely
from numpy.typing import NDArray

from latchscan.errors import LayoutError
from latchscan.layout.file.tables import Tables
from latchscan.layout.model import Floats, Ints

Flags = NDArray[np.bool_]


def child_lists(tables: Tables) -> list[list[int]]:
    """For every cell its distinct children in file order."""
    children: list[dict[int, None]] = [{} for _ in tables.cell_names]
    edges = np.stack([tables.reference_parent, tables.reference_child], axis=1)
    for parent, child in np.unique(edges, axis=0).tolist():
        children[parent][child] = None
    return [list(row) for row in children]


def parents_first(tables: Tables, where: str) -> Ints:
    """Cells in an order in which every parent comes before its children.

    Raises
    ------
    LayoutError
        If cells refer to each other in a cycle; the message names its cells.
    """
    children = child_lists(tables)
    waiting = np.zeros(len(children), dtype=np.int64)
    for row in children:
        waiting[row] += 1
    order = np.flatnonzero(waiting == 0).tolist()
    for cell in order:  # grows while it is walked
        for child in children[cell]:
            waiting[child] -= 1
            if waiting[child] == 0:
                order.append(child)
    if len(order) < len(children):
        names = [tables.cell_names[cell] for cell in _cycle(children, waiting > 0)]
        raise LayoutError(f"{where}: cells refer to each other in a cycle: {_chain(names)}")
    return np.array(order, dtype=np.int64)


def _cycle(children: list[list[int]], tangled: Flags) -> list[int]:
    """One cycle among the cells that no order can place."""
    parent_of = {
        child: cell for cell in np.flatnonzero(tangled).tolist() for child in children[cell]
    }
    # every tangled cell has a tangled parent: walking upwards must come back to itself
    cell = int(np.flatnonzero(tangled)[0])
    seen: dict[int, int] = {}
    path: list[int] = []
    while cell not in seen:
        seen[cell] = len(path)
        path.append(cell)
        cell = parent_of[cell]
    loop = path[seen[cell] :][::-1]
    return [*loop, loop[0]]


def _chain(names: Sequence[str]) -> str:
    shown = list(names) if len(names) <= 12 else [*names[:6], "...", *names[-5:]]
    return " > ".join(shown)


def reachable(tables: Tables, top: int) -> Flags:
    """Which cells belong to the hierarchy of `top`."""
    children = child_lists(tables)
    found = np.zeros(len(children), dtype=np.bool_)
    found[top] = True
    stack = [top]
    while stack:
        for child in children[stack.pop()]:
            if not found[child]:
                found[child] = True
                stack.append(child)
    return found


def top_cells(tables: Tables) -> list[int]:
    """Cells that no other cell refers to, in file order."""
    is_top = np.ones(len(tables.cell_names), dtype=np.bool_)
    is_top[tables.reference_child] = False
    return [int(cell) for cell in np.flatnonzero(is_top)]


def turned_box(box: Floats, matrix: Floats) -> Floats:
    """(..., 4) bounding boxes of boxes (..., 4) under the matrices (..., 4)."""
    centre = (box[..., :2] + box[..., 2:]) / 2
    half = (box[..., 2:] - box[..., :2]) / 2
    a, b, c, d = np.moveaxis(matrix, -1, 0)
    x = a * centre[..., 0] + b * centre[..., 1]
    y = c * centre[..., 0] + d * centre[..., 1]
    dx = np.abs(a) * half[..., 0] + np.abs(b) * half[..., 1]
    dy = np.abs(c) * half[..., 0] + np.abs(d) * half[..., 1]
    return np.stack([x - dx, y - dy, x + dx, y + dy], axis=-1)


def array_spread(tables: Tables) -> Floats:
    """(r, 4) box of the offsets of each reference's instances from its first."""
    last = (tables.reference_counts - 1).astype(np.float64)
    first = tables.reference_vectors[:, :2] * last[:, :1]
    second = tables.reference_vectors[:, 2:] * last[:, 1:]
    low = np.minimum(first, 0) + np.minimum(second, 0)
    high = np.maximum(first, 0) + np.maximum(second, 0)
    return np.concatenate([low, high], axis=1)


def heights(tables: Tables, order: Ints) -> Ints:
    """For every cell the number of levels below it."""
    children = child_lists(tables)
    height = np.zeros(len(order), dtype=np.int64)
    for cell in order[::-1].tolist():
        if children[cell]:
            height[cell] = 1 + height[children[cell]].max()
    return height


def cell_boxes(tables: Tables, order: Ints, chosen: Flags) -> tuple[Floats, Floats]:
    """Bounding boxes of every cell's hierarchy and of every reference.

    Parameters
    ----------
    order
        Cells, parents first.
    chosen
        (n,) polygons that count.

    Returns
    -------
    cells, references
        (c, 4) and (r, 4) boxes [database units]; an empty cell has x0 > x1.  References
        turned by other than quarter turns have boxes that may be larger than needed.
    """
    empty = np.array([np.inf, np.inf, -np.inf, -np.inf])
    cells = np.tile(empty, (len(tables.cell_names), 1))
    rows = np.flatnonzero(chosen)
    owner = tables.polygon_cell[rows]
    # polygons of one cell are neighbours in the tables
    starts = np.flatnonzero(np.diff(owner, prepend=-1))
    for corner, best in ((0, np.minimum), (1, np.minimum), (2, np.maximum), (3, np.maximum)):
        if len(starts):
            side = tables.polygon_box[:, corner][rows]
            cells[owner[starts], corner] = best.reduceat(side, starts)
    references = np.tile(empty, (len(tables.reference_parent), 1))
    spread = array_spread(tables)
    height = heights(tables, order)
    parent_height = height[tables.reference_parent]
    by_height = np.argsort(parent_height, kind="stable")
    cuts = np.searchsorted(parent_height[by_height], np.arange(1, height.max(initial=0) + 2))
    for low, high in pairwise(cuts):
        rows = by_height[low:high]
        rows = rows[
            cells[tables.reference_child[rows], 0] <= cells[tables.reference_child[rows], 2]
        ]
        origin = np.tile(tables.reference_origin[rows], 2)
        child = cells[tables.reference_child[rows]]
        # magnified magnifications may run away; whoever uses the boxes checks their size
        with np.errstate(over="ignore", invalid="ignore"):
            placed = turned_box(child, tables.reference_matrix[rows]) + origin + spread[rows]
        references[rows] = placed
        np.minimum.at(cells[:, :2], tables.reference_parent[rows], placed[:, :2])
        np.maximum.at(cells[:, 2:], tables.reference_parent[rows], placed[:, 2:])
    return cells, references


def polygon_counts(tables: Tables, order: Ints, chosen: Flags) -> list[int]:
    """Polygons of every cell's hierarchy after expansion, without expanding."""
    own = np.bincount(tables.polygon_cell[chosen], minlength=len(tables.cell_names))
    totals = [int(count) for count in own]
    copies = instance_edges(tables)
    for cell in order[::-1].tolist():
        totals[cell] += sum(count * totals[child] for child, count in copies[cell].items())
    return totals


def instance_counts(tables: Tables, order: Ints, top: int) -> list[int]:
    """How often every cell occurs under `top` after expansion."""
    totals = [0] * len(tables.cell_names)
    totals[top] = 1
    copies = instance_edges(tables)
    for cell in order.tolist():
        if totals[cell]:
            for child, count in copies[cell].items():
                totals[child] += totals[cell] * count
    return totals


def instance_edges(tables: Tables) -> list[dict[int, int]]:
    """For every cell how many instances of each child it places."""
    edges: list[dict[int, int]] = [{} for _ in tables.cell_names]
    rows = zip(
        tables.reference_parent.tolist(),
        tables.reference_child.tolist(),
        tables.reference_counts.tolist(),
        strict=True,
    )
    for parent, child, (columns, rows_count) in rows:
        edges[parent][child] = edges[parent].get(child, 0) + columns * rows_count
    return edges


def exact_box(tables: Tables, order: Ints, top: int, chosen: Flags) -> Floats:
    """Tight bounding box (4,) of `top` where references are turned by any angle.

    Boxes of turned boxes are too large; convex hulls turn exactly.
    """
    hulls: dict[int, Floats] = {}
    used = reachable(tables, top)
    polygon_first = np.searchsorted(tables.polygon_cell, np.arange(len(used) + 1))
    reference_first = np.searchsorted(tables.reference_parent, np.arange(len(used) + 1))
    spread = array_spread(tables)
    for cell in order[::-1].tolist():
        if not used[cell]:
            continue
        rows = np.arange(polygon_first[cell], polygon_first[cell + 1])
        parts: list[NDArray[Any]] = [
            tables.polygon_points[tables.polygon_first[row] : tables.polygon_first[row + 1]]
            for row in rows[chosen[rows]]
        ]
        parts += [
            _placed_hull(tables, row, hulls[int(tables.reference_child[row])], spread)
            for row in range(reference_first[cell], reference_first[cell + 1])
        ]
        points = np.concatenate([np.zeros((0, 2)), *parts])
        hull = shapely.convex_hull(shapely.multipoints(points))
        hulls[cell] = shapely.get_coordinates(hull)
    corners = hulls[top]
    return np.concatenate([corners.min(axis=0), corners.max(axis=0)])


def _placed_hull(tables: Tables, row: int, hull: Floats, spread: Floats) -> Floats:
    turned = hull @ tables.reference_matrix[row].reshape(2, 2).T + tables.reference_origin[row]
    last = tables.reference_counts[row] - 1
    first = tables.reference_vectors[row, :2] * last[0]
    second = tables.reference_vectors[row, 2:] * last[1]
    corners = (np.zeros(2), first, second, first + second) if spread[row].any() else (np.zeros(2),)
    return np.concatenate([turned + corner for corner in corners])
