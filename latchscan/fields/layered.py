"""Potential on the surface of a layered conductor, from points and from rectangles.

In goes a stack of layers, out comes the potential on its surface per ampere that enters
there.  The idea: the singular part is that of a half space of the uppermost layer, known in
closed form even when averaged over two rectangles; what the other layers add is smooth,
so one table of it serves every pair.

References
----------
P. A. Schumann, E. E. Gardner, "Application of multilayer potential distribution to
spreading resistance correction factors", J. Electrochem. Soc. 116, 87, 1969 (the layered
kernel as a Hankel integral; its admittance follows from the impedance recursion).
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import cast

import numpy as np
from numpy.typing import NDArray
from scipy.interpolate import CubicSpline
from scipy.special import j0

from latchscan.fields.rectangles import (
    inverse_distance_at,
    inverse_distance_between,
    overlap_nodes,
)

Floats = NDArray[np.float64]

_TABLE_STEP = 0.05
_DECAY = 20.0
"""The correction falls as exp(-2 k t); exp(-40) is nothing."""
_FAR = 4.0
"""Rectangles farther apart than this many mean sizes act by their second moments."""
_SMALL = 0.4
"""Sides of both rectangles together, over the scale of the correction."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Stack:
    """Horizontal layers from the surface downwards.

    Attributes
    ----------
    resistivity_ohm_um
        One value a layer [ohm um], above 0.
    thickness_um
        One value a layer [um], above 0.
    bottom_contacted
        True: the bottom is at potential 0.  False: no current leaves through it, and the
        potential is fixed only up to a constant, so that only currents that sum to 0 have
        a meaning.
    """

    resistivity_ohm_um: tuple[float, ...]
    thickness_um: tuple[float, ...]
    bottom_contacted: bool


