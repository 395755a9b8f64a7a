"""Direct solution of a grid's network, slab by slab.

In go a network and many right sides, out come the potentials.  The idea: cells that share
an interval of one axis are a slab, and slabs couple only to the next ones.  Eliminating
them in order takes dense matrices as wide as a slab, which for a grid some 100 lines wide
and hundreds of right sides is faster than any sparse factorisation.

References
----------
G. H. Golub, C. F. Van Loan, *Matrix Computations*, 4th ed., 2013, section 4.5.1 (block
tridiagonal systems) and section 2.1.4 (the contacts' border).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.linalg.lapack import dpotrf, dpotri
from scipy.sparse import csc_matrix

from latchscan.errors import ConvergenceError
from latchscan.fields.layered_network import Network

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class _Coupling:
    """Conductances between a slab's cells and the next slab's: one link a cell at most."""

    here: Ints
    there: Ints
    value: Floats


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class _Slabs:
    """Cells in the order of their slabs.

    Attributes
    ----------
    order
        (cells,) number of each cell in the network, slab by slab.
    first
        (slabs + 1,) offsets of the slabs into the order.
    inner
        Matrix of each slab's own cells.
    links
        What couples each slab to the next.
    """

    order: Ints
    first: Ints
    inner: tuple[Floats, ...]
    links: tuple[_Coupling, ...]

    def rows(self, index: int) -> Ints:
        """Numbers of a slab's cells."""
        return self.order[self.first[index] : self.first[index + 1]]

    @classmethod
    def of(cls, network: Network) -> _Slabs:
        """Cut the cells into slabs and collect what each couples."""
        order, first = _slab_order(network)
        place = np.empty(network.cells, dtype=np.int64)
        place[order] = np.arange(network.cells)
        entries = network.matrix[: network.cells, : network.cells].tocoo()
        row, column, value = place[entries.row], place[entries.col], entries.data
        slab = np.repeat(np.arange(len(first) - 1), np.diff(first))
        step = slab[column] - slab[row]
        inner, links = [], []
        for own, kept in ((True, step == 0), (False, step == 1)):
            chosen = np.flatnonzero(kept)
            chosen = chosen[np.argsort(slab[row[chosen]], kind="stable")]
            ends = np.searchsorted(slab[row[chosen]], np.arange(len(first)))
            for index in range(len(first) - 1):
                part = chosen[ends[index] : ends[index + 1]]
                here = row[part] - first[index]
                if own:
                    matrix = np.zeros((first[index + 1] - first[index],) * 2)
                    matrix[here, column[part] - first[index]] = value[part]
                    inner.append(matrix)
                else:
                    there = column[part] - first[index + 1] if len(part) else part
                    links.append(_Coupling(here=here, there=there, value=-value[part]))
        return cls(order=order, first=first, inner=tuple(inner), links=tuple(links))


def solve_network(network: Network, right: csc_matrix) -> Floats:
    """Potentials of a network for currents forced into it.

    Parameters
    ----------
    network
        The network; its matrix is symmetric and every cell is tied to potential 0 somehow.
    right
        (unknowns, r) currents forced into cells and contacts [A]; fastest with the columns
        in the order of `elimination_order`.

    Returns
    -------
    ndarray
        (unknowns, r) potentials [V].

    Raises
    ------
    ConvergenceError
        Where equations have no solution.
    """
    cells = network.cells
    slabs = _Slabs.of(network)
    border = network.matrix[:cells, cells:]
    shift = border.toarray(order="C")
    answer = right.toarray(order="C")
    _eliminate(slabs, ((answer[:cells], right[:cells]), (shift, border)))
    across = border.T.tocsr()
    own = network.matrix[cells:, cells:].toarray() - across @ shift
    try:
        contacts = np.linalg.solve(own, answer[cells:] - across @ answer[:cells])
    except np.linalg.LinAlgError:
        raise ConvergenceError("substrate sheet: the contacts have no solution") from None
    for rows in _row_blocks(cells):
        answer[rows] -= shift[rows] @ contacts
    answer[cells:] = contacts
    return np.asarray(answer, dtype=np.float64)


