"""Tap distances, tap reach and spacings against hand-worked figures and plain subdivision."""

from __future__ import annotations

import doctest
from collections.abc import Callable, Sequence
from dataclasses import replace
from typing import Any

import numpy as np
import pytest
import shapely
from hypothesis import given, settings
from hypothesis import strategies as st
from shapely import affinity

from latchscan.errors import GeometryError, ResolutionError
from latchscan.layout import distances
from latchscan.layout.connections import BY_PIN, Injectors, Rings
from latchscan.layout.distances import measure_distances, measure_spacings, own_collectors
from latchscan.layout.measure import convex, farthest, neighbours, walls
from latchscan.layout.measure.farthest import farthest_points
from latchscan.layout.model import (
    N_OUTSIDE_NWELL,
    P_IN_NWELL,
    SUBSTRATE_TAP,
    Body,
    Emitters,
    Layout,
    Regions,
    Taps,
)
from latchscan.layout.unconnected import no_injectors, no_rings
from latchscan.tasks import Silent, Workers, open_workers

GRID_UM = 0.005
EXACT_UM = 1e-7
Box = tuple[float, float, float, float]
Tap = tuple[Any, int, Sequence[Box]]
Emitter = tuple[Any, int, int, str]


def column(shapes: Sequence[Any]) -> np.ndarray:
    """Polygons as an object array, also when there are none."""
    array = np.empty(len(shapes), dtype=object)
    array[:] = shapes
    return array


def build(
    emitters: Sequence[Emitter], taps: Sequence[Tap] = (), bodies: Sequence[Body] = ()
) -> Layout:
    """A layout of (polygon, kind, body, injector) and (polygon, body, contact boxes)."""
    polygons = column([e[0] for e in emitters])
    contacts = [box for tap in taps for box in tap[2]]
    count = np.array([len(tap[2]) for tap in taps], dtype=np.int64)
    return Layout(
        regions=Regions(
            bbox_um=(0, 0, 1, 1), shapes={}, contact_box_um=np.empty((0, 4)), labels=()
        ),
        bodies=tuple(bodies),
        taps=Taps(
            polygons=column([tap[0] for tap in taps]),
            kind=np.full(len(taps), SUBSTRATE_TAP),
            body=np.array([tap[1] for tap in taps], dtype=np.int64),
            contact_count=count,
            contact_first=np.concatenate([[0], np.cumsum(count)]).astype(np.int64),
            contact_box_um=np.array(contacts, dtype=float).reshape(-1, 4),
        ),
        emitters=Emitters(
            ids=np.array([f"e-{i}" for i in range(len(emitters))], dtype=np.str_),
            polygons=polygons,
            kind=np.array([e[1] for e in emitters], dtype=np.int64),
            body=np.array([e[2] for e in emitters], dtype=np.int64),
            box_um=shapely.bounds(polygons).reshape(-1, 4),
            area_um2=shapely.area(polygons),
            over_buried=np.zeros(len(emitters), dtype=bool),
            injector=np.array([e[3] for e in emitters], dtype=np.str_),
        ),
    )


def nwell(name: str, *polygons: Any) -> Body:
    return Body(id=name, kind="nwell", polygons=column(polygons), sheets=())


def one(shape: Any, *targets: Any) -> tuple[float, list[float], list[float]]:
    """Distance, farthest point and nearest target point of a single shape."""
    zero = np.zeros(len(targets), dtype=np.int64)
    found = farthest_points(column([shape]), zero[:1], column(targets), zero)
    return float(found.distance_um[0]), found.at_um[0].tolist(), found.nearest_um[0].tolist()


