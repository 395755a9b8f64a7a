"""The network of a thin sheet with holes and contacts on a graded grid.

In go rectangles and grid lines, out comes a sparse matrix of conductances.  The idea: a cell
holds as much sheet as the rectangles leave of it, and two cells conduct over that part of
their common edge which sheet covers on both sides, so holes need not follow the grid.

References
----------
S. V. Patankar, *Numerical Heat Transfer and Fluid Flow*, 1980, chapter 4 (finite volumes).
"""

from __future__ import annotations

from bisect import bisect_left
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.sparse import coo_matrix, csc_matrix

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

_LEAK_SHARE = 1e-9
"""Conductance to 0 of a cell's sheet, over that of a square: keeps floating parts solvable."""
_METAL = 1e4
"""Conductance between a contact and a grid cell that it covers, over the sheet's."""
LEAST_STEP_UM = 0.02
"""Edges closer than this share one grid line."""
_LEAST_SHARE = 1e-4
_LEAST_WAY = 1e-3


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class GridLines:
    """Grid lines along x and y, and the block that each interval belongs to.

    Attributes
    ----------
    x, y
        Ascending coordinates [um].
    block_x, block_y
        One index an interval, ascending from 0.
    """

    x: Floats
    y: Floats
    block_x: Ints
    block_y: Ints


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class SheetOnBulk:
    """A sheet, its holes and its contacts.

    Attributes
    ----------
    conductance_s
        Conductance of a square of the sheet [S].
    sheet, holes
        (n, 4) disjoint rectangles of the sheet, and of the holes in it [um].
    contacts, contact
        (c, 4) rectangles and (c,) the contact of each.
    series_ohm
        (k,) resistance between each contact and potential 0 [ohm].
    patches, patch_contact
        (p, 4) rectangles through which contacts pass current into the conductor apart from
        the sheet around them, and (p,) the contact of each.
    """

    conductance_s: float
    sheet: Floats
    holes: Floats
    contacts: Floats
    contact: Ints
    series_ohm: Floats
    patches: Floats
    patch_contact: Ints


def grow_lines(
    low: float, high: float, inner: tuple[float, float], step: float, growth: float
) -> Floats:
    """Lines from `low` to `high`: `step` apart within `inner`, farther apart beyond."""
    count = max(int(np.ceil((inner[1] - inner[0]) / step)), 1)
    middle = np.linspace(inner[0], inner[1], count + 1)
    before = _outwards(inner[0] - low, step, growth)
    after = _outwards(high - inner[1], step, growth)
    return np.concatenate([inner[0] - before[::-1], middle, inner[1] + after])


def _outwards(reach: float, step: float, growth: float) -> Floats:
    if reach <= 1e-9:
        return np.zeros(0)
    count = max(
        int(np.ceil(np.log1p(reach * (growth - 1.0) / (growth * step)) / np.log(growth))), 1
    )
    steps = np.cumsum(growth ** np.arange(1, count + 1))
    return np.asarray(steps * (reach / steps[-1]), dtype=np.float64)


def fit_lines(lines: Floats, edges: Floats) -> Floats:
    """Lines that hold every edge: the nearest line moves onto it, or the edge is added.

    A line moves where it is free and the edge within a third of its step; the first and the
    last line stay, and edges outside them or closer than `LEAST_STEP_UM` to a line that an
    earlier edge took are left out.
    """
    fitted = lines.tolist()
    taken = {fitted[0], fitted[-1]}
    for edge in edges.tolist():
        index = bisect_left(fitted, edge)
        if index in {0, len(fitted)} or min(abs(edge - held) for held in taken) < LEAST_STEP_UM:
            continue
        low, high = fitted[index - 1], fitted[index]
        nearest = index - 1 if edge - low < high - edge else index
        if abs(fitted[nearest] - edge) < (high - low) / 3.0 and fitted[nearest] not in taken:
            fitted[nearest] = edge
        else:
            fitted.insert(index, edge)
        taken.add(edge)
    return np.asarray(fitted, dtype=np.float64)