def elimination_order(network: Network, right: csc_matrix) -> Ints:
    """Order of the columns in which the elimination leaves out most zeros."""
    order = _slab_order(network)[0]
    place = np.full(right.shape[0], len(order), dtype=np.int64)
    place[order] = np.arange(len(order))
    return np.argsort(_first_rows(right, place), kind="stable")


def _slab_order(network: Network) -> tuple[Ints, Ints]:
    """Cells slab by slab, cut along the axis with more lines, and the slabs' offsets."""
    number = network.number
    slabs = number if number.shape[0] >= number.shape[1] else number.T
    real = slabs >= 0
    first = np.concatenate([[0], np.cumsum(np.count_nonzero(real, axis=1))])
    return slabs[real], first.astype(np.int64)


def _first_rows(right: csc_matrix, place: Ints) -> Ints:
    """Place of the first entry of each column."""
    result = np.zeros(right.shape[1], dtype=np.int64)
    filled = np.diff(right.indptr) > 0
    result[filled] = np.minimum.reduceat(place[right.indices], right.indptr[:-1][filled])
    return result


def _row_blocks(rows: int) -> list[slice]:
    """Slices of rows whose products stay in the cache."""
    return [slice(start, min(start + 256, rows)) for start in range(0, rows, 256)]


def _eliminate(slabs: _Slabs, fields: tuple[tuple[Floats, csc_matrix], ...]) -> None:
    """Replace currents (cells, r) by potentials in place, every contact at 0."""
    place = np.empty(slabs.first[-1], dtype=np.int64)
    place[slabs.order] = np.arange(len(slabs.order))
    active = []
    for _, right in fields:
        # up to the last column that has begun, columns hold something besides 0
        begun = np.searchsorted(slabs.first, _first_rows(right, place), side="right") - 1
        last = np.zeros(len(slabs.links), dtype=np.int64)
        np.maximum.at(last, begun, np.arange(1, len(begun) + 1))
        active.append(np.maximum.accumulate(last))
    inverses: list[Floats] = []
    for index, matrix in enumerate(slabs.inner):
        rows = slabs.rows(index)
        if index > 0:
            link, above = slabs.links[index - 1], slabs.rows(index - 1)
            own, other = rows[link.there], above[link.here]
            matrix[np.ix_(link.there, link.there)] -= (
                link.value[:, None] * inverses[-1][np.ix_(link.here, link.here)] * link.value
            )
            for (field, _), width in zip(fields, active, strict=True):
                seen = width[index - 1]
                field[own, :seen] += link.value[:, None] * field[other, :seen]
        inverses.append(_inverse(matrix))
        for (field, _), width in zip(fields, active, strict=True):
            field[rows, : width[index]] = inverses[-1] @ field[rows, : width[index]]
    for index in range(len(slabs.inner) - 2, -1, -1):
        link = slabs.links[index]
        back = inverses[index][:, link.here] * link.value
        below = slabs.rows(index + 1)[link.there]
        for field, _ in fields:
            field[slabs.rows(index)] += back @ field[below]


def _inverse(matrix: Floats) -> Floats:
    """Inverse of a symmetric positive definite matrix, by Cholesky's factors."""
    if len(matrix) == 0:
        return matrix
    factor, failed = dpotrf(matrix, lower=1)
    inverse, failed_too = dpotri(factor, lower=1)
    if failed or failed_too:
        raise ConvergenceError("substrate sheet: a slab of the grid has no solution")
    # only the lower triangle comes back
    lower = np.tril(inverse, -1)
    result = lower + lower.T
    np.fill_diagonal(result, np.diagonal(inverse))
    return np.asarray(result, dtype=np.float64)
