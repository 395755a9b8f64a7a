"""The boundary-element equations of a sheet: unknowns, matrix, right sides, listeners.

With the potential counted as psi = g0 phi (g0 the largest conductance, rho = g / g0) every
point x of a domain obeys

    angle(x) rho psi(x) = sum over panels of rho Theta psi - (Lambda / L) J + source term,

Theta the angle under which a panel is seen, Lambda the integral of ln r over it, J the
current that flows into the domain through it, and angle(x) = 2 pi inside, pi on an edge.
Collocation makes x the midpoint of each panel in turn.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from latchscan.fields.sheet_kernels import (
    Floats,
    Ints,
    Lines,
    Pieces,
    area_means,
    panel_layers,
)
from latchscan.fields.sheet_panels import Panels, SheetProblem
from latchscan.fields.sheet_quadrature import mutual_means
from latchscan.fields.sheet_sources import SheetSources


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Side:
    """The boundary of one domain: panels with the domain on their left.

    Attributes
    ----------
    domain
        Index of the domain.
    lines
        (n,) panels in the domain's orientation.
    row
        (n,) equation of each panel.
    potential, current
        Indices among the side's panels of those with unknown psi and unknown J.
    potential_column, current_column
        Their unknowns.
    sign
        Sign of J where it enters this domain: -1 on the far side of an interface.
    cut
        Indices among the side's panels of those on a cut.
    nodes
        (node, its panels on this side, whether they close around it) for every contact.
    """

    domain: int
    lines: Lines
    row: Ints
    potential: Ints
    potential_column: Ints
    current: Ints
    current_column: Ints
    sign: Floats
    cut: Ints
    cut_column: Ints
    nodes: tuple[tuple[int, Ints, bool], ...]


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Boundary:
    """All sides of a sheet and the numbering of its unknowns."""

    sides: tuple[Side, ...]
    share: Floats
    """(d,) rho, conductance over the largest one."""
    unit_s: float
    """The largest conductance g0 [S]."""
    log_reach: float
    """ln of a length above every distance; keeps the logarithm's sign (no degenerate scale)."""
    size: int
    node_column: Ints
    """(k,) unknown of every node, -1 for a grounded one."""
    node_share: Floats
    """(k,) 1 / (g0 R) of every node."""
    cut_column: Ints
    outlet_column: Ints
    """Unknown currents of all contacts."""
    outlet_node: Ints

    @classmethod
    def of(cls, problem: SheetProblem, panels: Panels) -> Boundary:
        """Number the unknowns of `panels` and collect the sides of every domain."""
        count = len(panels.left)
        two_sided = np.flatnonzero(panels.right >= 0)
        second = np.full(count, -1)
        second[two_sided] = count + np.arange(len(two_sided))
        free = np.flatnonzero(problem.node_resistance_ohm > 0)
        size = count + len(two_sided) + len(free)
        node_column = np.full(len(problem.node_resistance_ohm), -1)
        node_column[free] = count + len(two_sided) + np.arange(len(free))
        unit = float(problem.conductance_s.max())
        node_share = np.zeros(len(node_column))
        node_share[free] = 1.0 / (unit * problem.node_resistance_ohm[free])
        reach = 2.0 * float(np.hypot(*np.ptp(panels.lines.middle, axis=0))) + 1.0
        outlet = np.flatnonzero(panels.node >= 0)
        return cls(
            sides=tuple(
                _side(panels, domain, second) for domain in range(len(problem.conductance_s))
            ),
            share=problem.conductance_s / unit,
            unit_s=unit,
            log_reach=float(np.log(reach)),
            size=size,
            node_column=node_column,
            node_share=node_share,
            cut_column=np.flatnonzero(panels.cut),
            outlet_column=outlet,
            outlet_node=panels.node[outlet],
        )

    def full_angle(self, domain: int) -> float:
        """Factor of psi at an interior point: 2 pi rho."""
        return float(2 * np.pi * self.share[domain])

    def angle(self, points: Floats, domain: int) -> Floats:
        """(m,) factor of psi at points of the closed domain; less than 2 pi rho on an edge."""
        lines = self.sides[domain].lines
        _, double = panel_layers(points, lines, single=False, double=True)
        angle: Floats = double.sum(axis=1) * self.share[domain]
        return angle

    def point_rows(self, points: Floats, domain: int) -> Floats:
        """(m, size) factors of the unknowns in angle * psi at points; cuts are insulated."""
        side = self.sides[domain]
        rho = self.share[domain]
        rows = np.zeros((len(points), self.size))
        lines = side.lines.take(side.potential)
        _, double = panel_layers(points, lines, single=False, double=True)
        double *= rho
        rows[:, side.potential_column] = double
        rows[:, side.current_column] = -side.sign * self.current_factors(points, side, side.current)
        for node, panel, closed in side.nodes:
            if self.node_column[node] >= 0 and not closed:
                _, double = panel_layers(points, side.lines.take(panel), single=False, double=True)
                rows[:, self.node_column[node]] += rho * double.sum(axis=1)
        return rows

    def ground_cuts(self, rows: Floats, points: Floats, domain: int) -> None:
        """Change `point_rows` to those of grounded cuts, in place."""
        side = self.sides[domain]
        rows[:, side.cut_column] = -self.current_factors(points, side, side.cut)

    def current_factors(self, points: Floats, side: Side, panel: Ints) -> Floats:
        """(m, p) mean of ln r over the side's panels, seen from every point."""
        lines = side.lines.take(panel)
        single, _ = panel_layers(points, lines, single=True, double=False)
        single /= lines.length
        single -= self.log_reach
        return single

    def node_potentials(self, unknown: Floats) -> Floats:
        """(k, n) psi of every node."""
        result = np.zeros((len(self.node_column), unknown.shape[1]))
        free = self.node_column >= 0
        result[free] = unknown[self.node_column[free]]
        return result

    def cut_peak(self, unknown: Floats) -> Floats:
        """(n,) largest psi on insulated cuts."""
        peak: Floats = unknown[self.cut_column].max(axis=0, initial=0.0)
        return peak

    def imbalance(self, unknown: Floats, spread: int, *, grounded: bool) -> Floats:
        """(n,) current out of the sheet minus current into it; the first `spread` force 1 A."""
        out = -unknown[self.outlet_column].sum(axis=0)
        if grounded:
            out -= unknown[self.cut_column].sum(axis=0)
        out[:spread] -= 1.0
        return np.asarray(out)


