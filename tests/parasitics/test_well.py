"""Well resistances against finite elements, and what may not change them.

The finite elements are scikit-fem's; nothing of the boundary elements enters them.
"""

from __future__ import annotations

from typing import Any

import numpy as np
import pytest
import shapely
from wells import ALONE, finite_elements, layout_of, moved, nwell, objects, pairs_of

from latchscan.errors import TechnologyError
from latchscan.layout.model import Body, Layout
from latchscan.parasitics import well as well_module
from latchscan.parasitics.material import sheet_temperature_factor
from latchscan.parasitics.well import solve_wells
from latchscan.tasks import Silent, open_workers
from latchscan.technology.load import load_technology
from latchscan.technology.model import Technology

HOT_K = 398.15
NO_PAIRS = pairs_of([])
box = shapely.box


@pytest.fixture(scope="module")
def technology() -> Technology:
    return load_technology("larch180").technology


def sheet_ohm(technology: Technology, kind: str) -> float:
    typical = getattr(technology.wells, f"{kind}_sheet_resistance_ohm_sq").typical
    return float(typical * sheet_temperature_factor(technology, HOT_K))


def row_well() -> Layout:
    """A standard-cell row: tap strip, tap beside the sources, butted and remote emitters."""
    taps = [(box(0.5, 5.2, 9.5, 5.6), 0, 9), (box(10, 1, 10.5, 3), 0, 4)]
    emitters = [box(0.8 + 1.4 * k, 1.0, 1.3 + 1.4 * k, 2.6) for k in range(6)]
    emitters += [box(10.5, 1, 11.2, 3), box(12.8, 0.6, 13.4, 1.2), box(9.6, 1, 9.9, 3)]
    emitters += [box(1, 4.4, 8, 4.9)]
    return layout_of(
        [nwell([("nwell", box(0, 0, 14, 6))])], taps, [(polygon, 0) for polygon in emitters]
    )


def buried_well() -> Layout:
    """A well half over a buried layer, with a tap that bends and emitters on its border."""
    buried = box(3, 3, 14, 13)
    plain = box(0, 0, 20, 16).difference(buried)
    bent = box(0.5, 0.5, 19.5, 1.0).union(box(0.5, 0.5, 1.0, 15.5))
    taps = [(bent, 0, 30), (box(15, 6, 15.6, 10), 0, 8)]
    emitters = [box(4 + 4 * i, 4 + 3 * j, 4.8 + 4 * i, 5.2 + 3 * j) for i in (0, 1) for j in (0, 2)]
    emitters += [box(13, 11, 15, 12), box(15.6, 6, 16.6, 10), box(17.5, 12, 18.5, 15)]
    return layout_of(
        [nwell([("nwell", plain), ("nwell_over_buried", buried)])],
        taps,
        [(polygon, 0) for polygon in emitters],
    )


def long_well() -> Layout:
    """A well of 180 um with taps far apart: windows must cut it."""
    taps = [(box(x, 1, x + 0.6, 3), 0, 4) for x in (1, 21, 47, 60, 85, 115, 140, 178)]
    emitters = [
        box(x, 1.0, x + 0.5, 2.5)
        for x in np.arange(2.5, 177, 1.25)
        if min(abs(x - tap.bounds[0]) for tap, _, _ in taps) > 1.0
    ]
    return layout_of(
        [nwell([("nwell", box(0, 0, 180, 4))])], taps, [(polygon, 0) for polygon in emitters]
    )


def reference(layout: Layout, technology: Technology) -> tuple[Any, Any]:
    sheets = [(1 / sheet_ohm(technology, kind), p) for kind, p in layout.bodies[0].sheets]
    contact = technology.wells.well_tap_contact_resistance_ohm.typical
    resistances = contact / layout.taps.contact_count
    return finite_elements(
        sheets, list(layout.taps.polygons), resistances, list(layout.emitters.polygons)
    )


@pytest.mark.parametrize("make", [row_well, buried_well])
def test_within_half_a_percent_of_finite_elements(make: Any, technology: Technology) -> None:
    layout = make()
    mean, largest = reference(layout, technology)
    found = solve_wells(layout, NO_PAIRS, technology, HOT_K, ALONE).resistances
    n = len(mean)
    error = np.abs(found.mean_ohm[:n] / np.diag(mean) - 1)
    assert error.max() < 0.005
    assert np.all(error <= found.relative_error[:n])
    assert found.max_ohm[:n] == pytest.approx(largest, rel=0.01)
    # a patch: every emitter within the radius, currents by area
    polygons, area = layout.emitters.polygons, layout.emitters.area_um2
    radius = technology.loop.patch_radius_um
    for k in range(n):
        near = shapely.distance(polygons[k], polygons) <= radius
        expected = mean[k, near] @ area[near] / area[near].sum()
        assert found.patch_ohm[k] == pytest.approx(expected, rel=0.01)
    # the body itself is no source
    assert np.all(np.isnan(found.mean_ohm[n:]))


def test_windows_agree_with_the_whole_well_within_the_stated_error(
    technology: Technology, monkeypatch: pytest.MonkeyPatch
) -> None:
    layout = long_well()
    n = len(layout.emitters.kind)
    pairs = pairs_of([(k, 0, 0, -1, (float(layout.emitters.box_um[k, 0]), 0.0)) for k in range(n)])
    cut = solve_wells(layout, pairs, technology, HOT_K, ALONE)
    monkeypatch.setattr(well_module, "LEAST_HALO_UM", 1000.0)
    whole = solve_wells(layout, pairs, technology, HOT_K, ALONE)
    error = np.abs(cut.resistances.mean_ohm[:n] / whole.resistances.mean_ohm[:n] - 1)
    assert np.all(error <= cut.resistances.relative_error[:n])
    assert 0 < error.max() < 0.01
    assert cut.transfers.well_ohm == pytest.approx(whole.transfers.well_ohm, rel=0.02)
    assert np.all(cut.transfers.well_ohm < cut.resistances.max_ohm[:n])


