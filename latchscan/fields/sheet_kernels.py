"""Integrals of the logarithmic potential over straight panels and over polygon areas.

In go points, panels and polygons as arrays; out come matrices, one row a point.  The one
idea: each integral has a closed form for pairs that are near each other and a short
multipole series, cheap enough for whole matrices, for pairs that are far apart.

Source: closed forms derived from the definitions; the series is the usual complex multipole
expansion of log(z) (Greengard & Rokhlin, J. Comput. Phys. 73, 325, 1987, section 2).
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from latchscan.fields.sheet_rectangles import rectangle_means

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

ON_LINE_UM = 1.0e-4
"""A point this near a panel's line counts as lying on it; far below any drawn size [um]."""
NEAR_PANEL_LENGTHS = 2.5
NEAR_PIECE_RADII = 2.5
BLOCK_PAIRS = 60_000
"""Pairs handled at once; keeps the temporaries of one block inside a core's cache."""


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Lines:
    """Directed straight panels; the domain lies on the left of every panel.

    Attributes
    ----------
    start, along
        (n, 2) first point [um] and unit direction.
    length
        (n,) lengths [um].
    """

    start: Floats
    along: Floats
    length: Floats

    @property
    def outward(self) -> Floats:
        """(n, 2) unit normals that leave the domain."""
        return np.stack([self.along[:, 1], -self.along[:, 0]], axis=1)

    @property
    def middle(self) -> Floats:
        """(n, 2) midpoints [um]."""
        return self.start + 0.5 * self.length[:, None] * self.along

    def take(self, index: Ints) -> Lines:
        """Return the panels of `index`, in its order."""
        return Lines(start=self.start[index], along=self.along[index], length=self.length[index])


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Pieces:
    """Polygon pieces by their directed edges (outer rings counter-clockwise, holes clockwise).

    Attributes
    ----------
    edges
        All edges, those of one piece together.
    first
        (p + 1,) offsets of the pieces into the edges.
    centre
        (p, 2) centroids [um].
    area
        (p,) areas [um2].
    radius
        (p,) largest distance of a vertex from the centroid [um].
    moment
        (p, 3) complex means of z**2, z**3, z**4 about the centroid, z = x + iy.
    low, high
        (p, 2) corners of the bounding boxes [um].
    rectangle
        (p,) True for pieces that fill their bounding box.
    """

    edges: Lines
    first: Ints
    centre: Floats
    area: Floats
    radius: Floats
    moment: NDArray[np.complex128]
    low: Floats
    high: Floats
    rectangle: NDArray[np.bool_]

    def take(self, index: Ints) -> Pieces:
        """Return the pieces of `index`, in its order."""
        count = np.diff(self.first)[index]
        first = np.concatenate([[0], np.cumsum(count)]).astype(np.int64)
        edge = np.arange(first[-1]) + np.repeat(self.first[index] - first[:-1], count)
        return Pieces(
            edges=self.edges.take(edge),
            first=first,
            centre=self.centre[index],
            area=self.area[index],
            radius=self.radius[index],
            moment=self.moment[index],
            low=self.low[index],
            high=self.high[index],
            rectangle=self.rectangle[index],
        )


def exact_layers(points: Floats, lines: Lines) -> tuple[Floats, Floats]:
    """Closed-form integrals of ln r and of its outward derivative over a panel, pair by pair.

    Parameters
    ----------
    points
        (n, 2) points [um]; point k belongs to panel k.
    lines
        (n,) panels.

    Returns
    -------
    single, double
        (n,) integral of ln r dl [um] and the angle (signed) under which the panel is seen;
        the angle is 0 for a point on the panel's own line (principal value).

    Examples
    --------
    >>> panel = Lines(start=np.array([[-1.0, 0.0]]), along=np.array([[1.0, 0.0]]),
    ...               length=np.array([2.0]))
    >>> single, double = exact_layers(np.array([[0.0, 1.0]]), panel)
    >>> round(float(double[0] / np.pi), 6)
    0.5
    """
    dx = lines.start[:, 0] - points[:, 0]
    dy = lines.start[:, 1] - points[:, 1]
    u1 = dx * lines.along[:, 0] + dy * lines.along[:, 1]
    d = dx * lines.along[:, 1] - dy * lines.along[:, 0]
    d[np.abs(d) < ON_LINE_UM] = 0.0
    u2 = u1 + lines.length
    d2 = d * d
    tiny = np.finfo(np.float64).tiny
    single = u2 * np.log(np.maximum(u2 * u2 + d2, tiny))
    single -= u1 * np.log(np.maximum(u1 * u1 + d2, tiny))
    single *= 0.5
    single -= lines.length
    double = np.arctan2(d * lines.length, d2 + u1 * u2)
    double[d == 0.0] = 0.0
    single += d * double
    return single, double


