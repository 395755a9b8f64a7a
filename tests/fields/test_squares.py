"""Squares of plane conductors against published values."""

from __future__ import annotations

import itertools

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from latchscan.fields.squares import Flags, Floats, graded_lines, squares_between

Box = tuple[float, float, float, float]


def solved(boxes: list[Box], terminals: list[Box], finest: float) -> Floats:
    """Squares of a union of rectangles between rectangles (or lines) that are terminals."""
    edges = np.array([*boxes, *terminals], dtype=np.float64)
    x, y = (graded_lines(edges[:, [axis, axis + 2]].ravel(), finest) for axis in (0, 1))
    middle_x, middle_y = (x[1:] + x[:-1]) / 2, (y[1:] + y[:-1]) / 2
    sheet = np.zeros((len(middle_y), len(middle_x)), dtype=np.bool_)
    for box in boxes:
        sheet |= within(middle_x, middle_y, box)
    return squares_between(x, y, sheet, [within(x, y, box) for box in terminals])


def within(x: Floats, y: Floats, box: Box) -> Flags:
    x0, y0, x1, y1 = box
    return np.asarray(((y >= y0) & (y <= y1))[:, None] & ((x >= x0) & (x <= x1)))


@settings(deadline=None)
@given(length=st.floats(0.1, 50.0), width=st.floats(0.1, 50.0))
def test_a_bar_has_length_over_width(length: float, width: float) -> None:
    # Source: Ohm's law in a uniform sheet, R = R_sh L / W
    found = solved(
        [(0, 0, length, width)], [(0, 0, 0, width), (length, 0, length, width)], width / 4
    )
    assert found[0, 1] == pytest.approx(length / width, rel=1e-9)


def test_a_right_angle_corner_has_0_559_squares() -> None:
    # Source: P. M. Hall, "Resistance calculations for thin film patterns", Thin Solid Films 1,
    # 277, 1967 (0.559 squares)
    legs: list[Box] = [(0, 0, 1, 6), (0, 0, 6, 1)]
    found = solved(legs, [(0, 6, 1, 6), (6, 0, 6, 1)], 1 / 128)
    assert found[0, 1] - 10.0 == pytest.approx(0.559, abs=0.005)


def test_the_corner_converges() -> None:
    # Source: Hall 1967 as above; the error of a re-entrant corner falls with the cell's size
    legs: list[Box] = [(0, 0, 1, 6), (0, 0, 6, 1)]
    ends: list[Box] = [(0, 6, 1, 6), (6, 0, 6, 1)]
    errors = [0.559 - (solved(legs, ends, 1 / n)[0, 1] - 10.0) for n in (4, 8, 16, 32)]
    assert all(later < 0.75 * earlier for earlier, later in itertools.pairwise(errors))


def test_bars_in_series_and_parallel() -> None:
    # Source: Kirchhoff's laws; three terminals in line, the middle one floats
    bar: list[Box] = [(0, 0, 9, 1)]
    ends: list[Box] = [(0, 0, 0, 1), (3, 0, 3, 1), (9, 0, 9, 1)]
    found = solved(bar, ends, 0.25)
    assert found == pytest.approx(np.array([[0, 3, 9], [3, 0, 6], [9, 6, 0]]), abs=1e-9)


def test_terminals_without_a_way_between_them_are_infinitely_far() -> None:
    # Source: definition of an open circuit
    found = solved([(0, 0, 2, 1), (4, 0, 6, 1)], [(0, 0, 0, 1), (2, 0, 2, 1), (6, 0, 6, 1)], 0.25)
    assert found[0, 1] == pytest.approx(2.0)
    assert found[0, 2] == np.inf
    assert found[2, 1] == np.inf


def test_a_terminal_off_the_sheet_is_not_a_number() -> None:
    # Source: definition
    found = solved([(0, 0, 2, 1)], [(0, 0, 0, 1), (5, 0, 5, 1)], 0.25)
    assert np.isnan(found[0, 1])


@settings(deadline=None)
@given(st.lists(st.floats(-100.0, 100.0), min_size=2, max_size=8, unique=True))
def test_lines_hold_every_edge_and_ascend(edges: list[float]) -> None:
    # Source: contract of `graded_lines`
    places = np.array(edges)
    lines = graded_lines(places, 0.5)
    assert np.isin(places, lines).all()
    assert np.all(np.diff(lines) > 0)