def test_two_workers_give_the_same_bits(technology: Technology) -> None:
    layout = long_well()
    alone = solve_wells(layout, NO_PAIRS, technology, HOT_K, ALONE).resistances
    with open_workers(2, Silent()) as workers:
        shared = solve_wells(layout, NO_PAIRS, technology, HOT_K, workers).resistances
    assert np.array_equal(alone.mean_ohm, shared.mean_ohm, equal_nan=True)
    assert np.array_equal(alone.patch_ohm, shared.patch_ohm, equal_nan=True)


@pytest.mark.parametrize(
    "change",
    [
        lambda p: p + np.array([1234.565, -987.32]),
        lambda p: p * (-1, 1),
        lambda p: np.stack([-p[:, 1], p[:, 0]], axis=1),
    ],
    ids=["move", "mirror", "quarter turn"],
)
def test_where_and_how_a_well_lies_does_not_matter(change: Any, technology: Technology) -> None:
    layout = buried_well()
    plain = solve_wells(layout, NO_PAIRS, technology, HOT_K, ALONE).resistances
    other = solve_wells(moved(layout, change), NO_PAIRS, technology, HOT_K, ALONE).resistances
    n = len(layout.emitters.kind)
    assert other.mean_ohm[:n] == pytest.approx(plain.mean_ohm[:n], rel=1e-4)
    assert other.max_ohm[:n] == pytest.approx(plain.max_ohm[:n], rel=1e-3)


def test_an_isolated_p_well_is_a_source_and_holds_sources(technology: Technology) -> None:
    # the p-well against finite elements as a source in its n-well, its n+ as one in itself
    hole = box(3, 3, 17, 11)
    ring = box(0.5, 0.5, 19.5, 13.5).difference(box(1.0, 1.0, 19.0, 13.0))
    around = nwell([("nwell", box(0, 0, 20, 14).difference(hole)), ("buried", hole)])
    inner = Body(
        id="pwell-1",
        kind="isolated_pwell",
        polygons=objects([hole]),
        sheets=(("isolated_pwell", hole),),
        enclosing=0,
    )
    strap = box(4, 4, 5, 10)
    layout = layout_of([around, inner], [(ring, 0, 50), (strap, 1, 10)], [(box(12, 6, 13, 8), 1)])
    pairs = pairs_of([(2, 0, 0, 1, (17.0, 7.0))])
    fields = solve_wells(layout, pairs, technology, HOT_K, ALONE)
    sheets = [(1 / sheet_ohm(technology, kind), p) for kind, p in around.sheets]
    contact = technology.wells.well_tap_contact_resistance_ohm.typical
    mean, _ = finite_elements(sheets, [ring], [contact / 50], [hole])
    found = fields.resistances
    assert found.mean_ohm[2] == pytest.approx(mean[0, 0], rel=0.01)
    assert found.patch_ohm[2] == pytest.approx(found.mean_ohm[2], rel=0.01)
    assert np.isnan(found.mean_ohm[1])
    assert found.mean_ohm[0] > found.mean_ohm[2]
    assert 0 < fields.transfers.well_ohm[0] < found.max_ohm[2]
    assert 0 < fields.transfers.substrate_ohm[0] < found.max_ohm[0]


def test_a_body_without_a_contacted_tap_is_unbounded(technology: Technology) -> None:
    tap = (box(1, 1, 2, 2), 0, 0)
    layout = layout_of([nwell([("nwell", box(0, 0, 9, 4))])], [tap], [(box(4, 1, 5, 2), 0)])
    fields = solve_wells(layout, pairs_of([(0, 0, 0, -1, (9, 1))]), technology, HOT_K, ALONE)
    assert np.isinf(fields.resistances.mean_ohm[0])
    assert np.isinf(fields.resistances.patch_ohm[0])
    assert np.isinf(fields.transfers.well_ohm[0])


def test_a_separate_piece_of_a_body_without_a_tap_is_unbounded(technology: Technology) -> None:
    parts = [("nwell", box(0, 0, 6, 4)), ("nwell", box(8, 0, 14, 4))]
    layout = layout_of(
        [nwell(parts)], [(box(1, 1, 2, 2), 0, 1)], [(box(4, 1, 5, 2), 0), (box(10, 1, 11, 2), 0)]
    )
    found = solve_wells(layout, NO_PAIRS, technology, HOT_K, ALONE).resistances
    assert np.isfinite(found.mean_ohm[0])
    assert np.isinf(found.mean_ohm[1])


def test_a_missing_sheet_resistance_is_named(technology: Technology) -> None:
    mute = technology.model_copy(
        update={
            "wells": technology.wells.model_copy(update={"buried_sheet_resistance_ohm_sq": None})
        }
    )
    layout = layout_of(
        [nwell([("buried", box(0, 0, 9, 4))])], [(box(1, 1, 2, 2), 0, 1)], [(box(4, 1, 5, 2), 0)]
    )
    with pytest.raises(TechnologyError, match="buried_sheet_resistance_ohm_sq"):
        solve_wells(layout, NO_PAIRS, mute, HOT_K, ALONE)