def block_intervals(lines: Floats, inner: tuple[float, float], least: float, growth: float) -> Ints:
    """Join intervals to blocks about `least` wide, wider in proportion to the distance."""
    middle = (lines[1:] + lines[:-1]) / 2.0
    away = np.maximum(np.maximum(inner[0] - middle, middle - inner[1]), 0.0)
    # a block index that advances by the interval's share of the block wanted there
    share = np.diff(lines) / np.maximum(least, growth * away)
    place = np.floor(np.cumsum(share) - share / 2.0 + 1e-9).astype(np.int64)
    _, index = np.unique(place, return_inverse=True)
    return index.astype(np.int64)


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Network:
    """The sheet's equations: grid cells that hold some sheet, then contacts."""

    matrix: csc_matrix
    number: Ints
    """(nx, ny) unknown of each grid cell, -1 without sheet."""
    area: Floats
    """(cells,) area of sheet in each cell [um2]."""
    rim: NDArray[np.bool_]
    cells: int

    @classmethod
    def of(cls, problem: SheetOnBulk, lines: GridLines) -> Network:
        """Build the network of a sheet on a grid."""
        dx, dy = np.diff(lines.x), np.diff(lines.y)
        metal_area = _covered(problem.contacts, lines)
        whole = _covered(problem.sheet, lines) - _covered(problem.holes, lines)
        size = dx[:, None] * dy[None, :]
        real = whole > _LEAST_SHARE * size
        number = np.full(real.shape, -1, dtype=np.int64)
        cells = int(real.sum())
        number[real] = np.arange(cells)
        links = [
            _links(number, problem, lines, metal_area / size, axis=0),
            _links(number, problem, lines, metal_area / size, axis=1),
            _metal(number, problem, lines, metal_area / size),
        ]
        first, second, value = (np.concatenate(column) for column in zip(*links, strict=True))
        ground = np.zeros(cells + len(problem.series_ohm))
        ground[:cells] = _LEAK_SHARE * problem.conductance_s * (whole / size)[real]
        least_ohm = 1e-3 / problem.conductance_s * 1e-3
        ground[cells:] = 1.0 / np.maximum(problem.series_ohm, least_ohm)
        edge = np.zeros(real.shape, dtype=bool)
        edge[[0, -1]] = edge[:, [0, -1]] = True
        return cls(
            matrix=_laplacian(first, second, value, ground),
            number=number,
            area=whole[real],
            rim=np.concatenate([edge[real], np.zeros(len(problem.series_ohm), dtype=bool)]),
            cells=cells,
        )


def _laplacian(first: Ints, second: Ints, value: Floats, ground: Floats) -> csc_matrix:
    rows = np.concatenate([first, second, np.arange(len(ground))])
    columns = np.concatenate([second, first, np.arange(len(ground))])
    diagonal = (
        ground + np.bincount(first, value, len(ground)) + np.bincount(second, value, len(ground))
    )
    values = np.concatenate([-value, -value, diagonal])
    return coo_matrix((values, (rows, columns)), shape=(len(ground),) * 2).tocsc()


def _overlaps(low: Floats, high: Floats, cuts: Floats) -> Floats:
    """Length of each interval [low, high] within each interval of cuts, (n, cells)."""
    return np.asarray(
        np.maximum(
            np.minimum(high[:, None], cuts[None, 1:]) - np.maximum(low[:, None], cuts[None, :-1]),
            0.0,
        ),
        dtype=np.float64,
    )


def _covered(boxes: Floats, lines: GridLines) -> Floats:
    """Area that disjoint rectangles cover of each grid cell, (nx, ny)."""
    along = _overlaps(boxes[:, 0], boxes[:, 2], lines.x)
    return np.asarray(along.T @ _overlaps(boxes[:, 1], boxes[:, 3], lines.y), dtype=np.float64)


def _open_lengths(boxes: Floats, lines: GridLines, axis: int, *, below: bool) -> Floats:
    """Length of each inner grid edge that rectangles cover just below or above it."""
    cuts, other = (lines.x, lines.y) if axis == 0 else (lines.y, lines.x)
    at = cuts[1:-1][None, :]
    low, high = boxes[:, axis][:, None], boxes[:, axis + 2][:, None]
    tiny = 1e-6
    place = at - tiny if below else at + tiny
    crosses = ((low < place) & (place < high)).astype(np.float64)
    along = _overlaps(boxes[:, 1 - axis], boxes[:, 3 - axis], other)
    return np.asarray(crosses.T @ along, dtype=np.float64)