def bracket(shape: Any, targets: Any, radius: float = 0.002) -> tuple[float, float]:
    """Bounds of the farthest distance by plain quartering of squares.

    Independent of the project: the distance changes by no more than the way walked, so a
    square of half diagonal r round c holds values within r of the one at c.  shapely measures.
    """
    x0, y0, x1, y1 = shape.bounds
    half = max(x1 - x0, y1 - y0) / 2.0
    centre = np.array([[(x0 + x1) / 2.0, (y0 + y1) / 2.0]])
    shapely.prepare(shape)
    while True:
        x, y = centre.T
        meets = shapely.intersects(shapely.box(x - half, y - half, x + half, y + half), shape)
        centre = centre[meets]
        value = shapely.distance(shapely.points(centre), targets)
        reach = half * np.sqrt(2.0)
        low = float(np.max(value - reach))
        if reach < radius:
            return low, float(np.max(value + reach))
        centre = centre[value + reach >= low]
        half /= 2.0
        steps = half * np.array([[-1, -1], [1, -1], [-1, 1], [1, 1]])
        centre = (centre[:, None, :] + steps).reshape(-1, 2)


def snapped(rng: np.random.Generator, low: float, high: float) -> float:
    return float(rng.integers(round(low / GRID_UM), round(high / GRID_UM))) * GRID_UM


def comb(x: float, y: float) -> Any:
    """A comb of three teeth."""
    parts = [shapely.box(x, y, x + 6, y + 1)]
    parts += [shapely.box(x + 2.5 * k, y, x + 2.5 * k + 1, y + 4) for k in range(3)]
    return shapely.union_all(parts)


# ---- hand-worked examples -------------------------------------------------------------


def test_a_bar_between_two_taps_is_farthest_in_its_middle() -> None:
    # by hand: half of the 12 um between the taps; its corners are only 1 um away
    distance, at, _ = one(
        shapely.box(0, 0, 10, 1), shapely.box(-2, 0, -1, 1), shapely.box(11, 0, 12, 1)
    )
    assert distance == pytest.approx(6.0, abs=EXACT_UM)
    assert at == pytest.approx([5.0, 0.0], abs=EXACT_UM)


def test_an_l_shape_is_farthest_inside_one_of_its_edges() -> None:
    # by hand, on the edge x = 0: 15 - y = sqrt(11^2 + (y - 1)^2) gives y = 103 / 28
    shape = shapely.Polygon([(0, 0), (10, 0), (10, 1), (1, 1), (1, 10), (0, 10)])
    distance, at, _ = one(shape, shapely.box(11, 0, 12, 1), shapely.box(0, 15, 1, 16))
    assert at == pytest.approx([0.0, 103 / 28], abs=1e-5)
    assert distance == pytest.approx(15 - 103 / 28, abs=EXACT_UM)


def test_inside_a_ring_tap_the_centre_is_farthest() -> None:
    # by hand: the centre of a square opening of 20 um is 10 um from its sides
    ring = shapely.box(-1, -1, 21, 21) - shapely.box(0, 0, 20, 20)
    distance, at, _ = one(shapely.box(4, 3, 17, 16), ring)
    assert distance == pytest.approx(10.0, abs=EXACT_UM)
    assert at == pytest.approx([10.0, 10.0], abs=EXACT_UM)


def test_a_ring_emitter_is_farthest_at_its_outer_corner() -> None:
    # by hand: from the corner (-5, -5) to the tap's corner (-1, -1)
    shape = shapely.box(-5, -5, 5, 5) - shapely.box(-4, -4, 4, 4)
    distance, at, nearest = one(shape, shapely.box(-1, -1, 1, 1))
    assert distance == pytest.approx(np.hypot(4, 4), abs=EXACT_UM)
    assert at == [-5.0, -5.0]
    assert nearest == [-1.0, -1.0]


def test_three_pointed_taps_are_farthest_at_the_centre_of_their_circle() -> None:
    # closed form: three points on a circle of 5 um are equally far from its centre only
    needle = shapely.Polygon([(5, 0), (7, -0.5), (7, 0.5)])
    taps = [affinity.rotate(needle, angle, origin=(0, 0)) for angle in (20, 140, 260)]
    distance, at, _ = one(shapely.box(-1, -1.3, 1.1, 1), *taps)
    assert distance == pytest.approx(5.0, abs=EXACT_UM)
    assert at == pytest.approx([0.0, 0.0], abs=1e-5)


