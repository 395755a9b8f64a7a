"""Number of squares between the terminals of a uniform conducting sheet of any shape.

In: the lines of a tensor grid, which of its cells are sheet, and which of its nodes each
terminal holds.  Out: the resistance between every two terminals for a sheet resistance of
1 ohm per square.  The one idea: with unknowns on the nodes a terminal may be a line as well as
an area, and a bar with lines on its edges comes out exact; `graded_lines` puts the nodes where
corners need them and leaves long straight stretches coarse.

The five-point formula, each link with the conductances of the half cells on either side of it
(any text on finite differences).
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray
from scipy.sparse import coo_matrix, csc_matrix, csr_matrix, diags
from scipy.sparse.csgraph import connected_components
from scipy.sparse.linalg import splu

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]
Flags = NDArray[np.bool_]

GROWTH = 1.3
"""Ratio of neighbouring grid cells away from an edge."""


def graded_lines(edges: Floats, finest: float) -> Floats:
    """Grid lines on all edges, `finest` apart beside them and growing towards the middle.

    Parameters
    ----------
    edges
        (n,) places of edges in any order, repetitions allowed [um].
    finest
        Width of the cell beside an edge, above 0 [um].

    Returns
    -------
    Floats
        (m,) ascending lines that contain the edges.

    Examples
    --------
    >>> graded_lines(np.array([0.0, 4.6]), 1.0).round(6).tolist()
    [0.0, 1.0, 2.3, 3.6, 4.6]
    """
    places = np.unique(edges)
    inner = [
        low + (high - low) * _graded_shares((high - low) / finest)[1:-1]
        for low, high in zip(places[:-1].tolist(), places[1:].tolist(), strict=True)
    ]
    return np.asarray(np.sort(np.concatenate([places, *inner])), dtype=np.float64)


def _graded_shares(length: float) -> Floats:
    """Places in 0..1 of cells that grow from 1 at both ends of a stretch of `length`."""
    half: list[float] = []
    width, reached = 1.0, 0.0
    while reached + width / 2 < length / 2:
        half.append(width)
        reached += width
        width *= GROWTH
    if not half:
        return np.array([0.0, 1.0])
    widths = np.array([*half, *half[::-1]])
    return np.concatenate([[0.0], np.cumsum(widths) / widths.sum()])


def squares_between(x_um: Floats, y_um: Floats, sheet: Flags, terminals: list[Flags]) -> Floats:
    """Squares between every two terminals, the others floating.

    Parameters
    ----------
    x_um, y_um
        (nx,), (ny,) ascending grid lines [um].
    sheet
        (ny - 1, nx - 1) which cells conduct, rows are y.
    terminals
        Of t terminals the (ny, nx) nodes that each holds at one potential.

    Returns
    -------
    Floats
        (t, t) resistance for 1 ohm per square, 0 on the diagonal, inf where nothing conducts
        between two terminals, NaN where a terminal holds no node of the sheet.
    """
    one, other, conductance, used = _conductances(x_um, y_um, sheet)
    count = len(terminals)
    owner = np.arange(count, count + used.size)
    for number, nodes in enumerate(terminals):
        owner[nodes.ravel() & used.ravel()] = number
    present = [bool(np.any(nodes & used)) for nodes in terminals]
    # terminals first, so that their numbers are their rows
    names = np.unique(np.concatenate([np.arange(count), owner[used.ravel()]]))
    number_of = np.full(used.size + count, -1, dtype=np.int64)
    number_of[names] = np.arange(len(names))
    rows, columns = number_of[owner[one]], number_of[owner[other]]
    kept = rows != columns
    rows, columns, conductance = rows[kept], columns[kept], conductance[kept]
    size = len(names)
    graph = coo_matrix((conductance, (rows, columns)), shape=(size, size)).tocsr()
    _, island = connected_components(graph, directed=False)
    squares = np.full((count, count), np.inf)
    for label in np.unique(island[:count]).tolist():
        members = np.flatnonzero(island[:count] == label)
        if len(members) > 1:
            squares[np.ix_(members, members)] = _island(graph, island == label, members)
    squares[~np.array(present), :] = np.nan
    squares[:, ~np.array(present)] = np.nan
    np.fill_diagonal(squares, 0.0)
    return squares


def _conductances(x_um: Floats, y_um: Floats, sheet: Flags) -> tuple[Ints, Ints, Floats, Flags]:
    """Links between nodes (one, other, conductance) and the (ny, nx) nodes of the sheet."""
    dx, dy = np.diff(x_um), np.diff(y_um)
    ny, nx = len(y_um), len(x_um)
    across = np.zeros((ny, nx - 1))
    across[:-1] += sheet * dy[:, np.newaxis] / 2
    across[1:] += sheet * dy[:, np.newaxis] / 2
    across /= dx
    along = np.zeros((ny - 1, nx))
    along[:, :-1] += sheet * dx / 2
    along[:, 1:] += sheet * dx / 2
    along /= dy[:, np.newaxis]
    node = np.arange(ny * nx).reshape(ny, nx)
    flat, upright = across > 0, along > 0
    one = np.concatenate([node[:, :-1][flat], node[:-1][upright]])
    other = np.concatenate([node[:, 1:][flat], node[1:][upright]])
    used = np.zeros((ny, nx), dtype=np.bool_)
    used.ravel()[one] = True
    used.ravel()[other] = True
    return one, other, np.concatenate([across[flat], along[upright]]), used


def _island(graph: csr_matrix, chosen: Flags, members: Ints) -> Floats:
    """(k, k) resistances between the terminals `members` of one connected island."""
    part = graph[chosen][:, chosen]
    part = part + part.T
    matrix = csc_matrix(diags(np.asarray(part.sum(axis=1)).ravel()) - part)
    place = np.cumsum(chosen)[members] - 1
    ground = int(place[-1])
    free = np.delete(np.arange(matrix.shape[0]), ground)
    factor = splu(
        matrix[free][:, free], permc_spec="MMD_AT_PLUS_A", options={"SymmetricMode": True}
    )
    # nodes beyond the grounded one have moved up by one
    rows = place[:-1] - (place[:-1] > ground)
    sources = np.zeros((len(free), len(rows)))
    sources[rows, np.arange(len(rows))] = 1.0
    potential = np.zeros((len(members), len(members)))
    potential[:-1, :-1] = np.asarray(factor.solve(sources))[rows]
    own = np.diag(potential)
    found = own[:, np.newaxis] + own - 2.0 * potential
    return np.asarray((found + found.T) / 2, dtype=np.float64)
