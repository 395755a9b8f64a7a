"""Substrate resistances against finite differences in space, closed forms and symmetry."""

from __future__ import annotations

from concurrent.futures import ThreadPoolExecutor
from types import SimpleNamespace
from typing import Any

import numpy as np
import pytest
import shapely
from space_grid import Problem, extrapolated

from latchscan.fields.layered import tabulate_kernel
from latchscan.layout.model import (
    N_OUTSIDE_NWELL,
    SUBSTRATE_TAP,
    Body,
    Emitters,
    Layout,
    Pairs,
    Regions,
    Taps,
)
from latchscan.parasitics.clusters import cluster_emitters, repeat_pitch
from latchscan.parasitics.material import pwell_temperature_factor
from latchscan.parasitics.model import BodyFields
from latchscan.parasitics.pieces import rectangle_pieces
from latchscan.parasitics.substrate import solve_substrate, substrate_stack
from latchscan.parasitics.substrate_sheet import solve_sheet_window
from latchscan.parasitics.substrate_windows import MOST_HALO_UM, WindowCutter, substrate_scene
from latchscan.tasks import Workers

Box = tuple[float, float, float, float]
TEMPERATURE_K = 300.15
EMITTERS: list[Box] = [(6, -2, 8, 2), (10, -2, 12, 2)]
TAPS: list[Box] = [(-14, -2, -10, 2), (14, -14, 18, -10)]
HOLE: Box = (-4, -12, 4, 12)
ARRIVALS = [(1.0, 1.0), (-1.0, 7.0)]
SHEET = shapely.box(-20, -20, 20, 20) - shapely.box(*HOLE)


def column(shapes: list[Any]) -> Any:
    result = np.empty(len(shapes), dtype=object)
    result[:] = shapes
    return result


def layout(emitters: list[Box], taps: list[Box], sheet: Any, contacts: int = 1) -> Layout:
    n, t = len(emitters), len(taps)
    shapes, metal = (
        column([shapely.box(*e) for e in emitters]),
        column([shapely.box(*b) for b in taps]),
    )
    parts = list(shapely.get_parts(sheet))
    body = Body(
        id="substrate",
        kind="substrate",
        polygons=column(parts),
        sheets=tuple(("pwell", part) for part in parts),
    )
    regions = Regions(
        bbox_um=(0.0, 0.0, 1.0, 1.0), shapes={}, contact_box_um=np.zeros((0, 4)), labels=()
    )
    return Layout(
        regions=regions,
        bodies=(body,),
        taps=Taps(
            polygons=metal,
            kind=np.full(t, SUBSTRATE_TAP),
            body=np.zeros(t, dtype=np.int64),
            contact_count=np.full(t, contacts),
            contact_first=np.arange(t + 1),
            contact_box_um=shapely.bounds(metal).reshape(-1, 4),
        ),
        emitters=Emitters(
            ids=np.array([f"n-{i + 1}" for i in range(n)]),
            polygons=shapes,
            kind=np.full(n, N_OUTSIDE_NWELL),
            body=np.zeros(n, dtype=np.int64),
            box_um=shapely.bounds(shapes).reshape(-1, 4),
            area_um2=shapely.area(shapes),
            over_buried=np.zeros(n, dtype=bool),
            injector=np.full(n, ""),
        ),
    )


def pairs(cathodes: list[int], arrivals: list[tuple[float, float]]) -> Pairs:
    m = len(cathodes)
    zero = np.zeros(m, dtype=np.int64)
    return Pairs(
        anode=zero,
        cathode=np.array(cathodes, dtype=np.int64),
        well=zero,
        base=zero,
        spacing_um=np.ones(m),
        base_width_um=np.ones(m),
        edge_um=np.zeros((m, 2)),
        arrival_um=np.array(arrivals, dtype=np.float64).reshape(-1, 2),
    )


def technology(
    sheet_ohm: float | None, *, layers: Any = ((10.0, 30.0),), contacted: bool = True
) -> Any:
    def number(value: float) -> SimpleNamespace:
        return SimpleNamespace(typical=value)

    return SimpleNamespace(
        substrate=SimpleNamespace(
            layers=tuple(
                SimpleNamespace(resistivity_ohm_cm=number(r), thickness_um=number(t))
                for r, t in layers
            ),
            back_side="contacted" if contacted else "floating",
            pwell_sheet_resistance_ohm_sq=None if sheet_ohm is None else number(sheet_ohm),
            substrate_tap_contact_resistance_ohm=number(9.0),
        ),
        loop=SimpleNamespace(patch_radius_um=10.0),
    )