@pytest.mark.parametrize("angle", [17.0, 45.0, 90.0, 211.0])
def test_turning_everything_keeps_the_distance(angle: float) -> None:
    shapes = [
        affinity.rotate(shape, angle, origin=(3, -2))
        for shape in (
            shapely.box(0, 0, 10, 1),
            shapely.box(-2, 0, -1, 1),
            shapely.box(11, 0, 12, 1),
        )
    ]
    # by hand as above; both long edges tie, so the place is only known to lie on the middle
    distance, at, _ = one(*shapes)
    assert distance == pytest.approx(6.0, abs=EXACT_UM)
    middle = affinity.rotate(shapely.LineString([(5, 0), (5, 1)]), angle, origin=(3, -2))
    assert middle.distance(shapely.Point(at)) < 1e-6


def test_an_emitter_wholly_on_a_tap_has_no_distance() -> None:
    assert one(shapely.box(1, 1, 2, 2), shapely.box(0, 0, 5, 5))[0] == 0.0


def test_equally_far_points_give_the_lowest_then_leftmost() -> None:
    # by hand: all four corners are hypot(2, 2) from the tap
    _, at, _ = one(shapely.box(-3, -3, 3, 3) - shapely.box(-2, -2, 2, 2), shapely.box(-1, -1, 1, 1))
    assert at == [-3.0, -3.0]


# ---- bodies, contacts, reach ----------------------------------------------------------

CONTACT = (0.1, 0.1, 0.3, 0.3)


def test_only_contacted_taps_of_the_own_body_count() -> None:
    emitter = shapely.box(10, 0, 11, 1)
    layout = build(
        [(emitter, P_IN_NWELL, 0, ""), (emitter, P_IN_NWELL, 1, ""), (emitter, P_IN_NWELL, 2, "")],
        [
            (shapely.box(0, 0, 1, 1), 0, [CONTACT]),
            (shapely.box(8, 0, 9, 1), 0, []),
            (shapely.box(12, 0, 13, 1), 1, [CONTACT]),
        ],
    )
    found = measure_distances(layout, Workers())
    # by hand: to x = 1 past the uncontacted tap; to x = 12; body 2 has no tap
    assert found.tap_distance_um.tolist()[:2] == pytest.approx([10.0, 2.0], abs=EXACT_UM)
    assert np.isnan(found.tap_distance_um[2])
    assert np.all(np.isnan(found.farthest_um[2]))
    assert np.all(np.isnan(found.nearest_tap_um[2]))


def test_reach_is_measured_from_the_last_contact_of_the_same_tap() -> None:
    layout = build(
        [],
        [
            (shapely.box(0, 0, 10, 1), 0, [(1, 0.4, 1.22, 0.62), (3, 0.4, 3.22, 0.62)]),
            (shapely.box(0, 2, 10, 3), 0, []),
            (shapely.box(10.5, 0, 11.5, 1), 0, [(10.9, 0.4, 11.1, 0.6)]),
        ],
    )
    found = measure_distances(layout, Workers())
    # by hand: (10, 0) to (3.22, 0.4); the third tap's contact is nearer but not its own
    assert found.tap_reach_um[0] == pytest.approx(np.hypot(6.78, 0.4), abs=EXACT_UM)
    assert found.tap_reach_at_um[0].tolist() == [10.0, 0.0]
    assert np.isnan(found.tap_reach_um[1])
    assert found.tap_reach_um[2] == pytest.approx(np.hypot(0.4, 0.4), abs=EXACT_UM)


def test_an_empty_layout_has_empty_measures() -> None:
    layout = build([])
    assert measure_distances(layout, Workers()).farthest_um.shape == (0, 2)
    assert measure_spacings(layout).from_um.shape == (0, 2)


def test_size_of_tasks_and_number_of_workers_change_nothing(
    monkeypatch: pytest.MonkeyPatch,
) -> None:
    layout = random_layout(np.random.default_rng(5), bodies=3)
    whole = measure_distances(layout, Workers())
    monkeypatch.setattr(distances, "CONTACTS_PER_TASK", 4)
    monkeypatch.setattr(distances, "EMITTERS_PER_TASK", 5)
    with open_workers(2, Silent()) as workers:
        parted = measure_distances(layout, workers)
    for name in ("tap_distance_um", "farthest_um", "tap_reach_um", "tap_reach_at_um"):
        np.testing.assert_allclose(
            getattr(parted, name), getattr(whole, name), rtol=0.0, atol=EXACT_UM, equal_nan=True
        )


