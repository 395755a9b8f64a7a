"""The sheet solver against closed forms; the source of each stands beside it."""

from __future__ import annotations

import numpy as np
import pytest
from sheet_shapes import Sheet, box, circle, injected, spread
from skfem import Basis, ElementTriP1, MeshTri

from latchscan.fields.sheet import PanelRule, SheetProblem, solve_sheet
from latchscan.fields.sheet_kernels import pieces_from_edges
from latchscan.fields.sheet_peak import largest_potentials
from latchscan.fields.sheet_rectangles import rectangle_pair_means

FLOATING = float("inf")


def panels(longest_um: float) -> PanelRule:
    """Panels of one length everywhere but at the corners of contacts."""
    return PanelRule(longest_um=longest_um, size_share=1e3)


def bar(length: float, width: float) -> SheetProblem:
    """1 kohm per square, grounded on the left, contact 1 on the right."""
    sheet = Sheet(1e-3)
    left, right = sheet.node(), sheet.node(FLOATING)
    sheet.line([(0, 0), (length, 0)]).line([(length, 0), (length, width)], node=right)
    return sheet.line([(length, width), (0, width)]).line([(0, width), (0, 0)], node=left).problem()


def test_a_bar_has_length_over_width_squares() -> None:
    # elementary: R = R_sheet L / W
    solution = solve_sheet(bar(6.0, 2.0), injected(1), rule=panels(0.05))
    assert solution.node_ohm[0, 1, 0] == pytest.approx(3000.0, rel=3e-3)


def test_error_falls_at_least_like_length_to_the_1_4() -> None:
    # the bar again: slope of log error against log panel length
    lengths = np.array([0.5, 0.25, 0.125, 0.0625])
    error = [
        abs(solve_sheet(bar(4.0, 1.0), injected(1), rule=panels(h)).node_ohm[0, 1, 0] - 4000.0)
        for h in lengths
    ]
    order = np.polyfit(np.log(lengths), np.log(error), 1)[0]
    assert 1.4 < order < 2.5


def test_a_right_angle_corner_has_0_559_squares() -> None:
    # Hall, "Resistance calculations for thin film patterns", Thin Solid Films 1 (1967) 277
    def bend(arm: float) -> float:
        sheet = Sheet(1.0)
        start, end = sheet.node(), sheet.node(FLOATING)
        sheet.line([(0, 1 + arm), (0, 0), (1 + arm, 0)])
        sheet.line([(1 + arm, 0), (1 + arm, 1)], node=end)
        sheet.line([(1 + arm, 1), (1, 1), (1, 1 + arm)])
        sheet.line([(1, 1 + arm), (0, 1 + arm)], node=start)
        rule = panels(0.04)
        return float(solve_sheet(sheet.problem(), injected(1), rule=rule).node_ohm[0, 1, 0])

    assert bend(2.0) - 4.0 == pytest.approx(0.559, abs=0.012)


def test_an_annulus_has_ln_ratio_over_two_pi_squares() -> None:
    # derived: ln(b/a) / (2 pi) = 0.36647 squares for b/a = 10
    sheet = Sheet(1.0)
    outer, inner = sheet.node(), sheet.node(FLOATING)
    sheet.line(circle(10.0, 96), node=outer).line(circle(1.0, 96)[::-1], node=inner)
    solution = solve_sheet(sheet.problem(), injected(1), rule=panels(1.0))
    assert solution.node_ohm[0, 1, 0] == pytest.approx(0.36647, rel=1e-3)


def test_a_square_obeys_van_der_pauw() -> None:
    # van der Pauw, Philips Research Reports 13 (1958) 1: R_sheet = (pi / ln 2) R for a square
    small = 0.004
    sheet = Sheet(1.0)
    nodes = [sheet.node() if k == 1 else sheet.node(FLOATING) for k in range(4)]
    corners = box(0, 0, 1, 1)
    for k in range(4):
        (x0, y0), (x1, y1) = corners[k], corners[(k + 1) % 4]
        dx, dy = np.sign(x1 - x0) * small, np.sign(y1 - y0) * small
        sheet.line([(x0, y0), (x0 + dx, y0 + dy)], node=nodes[k])
        sheet.line([(x0 + dx, y0 + dy), (x1 - dx, y1 - dy)])
        sheet.line([(x1 - dx, y1 - dy), (x1, y1)], node=nodes[(k + 1) % 4])
    rule = PanelRule(longest_um=0.05, smallest_um=0.001)
    voltage = solve_sheet(sheet.problem(), injected(0), rule=rule).node_ohm[0, :, 0]
    assert np.pi / np.log(2) * (voltage[3] - voltage[2]) == pytest.approx(1.0, rel=0.01)