def solve(block: Layout, candidates: Pairs, process: Any) -> BodyFields:
    return solve_substrate(block, candidates, process, TEMPERATURE_K, Workers())


@pytest.fixture(scope="module")
def on_sheet() -> BodyFields:
    return solve(
        layout(EMITTERS, TAPS, SHEET),
        pairs([0, 0, 1], [*ARRIVALS, ARRIVALS[0]]),
        technology(2500.0),
    )


def test_sheet_on_bulk_agrees_with_finite_differences(on_sheet: BodyFields) -> None:
    # Finite differences in space, extrapolated: p-well sheet, one n-well hole, two taps
    def inside(x: Any, y: Any) -> Any:
        hole = (x > HOLE[0]) & (x < HOLE[2]) & (y > HOLE[1]) & (y < HOLE[3])
        return (abs(x) < 20.0) & (abs(y) < 20.0) & ~hole

    problem = Problem(
        inside=inside,
        taps=TAPS,
        tap_ohm=9.0,
        sheet_ohm=2500.0,
        resistivity_ohm_um=1.0e5,
        thickness_um=30.0,
        contacted=True,
        half_um=20.0,
        far_um=80.0,
    )
    spots = [(x - 1.0, y - 1.0, x + 1.0, y + 1.0) for x, y in ARRIVALS]
    expected = extrapolated(problem, EMITTERS[0], [*EMITTERS, *spots], 1.0)
    found = on_sheet.resistances
    assert found.mean_ohm[0] == pytest.approx(expected[0], rel=0.03)
    np.testing.assert_allclose(on_sheet.transfers.substrate_ohm[:2], expected[2:], rtol=0.05)
    # both emitters are driven evenly per area: the mean of self and mutual
    assert found.patch_ohm[0] == pytest.approx(expected[:2].mean(), rel=0.03)
    assert abs(found.mean_ohm[0] / expected[0] - 1.0) < 1.5 * found.relative_error[0]


def test_maximum_is_above_the_mean(on_sheet: BodyFields) -> None:
    r = on_sheet.resistances
    assert np.all(r.max_ohm[:2] > r.mean_ohm[:2])
    assert np.all(r.patch_ohm[:2] < r.mean_ohm[:2])
    assert np.isnan(r.mean_ohm[2])


def test_bulk_alone_is_a_square_plate_far_from_taps() -> None:
    # Even current over a square: rho / (2 pi s) times the mean of 1/r over it, 2.97321 / s, and
    # 4 ln(1 + sqrt 2) = 3.52549 at the middle (textbook integrals); 300 um of bulk on metal takes
    # off rho ln 2 / (2 pi t) (images)
    block = layout([(0, 0, 1, 1)], [], SHEET)
    r = solve(block, pairs([], []), technology(None, layers=((10.0, 300.0),))).resistances
    image = 1.0e5 / (2.0 * np.pi) * np.log(2.0) / 300.0
    assert r.mean_ohm[0] == pytest.approx(1.0e5 / (2 * np.pi) * 2.97321 - image, rel=1e-3)
    assert r.max_ohm[0] == pytest.approx(1.0e5 / (2 * np.pi) * 3.52549 - image, rel=1e-3)


def test_bulk_alone_transfer_is_a_point_source() -> None:
    # rho / 2 pi d less the metal's image sum, taps 80 um away drawing next to nothing
    block = layout([(0, 0, 1, 1)], [], SHEET)
    process = technology(None, layers=((10.0, 300.0),))
    found = solve(block, pairs([0], [(20.5, 0.5)]), process).transfers.substrate_ohm[0]
    n = np.arange(1, 100_001)
    images = 2.0 * np.sum((-1.0) ** n / np.hypot(20.0, 600.0 * n))
    assert found == pytest.approx(1.0e5 / (2.0 * np.pi) * (1.0 / 20.0 + images), rel=2e-3)


def test_very_conductive_bulk_leaves_nothing_of_the_sheet() -> None:
    # Bulk on metal under a sheet of huge resistance: the bulk alone (the other equations)
    block, candidates = layout([(6, -2, 8, 2)], TAPS, SHEET), pairs([0], [(0.0, 0.0)])
    alone = solve(block, candidates, technology(None))
    under = solve(block, candidates, technology(1.0e9))
    assert under.resistances.mean_ohm[0] < 1e8
    np.testing.assert_allclose(
        under.transfers.substrate_ohm, alone.transfers.substrate_ohm, rtol=0.05
    )


