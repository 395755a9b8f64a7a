"""A thin sheet with holes on top of a layered conductor, on a graded grid.

In go rectangles of the sheet, of its contacts and of sources; out come potentials per ampere
and the currents that pass from the sheet into the conductor.  The idea: the sheet is a
sparse network on a grid that is fine at the core and grows outwards; current passes into
the conductor through far fewer blocks of grid cells, whose dense answer is the layered
kernel's.

References
----------
D. W. Peaceman, "Interpretation of well-block pressures in numerical reservoir simulation",
Soc. Pet. Eng. J. 18, 183, 1978 (a grid cell acts as a disk of 0.1985 of its side).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.sparse import coo_matrix, csc_matrix, csr_matrix, hstack

from latchscan.errors import ConvergenceError
from latchscan.fields.layered import LayeredKernel
from latchscan.fields.layered_elimination import elimination_order, solve_network
from latchscan.fields.layered_network import GridLines, Network, SheetOnBulk, cell_weights
from latchscan.fields.rectangles import mean_log_within

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

_CELL_RADIUS = 0.1985
_BALANCE = 1e-6


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class SheetPotentials:
    """Answer of sheet and conductor together, for 1 A into each source (s).

    Attributes
    ----------
    mean_ohm
        (r, s) mean potential over every receiver.
    peak_ohm
        (s,) largest potential of the source's own grid cells.
    change_ohm
        (s,) change of the mean over the source itself with fewer blocks.
    rim_ohm
        (s,) largest difference of a potential on the grid's rim from that beyond it: what
        would drive current there.
    block_boxes, block_current, level
        (b, 4), (b, s) and (s,): rectangles, currents into the conductor [A], and the free
        constant of a conductor with insulated bottom [ohm].
    """

    mean_ohm: Floats
    peak_ohm: Floats
    change_ohm: Floats
    rim_ohm: Floats
    block_boxes: Floats
    block_current: Floats
    level: Floats


def solve_on_bulk(
    problem: SheetOnBulk,
    kernel: LayeredKernel,
    lines: GridLines,
    sources: tuple[Floats, Ints, int],
    receivers: tuple[Floats, Ints, int],
) -> SheetPotentials:
    """Potentials for 1 A spread evenly over each source in the sheet.

    Parameters
    ----------
    problem, kernel, lines
        Sheet, conductor and grid.
    sources, receivers
        (rectangles (m, 4), owner of each (m,), number of owners); the sources are the
        first receivers.

    Raises
    ------
    ConvergenceError
        Where an equation is left unsatisfied.

    Notes
    -----
    K is the sheet's network, Q spreads a block's current over its cells, G is the kernel's
    answer between blocks.  With w the currents into the conductor:
    ``K phi = e - Q w`` and ``Q^T phi = G w + level``.  A part of the sheet without contact
    is tied to 0 by a conductance far below every other.
    """
    network = Network.of(problem, lines)
    spread, boxes = _blocks(network, lines, problem)
    forced = cell_weights(network, lines, *sources)
    heard = cell_weights(network, lines, *receivers)
    count, width = forced.shape[1], len(boxes)
    # all patches of a contact share one column
    column, first = _distinct(problem, width)
    shared = spread[:, first]
    right = hstack([forced, shared]).tocsc()
    order = elimination_order(network, right)
    answer = solve_network(network, right[:, order])
    both = np.empty((shared.shape[1], len(order)))
    both[:, order] = shared.T.tocsr() @ answer
    bulk = kernel.between(boxes, boxes)
    matrix, seen = _agreement(
        both[:, count:][np.ix_(column, column)] + bulk, both[column, :count], kernel.floating
    )
    current = _solved(matrix, seen)
    joint = _joining(network, lines, len(matrix))
    fewer = joint @ _solved(joint.T @ matrix @ joint, joint.T @ seen)
    # one current a distinct column, below the sources' own: potentials are answer @ driven
    change = _summed(column, (current - fewer)[:width])
    driven = np.concatenate([np.eye(count), -_summed(column, current[:width])])[order]
    mean = (heard.T.tocsr() @ answer) @ driven
    own = np.einsum("bi,bi->i", both[:, :count], change)
    mean[np.arange(count), np.arange(count)] += _self_terms(network, lines, sources, forced) / (
        2.0 * np.pi * problem.conductance_s
    )
    return SheetPotentials(
        mean_ohm=mean,
        peak_ohm=_peaks(forced, answer, driven),
        change_ohm=np.abs(own),
        rim_ohm=_rim_spread(network, answer, driven, floating=kernel.floating),
        block_boxes=boxes,
        block_current=current[:width],
        level=current[width] if kernel.floating else np.zeros(count),
    )


def _distinct(problem: SheetOnBulk, width: int) -> tuple[Ints, Ints]:
    """For each of `width` blocks its column among the distinct ones, and these ones."""
    blocks = width - len(problem.patch_contact)
    key = np.concatenate([np.arange(blocks), blocks + problem.patch_contact])
    _, first, column = np.unique(key, return_index=True, return_inverse=True)
    return column.astype(np.int64), first.astype(np.int64)


def _summed(column: Ints, current: Floats) -> Floats:
    """Currents of all blocks that share a column, added up."""
    member = csr_matrix((np.ones(len(column)), (column, np.arange(len(column)))))
    return np.asarray(member @ current, dtype=np.float64)


def _rim_spread(network: Network, answer: Floats, driven: Floats, *, floating: bool) -> Floats:
    """Largest difference of the grid's rim from what lies beyond; 0 without a rim.

    Far away a conductor with contacted bottom is at 0; another takes on the rim's mean.
    """
    if not network.rim.any():
        return np.zeros(driven.shape[1])
    potential = answer[network.rim] @ driven
    beyond = potential.mean(axis=0) if floating else 0.0
    return np.asarray(np.abs(potential - beyond).max(axis=0), dtype=np.float64)


def _peaks(forced: csc_matrix, answer: Floats, driven: Floats) -> Floats:
    """Largest potential of the grid cells that each source covers."""
    cell, source = forced.nonzero()
    value = np.einsum("ib,bi->i", answer[cell], driven[:, source])
    peak = np.full(forced.shape[1], -np.inf)
    np.maximum.at(peak, source, value)
    return peak


def _blocks(network: Network, lines: GridLines, problem: SheetOnBulk) -> tuple[csc_matrix, Floats]:
    """How every block's current spreads over the unknowns, and each block's rectangle.

    A block that sheet covers in part becomes the rectangle with the same first and second
    moments.  The contacts' rectangles are blocks of their own.
    """
    real = network.number >= 0
    key = (lines.block_x[:, None] * (lines.block_y[-1] + 1) + lines.block_y[None, :])[real]
    _, block = np.unique(key, return_inverse=True)
    count, area = int(block.max()) + 1, network.area
    total = np.bincount(block, area, count)
    boxes = np.empty((count, 4))
    for axis, cuts in ((0, lines.x), (1, lines.y)):
        middle, side = (cuts[1:] + cuts[:-1]) / 2.0, np.diff(cuts)
        place = np.nonzero(real)[axis]
        mean = np.bincount(block, area * middle[place], count) / total
        square = np.bincount(block, area * (middle[place] ** 2 + side[place] ** 2 / 12.0), count)
        half = np.sqrt(3.0 * np.maximum(square / total - mean**2, 1e-6))
        boxes[:, axis], boxes[:, axis + 2] = mean - half, mean + half
    patch = np.arange(len(problem.patches))
    rows = np.concatenate([np.arange(network.cells), network.cells + problem.patch_contact])
    columns = np.concatenate([block, count + patch])
    values = np.concatenate([area / total[block], np.ones(len(patch))])
    shape = (network.matrix.shape[0], count + len(patch))
    spread = coo_matrix((values, (rows, columns)), shape=shape).tocsc()
    return spread, np.concatenate([boxes, problem.patches])


def _joining(network: Network, lines: GridLines, size: int) -> Floats:
    """Matrix (size, fewer) that joins blocks two by two along each axis."""
    real = network.number >= 0
    key = (lines.block_x[:, None] * (lines.block_y[-1] + 1) + lines.block_y[None, :])[real]
    unique, block = np.unique(key, return_inverse=True)
    across = lines.block_y[-1] + 1
    pair = (unique // across // 2) * across + (unique % across) // 2
    _, group = np.unique(pair, return_inverse=True)
    area = np.bincount(block, network.area)
    count, joint = len(unique), int(group.max()) + 1
    matrix = np.zeros((size, size - count + joint))
    matrix[np.arange(count), group] = area / np.bincount(group, area)[group]
    rest = np.arange(size - count)
    matrix[count + rest, joint + rest] = 1.0
    return matrix


def _self_terms(
    network: Network, lines: GridLines, sources: tuple[Floats, Ints, int], forced: csc_matrix
) -> Floats:
    """What the grid leaves out of each source's own potential, times 2 pi conductance.

    The potential of a current in a sheet falls as ln r; the grid spreads the current over
    whole cells, each of which acts as a disk (Peaceman).  The difference of both sums of
    ln r is local and hence the same wherever the source lies.
    """
    boxes, owner, count = sources
    place = np.nonzero(network.number >= 0)
    side_x, side_y = np.diff(lines.x)[place[0]], np.diff(lines.y)[place[1]]
    x = ((lines.x[1:] + lines.x[:-1]) / 2.0)[place[0]]
    y = ((lines.y[1:] + lines.y[:-1]) / 2.0)[place[1]]
    result = np.zeros(count)
    for index in range(count):
        entries = slice(forced.indptr[index], forced.indptr[index + 1])
        cells, weight = forced.indices[entries], forced.data[entries]
        if len(cells) == 0:
            continue
        apart = np.hypot(x[cells][:, None] - x[cells], y[cells][:, None] - y[cells])
        np.fill_diagonal(apart, _CELL_RADIUS * np.sqrt(side_x[cells] * side_y[cells]))
        grid_mean = float(weight @ np.log(apart) @ weight)
        result[index] = grid_mean - mean_log_within(boxes[owner == index])
    return result


def _agreement(both: Floats, seen: Floats, floating: bool) -> tuple[Floats, Floats]:
    """Equations of the blocks' currents, with the free constant where there is one."""
    if not floating:
        return both, seen
    width = len(both)
    matrix = np.zeros((width + 1, width + 1))
    matrix[:width, :width] = both
    matrix[:width, width] = matrix[width, :width] = 1.0
    return matrix, np.concatenate([seen, np.zeros((1, seen.shape[1]))])


def _solved(matrix: Floats, right: Floats) -> Floats:
    try:
        solution = np.asarray(np.linalg.solve(matrix, right), dtype=np.float64)
    except np.linalg.LinAlgError:
        raise ConvergenceError("substrate sheet: equations without solution") from None
    worst = float(np.abs(matrix @ solution - right).max() / max(np.abs(right).max(), 1e-300))
    if not worst < _BALANCE:
        raise ConvergenceError(
            f"substrate sheet: residual {worst:.1e}; expected below {_BALANCE:.0e}"
        )
    return solution