# ---- against plain subdivision --------------------------------------------------------


def random_layout(rng: np.random.Generator, bodies: int) -> Layout:
    """Rectangles, combs, rings, turned ones; taps of several shapes, in interleaved bodies."""
    emitters: list[Emitter] = []
    taps: list[Tap] = []
    for i in range(24):
        x, y = snapped(rng, 0, 40), snapped(rng, 0, 40)
        w, h = snapped(rng, 0.3, 9), snapped(rng, 0.3, 9)
        shape = (
            shapely.box(x, y, x + w, y + h),
            comb(x, y),
            affinity.rotate(comb(x, y), 45, origin=(x, y)),
            shapely.box(x, y, x + w + 2, y + h + 2) - shapely.box(x + 1, y + 1, x + w, y + h),
        )[i % 4]
        emitters.append((shape, N_OUTSIDE_NWELL, i % bodies, ""))
    for i in range(18):
        x, y = snapped(rng, 0, 40), snapped(rng, 0, 40)
        w, h = snapped(rng, 0.4, 5), snapped(rng, 0.4, 2)
        ring = shapely.box(x, y, x + 9, y + 7) - shapely.box(x + 1, y + 1, x + 8, y + 6)
        shape = ring if i % 6 == 0 else shapely.box(x, y, x + w, y + h)
        shape = affinity.rotate(shape, 45, origin=(x, y)) if i % 6 == 5 else shape
        contacts = [
            (x + k, y + 0.1, x + k + 0.22, y + 0.32) for k in np.arange(0.1, min(w, 3), 0.7)
        ]
        taps.append((shape, i % bodies, contacts))
    return build(emitters, taps)


@pytest.mark.parametrize("seed", [1, 2, 3])
def test_distances_lie_within_plain_subdivision(seed: int) -> None:
    layout = random_layout(np.random.default_rng(seed), bodies=2)
    found = measure_distances(layout, Workers())
    taps, emitters = layout.taps, layout.emitters
    for i, shape in enumerate(emitters.polygons):
        targets = shapely.union_all(taps.polygons[taps.body == emitters.body[i]])
        low, high = bracket(shape, targets)
        assert high - low < GRID_UM
        assert low <= found.tap_distance_um[i] <= high
        # the two ends are what they are said to be, measured by shapely
        end, tap_end = shapely.points(found.farthest_um[i]), shapely.points(found.nearest_tap_um[i])
        assert shape.distance(end) < EXACT_UM
        assert targets.distance(tap_end) < EXACT_UM
        assert targets.distance(end) == pytest.approx(found.tap_distance_um[i], abs=EXACT_UM)
        assert end.distance(tap_end) == pytest.approx(found.tap_distance_um[i], abs=EXACT_UM)


def test_reach_lies_within_plain_subdivision() -> None:
    layout = random_layout(np.random.default_rng(7), bodies=2)
    found = measure_distances(layout, Workers())
    offsets = layout.taps.contact_first
    for i, shape in enumerate(layout.taps.polygons):
        boxes = layout.taps.contact_box_um[offsets[i] : offsets[i + 1]]
        low, high = bracket(shape, shapely.union_all(shapely.box(*boxes.T)))
        assert low <= found.tap_reach_um[i] <= high


def fields(rng: np.random.Generator, tap: Any, pitch: float, kind: str) -> list[Box]:
    """Contacts of 0.2 um all over a tap: in a grid, staggered, with gaps, or anywhere."""
    x0, y0, x1, y1 = tap.bounds
    found = []
    for row, y in enumerate(np.arange(y0 + 0.1, y1 - 0.3, pitch)):
        shift = 0.5 * pitch * (row % 2) if kind == "staggered" else 0.0
        for x in np.arange(x0 + 0.1 + shift, x1 - 0.3, pitch):
            if kind == "gaps" and rng.random() < 0.2:
                continue
            moved = rng.integers(-10, 10, 2) * GRID_UM if kind == "anywhere" else (0.0, 0.0)
            left, low = round(x + moved[0], 3), round(y + moved[1], 3)
            box = (left, low, round(left + 0.2, 3), round(low + 0.2, 3))
            if tap.contains(shapely.box(*box)):
                found.append(box)
    return found