@pytest.mark.parametrize(("both", "share"), [(False, 1 / 2), (True, 1 / 8)])
def test_a_strip_well_drops_as_derived(both: bool, share: float) -> None:
    # derived: uniform collection of I, drop I R l/(2w) with one tap, I R l/(8w) with two
    sheet = Sheet(1e-3)
    left = sheet.node()
    sheet.line([(0, 0), (4, 0)]).line([(4, 0), (4, 1)], node=left if both else -1)
    sheet.line([(4, 1), (0, 1)]).line([(0, 1), (0, 0)], node=left)
    solution = solve_sheet(sheet.problem(), spread(box(0, 0, 4, 1)), rule=panels(0.0625))
    assert largest_potentials(solution)[0, 0] == pytest.approx(4000.0 * share, rel=5e-3)


def test_a_disk_with_a_ring_tap_drops_one_over_four_pi() -> None:
    # derived: uniform collection in a disk grounded at its rim, drop I R_sheet / (4 pi)
    sheet = Sheet(1.0)
    sheet.line(circle(5.0, 96), node=sheet.node())
    solution = solve_sheet(sheet.problem(), spread(circle(5.0, 96)[:-1]), rule=panels(0.5))
    centre = solution.potentials(np.zeros((1, 2)), np.zeros(1, dtype=int))[0, 0, 0]
    assert centre == pytest.approx(1 / (4 * np.pi), rel=1e-3)
    # the mean over the disk is half of that
    assert solution.mean_ohm[0, 0, 0] == pytest.approx(1 / (8 * np.pi), rel=1e-3)


def test_a_contact_resistance_adds_in_series() -> None:
    # elementary: the whole ampere passes the contact
    sheet = Sheet(1e-3)
    tap = sheet.node(70.0)
    sheet.line([(0, 0), (4, 0), (4, 1), (0, 1)]).line([(0, 1), (0, 0)], node=tap)
    source = spread(box(2.5, 0.2, 3.5, 0.8))
    tied = solve_sheet(sheet.problem(), source, rule=panels(0.25))
    sheet.resistance[tap] = 0.0
    grounded = solve_sheet(sheet.problem(), source, rule=panels(0.25))
    assert tied.node_ohm[0, 0, 0] == pytest.approx(70.0, rel=5e-3)
    added = tied.mean_ohm[0, 0, 0] - grounded.mean_ohm[0, 0, 0]
    assert added == pytest.approx(70.0, rel=5e-3)


@pytest.mark.parametrize(("series", "expected"), [(True, 2200.0), (False, 4000 / 11)])
def test_two_domains_in_series_and_in_parallel(series: bool, expected: float) -> None:
    # elementary: 2 squares of 1 kohm and 2 of 100 ohm in series; 4 of each side by side
    sheet = Sheet(1e-3, 1e-2)
    start, end = sheet.node(), sheet.node(FLOATING)
    if series:
        sheet.line([(0, 1), (0, 0)], node=start).line([(4, 0), (4, 1)], domain=1, node=end)
        for x, domain in ((0, 0), (2, 1)):
            sheet.line([(x, 0), (x + 2, 0)], domain=domain)
            sheet.line([(x + 2, 1), (x, 1)], domain=domain)
        sheet.line([(2, 0), (2, 1)], other=1)
    else:
        for y, domain in ((0, 0), (1, 1)):
            sheet.line([(0, y + 1), (0, y)], domain=domain, node=start)
            sheet.line([(4, y), (4, y + 1)], domain=domain, node=end)
        sheet.line([(0, 0), (4, 0)]).line([(4, 2), (0, 2)], domain=1)
        sheet.line([(4, 1), (0, 1)], other=1)
    solution = solve_sheet(sheet.problem(), injected(1), rule=panels(0.1))
    assert solution.node_ohm[0, 1, 0] == pytest.approx(expected, rel=5e-3)


def test_the_mean_distance_of_a_square_is_maxwells() -> None:
    # Maxwell, Treatise, 3rd ed., art. 692: geometric mean distance of a square 0.44705 side
    low, high = np.zeros((1, 2)), np.ones((1, 2))
    assert np.exp(rectangle_pair_means(low, high, low, high))[0] == pytest.approx(0.44705, abs=1e-5)


def test_moments_of_a_triangle_are_those_of_finite_elements() -> None:
    # scikit-fem integrates the same polynomials over a mesh of the same triangle
    corners = np.array([[1.0, 2.0], [4.0, 2.5], [2.0, 5.0]])
    pieces = pieces_from_edges(corners, np.roll(corners, -1, axis=0), np.array([0, 3]))
    basis = Basis(MeshTri(corners.T, np.array([[0], [1], [2]])), ElementTriP1(), intorder=6)
    x, y = np.asarray(basis.global_coordinates())
    area = basis.dx.sum()
    centre = np.array([(x * basis.dx).sum(), (y * basis.dx).sum()]) / area
    z = (x - centre[0]) + 1j * (y - centre[1])
    assert pieces.area[0] == pytest.approx(area)
    assert pieces.centre[0] == pytest.approx(centre)
    for column, power in enumerate((2, 3, 4)):
        mean = (z**power * basis.dx).sum() / area
        assert abs(pieces.moment[0, column] - mean) < 1e-9 * pieces.radius[0] ** power
