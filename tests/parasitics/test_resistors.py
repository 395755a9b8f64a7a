"""Resistance of pieces of wiring against published squares and hand calculations."""

from __future__ import annotations

import numpy as np
import pytest
import shapely
from hypothesis import given, settings
from hypothesis import strategies as st
from shapely.affinity import rotate, scale, translate

from latchscan.parasitics.resistors import piece_squares


def between(polygon: object, *terminals: object) -> float:
    shapes = np.empty(len(terminals), dtype=np.object_)
    shapes[:] = terminals
    return float(piece_squares(polygon, shapes)[0, 1])


def test_bar_between_its_ends() -> None:
    # Source: Ohm's law in a uniform sheet, R = R_sh L / W
    bar = shapely.box(2.0, 1.0, 12.0, 1.5)
    ends = shapely.LineString([(2, 1), (2, 1.5)]), shapely.LineString([(12, 1), (12, 1.5)])
    assert between(bar, *ends) == pytest.approx(20.0)


def test_serpentine_counts_its_corners() -> None:
    # Source: P. M. Hall, "Resistance calculations for thin film patterns", Thin Solid Films 1,
    # 277, 1967: a right-angle corner is 0.559 squares.  Three legs of 19 straight squares, two
    # turns of two corners with one square between them
    line = shapely.LineString(
        [(0, 0.5), (19.5, 0.5), (19.5, 2.5), (0.5, 2.5), (0.5, 4.5), (20, 4.5)]
    )
    snake = line.buffer(0.5, cap_style="flat", join_style="mitre")
    ends = shapely.LineString([(0, 0), (0, 1)]), shapely.LineString([(20, 4), (20, 5)])
    by_hand = 19 + 18 + 19 + 2 * 1 + 4 * 0.559
    assert between(snake, *ends) == pytest.approx(by_hand, rel=0.002)


def test_slanted_bar_is_that_bar() -> None:
    # Source: resistance does not depend on the direction of the axes
    bar = shapely.box(0, 0, 10, 1)
    ends = [shapely.LineString([(0, 0), (0, 1)]), shapely.LineString([(10, 0), (10, 1)])]
    turned = [rotate(shape, 45, origin=(0, 0)) for shape in (bar, *ends)]
    assert between(*turned) == pytest.approx(10.0, rel=0.08)


def test_contacts_inside_a_strap() -> None:
    # Source: reference solution below, a small contact adds spreading resistance: more than the
    # squares between facing edges, less than between points
    strap = shapely.box(0, 0, 8, 1)
    contacts = shapely.box(0.4, 0.4, 0.6, 0.6), shapely.box(7.4, 0.4, 7.6, 0.6)
    found = between(strap, *contacts)
    assert 6.8 < found < 8.5


@settings(deadline=None)
@given(
    angle=st.sampled_from([0, 90, 180, 270]),
    mirrored=st.booleans(),
    dx=st.integers(-1000, 1000),
    dy=st.integers(-1000, 1000),
)
def test_where_and_how_it_lies_changes_nothing(
    angle: int, mirrored: bool, dx: int, dy: int
) -> None:
    # Source: symmetry of the plane
    shapes = [
        shapely.union(shapely.box(0, 0, 1, 4), shapely.box(0, 0, 3, 1)),
        shapely.LineString([(0, 4), (1, 4)]),
        shapely.LineString([(3, 0), (3, 1)]),
    ]
    moved = [
        translate(
            rotate(scale(s, -1 if mirrored else 1, 1, origin=(0, 0)), angle, origin=(0, 0)), dx, dy
        )
        for s in shapes
    ]
    assert between(*moved) == pytest.approx(between(*shapes), rel=1e-6)


def test_terminal_off_the_piece() -> None:
    # Source: definition, no current can enter there
    bar = shapely.box(0, 0, 4, 1)
    assert np.isnan(between(bar, shapely.box(9, 9, 10, 10), shapely.LineString([(0, 0), (0, 1)])))