def surface_ratio(stack: Stack, wavenumber: Floats) -> Floats:
    """Surface impedance over that of a half space of the uppermost layer, less 1.

    Parameters
    ----------
    wavenumber
        Lateral wavenumbers k above 0 [1/um], any shape.

    Notes
    -----
    From the bottom up, a layer with ``p = k / resistivity`` and ``T = tanh(k thickness)``
    turns the admittance Y below it into ``p (Y + p T) / (p + Y T)``.  Returned is
    ``p / y - 1 = (p - Y)(1 - T) / (Y + p T)`` of the uppermost layer, which keeps its
    digits where it is small.
    """
    last = len(stack.thickness_um) - 1
    below = np.zeros_like(wavenumber)
    for layer in range(last, 0, -1):
        p = wavenumber / stack.resistivity_ohm_um[layer]
        tanh = np.tanh(wavenumber * stack.thickness_um[layer])
        if layer == last and stack.bottom_contacted:
            below = p / tanh
        else:
            below = p * (below + p * tanh) / (p + below * tanh)
    x = wavenumber * stack.thickness_um[0]
    rest = 2.0 * np.exp(-2.0 * x) / (1.0 + np.exp(-2.0 * x))
    if last == 0 and stack.bottom_contacted:
        return -rest
    p = wavenumber / stack.resistivity_ohm_um[0]
    return (p - below) * rest / (below + p * np.tanh(x))


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class LayeredKernel:
    """Surface potential per ampere of a stack, ready for evaluation.

    Attributes
    ----------
    resistivity_ohm_um
        Of the uppermost layer.
    scale_um
        Length over which the tabulated correction varies: the uppermost thickness.
    floating
        True where the potential is fixed only up to a constant.
    reach_um
        Largest distance of the table; farther points take its last value.
    """

    resistivity_ohm_um: float
    scale_um: float
    floating: bool
    reach_um: float
    table_start: float
    table: Floats

    def correction(self, distance_squared: Floats) -> Floats:
        """What the stack adds to the half space's potential [ohm] at these distances."""
        u = np.log(distance_squared + self.scale_um**2 / 16.0)
        place = (u - self.table_start) / _TABLE_STEP
        index = np.clip(place.astype(np.int64), 0, self.table.shape[1] - 1)
        step = np.minimum(place - index, 1.0)
        c = self.table
        return cast(
            "Floats", ((c[0][index] * step + c[1][index]) * step + c[2][index]) * step + c[3][index]
        )

    def point(self, distance_um: Floats) -> Floats:
        """Potential [ohm] at a distance above 0 from a point source of 1 A."""
        half_space = self.resistivity_ohm_um / (2.0 * np.pi * distance_um)
        return half_space + self.correction(distance_um**2)

    def at_points(self, points: Floats, boxes: Floats) -> Floats:
        """Potential [ohm] at points for 1 A spread evenly over each rectangle.

        Parameters
        ----------
        points
            (m, 2) x, y [um].
        boxes
            (n, 4) x0, y0, x1, y1 [um].

        Returns
        -------
        ndarray
            (m, n).
        """
        spots = np.concatenate([points, points], axis=1)
        rows, columns = _near_pairs(spots, boxes)
        result = self._far_between(spots, boxes)
        near, box = points[rows], boxes[columns]
        half_space = self.resistivity_ohm_um / (2.0 * np.pi) * inverse_distance_at(near, box)
        result[rows, columns] = half_space + self._correction_near(spots[rows], box)
        return result

    def between(self, receivers: Floats, sources: Floats) -> Floats:
        """Mean potential [ohm] over each receiver for 1 A spread evenly over each source.

        Parameters
        ----------
        receivers, sources
            (m, 4) and (n, 4) rectangles x0, y0, x1, y1 [um], not degenerate.

        Returns
        -------
        ndarray
            (m, n); symmetric where receivers and sources are the same.
        """
        rows, columns = _near_pairs(receivers, sources)
        result = self._far_between(receivers, sources)
        same = receivers is sources
        if same:
            rows, columns = rows[rows <= columns], columns[rows <= columns]
        a, b = receivers[rows], sources[columns]
        half_space = self.resistivity_ohm_um / (2.0 * np.pi) * inverse_distance_between(a, b)
        result[rows, columns] = half_space + self._correction_near(a, b)
        if same:
            result[columns, rows] = result[rows, columns]
        return result

    def _far_between(self, receivers: Floats, sources: Floats) -> Floats:
        """Mean by the second moments of both rectangles, right where they are far apart.

        Four points stand for each pair.  Where all rectangles are small against the scale
        of the correction, one evaluation of it is enough.
        """
        a, b = receivers[:, None, :], sources[None, :, :]
        squares = _moment_distances_squared(a, b)
        least = 1e-12 * self.scale_um**2
        total = np.zeros(squares[0].shape)
        for square in squares:
            total += 1.0 / np.sqrt(np.maximum(square, least))
        total *= self.resistivity_ohm_um / (8.0 * np.pi)
        if _largest_side(receivers) + _largest_side(sources) < _SMALL * self.scale_um:
            return total + self.correction(sum(squares, np.zeros(())) / 4.0)
        return total + sum((self.correction(s) for s in squares), np.zeros(())) / 4.0

    def _correction_near(self, a: Floats, b: Floats) -> Floats:
        """Mean correction over pairs of rectangles (p, 4), by their size over the scale."""
        size = (a[:, 2:] - a[:, :2] + b[:, 2:] - b[:, :2]).max(axis=1)
        result = np.empty(len(a))
        small = size < _SMALL * self.scale_um
        squares = _moment_distances_squared(a[small], b[small])
        result[small] = sum((self.correction(s) for s in squares), np.zeros(())) / 4.0
        order = np.flatnonzero(~small)
        count = np.ceil(np.log2(np.maximum(size[order] / self.scale_um, 1.0))).astype(np.int64)
        for level in np.unique(count):
            chosen = order[count == level]
            for start in range(0, len(chosen), 4096):
                part = chosen[start : start + 4096]
                square, weight = overlap_nodes(a[part], b[part], nodes=3 + 2 * int(level))
                result[part] = (self.correction(square) * weight).sum(axis=1)
        return result


def _near_pairs(receivers: Floats, sources: Floats) -> tuple[NDArray[np.intp], NDArray[np.intp]]:
    """Pairs too close for their second moments alone."""
    a, b = receivers[:, None, :], sources[None, :, :]
    dx = (a[..., 0] + a[..., 2] - b[..., 0] - b[..., 2]) / 2.0
    dy = (a[..., 1] + a[..., 3] - b[..., 1] - b[..., 3]) / 2.0
    widths = np.hypot(receivers[:, 2] - receivers[:, 0], receivers[:, 3] - receivers[:, 1])
    others = np.hypot(sources[:, 2] - sources[:, 0], sources[:, 3] - sources[:, 1])
    size = (widths[:, None] + others[None, :]) / 2.0
    rows, columns = np.nonzero(dx * dx + dy * dy < (_FAR * size) ** 2)
    return rows, columns


def _largest_side(boxes: Floats) -> float:
    return float((boxes[:, 2:] - boxes[:, :2]).max(initial=0.0))