def test_insulating_bulk_leaves_the_sheet_alone() -> None:
    # A bar of p-well between two taps at its ends, emitter in the middle across the whole
    # width: two halves in parallel, R = (1/2) Rs (L/2 - e/3) / W with L between the taps and
    # e the emitter's length (derived: the mean of the parabola over the emitter)
    bar = shapely.box(0, 0, 44, 4)
    block = layout([(20, 0, 24, 4)], [(0, 0, 2, 4), (42, 0, 44, 4)], bar, contacts=1000)
    process = technology(1000.0, layers=((1.0e6, 300.0),))
    found = solve(block, pairs([], []), process).resistances.mean_ohm[0]
    expected = 0.5 * 1000.0 * (20.0 - 4.0 / 3.0) / 4.0
    assert found == pytest.approx(expected, rel=0.02)


def test_no_way_out_is_infinite() -> None:
    block = layout([(6, -2, 8, 2)], [], SHEET)
    for sheet in (None, 2500.0):
        found = solve(block, pairs([0], [(0.0, 0.0)]), technology(sheet, contacted=False))
        assert np.isinf(found.resistances.mean_ohm[0])
        assert np.isinf(found.transfers.substrate_ohm[0])


def test_an_island_of_sheet_drains_through_the_bulk() -> None:
    # A part of the p-well that no tap touches: finite, between the bulk alone and a tapped one
    island = SHEET | shapely.box(30, -5, 40, 5)
    block = layout([(34, -1, 36, 1)], TAPS, island)
    candidates = pairs([], [])
    alone = solve(block, candidates, technology(None, contacted=False)).resistances
    found = solve(block, candidates, technology(2500.0, contacted=False)).resistances
    assert 500.0 < found.mean_ohm[0] < alone.mean_ohm[0]


@pytest.mark.parametrize("sheet", [None, 2500.0])
def test_one_more_tap_never_raises_a_resistance(sheet: float | None) -> None:
    candidates = pairs([], [])
    process = technology(sheet, contacted=False)
    few = solve(layout(EMITTERS, TAPS, SHEET), candidates, process).resistances
    more = solve(layout(EMITTERS, [*TAPS, (6, 8, 8, 10)], SHEET), candidates, process).resistances
    assert np.all(more.mean_ohm[:2] < few.mean_ohm[:2])


@pytest.mark.parametrize("sheet", [None, 2500.0])
def test_moving_the_block_changes_nothing(sheet: float | None) -> None:
    def moved(box: Box) -> Box:
        return (box[0] + 103.0, box[1] - 57.0, box[2] + 103.0, box[3] - 57.0)

    process = technology(sheet)
    here = solve(layout(EMITTERS, TAPS, SHEET), pairs([1], [(0.0, 0.0)]), process)
    there = solve(
        layout(
            [moved(e) for e in EMITTERS],
            [moved(t) for t in TAPS],
            shapely.transform(SHEET, lambda c: c + np.array([103.0, -57.0])),
        ),
        pairs([1], [(103.0, -57.0)]),
        process,
    )
    np.testing.assert_array_equal(here.resistances.mean_ohm, there.resistances.mean_ohm)
    np.testing.assert_array_equal(here.transfers.substrate_ohm, there.transfers.substrate_ohm)


def test_workers_change_nothing() -> None:
    emitters = [(x, y, x + 1.0, y + 1.0) for x in range(0, 90, 9) for y in range(0, 90, 9)]
    taps = [
        (x + 4.0, y + 4.0, x + 5.0, y + 5.0) for x in range(0, 90, 18) for y in range(0, 90, 18)
    ]
    block = layout(emitters, taps, shapely.box(-5, -5, 100, 100))
    candidates = pairs([0, 50], [(3.0, 3.0), (50.0, 50.0)])
    process = technology(None)
    alone = solve(block, candidates, process)
    with ThreadPoolExecutor(2) as executor:
        shared = solve_substrate(
            block, candidates, process, TEMPERATURE_K, Workers(executor=executor)
        )
    np.testing.assert_array_equal(alone.resistances.patch_ohm, shared.resistances.patch_ohm)
    np.testing.assert_array_equal(alone.transfers.substrate_ohm, shared.transfers.substrate_ohm)


