"""Means over polygon pieces: their outlines, their points, and means between two of them.

In go `Pieces`; out come boxes for the panelling, points for sampling, and the matrix of
means of ln r between pieces.  Source: Gauss-Legendre rule with 3 points; the 7-point
triangle rule of degree 5 of Radon (1948), as tabulated by Stroud, *Approximate Calculation
of Multiple Integrals*, 1971.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from latchscan.fields.sheet_kernels import Floats, Ints, Pieces, exact_area_means
from latchscan.fields.sheet_rectangles import rectangle_pair_means

GAUSS = np.array([-np.sqrt(0.6), 0.0, np.sqrt(0.6)])
NEAR_PAIR_REACHES = 1.5
LONGEST_ASPECT = 4.0
MOST_PARTS = 24


def outlines(pieces: Pieces) -> tuple[Floats, Floats]:
    """Boxes that together line every piece, and the width of the piece each belongs to.

    A rectangle is its own box; anything else is lined by a box an edge, so that the hole of a
    ring or the notch of an L does not count as inside.

    Returns
    -------
    box, width
        (b, 4) x0, y0, x1, y1 [um] and (b,) 4 area / perimeter, at most the smaller side [um].
    """
    if len(pieces.area) == 0:
        return np.empty((0, 4)), np.empty(0)
    begin, count = pieces.first[:-1], np.diff(pieces.first)
    start = pieces.edges.start
    end = start + pieces.edges.length[:, None] * pieces.edges.along
    low, high = pieces.low, pieces.high
    width = 4 * pieces.area / np.add.reduceat(pieces.edges.length, begin)
    width = np.minimum(width, (high - low).min(axis=1))
    whole = pieces.rectangle
    lined = np.repeat(~whole, count)
    boxes = np.concatenate([low[whole], np.minimum(start, end)[lined]])
    tops = np.concatenate([high[whole], np.maximum(start, end)[lined]])
    widths = np.concatenate([width[whole], np.repeat(width, count)[lined]])
    return np.concatenate([boxes, tops], axis=1), widths


def split_rectangles(pieces: Pieces, index: Ints) -> tuple[Floats, Floats, Ints]:
    """Rectangles cut across their long side until none is longer than twice its width.

    Returns
    -------
    centre, half, piece
        (q, 2) centres and half sides [um], (q,) the piece each belongs to.
    """
    low, high = pieces.low[index], pieces.high[index]
    side = high - low
    across = np.argmin(side, axis=1)
    longest, shortest = side.max(axis=1), side.min(axis=1)
    parts = np.ceil(longest / (LONGEST_ASPECT * shortest) - 1e-9).astype(np.int64)
    parts = np.clip(parts, 1, MOST_PARTS)
    owner = np.repeat(np.arange(len(index)), parts)
    offset = np.concatenate([[0], np.cumsum(parts)[:-1]])
    position = np.arange(len(owner)) - offset[owner]
    along = 1 - across[owner]
    rows = np.arange(len(owner))
    half = 0.5 * side[owner]
    centre = 0.5 * (low + high)[owner]
    half[rows, along] /= parts[owner]
    centre[rows, along] = low[owner, along] + (2 * position + 1) * half[rows, along]
    return centre, half, index[owner]


def _triangle_rule() -> tuple[Floats, Floats]:
    """Barycentric points (7, 3) and weights (7,) of degree 5."""
    root = np.sqrt(15.0)
    points, weights = [np.full(3, 1 / 3)], [9 / 40]
    for sign in (-1.0, 1.0):
        small = (6 + sign * root) / 21
        for k in range(3):
            point = np.full(3, small)
            point[k] = 1 - 2 * small
            points.append(point)
            weights.append((155 + sign * root) / 1200)
    return np.stack(points), np.array(weights)


def quadrature(pieces: Pieces) -> tuple[Floats, Ints, Floats]:
    """Points (q, 2) [um], piece of each (q,) and weights (q,).

    A piece is the signed sum of the triangles from its centroid to its edges: some points may
    lie outside it, which is exact for smooth functions all the same.
    """
    piece = np.repeat(np.arange(len(pieces.area)), np.diff(pieces.first))
    a = pieces.edges.start
    b = a + pieces.edges.length[:, None] * pieces.edges.along
    c = pieces.centre[piece]
    area = 0.5 * ((a - c)[:, 0] * (b - c)[:, 1] - (a - c)[:, 1] * (b - c)[:, 0])
    points, weights = [], []
    for share, weight in zip(*_triangle_rule(), strict=True):
        points.append(share[0] * c + share[1] * a + share[2] * b)
        weights.append(weight * area / pieces.area[piece])
    return np.concatenate(points), np.tile(piece, len(points)), np.concatenate(weights)


def mutual_means(heard: Pieces, driven: Pieces) -> Floats:
    """(h, d) mean of ln r between every point of one piece and every point of another.

    Far pairs take the two pieces' moments (the series of `area_means`, averaged once more),
    near ones closed forms or Gauss points.
    """
    z = (heard.centre[:, None, 0] - driven.centre[None, :, 0]) + 1j * (
        heard.centre[:, None, 1] - driven.centre[None, :, 1]
    )
    r2 = z.real**2 + z.imag**2
    reach = heard.radius[:, None] + driven.radius[None, :]
    near = r2 < (NEAR_PAIR_REACHES * reach) ** 2
    w = np.conj(z) / np.where(near, 1.0, r2)
    w2 = w * w
    m, n = heard.moment.T[:, :, None], driven.moment.T[:, None, :]
    far = (m[0] + n[0]) / 2 + (m[1] - n[1]) / 3 * -w
    far += (m[2] + 6 * m[0] * n[0] + n[2]) / 4 * w2
    mean: Floats = 0.5 * np.log(np.where(near, 1.0, r2)) - (far * w2).real
    both = near & heard.rectangle[:, None] & driven.rectangle[None, :]
    i, j = np.nonzero(both)
    mean[i, j] = rectangle_pair_means(heard.low[i], heard.high[i], driven.low[j], driven.high[j])
    _fill_by_points(mean, np.nonzero(near & ~both), heard, driven)
    return mean


def _fill_by_points(
    mean: Floats, pairs: tuple[NDArray[np.intp], ...], heard: Pieces, driven: Pieces
) -> None:
    """Means of the given (heard, driven) pairs by Gauss points over the heard piece."""
    i, j = pairs
    if len(i) == 0:
        return
    listening, row = np.unique(i, return_inverse=True)
    points, piece, weight = quadrature(heard.take(listening))
    order = np.argsort(piece, kind="stable")
    first = np.searchsorted(piece[order], np.arange(len(listening) + 1))
    count = np.diff(first)[row]
    pair = np.repeat(np.arange(len(i)), count)
    begin = np.cumsum(count) - count
    chosen = order[np.arange(len(pair)) - begin[pair] + first[row][pair]]
    seen, _ = exact_area_means(points[chosen], driven, j[pair])
    mean[i, j] = np.bincount(pair, weights=seen * weight[chosen], minlength=len(i))