@pytest.mark.parametrize("kind", ["grid", "staggered", "gaps", "anywhere"])
def test_reach_of_taps_full_of_contacts_is_that_of_the_plain_search(kind: str) -> None:
    rng = np.random.default_rng(9)
    bar = shapely.box(0, 0, 12, 1.3)
    ring = shapely.box(20, 0, 30, 9) - shapely.box(21.2, 1.1, 28.9, 8)
    bent = shapely.Polygon([(0, 5), (9, 5), (9, 7), (2, 7), (2, 14), (0, 14)])
    slanted = shapely.Polygon([(12, 5), (17, 5), (18, 6), (18, 12), (12, 12)])
    taps = column([bar, ring, bent, slanted, shapely.box(40, 0, 41, 1)])
    contacts = [fields(rng, tap, 0.45, kind) for tap in taps[:4]]
    owner = np.repeat(np.arange(4), [len(boxes) for boxes in contacts])
    boxes = np.array([box for part in contacts for box in part])
    assert len(boxes) > 150
    found = farthest.farthest_in_crowds(taps, boxes, owner)
    plain = farthest_points(taps, np.arange(5), shapely.box(*boxes.T), owner)
    assert np.isnan(found.distance_um[4])
    assert np.nanmax(np.abs(found.distance_um - plain.distance_um)) <= EXACT_UM
    assert np.nanmax(np.abs(found.at_um - plain.at_um)) <= 1e-6
    for row in range(4):
        low, high = bracket(taps[row], shapely.multipolygons(shapely.box(*boxes[owner == row].T)))
        assert low - EXACT_UM <= found.distance_um[row] <= high + EXACT_UM


def test_reach_in_a_regular_field_by_hand() -> None:
    # squares of 0.2 um, 0.4 um apart, flush with the tap's edges: the centre of four squares
    # lies half the diagonal of the gap away, and of all centres the lowest leftmost counts
    x, y = (axis.ravel() for axis in np.meshgrid(np.arange(9) * 0.6, np.arange(6) * 0.6))
    boxes = np.round(np.column_stack([x, y, x + 0.2, y + 0.2]), 3)
    tap = column([shapely.box(0, 0, 5.0, 3.2)])
    found = farthest.farthest_in_crowds(tap, boxes, np.zeros(len(boxes), dtype=np.int64))
    assert found.distance_um[0] == pytest.approx(0.2 * np.sqrt(2.0), abs=1e-9)
    assert found.at_um[0] == pytest.approx([0.4, 0.4], abs=1e-9)


def test_a_small_group_does_not_lend_its_targets_to_a_large_one() -> None:
    """By hand: the bar's farthest point is 38 um from its only target, whoever stands around."""
    shapes = np.array([shapely.box(0, 0, 1, 1), shapely.box(0, 10, 40, 11)])
    targets = np.array([shapely.box(0, 0, 1, 1), shapely.box(38, 10, 40, 11)])
    found = farthest_points(shapes, np.array([0, 1]), targets, np.array([0, 1]))
    assert found.distance_um.tolist() == [0.0, 38.0]
    assert found.at_um[1].tolist() == [0.0, 10.0]
    assert found.nearest_um[1].tolist() == [38.0, 10.0]


