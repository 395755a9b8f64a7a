"""Means of ln r over rectangles along the axes, in closed form.

In go points and rectangles, or pairs of rectangles; out come means of ln r, which the many
rectangular diffusions of a layout need most.  The one idea: ln r is integrated once or twice
in x and in y to a function of the corners alone.

Source: derived by repeated integration; for one rectangle against itself it is Maxwell's
geometric mean distance (*Treatise*, 3rd ed., art. 692).
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]

_TINY = 1.0e-200


def rectangle_means(points: Floats, low: Floats, high: Floats) -> tuple[Floats, Floats]:
    """Mean of ln r over a rectangle, and its gradient at the point, pair by pair.

    Parameters
    ----------
    points, low, high
        (n, 2) points and corners of the rectangles [um].

    Returns
    -------
    mean, gradient
        (n,) and (n, 2) [1/um].

    Examples
    --------
    >>> centre, low, high = np.zeros((1, 2)), np.full((1, 2), -0.5), np.full((1, 2), 0.5)
    >>> mean, gradient = rectangle_means(centre, low, high)
    >>> round(float(mean[0]), 6)  # (ln(1/2) - 3 + pi/2) / 2
    -1.061175
    """
    mean = np.zeros(len(points))
    slope = np.zeros((len(points), 2))
    for corner_x, sign_x in ((high[:, 0], 1.0), (low[:, 0], -1.0)):
        x = corner_x - points[:, 0]
        for corner_y, sign_y in ((high[:, 1], 1.0), (low[:, 1], -1.0)):
            y = corner_y - points[:, 1]
            xx, yy = x * x, y * y
            log = np.log(np.maximum(xx + yy, _TINY))
            along, across = _angles(x, y)
            sign = sign_x * sign_y
            half = 0.5 * log
            mean += sign * (x * y * (half - 1.5) + 0.5 * (xx * along + yy * across))
            slope[:, 0] -= sign * (y * half + x * along - y)
            slope[:, 1] -= sign * (x * half + y * across - x)
    area = (high - low).prod(axis=1)
    return mean / area, slope / area[:, None]


def rectangle_pair_means(
    low: Floats, high: Floats, other_low: Floats, other_high: Floats
) -> Floats:
    """(n,) mean of ln r between two rectangles, pair by pair.

    Parameters
    ----------
    low, high, other_low, other_high
        (n, 2) corners [um].

    Examples
    --------
    >>> low, high = np.zeros((1, 2)), np.ones((1, 2))
    >>> round(float(np.exp(rectangle_pair_means(low, high, low, high))[0]), 4)
    0.447
    """
    total = np.zeros(len(low))
    for a, sign_a in ((high, 1.0), (low, -1.0)):
        for b, sign_b in ((other_high, 1.0), (other_low, -1.0)):
            x = a[:, 0] - b[:, 0]
            for c, sign_c in ((high, 1.0), (low, -1.0)):
                for d, sign_d in ((other_high, 1.0), (other_low, -1.0)):
                    y = c[:, 1] - d[:, 1]
                    total += sign_a * sign_b * sign_c * sign_d * _twice_integrated(x, y)
    total /= (high - low).prod(axis=1) * (other_high - other_low).prod(axis=1)
    return total


def _twice_integrated(x: Floats, y: Floats) -> Floats:
    """Integral of ln r, twice over x and twice over y."""
    xx, yy = x * x, y * y
    log = np.log(np.maximum(xx + yy, _TINY))
    along, across = _angles(x, y)
    xy = x * y
    result: Floats = (6 * xx * yy - xx * xx - yy * yy) / 48 * log
    result += xy * (xx * along + yy * across) / 6
    result -= 25 / 48 * xx * yy
    return result


def _angles(x: Floats, y: Floats) -> tuple[Floats, Floats]:
    """Arctan(y / x) and arctan(x / y), 0 on the axes, where their factors vanish."""
    xy = x * y
    off = np.abs(xy) > _TINY
    across = np.arctan(np.divide(x, y, out=np.zeros_like(x), where=off))
    along = np.where(off, np.copysign(0.5 * np.pi, xy) - across, 0.0)
    return along, across
