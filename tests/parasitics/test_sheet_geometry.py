"""Awkward shapes on their way to the field solver.

Expected values are counted by hand or computed by shapely on the whole shapes.
"""

from __future__ import annotations

from typing import Any

import numpy as np
import pytest
import shapely
from wells import objects

from latchscan.fields.sheet import solve_sheet
from latchscan.parasitics.sheet_geometry import SheetOutline, outline_sheet, spread_sources

box = shapely.box
WELL = box(0, 0, 10, 6)


def outline(
    taps: list[Any], *, sheets: list[tuple[float, Any]] | None = None, window: Any = None
) -> SheetOutline:
    resistances = np.full(len(taps), 10.0)
    return outline_sheet(sheets or [(1e-3, WELL)], objects(taps), resistances, window)


def length(found: SheetOutline, chosen: Any) -> float:
    """Length of the chosen boundary segments."""
    p = found.problem
    return float(np.hypot(*(p.end_um - p.start_um)[chosen].T).sum())


def resistance(found: SheetOutline, source: Any) -> float:
    sources = spread_sources(objects([source]), found.parts)
    return float(solve_sheet(found.problem, sources).mean_ohm[0, 0, 0])


def test_a_tap_inside_is_a_hole_with_its_whole_edge_as_contact() -> None:
    found = outline([box(2, 2, 3, 4)])
    assert length(found, found.problem.node == 0) == pytest.approx(6.0)
    assert length(found, found.problem.node < 0) == pytest.approx(32.0)
    assert found.whole
    assert found.tied.tolist() == [True]


@pytest.mark.parametrize("second", [box(3, 2, 4, 4), box(2.5, 1, 3.5, 3)], ids=["beside", "over"])
def test_taps_that_touch_are_one_node_with_contacts_in_parallel(second: Any) -> None:
    first = box(2, 2, 3, 4)
    found = outline([first, second, box(7, 2, 8, 4)])
    assert sorted(found.problem.node_resistance_ohm.tolist()) == [5.0, 10.0]
    outer = first.union(second).length + 6.0
    assert length(found, found.problem.node >= 0) == pytest.approx(outer)


def test_a_tap_over_the_wells_edge_counts_inside_only() -> None:
    found = outline([box(-1, 2, 1, 4)])
    assert length(found, found.problem.node == 0) == pytest.approx(4.0)
    assert length(found, found.problem.node < 0) == pytest.approx(30.0)


def test_a_tap_with_a_hole_leaves_a_part_inside_it() -> None:
    ring = box(2, 1, 8, 5).difference(box(3, 2, 7, 4))
    found = outline([ring])
    assert len(found.parts) == 2
    assert found.tied.all()
    assert length(found, found.problem.node == 0) == pytest.approx(20.0 + 12.0)


def test_a_window_cuts_the_sheet_but_not_a_tap_that_crosses_it() -> None:
    found = outline([box(4, 2, 6, 3)], window=(-2.0, -2.0, 5.0, 9.0))
    assert not found.whole
    assert length(found, found.problem.cut) == pytest.approx(5.0)
    assert length(found, found.problem.node == 0) == pytest.approx(3.0)


def test_a_window_on_the_wells_own_edge_cuts_nothing() -> None:
    assert outline([box(2, 2, 3, 4)], window=(0.0, 0.0, 10.0, 6.0)).whole


def test_neighbouring_sheets_meet_whatever_their_corners() -> None:
    # a corner of one side only, and a 45 degree border whose crossing is off the 1 nm grid
    left = shapely.Polygon([(0, 0), (4.0, 0), (6.0005, 2.0005), (4, 6), (0, 6)])
    right = WELL.difference(left)
    found = outline([box(1, 1, 2, 5)], sheets=[(1e-3, left), (1e-3, right)])
    shared = (found.problem.left >= 0) & (found.problem.right >= 0)
    assert length(found, shared) == pytest.approx(left.intersection(right).length, abs=0.01)
    assert len(set(found.component.tolist())) == 1
    plain = resistance(outline([box(1, 1, 2, 5)]), box(8, 2, 9, 3))
    assert resistance(found, box(8, 2, 9, 3)) == pytest.approx(plain, rel=0.01)


def test_a_tap_on_a_slanted_border_between_sheets() -> None:
    left = shapely.Polygon([(0, 0), (3, 0), (7.001, 6), (0, 6)])
    found = outline([box(4, 2, 5, 3.5)], sheets=[(1e-3, left), (1e-3, WELL.difference(left))])
    plain = outline([box(4, 2, 5, 3.5)])
    assert length(found, found.problem.node >= 0) == pytest.approx(5.0, abs=0.01)
    for source in (box(1, 1, 2, 2), box(8, 2, 9, 3), box(5.1, 4, 6.6, 5)):
        assert resistance(found, source) == pytest.approx(resistance(plain, source), rel=0.01)


def test_slivers_vanish() -> None:
    # a strip of 0.4 nm between two taps is no sheet
    found = outline([box(2, 0, 3, 6), box(3.0004, 0, 4, 6)])
    assert len(found.parts) == 2
    assert found.parts[0].area + found.parts[1].area == pytest.approx(48.0, abs=0.02)


def test_a_hole_in_the_well_is_an_edge() -> None:
    found = outline([box(1, 1, 2, 5)], sheets=[(1e-3, WELL.difference(box(4, 1, 5, 5)))])
    assert length(found, found.problem.node < 0) == pytest.approx(32.0 + 10.0)
    plain = resistance(outline([box(1, 1, 2, 5)]), box(8, 2, 9, 3))
    assert resistance(found, box(8, 2, 9, 3)) > 1.1 * plain


def test_a_source_over_two_sheets_is_split_by_area() -> None:
    found = outline([box(1, 1, 2, 5)], sheets=[(1e-3, box(0, 0, 4, 6)), (1e-2, box(4, 0, 10, 6))])
    sources = spread_sources(objects([box(6, 1, 7, 2), box(3, 1, 7, 2)]), found.parts)
    assert sources.owner.tolist() == [0, 1, 1]
    assert sources.weight == pytest.approx([1.0, 0.25, 0.75])