def _side(panels: Panels, domain: int, second: Ints) -> Side:
    near = np.flatnonzero(panels.left == domain)
    far = np.flatnonzero(panels.right == domain)
    panel = np.concatenate([near, far])
    back = np.arange(len(panel)) >= len(near)
    lines = panels.lines.take(panel)
    turned = np.where(back, -1.0, 1.0)[:, None]
    lines = Lines(
        start=np.where(
            back[:, None], lines.start + lines.length[:, None] * lines.along, lines.start
        ),
        along=lines.along * turned,
        length=lines.length,
    )
    contact, interface = panels.node[panel] >= 0, panels.right[panel] >= 0
    potential, current = np.flatnonzero(~contact), np.flatnonzero(contact | interface)
    cut = np.flatnonzero(panels.cut[panel])
    nodes = []
    for node in np.unique(panels.node[panel][contact]):
        mine = np.flatnonzero(panels.node[panel] == node)
        nodes.append((int(node), mine, _closed(lines.take(mine))))
    return Side(
        domain=domain,
        lines=lines,
        row=np.where(back, second[panel], panel),
        potential=potential,
        potential_column=panel[potential],
        current=current,
        current_column=np.where(interface, second[panel], panel)[current],
        sign=np.where(back, -1.0, 1.0)[current],
        cut=cut,
        cut_column=panel[cut],
        nodes=tuple(nodes),
    )


def _closed(lines: Lines) -> bool:
    """Whether the panels form closed loops."""
    start = np.rint(lines.start * 1e4)
    end = np.rint((lines.start + lines.length[:, None] * lines.along) * 1e4)
    order, turned = np.lexsort(start.T), np.lexsort(end.T)
    return bool(np.array_equal(start[order], end[turned]))


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Equations:
    """The dense system for insulated cuts and the columns that change for grounded ones."""

    matrix: Floats
    cut_column: Ints
    grounded: Floats
    """(size, cuts) columns of the unknown currents of grounded cuts."""

    @classmethod
    def of(cls, boundary: Boundary) -> Equations:
        """Assemble the collocation equations of every side and the balance of every node."""
        matrix = np.zeros((boundary.size, boundary.size), order="F")
        grounded = np.zeros((boundary.size, len(boundary.cut_column)), order="F")
        place = np.full(boundary.size, -1)
        place[boundary.cut_column] = np.arange(len(boundary.cut_column))
        for side in boundary.sides:
            rho = boundary.share[side.domain]
            rows = boundary.point_rows(side.lines.middle, side.domain)
            np.negative(rows, out=rows)
            rows[side.potential, side.potential_column] += np.pi * rho
            for node, panel, closed in side.nodes:
                column = boundary.node_column[node]
                if column >= 0:
                    # a closed contact is seen under the angle -pi from its own edge
                    rows[panel, column] += (2 if closed else 1) * np.pi * rho
            matrix[side.row] += rows
            if len(side.cut):
                grounded[np.ix_(side.row, place[side.cut_column])] = boundary.current_factors(
                    side.lines.middle, side, side.cut
                )
        for node, column in enumerate(boundary.node_column):
            if column >= 0:
                matrix[column, column] = boundary.node_share[node]
                mine = boundary.outlet_column[boundary.outlet_node == node]
                matrix[column, mine] = 1.0
        return cls(matrix=matrix, cut_column=boundary.cut_column, grounded=grounded)