def test_heat_raises_resistances_as_mobility_falls() -> None:
    # Arora, Hauser, Roulston 1982: 1.752 from 300 K to 125 C for lightly doped p; 1.750 from 27 C
    block = layout([(6, -2, 8, 2)], [], SHEET)
    process = technology(None)
    cold = solve(block, pairs([], []), process).resistances.mean_ohm[0]
    hot = solve_substrate(block, pairs([], []), process, 398.15, Workers()).resistances.mean_ohm[0]
    assert hot / cold == pytest.approx(1.75, rel=0.003)


def test_equal_surroundings_are_found_by_pitch() -> None:
    cell = np.array([[0.1, 0.1, 0.4, 0.6], [0.6, 0.2, 0.9, 0.7]])
    steps = np.array([(2.0 * i, 1.5 * j) for i in range(30) for j in range(20)])
    boxes = (cell[None] + np.tile(steps, 2)[:, None, :]).reshape(-1, 4)
    assert repeat_pitch(boxes) == (2.0, 1.5)
    groups = cluster_emitters(boxes)
    assert sorted(np.concatenate(groups).tolist()) == list(range(len(boxes)))
    # most tiles are alike: the same emitters relative to their corner
    shapes = {
        (boxes[g] - np.tile(boxes[g][:, :2].min(axis=0), 2)).round(6).tobytes() for g in groups
    }
    assert len(shapes) < len(groups) / 2
    assert max(len(g) for g in groups) <= 112


def test_groups_of_scattered_emitters_are_small_and_complete() -> None:
    rng = np.random.default_rng(5)
    low = rng.uniform(0.0, 500.0, (700, 2))
    groups = cluster_emitters(np.concatenate([low, low + 1.0], axis=1))
    assert sorted(np.concatenate(groups).tolist()) == list(range(700))
    assert max(len(g) for g in groups) <= 64


def test_rectangles_keep_the_area_of_any_polygon() -> None:
    # shapely's areas are the reference
    shapes = column(
        [
            shapely.box(0, 0, 2, 1),
            shapely.box(0, 0, 3, 3) - shapely.box(1, 1, 2, 2),
            shapely.Polygon([(0, 0), (4, 0), (4, 2), (2, 4), (0, 4)]),
        ]
    )
    boxes, owner = rectangle_pieces(shapes)
    area = (boxes[:, 2] - boxes[:, 0]) * (boxes[:, 3] - boxes[:, 1])
    np.testing.assert_allclose(np.bincount(owner, area), shapely.area(shapes), rtol=1e-9)


def test_wider_windows_hold_the_same_emitters() -> None:
    block = layout([(6, -2, 8, 2), (10, -2, 12, 2)], TAPS, SHEET)
    scene = substrate_scene(block, 9.0, with_sheet=True)
    cutter = WindowCutter(scene, pairs([0, 1], [(1.0, 1.0), (2.0, 2.0)]), 10.0)
    windows = cutter.all_windows()
    halo = windows[0].window.halo_um
    for _ in range(6):
        wide = cutter.wider(windows)
        assert wide[0].window.halo_um == min(2.0 * windows[0].window.halo_um, MOST_HALO_UM)
        for before, after in zip(windows[0].uses, wide[0].uses, strict=True):
            np.testing.assert_array_equal(before.emitters, after.emitters)
            np.testing.assert_array_equal(before.points_um, after.points_um)
        windows = wide
    assert halo < windows[0].window.halo_um == MOST_HALO_UM


def test_a_window_too_small_is_widened() -> None:
    # one small tap beside the emitter, another far away: the first window is chosen by the near
    # tap and ends where current still flows in the sheet
    wide = shapely.box(-150, -150, 150, 150)
    taps: list[Box] = [(-1, -1, 1, 1), (60, -150, 62, 150)]
    block = layout([(6, -2, 8, 2)], taps, wide)
    found = solve(block, pairs([], []), technology(2500.0)).resistances
    assert found.relative_error[0] < 0.08
    # a window of nearly the whole layout is the reference
    scene = substrate_scene(block, 9.0, with_sheet=True)
    cutter = WindowCutter(scene, pairs([], []), 10.0)
    windows = cutter.all_windows()
    for _ in range(4):
        windows = cutter.wider(windows)
    factor = pwell_temperature_factor(technology(2500.0), TEMPERATURE_K)
    kernel = tabulate_kernel(substrate_stack(technology(2500.0), factor), 2000.0)
    solved = solve_sheet_window(
        windows[0].window, tuple(windows[0].uses), kernel, 1.0 / (factor * 2500.0), 10.0
    )
    change = found.mean_ohm[0] / solved.mean_ohm[0] - 1.0
    assert abs(change) < found.relative_error[0] + solved.relative_error[0]
