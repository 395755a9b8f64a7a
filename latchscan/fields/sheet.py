"""Potentials in a conducting sheet made of uniform domains, by boundary elements.

In go a `SheetProblem` (domains, contacts, edges) and `SheetSources` (currents spread over
polygons or forced into contacts); out comes a `SheetSolution`: mean potentials per ampere
over polygons, potentials at points and at contacts.

The equation is -div(g grad phi) = s with s the forced current per area.  Inside a uniform
domain Green's identity expresses phi by phi and the current density on the domain's boundary
alone (direct formulation: Brebbia, Telles & Wrobel, *Boundary Element Techniques*, 1984,
chapter 2), so only the boundary carries unknowns: phi on insulating edges, current on
contacts, both on the interface of two domains.  Panels are straight with constant values,
collocation is at their midpoints, integrals are closed forms (`sheet_kernels`).

A cut through the sheet is solved twice, as an insulating edge and as grounded metal.  By
Rayleigh's theorem (Maxwell, *Treatise*, 3rd ed., art. 306) the self-resistance of the uncut
sheet lies between the two.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.linalg import lu_factor, lu_solve

from latchscan.errors import ConvergenceError, GeometryError
from latchscan.fields.sheet_equations import (
    Boundary,
    Equations,
    direct_means,
    listen,
    source_terms,
)
from latchscan.fields.sheet_kernels import Floats, Ints, Pieces
from latchscan.fields.sheet_panels import PanelRule, SheetProblem, cut_panels
from latchscan.fields.sheet_quadrature import outlines
from latchscan.fields.sheet_sources import SheetSources, no_sources

__all__ = [
    "GROUNDED",
    "INSULATED",
    "PanelRule",
    "SheetProblem",
    "SheetSolution",
    "SheetSources",
    "no_sources",
    "solve_sheet",
]

INSULATED = 0
GROUNDED = 1
LARGEST_RESIDUAL = 1.0e-8
LARGEST_IMBALANCE = 0.1


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class SheetSolution:
    """Potentials per ampere of every source (n), for each way (c) of treating the cuts.

    The first axis is `INSULATED`, then `GROUNDED`; it has length 1 where nothing is cut.

    Attributes
    ----------
    mean_ohm
        (c, l, n) mean potential over listener l [V per A].
    direct_ohm
        (l, n) what of it the sources make without any boundary; it does not depend on panels.
    node_ohm
        (c, k, n) potential of every contact node.
    cut_ohm
        (n,) largest potential on the insulated cuts; 0 where nothing is cut.
    imbalance
        (c, n) current that leaves through contacts and grounded cuts minus current forced.
    residual
        Largest relative residual of the equations.
    panel_count
        Panels on the boundary.
    """

    mean_ohm: Floats
    direct_ohm: Floats
    node_ohm: Floats
    cut_ohm: Floats
    imbalance: Floats
    residual: float
    panel_count: int
    boundary: Boundary
    sources: SheetSources
    unknowns: tuple[Floats, ...]

    def potentials(self, points_um: Floats, domain: Ints) -> Floats:
        """(c, m, n) potentials at (m, 2) points of the closed domains `domain` (m,)."""
        result = np.zeros((len(self.unknowns), len(points_um), self.mean_ohm.shape[2]))
        pieces = self.sources.pieces()
        for d in np.unique(domain):
            chosen = np.flatnonzero(domain == d)
            points = points_um[chosen]
            inside = self.boundary.angle(points, int(d))
            direct = source_terms(points, int(d), self.sources, pieces, self.boundary)
            rows = self.boundary.point_rows(points, int(d))
            for case, unknown in enumerate(self.unknowns):
                if case == GROUNDED:
                    self.boundary.ground_cuts(rows, points, int(d))
                value = rows @ unknown
                value[:, : self.sources.count] += direct
                result[case, chosen] = value / inside[:, None]
        return result / self.boundary.unit_s

    def own_potentials(self, points_um: Floats, domain: Ints, source: Ints) -> Floats:
        """(c, m) boundary's part of the potential at interior points, each for its source.

        This part is smooth inside the sheet, also across a source's edge; see
        `latchscan.fields.sheet_peak` for the rest.
        """
        result = np.zeros((len(self.unknowns), len(points_um)))
        for d in np.unique(domain):
            chosen = np.flatnonzero(domain == d)
            points, mine = points_um[chosen], source[chosen]
            full = self.boundary.full_angle(int(d)) * self.boundary.unit_s
            rows = self.boundary.point_rows(points, int(d))
            for case, unknown in enumerate(self.unknowns):
                if case == GROUNDED:
                    self.boundary.ground_cuts(rows, points, int(d))
                result[case, chosen] = np.einsum("mk,km->m", rows, unknown[:, mine]) / full
        return result


def solve_sheet(
    problem: SheetProblem,
    sources: SheetSources,
    *,
    listeners: SheetSources | None = None,
    rule: PanelRule | None = None,
    direct_ohm: Floats | None = None,
) -> SheetSolution:
    """Solve the sheet for every source.

    Parameters
    ----------
    problem
        The sheet.
    sources
        Currents of 1 A each; panels are short near their polygons.
    listeners
        Polygons over which mean potentials are wanted; the sources' own polygons if None.
    rule
        Panel lengths.
    direct_ohm
        That value of a solution with the same sources and listeners, to save its cost.

    Raises
    ------
    GeometryError
        When a part of the sheet has no path to ground.
    ResolutionError
        When the boundary needs more panels than a dense system can hold.
    ConvergenceError
        When the residual or the balance of currents fails.
    """
    rule = PanelRule() if rule is None else rule
    _require_ground(problem)
    pieces = sources.pieces()
    panels = cut_panels(problem, *outlines(pieces), rule)
    boundary = Boundary.of(problem, panels)
    equations = Equations.of(boundary)
    right = _right_sides(boundary, sources, pieces)
    unknowns, residual = _solve(equations, right)
    heard = sources if listeners is None else listeners
    rows = listen(boundary, heard)
    if direct_ohm is None:
        direct_ohm = direct_means(boundary, heard, sources) / boundary.unit_s
    means = []
    for case, unknown in enumerate(unknowns):
        value = rows[case] @ unknown
        value /= boundary.unit_s
        value[:, : sources.count] += direct_ohm
        means.append(value)
    solution = SheetSolution(
        mean_ohm=np.stack(means),
        direct_ohm=direct_ohm,
        node_ohm=np.stack([boundary.node_potentials(u) for u in unknowns]) / boundary.unit_s,
        cut_ohm=boundary.cut_peak(unknowns[INSULATED]) / boundary.unit_s,
        imbalance=np.stack(
            [
                boundary.imbalance(u, sources.count, grounded=case == GROUNDED)
                for case, u in enumerate(unknowns)
            ]
        ),
        residual=residual,
        panel_count=len(panels.left),
        boundary=boundary,
        sources=sources,
        unknowns=unknowns,
    )
    _require_convergence(solution)
    return solution


def _require_ground(problem: SheetProblem) -> None:
    """Raise unless every domain reaches a grounded node without passing a cut."""
    grounded = np.zeros(len(problem.conductance_s), dtype=bool)
    tied = np.isfinite(problem.node_resistance_ohm)
    side = np.maximum(problem.left, problem.right)
    contact = problem.node >= 0
    grounded[side[contact][tied[problem.node[contact]]]] = True
    shared = (problem.left >= 0) & (problem.right >= 0)
    a, b = problem.left[shared], problem.right[shared]
    # the appended value stands for the segments that are no contact (node -1)
    floating = contact & ~np.append(tied, True)[problem.node]
    for _ in range(len(grounded) + 1):
        before = grounded.sum()
        reached = grounded[a] | grounded[b]
        grounded[a[reached]] = True
        grounded[b[reached]] = True
        lifted = np.unique(problem.node[floating & grounded[side]])
        grounded[side[floating & np.isin(problem.node, lifted)]] = True
        if grounded.sum() == before:
            break
    if not grounded.all():
        raise GeometryError("sheet: a part of the sheet has no path to a grounded contact")


def _right_sides(boundary: Boundary, sources: SheetSources, pieces: Pieces) -> Floats:
    right = np.zeros((boundary.size, sources.count + len(sources.injected_node)), order="F")
    for side in boundary.sides:
        right[side.row, : sources.count] = source_terms(
            side.lines.middle, side.domain, sources, pieces, boundary
        )
    row = boundary.node_column[sources.injected_node]
    grounded = row < 0  # current forced into a grounded node goes to ground at once
    column = sources.count + np.arange(len(row))
    right[row[~grounded], column[~grounded]] = 1.0
    return right


def _solve(equations: Equations, right: Floats) -> tuple[tuple[Floats, ...], float]:
    """Solve with insulated cuts and, where there are cuts, with grounded ones."""
    matrix, cut = equations.matrix, equations.cut_column
    count = right.shape[1]
    # the grounded case differs in the cuts' columns only: a low-rank change of the same factors
    # (Golub & Van Loan, Matrix Computations, 4th ed., section 2.1.4)
    both = np.concatenate([right, equations.grounded], axis=1) if len(cut) else right
    factors = lu_factor(matrix, check_finite=False)
    solved = lu_solve(factors, both, check_finite=False)
    scale = np.abs(both).max(axis=0) + 1e-300
    residual = float((np.abs(matrix @ solved - both).max(axis=0) / scale).max(initial=0.0))
    if len(cut) == 0:
        return (solved,), residual
    insulated, change = solved[:, :count], solved[:, count:]
    try:
        inner: NDArray[np.float64] = np.linalg.solve(change[cut], insulated[cut])
    except np.linalg.LinAlgError:
        raise ConvergenceError("sheet: singular equations; expected one solution") from None
    grounded = insulated - change @ inner
    grounded[cut] = inner
    return (insulated, grounded), residual


def _require_convergence(solution: SheetSolution) -> None:
    if not solution.residual <= LARGEST_RESIDUAL:
        raise ConvergenceError(
            f"sheet: relative residual {solution.residual:.1e}; expected at most"
            f" {LARGEST_RESIDUAL:.0e}"
        )
    worst = float(np.abs(solution.imbalance).max(initial=0.0))
    if not worst <= LARGEST_IMBALANCE:
        raise ConvergenceError(
            f"sheet: {worst:.1%} of the forced current is missing at the contacts; expected at"
            f" most {LARGEST_IMBALANCE:.0%}"
        )