def _links(
    number: Ints, problem: SheetOnBulk, lines: GridLines, metal: Floats, axis: int
) -> tuple[Ints, Ints, Floats]:
    """Conductances between neighbours along an axis: only what sheet joins conducts.

    The way through a cell is as long as metal leaves it: a covered share is no way at all.
    """
    sides = [
        _open_lengths(problem.sheet, lines, axis, below=below)
        - _open_lengths(problem.holes, lines, axis, below=below)
        for below in (True, False)
    ]
    length = np.minimum(*sides)
    cuts = lines.x if axis == 0 else lines.y
    grid, covered = (number, metal) if axis == 0 else (number.T, metal.T)
    way = np.diff(cuts)[:, None] / 2.0 * np.maximum(1.0 - covered, _LEAST_WAY)
    apart = way[:-1] + way[1:]
    first, second = grid[:-1], grid[1:]
    real = (first >= 0) & (second >= 0) & (length > 1e-6)
    value = problem.conductance_s * length / apart
    return first[real], second[real], value[real]


def _metal(
    number: Ints, problem: SheetOnBulk, lines: GridLines, share: Floats
) -> tuple[Ints, Ints, Floats]:
    """Conductances between contacts and the cells they cover.

    A cell covered by the share c has its middle about (1 - c) / 4 sides away from metal.
    """
    cells = int(number.max()) + 1
    box, i, j = _cells_met(lines, problem.contacts)
    real = number[i, j] >= 0
    part = np.minimum(share[i, j][real], 1.0)
    near = 4.0 * part / np.maximum(1.0 - part, 4.0 / _METAL)
    return number[i, j][real], cells + problem.contact[box[real]], problem.conductance_s * near


def cell_weights(
    network: Network, lines: GridLines, boxes: Floats, owner: Ints, count: int
) -> csc_matrix:
    """(unknowns, count) share of each owner's area in every grid cell with sheet."""
    box, i, j = _cells_met(lines, boxes)
    part = _overlap(boxes[box, 0], boxes[box, 2], lines.x, i)
    part *= _overlap(boxes[box, 1], boxes[box, 3], lines.y, j)
    number = network.number[i, j]
    inside = (number >= 0) & (part > 0.0)
    whose = owner[box[inside]]
    total = np.bincount(whose, part[inside], count)
    shape = (network.matrix.shape[0], count)
    return coo_matrix((part[inside] / total[whose], (number[inside], whose)), shape=shape).tocsc()


def _cells_met(lines: GridLines, boxes: Floats) -> tuple[Ints, Ints, Ints]:
    """Pairs of a rectangle and a grid cell (i, j) that it meets."""
    spans = [_spans(cuts, boxes[:, i], boxes[:, i + 2]) for i, cuts in ((0, lines.x), (1, lines.y))]
    wide, tall = (last - first for first, last in spans)
    count = wide * tall
    box = np.repeat(np.arange(len(boxes)), count)
    within = np.arange(len(box)) - np.repeat(np.cumsum(count) - count, count)
    return box, spans[0][0][box] + within // tall[box], spans[1][0][box] + within % tall[box]


def _spans(cuts: Floats, low: Floats, high: Floats) -> tuple[Ints, Ints]:
    """First cell that each interval meets, and one past its last."""
    first = np.searchsorted(cuts, low + 1e-6, side="right") - 1
    last = np.searchsorted(cuts, high - 1e-6, side="left")
    first = np.clip(first, 0, len(cuts) - 2)
    return first, np.clip(last, first, len(cuts) - 1)


def _overlap(low: Floats, high: Floats, cuts: Floats, cell: Ints) -> Floats:
    """Length of interval i within cell i."""
    ends = np.minimum(high, cuts[cell + 1]) - np.maximum(low, cuts[cell])
    return np.asarray(np.maximum(ends, 0.0), dtype=np.float64)
