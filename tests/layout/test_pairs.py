"""Pairs of anodes and cathodes against hand-worked blocks and full distance tables."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import numpy as np
import pytest
import shapely
from hypothesis import given, settings
from hypothesis import strategies as st
from shapely import affinity

from latchscan.layout.measure import neighbours
from latchscan.layout.measure.neighbours import nearest_few
from latchscan.layout.measure.walls import nearest_on_walls
from latchscan.layout.model import (
    N_OUTSIDE_NWELL,
    P_IN_NWELL,
    Body,
    BodyKind,
    Emitters,
    Layout,
    Pairs,
    Regions,
    Taps,
)
from latchscan.layout.pairs import NEAREST, find_pairs

GRID_UM = 0.005


def column(shapes: Sequence[Any]) -> np.ndarray:
    """Polygons as an object array, also when there are none."""
    array = np.empty(len(shapes), dtype=object)
    array[:] = shapes
    return array


def body(kind: BodyKind, *polygons: Any, enclosing: int = -1) -> Body:
    return Body(id=kind, kind=kind, polygons=column(polygons), sheets=(), enclosing=enclosing)


def build(bodies: Sequence[Body], emitters: Sequence[tuple[Any, int]]) -> Layout:
    """A layout of bodies and (polygon, body) emitters; p+ in n-wells, n+ elsewhere."""
    polygons = column([polygon for polygon, _ in emitters])
    host = np.array([index for _, index in emitters], dtype=np.int64)
    kind = [P_IN_NWELL if bodies[i].kind == "nwell" else N_OUTSIDE_NWELL for i in host]
    none = np.empty(0, dtype=np.int64)
    return Layout(
        regions=Regions(
            bbox_um=(0, 0, 1, 1), shapes={}, contact_box_um=np.empty((0, 4)), labels=()
        ),
        bodies=tuple(bodies),
        taps=Taps(
            polygons=column([]),
            kind=none,
            body=none,
            contact_count=none,
            contact_first=np.zeros(1, dtype=np.int64),
            contact_box_um=np.empty((0, 4)),
        ),
        emitters=Emitters(
            ids=np.array([f"e-{i}" for i in range(len(host))], dtype=np.str_),
            polygons=polygons,
            kind=np.array(kind, dtype=np.int64),
            body=host,
            box_um=shapely.bounds(polygons).reshape(-1, 4),
            area_um2=shapely.area(polygons),
            over_buried=np.zeros(len(host), dtype=bool),
            injector=np.full(len(host), ""),
        ),
    )


def rows(pairs: Pairs) -> list[tuple[int, int]]:
    return list(zip(pairs.anode.tolist(), pairs.cathode.tolist(), strict=True))


# ---- hand-worked blocks ---------------------------------------------------------------


def test_one_pair_by_hand() -> None:
    layout = build(
        [body("nwell", shapely.box(0, 0, 10, 10)), body("substrate")],
        [(shapely.box(6, 2, 8, 8), 0), (shapely.box(13, 4, 14, 5), 1)],
    )
    pairs = find_pairs(layout, 20.0)
    assert rows(pairs) == [(0, 1)]
    assert (pairs.well.tolist(), pairs.base.tolist()) == ([0], [1])
    # by hand: 13 - 8; 13 - 10; the middle of the facing side; the anode's centre
    assert pairs.spacing_um.tolist() == [5.0]
    assert pairs.base_width_um.tolist() == [3.0]
    assert pairs.edge_um.tolist() == [[10.0, 4.5]]
    assert pairs.arrival_um.tolist() == [[7.0, 5.0]]


def test_reach_is_inclusive_and_ends_there() -> None:
    layout = build(
        [body("nwell", shapely.box(0, 0, 10, 10)), body("substrate")],
        [(shapely.box(6, 2, 8, 8), 0), (shapely.box(13, 4, 14, 5), 1)],
    )
    assert rows(find_pairs(layout, 5.0)) == [(0, 1)]
    assert rows(find_pairs(layout, 4.999)) == []
    assert find_pairs(layout, 4.999).edge_um.shape == (0, 2)


def test_a_far_anode_comes_in_through_its_cathodes_list_and_the_other_way_round() -> None:
    # by hand: seven anodes in a row before one cathode; the cathode keeps its six nearest,
    # but the seventh anode has no nearer cathode than this one
    anodes = [(shapely.box(20 - 2 * k, 1, 21 - 2 * k, 2), 0) for k in range(7)]
    layout = build(
        [body("nwell", shapely.box(0, 0, 22, 10)), body("substrate")],
        [*anodes, (shapely.box(23, 1, 24, 2), 1)],
    )
    assert rows(find_pairs(layout, 50.0)) == [(k, 7) for k in range(7)]


def test_an_anode_that_is_bent_is_entered_under_itself() -> None:
    # its centroid lies in the bend, outside the shape
    bent = shapely.Polygon([(1, 1), (9, 1), (9, 2), (2, 2), (2, 9), (1, 9)])
    layout = build(
        [body("nwell", shapely.box(0, 0, 10, 10)), body("substrate")],
        [(bent, 0), (shapely.box(13, 4, 14, 5), 1)],
    )
    assert bent.contains(shapely.Point(find_pairs(layout, 20.0).arrival_um[0]))


def isolated_block() -> Layout:
    """Two n-well rings (0, 1) round isolated p-wells (2 and 5 in ring 0, 3 in ring 1)."""
    rings = [
        shapely.box(0, 0, 40, 20) - shapely.box(4, 4, 16, 16) - shapely.box(24, 4, 36, 16),
        shapely.box(60, 0, 80, 20) - shapely.box(64, 4, 76, 16),
    ]
    bodies = [
        body("nwell", rings[0]),
        body("nwell", rings[1]),
        body("isolated_pwell", shapely.box(4, 4, 16, 16), enclosing=0),
        body("isolated_pwell", shapely.box(64, 4, 76, 16), enclosing=1),
        body("substrate"),
        body("isolated_pwell", shapely.box(24, 4, 36, 16), enclosing=0),
    ]
    emitters = [
        (shapely.box(1, 9, 3, 11), 0),  # 0: p+ left of p-well 2
        (shapely.box(6, 8, 7, 9), 2),  # 1: n+ in p-well 2, 2 um from its left wall
        (shapely.box(27, 8, 28, 9), 5),  # 2: n+ in p-well 5, 3 um from its left wall
        (shapely.box(66, 8, 67, 9), 3),  # 3: n+ in p-well 3
        (shapely.box(45, 8, 46, 9), 4),  # 4: n+ in the substrate between the rings
    ]
    return build(bodies, emitters)


def test_isolated_wells_pair_within_their_own_n_well_only() -> None:
    layout = isolated_block()
    pairs = find_pairs(layout, 100.0)
    anode = {"p+": 0, "well 2": 5 + 2, "well 3": 5 + 3, "well 5": 5 + 5}
    assert rows(pairs) == [
        (anode["p+"], 1),
        (anode["p+"], 2),
        (anode["p+"], 4),
        (anode["well 2"], 2),
        (anode["well 2"], 4),
        (anode["well 3"], 4),
        (anode["well 5"], 1),
        (anode["well 5"], 4),
    ]
    assert pairs.well.tolist() == [0, 0, 0, 0, 0, 1, 0, 0]
    assert pairs.base.tolist() == [2, 5, 4, 5, 4, 4, 2, 4]


def test_measures_in_isolated_wells_by_hand() -> None:
    pairs = find_pairs(isolated_block(), 100.0)
    at = {row: i for i, row in enumerate(rows(pairs))}
    inside = at[0, 1]
    # the wall x = 4 is 2 um from the cathode; the anode faces it from y = 9 to y = 11
    assert pairs.base_width_um[inside] == 2.0
    assert pairs.edge_um[inside].tolist() == [4.0, 8.5]
    assert pairs.arrival_um[inside].tolist() == [4.0, 10.0]
    across = at[7, 2]
    # from p-well 2 (x = 16) to the cathode at x = 27; it enters p-well 5 at x = 24
    assert pairs.spacing_um[across] == 11.0
    assert pairs.edge_um[across].tolist() == [24.0, 8.5]
    assert pairs.arrival_um[across].tolist() == [24.0, 10.0]
    outside = at[8, 4]
    # p-well 3 works through its ring's wall x = 60, 14 um from the cathode
    assert pairs.base_width_um[outside] == 14.0
    assert pairs.edge_um[outside].tolist() == [60.0, 8.5]
    assert pairs.arrival_um[outside].tolist() == [70.0, 10.0]


def test_an_isolated_well_of_several_polygons_is_one_anode() -> None:
    parts = [shapely.box(2, 2, 4, 4), shapely.box(6, 2, 8, 4)]
    well = shapely.box(0, 0, 10, 6) - shapely.union_all(parts)
    layout = build(
        [body("nwell", well), body("isolated_pwell", *parts, enclosing=0), body("substrate")],
        [(shapely.box(12, 2, 13, 3), 2)],
    )
    pairs = find_pairs(layout, 50.0)
    assert rows(pairs) == [(1 + 1, 0)]
    assert pairs.spacing_um.tolist() == [4.0]
    # the centroid of the two parts lies between them, so a point of one of them is taken
    assert shapely.union_all(parts).contains(shapely.Point(pairs.arrival_um[0]))


@pytest.mark.parametrize("emitters", [[], [0], [1]])
def test_a_block_without_one_half_has_no_pairs(emitters: list[int]) -> None:
    shapes = [shapely.box(1, 1, 2, 2), shapely.box(12, 1, 13, 2)]
    layout = build(
        [body("nwell", shapely.box(0, 0, 10, 10)), body("substrate")],
        [(shapes[i], i) for i in emitters],
    )
    pairs = find_pairs(layout, 50.0)
    assert rows(pairs) == []
    assert pairs.arrival_um.shape == (0, 2)


# ---- against full tables --------------------------------------------------------------


def scattered(rng: np.random.Generator, count: int, side: float) -> np.ndarray:
    """Rectangles and turned L shapes on the grid; every tenth a long one."""
    shapes = []
    for i in range(count):
        x, y = GRID_UM * rng.integers(0, round(side / GRID_UM), 2)
        w, h = GRID_UM * rng.integers(40, 200, 2)
        if i % 10 == 0:
            w = 20.0
        corner = shapely.Polygon(
            [(x, y), (x + w, y), (x + w, y + 0.2), (x + 0.2, y + 0.2), (x + 0.2, y + h), (x, y + h)]
        )
        turned = affinity.rotate(corner, 45, origin=(x, y))
        shapes.append(turned if i % 3 == 0 else shapely.box(x, y, x + w, y + h))
    return column(shapes)


def by_table(sources: Any, targets: Any, count: int, reach: float) -> set[tuple[int, int]]:
    """Nearest few by the whole distance table (shapely), equal ones by index."""
    table = shapely.distance(sources[:, None], targets[None, :])
    found = set()
    for i, line in enumerate(np.round(table, 6)):
        order = np.lexsort((np.arange(len(line)), line))[:count]
        found |= {(i, int(j)) for j in order if line[j] <= reach}
    return found


@pytest.mark.parametrize("reach", [0.4, 3.0, 25.0, 400.0])
@pytest.mark.parametrize("seed", [1, 2])
def test_nearest_few_match_the_whole_table(
    seed: int, reach: float, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr(neighbours, "SOURCES_AT_ONCE", 70)
    rng = np.random.default_rng(seed)
    sources, targets = scattered(rng, 150, 60.0), scattered(rng, 200, 90.0)
    found = nearest_few(sources, targets, count=6, reach_um=reach)
    pairs = set(zip(found.source.tolist(), found.target.tolist(), strict=True))
    assert len(pairs) == len(found.source)
    assert pairs == by_table(sources, targets, 6, reach)
    assert np.all(np.diff(found.source) >= 0)
    np.testing.assert_allclose(
        found.distance_um, shapely.distance(sources[found.source], targets[found.target])
    )


def test_ties_of_a_regular_array_go_by_index_wherever_it_stands() -> None:
    k = np.arange(400)
    x, y = (k % 20) * 1.3, (k // 20) * 1.3
    answers = []
    for shift in (0.0, 1234.565):
        targets = shapely.box(x + shift, y + shift, x + shift + 0.4, y + shift + 0.4)
        sources = shapely.box(x + shift + 0.6, y + shift, x + shift + 0.8, y + shift + 0.4)
        found = nearest_few(sources, targets, count=6, reach_um=50.0)
        answers.append((found.source.tolist(), found.target.tolist()))
        pairs = set(zip(*answers[-1], strict=True))
        assert pairs == by_table(sources, targets, 6, 50.0)
    assert answers[0] == answers[1]


def test_targets_in_few_clusters_match_the_whole_table() -> None:
    rng = np.random.default_rng(21)
    clusters = [scattered(rng, 60, 4.0), scattered(rng, 90, 10.0)]
    moved = shapely.transform(clusters[1], lambda points: points + np.array([400.0, 300.0]))
    targets = np.concatenate([clusters[0], moved])
    sources = scattered(rng, 80, 40.0)
    found = nearest_few(sources, targets, count=6, reach_um=900.0)
    pairs = set(zip(found.source.tolist(), found.target.tolist(), strict=True))
    assert pairs == by_table(sources, targets, 6, 900.0)


def test_a_single_row_of_targets_is_found_whole() -> None:
    targets = shapely.box(np.arange(50.0) * 9, 0.0, np.arange(50.0) * 9 + 1, 0.01)
    sources = column([shapely.box(200, 3, 201, 4)])
    found = nearest_few(sources, targets, count=60, reach_um=1000.0)
    assert sorted(found.target.tolist()) == list(range(50))


def test_pairs_of_a_random_block_match_the_whole_table() -> None:
    rng = np.random.default_rng(11)
    wells = [shapely.box(0, 20 * k, 60, 20 * k + 9) for k in range(3)]
    anodes, cathodes = [], []
    for k, shape in enumerate(scattered(rng, 90, 7.0)):
        spread = 20.0 * (k % 3)
        box = shapely.box(*shape.bounds)
        x = GRID_UM * rng.integers(0, 9000)
        anodes.append((affinity.translate(box, x, spread), k % 3))
        cathodes.append((affinity.translate(box, x + 1.3, spread + 10), 3))
    layout = build([*(body("nwell", well) for well in wells), body("substrate")], anodes + cathodes)
    pairs = find_pairs(layout, 12.0)
    p, n = layout.emitters.polygons[:90], layout.emitters.polygons[90:]
    expected = {(i, 90 + j) for i, j in by_table(p, n, NEAREST, 12.0)}
    expected |= {(i, 90 + j) for j, i in by_table(n, p, NEAREST, 12.0)}
    assert rows(pairs) == sorted(expected)
    well, shape = column(wells)[pairs.well], layout.emitters.polygons[pairs.cathode]
    edge = shapely.points(pairs.edge_um)
    np.testing.assert_allclose(pairs.base_width_um, shapely.distance(shapely.boundary(well), shape))
    np.testing.assert_allclose(shapely.distance(edge, shapely.boundary(well)), 0.0, atol=1e-9)
    np.testing.assert_allclose(shapely.distance(edge, shape), pairs.base_width_um, atol=1e-9)


# ---- walls ----------------------------------------------------------------------------

places = st.integers(min_value=-2000, max_value=2000)
MOTIONS = {"move": [1, 0, 0, 1, 512.25, -33.5], "mirror": [-1, 0, 0, 1, 0, 0]}
MOTIONS |= {"quarter turn": [0, -1, 1, 0, 0, 0], "flip": [1, 0, 0, -1, 0, 0]}


@pytest.mark.parametrize("motion", MOTIONS.values(), ids=MOTIONS.keys())
@settings(max_examples=30, deadline=None)
@given(x=places, y=places, w=st.integers(20, 300), h=st.integers(20, 300))
def test_the_nearest_place_on_a_wall_moves_with_the_block(
    motion: list[float], x: int, y: int, w: int, h: int
) -> None:
    outline = shapely.Polygon([(0, 0), (7, 0), (7, 3), (4, 3), (4, 8), (0, 8)])
    shape = shapely.box(*(GRID_UM * np.array([x, y, x + w, y + h])))
    distance, point = nearest_on_walls(column([outline]), column([shape]))
    assert distance[0] == pytest.approx(shape.distance(outline.exterior), abs=1e-9)
    moved = [affinity.affine_transform(item, motion) for item in (outline, shape)]
    after, place = nearest_on_walls(column(moved[:1]), column(moved[1:]))
    assert after[0] == pytest.approx(distance[0], abs=1e-9)
    end = shapely.Point(place[0])
    assert end.distance(moved[0].exterior) < 1e-9
    assert end.distance(moved[1]) == pytest.approx(distance[0], abs=1e-9)
    # inside and in the notch two walls can be equally near, where either is right
    if not shape.intersects(shapely.union_all([outline, shapely.box(4, 3, 7, 8)])):
        expected = affinity.affine_transform(shapely.Point(point[0]), motion)
        assert end.distance(expected) < 1e-6