def source_terms(
    points: Floats, domain: int, sources: SheetSources, pieces: Pieces, boundary: Boundary
) -> Floats:
    """(m, n) source term at points of a domain: minus the mean of ln r over each source."""
    result = np.zeros((len(points), sources.count))
    chosen = np.flatnonzero(sources.domain == domain)
    if len(chosen):
        mean, _ = area_means(points, pieces.take(chosen))
        mean -= boundary.log_reach
        mean *= -sources.weight[chosen, None]
        owner, total = _by_owner(sources.owner[chosen], mean)
        result[:, owner] = total.T
    return result


def _by_owner(owner: Ints, rows: Floats) -> tuple[Ints, Floats]:
    """Owners that occur (rising) and the sums of their rows."""
    first = np.flatnonzero(np.diff(owner, prepend=-1))
    if len(first) == len(owner):
        return owner, rows
    return owner[first], np.add.reduceat(rows, first, axis=0)


def listen(boundary: Boundary, listeners: SheetSources) -> tuple[Floats, ...]:
    """Factors of the unknowns in the mean psi over every listener.

    Averaging the point equation over a listener turns each panel's integral into the
    listener's own area mean seen from the panel, which is smooth along the panel, so the
    midpoint value serves.

    Returns
    -------
    tuple
        (l, size) for insulated and, where there are cuts, for grounded cuts.
    """
    heard = listeners.pieces()
    cases = 2 if len(boundary.cut_column) else 1
    rows = tuple(np.zeros((listeners.count, boundary.size)) for _ in range(cases))
    for side in boundary.sides:
        chosen = np.flatnonzero(listeners.domain == side.domain)
        if len(chosen) == 0:
            continue
        rho = boundary.share[side.domain]
        scale = (listeners.weight[chosen] / boundary.full_angle(side.domain))[:, None]
        mean, slope = area_means(side.lines.middle, heard.take(chosen), side.lines.outward)
        mean -= boundary.log_reach
        mean *= -scale
        slope *= rho * scale * side.lines.length
        part = np.zeros((len(chosen), boundary.size))
        part[:, side.potential_column] = slope[:, side.potential]
        part[:, side.current_column] = side.sign * mean[:, side.current]
        for node, panel, closed in side.nodes:
            if boundary.node_column[node] >= 0 and not closed:
                part[:, boundary.node_column[node]] += slope[:, panel].sum(axis=1)
        for case in range(cases):
            if case == 1:
                part[:, side.cut_column] = mean[:, side.cut]
            owner, total = _by_owner(listeners.owner[chosen], part)
            rows[case][owner] += total
    return rows


def direct_means(boundary: Boundary, listeners: SheetSources, sources: SheetSources) -> Floats:
    """(l, n) mean psi over every listener that the sources make without any boundary."""
    result = np.zeros((listeners.count, sources.count))
    heard, driven = listeners.pieces(), sources.pieces()
    for side in boundary.sides:
        i = np.flatnonzero(listeners.domain == side.domain)
        j = np.flatnonzero(sources.domain == side.domain)
        if len(i) == 0 or len(j) == 0:
            continue
        part = boundary.log_reach - mutual_means(heard.take(i), driven.take(j))
        part *= listeners.weight[i, None] * sources.weight[j] / boundary.full_angle(side.domain)
        rows, part = _by_owner(listeners.owner[i], part)
        columns, part = _by_owner(sources.owner[j], part.T)
        result[np.ix_(rows, columns)] += part.T
    return result
