"""Laws that every sheet obeys, and the solver's own alarms."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.integrate import dblquad, quad
from sheet_shapes import Sheet, box, spread

from latchscan.errors import GeometryError, ResolutionError
from latchscan.fields.sheet import GROUNDED, INSULATED, PanelRule, SheetProblem, solve_sheet
from latchscan.fields.sheet_kernels import (
    Lines,
    area_means,
    exact_layers,
    panel_layers,
    pieces_from_edges,
)
from latchscan.fields.sheet_peak import largest_potentials
from latchscan.fields.sheet_quadrature import mutual_means

SOURCES = spread(box(4, 1, 5, 2), box(6, 1, 6.5, 3), [(7.5, 1), (8.5, 1), (8.5, 1.6), (7.5, 2.4)])


def well(
    *taps: tuple[float, float, float, float], resistance_ohm: float = 0.0, cut: bool = False
) -> SheetProblem:
    """A well of 10 x 4 um at 1 kohm per square with taps inside; its right edge may be a cut."""
    sheet = Sheet(1e-3)
    sheet.line([(10, 4), (0, 4), (0, 0), (10, 0)]).line([(10, 0), (10, 4)], cut=cut)
    for tap in taps:
        ring = box(*tap)
        sheet.line([*ring[::-1], ring[-1]], node=sheet.node(resistance_ohm))
    return sheet.problem()


def test_reciprocity() -> None:
    # mean over j for 1 A into i equals mean over i for 1 A into j (Maxwell, Treatise, art. 281)
    mean = solve_sheet(well((1, 1, 2, 3), resistance_ohm=30.0), SOURCES).mean_ohm[0]
    assert mean == pytest.approx(mean.T, rel=2e-3)
    assert np.all(np.diag(mean) > mean - 1e-9)


def test_the_current_forced_in_leaves_through_the_contacts() -> None:
    solution = solve_sheet(well((1, 1, 2, 3), (9, 1, 9.5, 3)), SOURCES, rule=PanelRule())
    assert np.abs(solution.imbalance).max() < 3e-3
    assert solution.residual < 1e-10


def test_one_more_tap_never_raises_a_resistance() -> None:
    # Rayleigh's monotonicity: grounded metal only lowers potentials
    few = solve_sheet(well((1, 1, 2, 3)), SOURCES)
    more = solve_sheet(well((1, 1, 2, 3), (5.2, 2.2, 5.8, 3)), SOURCES)
    assert np.all(more.mean_ohm < few.mean_ohm)


def test_the_two_ways_of_treating_a_cut_enclose_the_whole() -> None:
    # Rayleigh again: the rest of the sheet conducts better than nothing, worse than metal
    half = solve_sheet(well((1, 1, 2, 3), cut=True), SOURCES)
    sheet = Sheet(1e-3)
    sheet.line([(10, 4), (0, 4), (0, 0), (10, 0)]).line([(10, 0), (14, 0), (14, 4), (10, 4)])
    ring = box(1, 1, 2, 3)
    sheet.line([*ring[::-1], ring[-1]], node=sheet.node())
    right = box(12, 1, 13, 3)
    sheet.line([*right[::-1], right[-1]], node=sheet.node())
    whole = np.diag(solve_sheet(sheet.problem(), SOURCES).mean_ohm[0])
    assert np.all(np.diag(half.mean_ohm[INSULATED]) > whole)
    assert np.all(np.diag(half.mean_ohm[GROUNDED]) < whole)


def test_a_line_through_a_uniform_sheet_changes_nothing() -> None:
    # an interface between equal sheets is no interface
    sheet = Sheet(1e-3, 1e-3)
    sheet.line([(4, 4), (0, 4), (0, 0), (4, 0)])
    sheet.line([(4, 0), (10, 0), (10, 4), (4, 4)], domain=1).line([(4, 0), (4, 4)], other=1)
    ring = box(1, 1, 2, 3)
    sheet.line([*ring[::-1], ring[-1]], node=sheet.node())
    source = spread(box(6, 1, 7, 2), domain=[1])
    rule = PanelRule().coarser(0.4)
    split = solve_sheet(sheet.problem(), source, rule=rule)
    plain = solve_sheet(well((1, 1, 2, 3)), spread(box(6, 1, 7, 2)), rule=rule)
    assert split.mean_ohm[0, 0, 0] == pytest.approx(plain.mean_ohm[0, 0, 0], rel=3e-3)
    at = np.array([[4.0, 2.0], [8.0, 2.0]])
    split_at = split.potentials(at, np.array([0, 1]))[0, :, 0]
    plain_at = plain.potentials(at, np.array([0, 0]))[0, :, 0]
    assert split_at == pytest.approx(plain_at, rel=5e-3)


def test_two_pieces_of_a_source_are_the_whole_of_it() -> None:
    whole = solve_sheet(well((1, 1, 2, 3)), spread(box(4, 1, 6, 2)))
    both = spread(box(4, 1, 4.5, 2), box(4.5, 1, 6, 2))
    pieces = type(both)(
        edge_start_um=both.edge_start_um,
        edge_end_um=both.edge_end_um,
        first=both.first,
        owner=np.array([0, 0]),
        domain=np.array([0, 0]),
        weight=np.array([0.25, 0.75]),
    )
    split = solve_sheet(well((1, 1, 2, 3)), pieces)
    assert split.mean_ohm[0, 0, 0] == pytest.approx(whole.mean_ohm[0, 0, 0], rel=1e-3)
    peak, split_peak = largest_potentials(whole)[0, 0], largest_potentials(split)[0, 0]
    assert split_peak == pytest.approx(peak, rel=3e-3)


def test_the_largest_potential_is_the_largest_of_many_points() -> None:
    solution = solve_sheet(well((1, 1, 2, 3)), SOURCES)
    grid = np.stack(np.meshgrid(np.linspace(6, 6.5, 21), np.linspace(1, 3, 81)), -1).reshape(-1, 2)
    values = solution.potentials(grid, np.zeros(len(grid), dtype=int))[0, :, 1]
    assert largest_potentials(solution)[0, 1] == pytest.approx(values.max(), rel=3e-3)
    assert values.mean() == pytest.approx(solution.mean_ohm[0, 1, 1], rel=0.01)


def test_a_sheet_without_a_grounded_contact_is_refused() -> None:
    with pytest.raises(GeometryError, match="no path to a grounded contact"):
        solve_sheet(well(), SOURCES)
    with pytest.raises(GeometryError, match="no path to a grounded contact"):
        solve_sheet(well((1, 1, 2, 3), resistance_ohm=float("inf")), SOURCES)


def test_a_rule_that_asks_for_too_much_is_refused() -> None:
    with pytest.raises(ResolutionError, match="panels"):
        solve_sheet(well((1, 1, 2, 3)), SOURCES, rule=PanelRule(longest_um=1e-3, smallest_um=1e-4))


@settings(max_examples=25, deadline=None, derandomize=True)
@given(x=st.floats(-4, 4), y=st.floats(-4, 4), turn=st.floats(0, 6.28), length=st.floats(0.1, 3))
def test_panel_integrals_match_adaptive_quadrature(
    x: float, y: float, turn: float, length: float
) -> None:
    # scipy.integrate.quad of the definitions
    along = np.array([[np.cos(turn), np.sin(turn)]])
    line = Lines(start=np.array([[0.1, 0.2]]), along=along, length=np.array([length]))
    gap = np.hypot(*(line.start[0] + np.linspace(0, length, 50)[:, None] * along - (x, y)).T)
    if gap.min() < 0.05:
        return
    point = np.array([[x, y]])
    normal = line.outward[0]

    def away(s: float) -> np.ndarray[tuple[int], np.dtype[np.float64]]:
        return np.asarray(line.start[0] + s * along[0] - point[0])

    single = quad(lambda s: 0.5 * np.log(away(s) @ away(s)), 0, length)[0]
    double = quad(lambda s: (away(s) @ normal) / (away(s) @ away(s)), 0, length)[0]
    exact = exact_layers(point, line)
    assert exact[0][0] == pytest.approx(single, abs=1e-6)
    assert exact[1][0] == pytest.approx(double, abs=1e-6)
    quick = panel_layers(point, line, single=True, double=True)
    assert quick[0][0, 0] == pytest.approx(single, abs=3e-4 * length)
    assert quick[1][0, 0] == pytest.approx(double, abs=3e-3)


@pytest.mark.parametrize("point", [(0.5, 0.4), (2.0, 0.0), (1.1, 3.0), (-4.0, 5.0)])
@pytest.mark.parametrize("ring", [box(0, 0, 2, 1), [(0, 0), (2, 0), (0.5, 1.5)]])
def test_area_means_match_adaptive_quadrature(
    point: tuple[float, float], ring: list[tuple[float, float]]
) -> None:
    # scipy.integrate.dblquad over the same area, slope by central difference
    corners = np.array(ring)
    pieces = pieces_from_edges(corners, np.roll(corners, -1, axis=0), np.array([0, len(ring)]))

    def top(x: float) -> float:
        if len(ring) == 4:
            return 1.0
        return 3 * x if x < 0.5 else 2.0 - x

    def mean(px: float, py: float) -> float:
        def value(y: float, x: float) -> float:
            return 0.5 * float(np.log((x - px) ** 2 + (y - py) ** 2 + 1e-18))

        parts = [(0, 0.5), (0.5, 2)]
        total = sum(dblquad(value, a, b, 0, top, epsabs=1e-6)[0] for a, b in parts)
        return total / float(pieces.area[0])

    direction = np.array([[0.6, 0.8]])
    found, slope = area_means(np.array([point]), pieces, direction)
    step = 1e-2
    ahead = mean(point[0] + 0.6 * step, point[1] + 0.8 * step)
    back = mean(point[0] - 0.6 * step, point[1] - 0.8 * step)
    assert found[0, 0] == pytest.approx(mean(*point), abs=5e-4)
    assert slope[0, 0] == pytest.approx((ahead - back) / (2 * step), abs=2e-2)


def test_mutual_means_near_and_far_agree_with_points() -> None:
    # the mean of area means over a fine raster of the listening rectangle
    rings = [box(0, 0, 0.5, 7), box(1, 0, 1.5, 7), box(9, 3, 10, 4), [(3, 0), (5, 0), (4, 2)]]
    points = [np.array(ring, dtype=float) for ring in rings]
    pieces = pieces_from_edges(
        np.concatenate(points),
        np.concatenate([np.roll(p, -1, axis=0) for p in points]),
        np.cumsum([0, *(len(p) for p in points)]),
    )
    found = mutual_means(pieces, pieces)
    assert found == pytest.approx(found.T, abs=2e-3)
    for k, (x0, y0, x1, y1) in enumerate(((0, 0, 0.5, 7), (1, 0, 1.5, 7), (9, 3, 10, 4))):
        x = x0 + (x1 - x0) * (np.arange(20) + 0.5) / 20
        y = y0 + (y1 - y0) * (np.arange(100) + 0.5) / 100
        raster = np.stack(np.meshgrid(x, y), -1).reshape(-1, 2)
        mean, _ = area_means(raster, pieces)
        assert found[k] == pytest.approx(mean.mean(axis=1), abs=1e-3)
