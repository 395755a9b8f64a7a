"""Means of 1/distance and of smooth functions of distance over axis-parallel rectangles.

Boxes are rows x0, y0, x1, y1 in any one length unit; results are per that unit.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]


def inverse_distance_at(points: Floats, boxes: Floats) -> Floats:
    """Mean of 1/r over box i as seen from point i, (p,).

    Parameters
    ----------
    points
        (p, 2) x, y; may lie on a box.
    boxes
        (p, 4) not degenerate.

    Notes
    -----
    The twofold integral of 1/r is ``x asinh(y / |x|) + y asinh(x / |y|)`` between corners.

    References
    ----------
    D. R. Wilton et al., "Potential integrals for uniform and linear source distributions
    on polygonal and polyhedral domains", IEEE Trans. Antennas Propag. 32, 276, 1984, eq. 5
    for a rectangle in its own plane.
    """
    total = np.zeros(len(points))
    for i, j, sign in ((2, 3, 1.0), (0, 3, -1.0), (2, 1, -1.0), (0, 1, 1.0)):
        x = boxes[:, i] - points[:, 0]
        y = boxes[:, j] - points[:, 1]
        total += sign * (_x_asinh(x, y) + _x_asinh(y, x))
    return total / _areas(boxes)


def _x_asinh(x: Floats, y: Floats) -> Floats:
    safe = np.maximum(np.abs(x), 1e-300)
    # the limit for x -> 0 is 0; the huge quotient would overflow in asinh's square
    return np.where(np.abs(x) > 1e-150, x * np.arcsinh(np.clip(y / safe, -1e150, 1e150)), 0.0)


def inverse_distance_between(a: Floats, b: Floats) -> Floats:
    """Mean of 1/r between boxes a[i] and b[i] in one plane, (p,).

    Notes
    -----
    The fourfold integral of 1/r over both boxes is
    ``F(x, y) = x^2 y ln(y + r) / 2 + x y^2 ln(x + r) / 2 - r^3 / 6``, summed with
    alternating signs over the sixteen corner differences.

    References
    ----------
    A. E. Ruehli, P. A. Brennan, "Efficient capacitance calculations for three-dimensional
    multiconductor systems", IEEE Trans. Microw. Theory Tech. 21, 76, 1973, eq. 15 with both
    plates in one plane.
    """
    total = np.zeros(len(a))
    x = (a[:, 0] - b[:, 2], a[:, 0] - b[:, 0], a[:, 2] - b[:, 2], a[:, 2] - b[:, 0])
    y = (a[:, 1] - b[:, 3], a[:, 1] - b[:, 1], a[:, 3] - b[:, 3], a[:, 3] - b[:, 1])
    signs = (1.0, -1.0, -1.0, 1.0)
    for across, s in zip(x, signs, strict=True):
        for along, t in zip(y, signs, strict=True):
            total += s * t * _fourfold(np.abs(across), np.abs(along))
    return total / (_areas(a) * _areas(b))


def _fourfold(x: Floats, y: Floats) -> Floats:
    """F for x, y >= 0.

    F is even up to terms that the alternating sum removes: ``ln(y + r) + ln(-y + r)`` is
    ``2 ln x``, and what is left, x^2 y ln x, is linear in y.
    """
    r = np.hypot(x, y)
    first = np.where(x > 0.0, x * x * y * np.arcsinh(y / np.maximum(x, 1e-300)), 0.0)
    second = np.where(y > 0.0, x * y * y * np.arcsinh(x / np.maximum(y, 1e-300)), 0.0)
    return (first + second) / 2.0 - r**3 / 6.0


def mean_log_within(boxes: Floats) -> float:
    """Mean of ln r between two points of one figure made of rectangles (n, 4).

    References
    ----------
    J. C. Maxwell, *Treatise on Electricity and Magnetism*, 3rd ed., 1891, art. 692
    (geometric mean distance of a rectangle from itself).

    Examples
    --------
    >>> round(mean_log_within(np.array([[0.0, 0.0, 1.0, 1.0]])), 4)
    -0.8051
    """
    a, b = boxes[:, 2] - boxes[:, 0], boxes[:, 3] - boxes[:, 1]
    own = np.log(np.hypot(a, b)) - 25.0 / 12.0
    own -= (b / a) ** 2 * np.log(np.hypot(1.0, a / b)) / 6.0
    own -= (a / b) ** 2 * np.log(np.hypot(1.0, b / a)) / 6.0
    own += 2.0 / 3.0 * (b / a * np.arctan2(a, b) + a / b * np.arctan2(b, a))
    share = a * b / (a * b).sum()
    return float(share @ _log_distances(boxes, own) @ share)


def mean_log_from_middle(boxes: Floats) -> float:
    """Least mean of ln r over a figure of rectangles (n, 4), seen from a rectangle's middle.

    Notes
    -----
    From the middle of a rectangle with half sides p, q the mean is
    ``(ln(p^2 + q^2) - 3 + p / q atan(q / p) + q / p atan(p / q)) / 2``; a rectangle elsewhere
    counts by its own middle.
    """
    p, q = (boxes[:, 2] - boxes[:, 0]) / 2.0, (boxes[:, 3] - boxes[:, 1]) / 2.0
    own = 2.0 * np.log(np.hypot(p, q)) - 3.0 + p / q * np.arctan2(q, p) + q / p * np.arctan2(p, q)
    share = p * q / (p * q).sum()
    return float((_log_distances(boxes, own / 2.0) @ share).min())


def _log_distances(boxes: Floats, own: Floats) -> Floats:
    """Logarithms of the distances between the middles of rectangles, `own` on the diagonal."""
    middle = (boxes[:, :2] + boxes[:, 2:]) / 2.0
    apart = np.hypot(*(middle[:, None] - middle[None, :]).transpose(2, 0, 1))
    np.fill_diagonal(apart, np.exp(own))
    return np.asarray(np.log(apart), dtype=np.float64)


def overlap_nodes(a: Floats, b: Floats, nodes: int) -> tuple[Floats, Floats]:
    """Squared distances and weights that average a smooth function over pairs of boxes.

    A mean over two boxes of a function of the displacement is a mean over the displacement
    alone, weighted along each axis by the overlap of two intervals: a trapezoid.  Each of
    its three straight parts gets a Gauss rule.

    Parameters
    ----------
    a, b
        (p, 4) boxes; one of a pair may be a point or a line, not both.
    nodes
        Gauss nodes a part.

    Returns
    -------
    square, weight
        (p, q) each; weights of a row sum to 1.
    """
    dx, wx = _trapezoid_rule(a[:, 0::2], b[:, 0::2], nodes)
    dy, wy = _trapezoid_rule(a[:, 1::2], b[:, 1::2], nodes)
    square = dx[:, :, None] ** 2 + dy[:, None, :] ** 2
    weight = wx[:, :, None] * wy[:, None, :]
    return square.reshape(len(a), -1), weight.reshape(len(a), -1)


def _trapezoid_rule(a: Floats, b: Floats, nodes: int) -> tuple[Floats, Floats]:
    """Displacements of two intervals (p, 2) each and their weights."""
    centre = (a.sum(axis=1) - b.sum(axis=1)) / 2.0
    wide, other = a[:, 1] - a[:, 0], b[:, 1] - b[:, 0]
    outer, inner = (wide + other) / 2.0, np.abs(wide - other) / 2.0
    knots = np.stack([-outer, -inner, inner, outer], axis=1)
    x, w = np.polynomial.legendre.leggauss(nodes)
    length = np.diff(knots, axis=1)
    place = knots[:, :-1, None] + length[:, :, None] * (x + 1.0) / 2.0
    shorter = np.minimum(wide, other)[:, None, None]
    height = np.clip(outer[:, None, None] - np.abs(place), 0.0, shorter)
    # a point against an interval: no slopes, an even weight in the middle part
    height = np.where(shorter > 0.0, height, 1.0)
    weight = (height * length[:, :, None] * w).reshape(len(a), -1)
    weight /= weight.sum(axis=1, keepdims=True)
    return centre[:, None] + place.reshape(len(a), -1), weight


def _areas(boxes: Floats) -> Floats:
    return (boxes[:, 2] - boxes[:, 0]) * (boxes[:, 3] - boxes[:, 1])
