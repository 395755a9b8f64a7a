"""Largest potential over a source's own polygon.

In go a `SheetSolution`; out comes the largest potential of every source over itself.  The
one idea: the boundary's part of the potential is harmonic, hence smooth, so nine points of
each rectangle carry it; the part of the source alone is a closed form and is taken on a fine
raster.
"""

from __future__ import annotations

import numpy as np

from latchscan.fields.sheet import SheetSolution
from latchscan.fields.sheet_kernels import Floats, Ints, Pieces, exact_area_means
from latchscan.fields.sheet_quadrature import GAUSS, split_rectangles

_RASTER = np.linspace(-1.0, 1.0, 9)


def largest_potentials(solution: SheetSolution) -> Floats:
    """(c, n) largest potential over each polygon source for 1 A into it [V per A].

    Notes
    -----
    A rectangle is sampled on 9 x 9 points for every four squares of its length, so the value is
    below the true maximum, by about half a percent at most.  Other shapes are
    sampled at their vertices, the middles of their edges and inside them.
    """
    sources = solution.sources
    pieces = sources.pieces()
    rectangle = pieces.rectangle
    points, piece, boundary = _rectangles(solution, pieces, np.flatnonzero(rectangle))
    more, other = _samples(pieces, np.flatnonzero(~rectangle))
    if len(other):
        part = solution.own_potentials(more, sources.domain[other], sources.owner[other])
        points = np.concatenate([points, more])
        piece = np.concatenate([piece, other])
        boundary = np.concatenate([boundary, part], axis=1)
    value = boundary + _direct(solution, pieces, points, piece)
    peak = np.full((len(value), sources.count), -np.inf)
    for case in range(len(value)):
        np.maximum.at(peak[case], sources.owner[piece], value[case])
    return peak


def _rectangles(
    solution: SheetSolution, pieces: Pieces, index: Ints
) -> tuple[Floats, Ints, Floats]:
    """Raster points, their pieces and the boundary's part there, interpolated."""
    sources = solution.sources
    centre, half, piece = split_rectangles(pieces, index)
    grid = np.stack(np.meshgrid(GAUSS, GAUSS, indexing="ij"), -1).reshape(-1, 2)
    nodes = centre[:, None, :] + half[:, None, :] * grid
    owner = np.repeat(piece, len(grid))
    flat = solution.own_potentials(
        nodes.reshape(-1, 2), sources.domain[owner], sources.owner[owner]
    )
    part = flat.reshape(len(flat), len(centre), len(GAUSS), len(GAUSS))
    lagrange = _lagrange()
    fine = np.einsum("ia,jb,cqab->cqij", lagrange, lagrange, part, optimize=True)
    raster = np.stack(np.meshgrid(_RASTER, _RASTER, indexing="ij"), -1).reshape(-1, 2)
    points = (centre[:, None, :] + half[:, None, :] * raster).reshape(-1, 2)
    return points, np.repeat(piece, len(raster)), fine.reshape(len(part), len(points))


def _lagrange() -> Floats:
    """(9, 3) values on the raster of the polynomials that are 1 at one Gauss point."""
    columns = []
    for k in range(3):
        others = np.delete(GAUSS, k)
        columns.append(
            (_RASTER - others[0])
            * (_RASTER - others[1])
            / ((GAUSS[k] - others[0]) * (GAUSS[k] - others[1]))
        )
    return np.stack(columns, axis=1)


def _samples(pieces: Pieces, index: Ints) -> tuple[Floats, Ints]:
    """Points in and on pieces of any shape: vertices, edge middles, and between those."""
    if len(index) == 0:
        return np.empty((0, 2)), np.empty(0, dtype=np.int64)
    chosen = pieces.take(index)
    vertex = chosen.edges.start
    middle = chosen.edges.middle
    owner = np.repeat(np.arange(len(index)), np.diff(chosen.first))
    # a point a little inside an edge lies in the piece whatever its shape
    inward = (
        middle
        - 0.25
        * np.minimum(chosen.edges.length, chosen.area[owner] / chosen.edges.length)[:, None]
        * chosen.edges.outward
    )
    return np.concatenate([vertex, middle, inward]), np.tile(index[owner], 3)


def _direct(solution: SheetSolution, pieces: Pieces, points: Floats, piece: Ints) -> Floats:
    """Part of the potential that the source alone makes, from its pieces in this domain."""
    sources, boundary = solution.sources, solution.boundary
    result = np.zeros(len(points))
    for step in range(int(np.bincount(sources.owner).max())):
        for sign in (1, -1) if step else (1,):
            other = piece + sign * step
            valid = (other >= 0) & (other < len(sources.owner))
            other = np.where(valid, other, 0)
            valid &= sources.owner[other] == sources.owner[piece]
            valid &= sources.domain[other] == sources.domain[piece]
            chosen = np.flatnonzero(valid)
            if len(chosen) == 0:
                continue
            mean, _ = exact_area_means(points[chosen], pieces, other[chosen])
            result[chosen] -= sources.weight[other[chosen]] * (mean - boundary.log_reach)
    full = 2 * np.pi * boundary.share[sources.domain[piece]] * boundary.unit_s
    return result / full