def _moment_distances_squared(a: Floats, b: Floats) -> tuple[Floats, ...]:
    """Squares of four distances whose mean has the second moments of both rectangles."""
    dx = (a[..., 0] + a[..., 2] - b[..., 0] - b[..., 2]) / 2.0
    dy = (a[..., 1] + a[..., 3] - b[..., 1] - b[..., 3]) / 2.0
    mx = np.sqrt(((a[..., 2] - a[..., 0]) ** 2 + (b[..., 2] - b[..., 0]) ** 2) / 12.0)
    my = np.sqrt(((a[..., 3] - a[..., 1]) ** 2 + (b[..., 3] - b[..., 1]) ** 2) / 12.0)
    left, right, low, high = (dx - mx) ** 2, (dx + mx) ** 2, (dy - my) ** 2, (dy + my) ** 2
    return left + low, left + high, right + low, right + high


def tabulate_kernel(stack: Stack, reach_um: float) -> LayeredKernel:
    """The kernel of a stack for distances up to `reach_um`.

    Notes
    -----
    ``G(r) = rho / (2 pi r) + rho / (2 pi) int_0^inf f(k) J0(k r) dk`` with f from
    `surface_ratio`.  With an insulated bottom f grows as ``1 / (k rho S)`` towards k = 0,
    S the sheet conductance of the whole stack; the part ``exp(-k a) / (k rho S)`` is
    taken out and put back as ``-ln((a + sqrt(a^2 + r^2)) / 2a) / (2 pi S)``, the
    difference being the constant that is free anyhow.
    """
    scale = stack.thickness_um[0]
    start = float(np.log(scale**2 / 16.0))
    stop = float(np.log(reach_um**2 + scale**2 / 16.0))
    count = int(np.ceil((stop - start) / _TABLE_STEP)) + 1
    u = start + _TABLE_STEP * np.arange(count)
    radius = np.sqrt(np.maximum(np.exp(u) - scale**2 / 16.0, 0.0))
    radius[0] = 0.0
    values = np.array([_hankel(stack, float(r)) for r in radius])
    values *= stack.resistivity_ohm_um[0] / (2.0 * np.pi)
    if not stack.bottom_contacted:
        sheet, a = sheet_conductance_s(stack), sum(stack.thickness_um)
        values -= np.log((a + np.hypot(a, radius)) / (2.0 * a)) / (2.0 * np.pi * sheet)
    spline = CubicSpline(np.arange(count, dtype=np.float64), values)
    table = np.ascontiguousarray(spline.c)
    table.setflags(write=False)
    return LayeredKernel(
        resistivity_ohm_um=stack.resistivity_ohm_um[0],
        scale_um=scale,
        floating=not stack.bottom_contacted,
        reach_um=float(radius[-1]),
        table_start=start,
        table=table,
    )


def sheet_conductance_s(stack: Stack) -> float:
    """Conductance of a square of the whole stack, current along the layers [S]."""
    return sum(
        thickness / resistivity
        for thickness, resistivity in zip(stack.thickness_um, stack.resistivity_ohm_um, strict=True)
    )


def _hankel(stack: Stack, radius: float) -> float:
    """``int f(k) J0(k r) dk`` by Gauss rules on panels: even in log k, then half waves."""
    top = _DECAY / stack.thickness_um[0]
    low = 1e-6 / (sum(stack.thickness_um) * (1.0 + _contrast(stack)))
    edges = np.geomspace(low, top, int(np.ceil(6.0 * np.log10(top / low))) + 1)
    edges = np.concatenate([[0.0], edges])
    pieces = np.maximum(np.ceil(np.diff(edges) * radius / 6.0), 1.0).astype(np.int64)
    width = np.repeat(np.diff(edges) / pieces, pieces)
    within = np.arange(pieces.sum()) - np.repeat(np.cumsum(pieces) - pieces, pieces)
    left = np.repeat(edges[:-1], pieces) + within * width
    nodes, weights = np.polynomial.legendre.leggauss(12)
    k = (left[:, None] + width[:, None] * (nodes + 1.0) / 2.0).ravel()
    w = (width[:, None] * weights / 2.0).ravel()
    f = surface_ratio(stack, k)
    if not stack.bottom_contacted:
        pole = stack.resistivity_ohm_um[0] * sheet_conductance_s(stack)
        f = f - np.exp(-k * sum(stack.thickness_um)) / (k * pole)
    return float(np.sum(f * j0(k * radius) * w))


def _contrast(stack: Stack) -> float:
    return max(stack.resistivity_ohm_um) / min(stack.resistivity_ohm_um)