def row_blocks(rows: int, columns: int) -> Iterator[slice]:
    """Slices of rows such that one block holds about `BLOCK_PAIRS` pairs."""
    step = max(1, BLOCK_PAIRS // max(columns, 1))
    for first in range(0, rows, step):
        yield slice(first, min(first + step, rows))


def panel_layers(
    points: Floats, lines: Lines, *, single: bool, double: bool
) -> tuple[Floats, Floats]:
    """Integrals of ln r and of its outward derivative over every panel, from every point.

    Parameters
    ----------
    points
        (m, 2) points [um].
    lines
        (n,) panels.
    single, double
        Which of the two matrices are wanted; an unwanted one comes back empty.

    Returns
    -------
    single, double
        (m, n) each, see `exact_layers`.

    Notes
    -----
    Far pairs (distance above 2.5 panel lengths) take the midpoint value with its second-order
    term, whose relative error there is below 1e-4.
    """
    rows, columns = len(points), len(lines.length)
    first_layer = np.empty((rows if single else 0, columns))
    second_layer = np.empty((rows if double else 0, columns))
    if rows == 0 or columns == 0:
        return first_layer, second_layer
    origin = lines.middle.mean(axis=0)
    x, y, normal = points - origin, lines.middle - origin, lines.outward
    square_left = np.stack([-2 * x[:, 0], -2 * x[:, 1], (x**2).sum(1), np.ones(rows)], 1)
    square_right = np.stack([y[:, 0], y[:, 1], np.ones(columns), (y**2).sum(1)])
    height_left = np.stack([-x[:, 0], -x[:, 1], np.ones(rows)], 1)
    height_right = np.stack([normal[:, 0], normal[:, 1], (y * normal).sum(1)])
    length = lines.length
    near_square = (NEAR_PANEL_LENGTHS * length) ** 2
    twelfth = length**2 / 12
    for block in row_blocks(rows, columns):
        r2 = square_left[block] @ square_right
        d = height_left[block] @ height_right
        near_row, near_column = np.nonzero(r2 < near_square)
        np.maximum(r2, 1e-12, out=r2)
        q = 1.0 / r2
        h = (d * d) * q
        q *= twelfth
        if double:
            # d/r2 * (1 + L2/12 (3 r2 - 4 d2)/r4)
            target = second_layer[block]
            np.multiply(h, -4.0, out=target)
            target += 3.0
            target *= q
            target += 1.0
            target *= d
            target /= r2
            target *= length
        if single:
            # ln r + L2/24 (2 d2 - r2)/r4
            target = first_layer[block]
            np.log(r2, out=target)
            h *= 2.0
            h -= 1.0
            h *= q
            target += h
            target *= 0.5 * length
        if len(near_row):
            exact = exact_layers(points[block][near_row], lines.take(near_column))
            if single:
                first_layer[block][near_row, near_column] = exact[0]
            if double:
                second_layer[block][near_row, near_column] = exact[1]
    return first_layer, second_layer


def exact_area_means(points: Floats, pieces: Pieces, index: Ints) -> tuple[Floats, Floats]:
    """Mean of ln r over piece `index[k]` seen from point k, and its gradient at the point."""
    mean, gradient = np.empty(len(points)), np.empty((len(points), 2))
    rectangle = pieces.rectangle[index]
    for chosen, integrate in (
        (np.flatnonzero(rectangle), _over_rectangles),
        (np.flatnonzero(~rectangle), _over_polygons),
    ):
        if len(chosen):
            mean[chosen], gradient[chosen] = integrate(points[chosen], pieces, index[chosen])
    return mean, gradient


def _over_rectangles(points: Floats, pieces: Pieces, index: Ints) -> tuple[Floats, Floats]:
    return rectangle_means(points, pieces.low[index], pieces.high[index])


def _over_polygons(points: Floats, pieces: Pieces, index: Ints) -> tuple[Floats, Floats]:
    count = (pieces.first[1:] - pieces.first[:-1])[index]
    offset = np.concatenate([[0], np.cumsum(count)[:-1]]).astype(np.int64)
    pair = np.repeat(np.arange(len(index)), count)
    edge = np.arange(len(pair)) - offset[pair] + pieces.first[index][pair]
    lines = pieces.edges.take(edge)
    seen = points[pair]
    line_integral, _ = exact_layers(seen, lines)
    normal = lines.outward
    height = ((lines.start - seen) * normal).sum(axis=1)
    mean = np.add.reduceat(height * (0.5 * line_integral - 0.25 * lines.length), offset)
    gradient = -np.add.reduceat(normal * line_integral[:, None], offset, axis=0)
    area = pieces.area[index]
    return mean / area, gradient / area[:, None]


def area_means(
    points: Floats, pieces: Pieces, directions: Floats | None = None
) -> tuple[Floats, Floats]:
    """Mean of ln r over every piece, seen from every point, and its slope there.

    Parameters
    ----------
    points
        (m, 2) points [um].
    pieces
        (p,) pieces.
    directions
        (m, 2) unit vectors along which the slope is wanted; None for no slopes.

    Returns
    -------
    mean, slope
        (p, m) mean of ln r and (p, m) its derivative along the point's direction [1/um]
        (empty without directions).

    Notes
    -----
    By the divergence theorem the integral of ln r over an area is the sum over its edges of
    h (1/2 integral of ln r dl - l/4), h the signed height of the edge over the point, and
    its gradient minus the sum of n times the integral of ln r dl.
    """
    rows, columns = len(pieces.area), len(points)
    mean = np.empty((rows, columns))
    slope = np.empty((rows if directions is not None else 0, columns))
    if rows == 0 or columns == 0:
        return mean, slope
    place = points[:, 0] + 1j * points[:, 1]
    centre = pieces.centre[:, 0] + 1j * pieces.centre[:, 1]
    turn = None if directions is None else directions[:, 0] + 1j * directions[:, 1]
    m2, m3, m4 = (pieces.moment[:, k, None] for k in range(3))
    skewed = bool(np.any(np.abs(m3[:, 0]) > 1e-9 * pieces.radius**3))
    for block in row_blocks(rows, columns):
        z = place[None, :] - centre[block, None]
        r2 = z.real**2 + z.imag**2
        near_piece, near_point = np.nonzero(
            r2 < (NEAR_PIECE_RADII * pieces.radius[block, None]) ** 2
        )
        np.maximum(r2, 1e-12, out=r2)
        w = np.conj(z, out=z)
        w /= r2
        w2 = w * w
        inner = m4[block] * w2
        far = inner * 0.25
        far += 0.5 * m2[block]
        if skewed:
            far += m3[block] / 3 * w
        far *= w2
        mean[block] = 0.5 * np.log(r2) - far.real
        if turn is not None:
            inner += m2[block]
            if skewed:
                inner += m3[block] * w
            inner *= w2
            inner += 1.0
            inner *= w
            inner *= turn
            slope[block] = inner.real
        if len(near_piece):
            exact = exact_area_means(
                points[near_point], pieces, near_piece.astype(np.int64) + block.start
            )
            mean[block][near_piece, near_point] = exact[0]
            if directions is not None:
                slope[block][near_piece, near_point] = (exact[1] * directions[near_point]).sum(1)
    return mean, slope


def pieces_from_edges(start: Floats, end: Floats, first: Ints) -> Pieces:
    """Pieces with their moments, from the (e, 2) edge ends [um] and (p + 1,) offsets."""
    step = end - start
    length = np.hypot(step[:, 0], step[:, 1])
    edges = Lines(start=start, along=step / length[:, None], length=length)
    piece = np.repeat(np.arange(len(first) - 1), np.diff(first))
    begin = first[:-1]
    # vertices relative to each piece's first vertex: areas lose no digits far from the origin
    base = start[begin][piece]
    a = (start - base)[:, 0] + 1j * (start - base)[:, 1]
    b = (end - base)[:, 0] + 1j * (end - base)[:, 1]
    cross = (np.conj(a) * b).imag
    area = 0.5 * np.add.reduceat(cross, begin)
    centre = np.add.reduceat(cross * (a + b), begin) / (6 * area)
    a, b = a - centre[piece], b - centre[piece]
    cross = (np.conj(a) * b).imag
    moments = []
    for power in (2, 3, 4):
        # mean of z**k over the triangle (0, a, b): 2 sum(a**i b**(k-i)) / ((k+1)(k+2))
        terms = sum(a**i * b ** (power - i) for i in range(power + 1))
        integral = np.add.reduceat(cross * terms, begin) / ((power + 1) * (power + 2))
        moments.append(integral / area)
    radius = np.maximum.reduceat(np.abs(a), begin)
    origin = start[begin]
    low, high = np.minimum.reduceat(start, begin), np.maximum.reduceat(start, begin)
    return Pieces(
        edges=edges,
        first=np.asarray(first, dtype=np.int64),
        centre=origin + np.stack([centre.real, centre.imag], axis=1),
        area=area,
        radius=radius,
        moment=np.stack(moments, axis=1),
        low=low,
        high=high,
        rectangle=np.abs(area - (high - low).prod(axis=1)) <= 1e-9 * area,
    )
