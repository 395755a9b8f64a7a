"""A p-well sheet on bulk silicon by finite differences in space: a reference for tests.

Cell-centred boxes for the bulk, one more unknown for each surface cell with sheet, one for
each tap; conjugate gradients.  It shares no code with the project.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray
from scipy.sparse import coo_matrix, diags
from scipy.sparse.linalg import cg

Floats = NDArray[np.float64]
Box = tuple[float, float, float, float]
GROWTH = 1.25


@dataclass(frozen=True, kw_only=True)
class Problem:
    inside: Callable[[Floats, Floats], NDArray[np.bool_]]
    taps: Sequence[Box]
    tap_ohm: float
    sheet_ohm: float
    resistivity_ohm_um: float
    thickness_um: float
    contacted: bool
    half_um: float
    far_um: float


@dataclass
class Links:
    first: list[NDArray[np.int64]] = field(default_factory=list)
    second: list[NDArray[np.int64]] = field(default_factory=list)
    value: list[Floats] = field(default_factory=list)

    def add(self, a: NDArray[np.int64], b: NDArray[np.int64], value: Floats) -> None:
        self.first.append(a.ravel())
        self.second.append(b.ravel())
        self.value.append(np.broadcast_to(value, a.shape).ravel())

    def matrix(self, ground: Floats) -> coo_matrix:
        a, b = np.concatenate(self.first), np.concatenate(self.second)
        g, n = np.concatenate(self.value), len(ground)
        diagonal = ground + np.bincount(a, g, n) + np.bincount(b, g, n)
        each = np.arange(n)
        return coo_matrix(
            (
                np.concatenate([-g, -g, diagonal]),
                (np.concatenate([a, b, each]), np.concatenate([b, a, each])),
            ),
            shape=(n, n),
        )


def cuts(half: float, step: float, far: float) -> Floats:
    inner = np.linspace(-half, half, round(2.0 * half / step) + 1)
    outer, width = [half], step
    while outer[-1] < far:
        width *= GROWTH
        outer.append(outer[-1] + width)
    beyond = np.array(outer[1:])
    return np.concatenate([-beyond[::-1], inner, beyond])


def depths(thickness: float, step: float) -> Floats:
    z, width = [0.0], step / 2.0
    while z[-1] < thickness:
        z.append(z[-1] + width)
        width *= GROWTH
    return np.array(z) * thickness / z[-1]


def within(x: Floats, y: Floats, box: Box) -> NDArray[np.bool_]:
    return (x > box[0]) & (x < box[2]) & (y > box[1]) & (y < box[3])


def potentials(problem: Problem, source: Box, receivers: Sequence[Box], step: float) -> Floats:
    """Mean surface potential over each receiver for 1 A spread over the source [ohm].

    Receivers on the sheet take the sheet's potential, others the uppermost bulk cells'.
    """
    x = cuts(problem.half_um, step, problem.far_um)
    dx, dz = np.diff(x), np.diff(depths(problem.thickness_um, step))
    centre = (x[1:] + x[:-1]) / 2.0
    grid_x, grid_y = np.meshgrid(centre, centre, indexing="ij")
    n, rho = len(dx), problem.resistivity_ohm_um
    bulk = np.arange(n * n * len(dz)).reshape(n, n, len(dz))
    tap = np.full((n, n), -1)
    for index, box in enumerate(problem.taps):
        tap[within(grid_x, grid_y, box)] = index
    sheet = problem.inside(grid_x, grid_y) & (tap < 0)
    surface = np.full((n, n), -1)
    surface[sheet] = bulk.size + np.arange(sheet.sum())
    tap_first = bulk.size + int(sheet.sum())
    surface[tap >= 0] = tap_first + tap[tap >= 0]
    links, area = Links(), dx[:, None] * dx[None, :]
    half = (dx[1:] + dx[:-1]) / 2.0
    links.add(bulk[:-1], bulk[1:], dx[None, :, None] * dz / rho / half[:, None, None])
    links.add(bulk[:, :-1], bulk[:, 1:], dx[:, None, None] * dz / rho / half[None, :, None])
    down = (dz[1:] + dz[:-1]) / 2.0
    links.add(bulk[:, :, :-1], bulk[:, :, 1:], area[:, :, None] / rho / down)
    on = surface >= 0
    links.add(bulk[:, :, 0][on], surface[on], (area / rho / (dz[0] / 2.0))[on])
    for turned in (False, True):
        s, t = (surface.T, tap.T) if turned else (surface, tap)
        reach = np.where(t[:-1] >= 0, 0.0, dx[:-1, None] / 2.0)
        reach = reach + np.where(t[1:] >= 0, 0.0, dx[1:, None] / 2.0)
        real = (s[:-1] >= 0) & (s[1:] >= 0) & (s[:-1] != s[1:])
        across = np.broadcast_to(dx[None, :], reach.shape)
        links.add(s[:-1][real], s[1:][real], (across[real] / problem.sheet_ohm / reach[real]))
    ground = np.zeros(tap_first + len(problem.taps))
    if problem.contacted:
        ground[bulk[:, :, -1].ravel()] = (area / rho / (dz[-1] / 2.0)).ravel()
    ground[tap_first:] = 1.0 / problem.tap_ohm
    matrix = links.matrix(ground).tocsr()
    right = np.zeros(len(ground))
    chosen = within(grid_x, grid_y, source)
    right[surface[chosen]] = area[chosen] / area[chosen].sum()
    solution, failed = cg(matrix, right, rtol=1e-8, M=diags(1.0 / matrix.diagonal()))
    assert failed == 0
    result = []
    for box in receivers:
        chosen = within(grid_x, grid_y, box)
        at = np.where(on, surface, bulk[:, :, 0])[chosen]
        result.append(np.average(solution[at], weights=area[chosen]))
    return np.array(result)


def extrapolated(problem: Problem, source: Box, receivers: Sequence[Box], step: float) -> Floats:
    """Potentials at steps going to 0; the error was seen to fall as step^1.8."""
    coarse = potentials(problem, source, receivers, 2.0 * step)
    fine = potentials(problem, source, receivers, step)
    return fine + (fine - coarse) / (2.0**1.8 - 1.0)