def test_many_groups_far_apart_do_not_see_each_other() -> None:
    # by hand: every group is a bar of 4 um with a tap 1 um beyond its right end
    k = np.arange(400)
    x, y = (k % 20) * 1.5, (k // 20) * 700.0
    bars = shapely.box(x, y, x + 4.0, y + 0.5)
    taps = shapely.box(x + 5.0, y, x + 6.0, y + 0.5)
    found = farthest_points(bars, k, taps, k)
    np.testing.assert_allclose(found.distance_um, 5.0, atol=EXACT_UM)
    np.testing.assert_allclose(found.at_um, np.column_stack([x, y]), atol=EXACT_UM)


# ---- what must not matter -------------------------------------------------------------

steps = st.integers(min_value=0, max_value=4000)
sizes = st.integers(min_value=20, max_value=1500)
boxes = st.builds(
    lambda x, y, w, h: shapely.box(*(GRID_UM * np.array([x, y, x + w, y + h]))),
    steps,
    steps,
    sizes,
    sizes,
)
scenes = st.tuples(st.lists(boxes, min_size=1, max_size=5), st.lists(boxes, min_size=1, max_size=7))
MOTIONS: dict[str, Callable[[Any], Any]] = {
    "move": lambda shape: affinity.translate(shape, 1234.565, -77.125),
    "mirror": lambda shape: affinity.affine_transform(shape, [-1, 0, 0, 1, 0, 0]),
    "quarter turn": lambda shape: affinity.affine_transform(shape, [0, -1, 1, 0, 0, 0]),
    "redraw": lambda shape: shapely.Polygon(np.roll(shape.exterior.coords[:-1], 2, axis=0)),
}


def measured(shapes: Sequence[Any], targets: Sequence[Any]) -> farthest.Farthest:
    return farthest_points(
        column(shapes),
        np.zeros(len(shapes), dtype=np.int64),
        column(targets),
        np.zeros(len(targets), dtype=np.int64),
    )


@pytest.mark.parametrize("motion", MOTIONS.values(), ids=MOTIONS.keys())
@settings(max_examples=40, deadline=None)
@given(scene=scenes)
def test_motions_change_no_distance(
    motion: Callable[[Any], Any], scene: tuple[list[Any], list[Any]]
) -> None:
    before = measured(*scene)
    after = measured(*([motion(shape) for shape in part] for part in scene))
    np.testing.assert_allclose(after.distance_um, before.distance_um, rtol=0.0, atol=EXACT_UM)


@settings(max_examples=40, deadline=None)
@given(scene=scenes, data=st.data())
def test_the_order_of_shapes_and_taps_changes_nothing(
    scene: tuple[list[Any], list[Any]], data: st.DataObject
) -> None:
    shapes, targets = scene
    order = data.draw(st.permutations(range(len(shapes))))
    other = data.draw(st.permutations(targets))
    before = measured(shapes, targets)
    after = measured([shapes[i] for i in order], other)
    np.testing.assert_array_equal(after.distance_um, before.distance_um[list(order)])
    np.testing.assert_array_equal(after.at_um, before.at_um[list(order)])


@settings(max_examples=40, deadline=None)
@given(scene=scenes, extra=boxes)
def test_one_more_tap_never_raises_a_distance(
    scene: tuple[list[Any], list[Any]], extra: Any
) -> None:
    shapes, targets = scene
    fewer, more = measured(shapes, targets), measured(shapes, [*targets, extra])
    assert np.all(more.distance_um <= fewer.distance_um + EXACT_UM)


@settings(max_examples=15, deadline=None)
@given(scene=scenes)
def test_distances_of_generated_scenes_lie_within_plain_subdivision(
    scene: tuple[list[Any], list[Any]],
) -> None:
    shapes, targets = scene
    found = measured(shapes[:1], targets)
    low, high = bracket(shapes[0], shapely.union_all(targets), radius=0.02)
    assert low <= found.distance_um[0] <= high


# ---- what cannot be measured ----------------------------------------------------------


def test_an_outline_that_crosses_itself_is_refused() -> None:
    bow = shapely.Polygon([(0, 0), (3, 1), (3, 0), (0, 2)])
    with pytest.raises(GeometryError, match="cross itself"):
        one(bow, shapely.box(5, 5, 6, 6))


def test_bounds_that_do_not_meet_are_an_error(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(farthest, "MAX_LEVELS", 1)
    with pytest.raises(ResolutionError, match="undecided"):
        one(shapely.box(0, 0, 10, 1), shapely.box(-2, 0, -1, 1), shapely.box(11, 0, 12, 1))


# ---- injectors ------------------------------------------------------------------------


def test_injector_spacings_by_hand() -> None:
    bodies = [
        nwell("nwell-1", shapely.box(0, 0, 10, 10), shapely.box(0, 50, 10, 60)),
        nwell("nwell-2", shapely.box(30, 0, 40, 10)),
        Body(id="substrate", kind="substrate", polygons=column([]), sheets=()),
    ]
    layout = build(
        [
            (shapely.box(1, 1, 2, 2), P_IN_NWELL, 0, "VIO"),
            (shapely.box(33, 1, 34, 2), P_IN_NWELL, 1, ""),
            (shapely.box(13, 14, 14, 15), N_OUTSIDE_NWELL, 2, "VIO"),
            (shapely.box(26, 2, 27, 3), N_OUTSIDE_NWELL, 2, "marker"),
            (shapely.box(12, 1, 13, 2), N_OUTSIDE_NWELL, 2, ""),
        ],
        bodies=bodies,
    )
    found = measure_spacings(layout)
    assert found.emitter.tolist() == [0, 2, 3]
    assert found.body.tolist() == [2, 0, 1]
    # by hand: 12 - 2; corner to corner hypot(3, 4); 30 - 27
    assert found.spacing_um.tolist() == pytest.approx([10.0, 5.0, 3.0])
    assert found.from_um[1].tolist() == [13.0, 14.0]
    assert found.to_um[1].tolist() == [10.0, 10.0]


def test_an_injector_without_a_partner_has_no_spacing() -> None:
    found = measure_spacings(build([(shapely.box(0, 0, 1, 1), P_IN_NWELL, 0, "VIO")]))
    assert found.body.tolist() == [-1]
    assert np.isnan(found.spacing_um[0])


def guarded(*, anode_in_ring: bool, ring_around: int) -> tuple[Layout, Injectors, Rings]:
    """An n+ at the origin in a guard well, which is a ring of `ring_around`; a well beyond."""
    guard = shapely.box(-10, -10, 10, 10) - shapely.box(-8, -8, 8, 8)
    far = shapely.box(30, -5, 40, 5)
    layout = build(
        [
            (shapely.box(-1, -1, 1, 1), N_OUTSIDE_NWELL, 2, "VIO"),
            (shapely.box(20, -1, 21, 1), N_OUTSIDE_NWELL, 2, "VIO"),
            (shapely.box(-9.5, -9.5, -8.5, -8.5), P_IN_NWELL, 0 if anode_in_ring else 1, ""),
        ],
        bodies=[
            nwell("nwell-1", guard),
            nwell("nwell-2", far),
            Body(id="pwell-1", kind="isolated_pwell", polygons=column([]), sheets=(), enclosing=0),
        ],
    )
    injectors = replace(
        no_injectors(), emitter=np.array([0, 1]), reason=np.full(2, BY_PIN), pin=np.zeros(2, int)
    )
    rings = replace(
        no_rings(),
        material=np.array(["nwell"]),
        polygons=column([shapely.multipolygons([guard])]),
        member_first=np.array([0, 1]),
        member_injector=np.array([ring_around]),
    )
    return layout, injectors, rings


def test_a_guard_well_is_no_target_of_what_it_guards() -> None:
    layout, injectors, rings = guarded(anode_in_ring=True, ring_around=0)
    collectors = own_collectors(layout, injectors, rings)
    assert collectors.tolist() == [[0, 0]]
    found = measure_spacings(layout, collectors)
    # by hand: from x = 1 and from x = 21 to the far well at 30; unguarded, from 1 to 8
    assert found.body.tolist() == [1, 1]
    assert found.spacing_um.tolist() == pytest.approx([29.0, 9.0])
    assert measure_spacings(layout).spacing_um.tolist() == pytest.approx([7.0, 9.0])


def test_the_well_around_an_isolated_pwell_collects_unless_it_holds_an_anode() -> None:
    layout, injectors, rings = guarded(anode_in_ring=False, ring_around=0)
    assert own_collectors(layout, injectors, rings).tolist() == [[0, 0], [1, 0]]
    layout, injectors, rings = guarded(anode_in_ring=True, ring_around=1)
    assert own_collectors(layout, injectors, rings).tolist() == [[1, 0]]
    assert own_collectors(layout, injectors, no_rings()).tolist() == []


@pytest.mark.parametrize("module", [convex, farthest, neighbours, walls])
def test_examples_in_docstrings_hold(module: Any) -> None:
    result = doctest.testmod(module)
    assert result.attempted > 0
    assert result.failed == 0
