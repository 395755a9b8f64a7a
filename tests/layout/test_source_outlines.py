"""Which outlines enclose something, and what becomes of those that wind both ways.

Sources: what a polygon fills is what it winds around (nonzero rule), here by the brute force of
`net_reference.filled` (shapely's faces, each with its winding number); that a walk along a
tree and back winds around nothing is plain topology.
"""

from __future__ import annotations

import random
from pathlib import Path
from tempfile import TemporaryDirectory

import gdsii_records as gds
import numpy as np
import pytest
import shapely
from hypothesis import example, given, settings
from hypothesis import strategies as st
from net_layouts import Wiring, technology, traced
from net_reference import filled, reference_nets
from reference_layouts import EVERYWHERE, outlines, technology_of

from latchscan.layout.file.outlines import OutlineColumns
from latchscan.layout.regions import derive_regions
from latchscan.layout.source import open_layout
from latchscan.tasks import Workers

PAIR = (1, 0)
BOWS = {
    "slanted": [(0, 0), (400, 400), (400, 0), (0, 400)],
    "upright": [(0, 0), (200, 0), (200, 400), (400, 400), (400, 200), (0, 200)],
    "one corner": [(0, 0), (200, 0), (200, 200), (200, 400), (400, 400), (400, 200), (0, 200)],
    "unequal": [(0, 0), (600, 600), (600, 0), (0, 400)],
}
walks = st.lists(st.tuples(st.integers(0, 3), st.integers(0, 3)), min_size=3, max_size=9)


def enclosed(points: list[tuple[int, int]]) -> float:
    """Area that a closed walk winds around."""
    array = np.array(points, dtype=np.float64)
    distinct = array[(array != np.roll(array, 1, axis=0)).any(axis=1)]
    return sum(part.area for part in filled(distinct)) if len(distinct) > 2 else 0.0


def kept(shapes: list[list[tuple[int, int]]], scale: int = 1) -> list[int]:
    """Indices of the outlines that are taken."""
    columns = OutlineColumns(1.0)
    for number, points in enumerate(shapes):
        columns.add(np.array(points, dtype=np.float64) * scale, number, 0)
    found = columns.finish()
    assert columns.dropped_count == len(shapes) - len(found.cell)
    return found.cell.tolist()


@given(shapes=st.lists(walks, min_size=1, max_size=30), scale=st.sampled_from([1, 7, 10**8]))
@example(shapes=[[(0, 0), (1, 1), (1, 0), (0, 1)]], scale=1)
@example(shapes=[[(0, 0), (2, 0), (1, 0), (3, 0)]], scale=1)
# two squares of opposite winding along one line, and the same square walked both ways
@example(shapes=[[(0, 0), (1, 0), (1, 1), (0, 1), (0, 0), (0, 1), (1, 1), (1, 0)]], scale=1)
@example(shapes=[[(1, 1), (2, 1), (2, 2), (1, 2), (1, 1), (0, 1), (0, 0), (1, 0)]], scale=1)
@settings(max_examples=150, deadline=None)
def test_what_winds_around_an_area_is_kept_and_nothing_else(shapes, scale):
    wanted = [number for number, points in enumerate(shapes) if enclosed(points) > 0]
    assert kept(shapes, scale) == wanted


@given(walks=st.lists(walks, min_size=1, max_size=20))
@settings(max_examples=60, deadline=None)
def test_a_walk_there_and_back_is_flat(walks):
    assert kept([walk + walk[-2:0:-1] for walk in walks]) == []


@given(walks=st.lists(walks, min_size=1, max_size=20))
@settings(max_examples=60, deadline=None)
def test_lobes_of_opposite_winding_are_kept(walks):
    # a walk and its mirror image through its first point, the other way round beside it
    shapes = []
    for walk in walks:
        x = walk[0][0]
        if any(other[0] > x for other in walk):
            continue
        shapes.append(walk + [(2 * x - px, py) for px, py in walk])
    wanted = [number for number, points in enumerate(shapes) if enclosed(points) > 0]
    assert kept(shapes) == wanted


def test_both_lobes_of_a_bow_tie_come_from_the_file(tmp_path):
    path = tmp_path / "bow.gds"
    shapes = [
        gds.boundary(1, 0, 0, 0, 10, 10, 10, 0, 0, 10, 0, 0),
        gds.boundary(1, 0, 0, 0, 10, 0, 20, 0, 10, 0, 0, 0),
        gds.boundary(1, 0, 0, 0, 10, 0, 10, 10, 10, 0, 0, 0),
    ]
    path.write_bytes(gds.library(gds.cell("top", *shapes)))
    source = open_layout(path, technology=technology_of(one="1/0"))
    assert ("flat-shapes", "2") in {(note.code, note.detail) for note in source.notes}
    (points,) = outlines(source.window(EVERYWHERE, [PAIR])[PAIR])
    assert {tuple(point) for point in points.tolist()} == {(0, 0), (10, 10), (10, 0), (0, 10)}


@pytest.mark.parametrize("backwards", [False, True])
@pytest.mark.parametrize("bow", BOWS)
def test_nets_of_bow_ties(tmp_path, bow, backwards):
    points = BOWS[bow][::-1] if backwards else BOWS[bow]
    drawn = Wiring().polygon("metal1", points).rect("metal1", 350, 350, 500, 380)
    for name, part in zip("AB", filled(np.array(points, dtype=float)), strict=True):
        at = part.representative_point()
        drawn.label(name, "metal1", int(at.x), int(at.y))
    drawn.polygon("metal2", [(x, y + 2000) for x, y in points]).label("C", "metal2", 390, 2395)
    path = drawn.write(tmp_path / "bow.gds")
    nets = traced(path, technology())
    wanted = reference_nets(path, "wiring", technology(), drawn.labels)
    counts = [
        (
            names,
            tuple(sorted((n, c) for n, c in zip(nets.layers, row, strict=True) if c)),
        )
        for names, row in zip(nets.names, nets.shape_count.tolist(), strict=True)
        if names
    ]
    assert sorted(counts) == sorted((net.names, net.counts) for net in wanted)
    assert ("A", "B") in [names for names, _ in counts]


@pytest.mark.parametrize("under", [False, True])
@pytest.mark.parametrize("bow", ["slanted", "upright", "one corner"])
def test_regions_of_bow_ties(tmp_path, bow, under):
    # a rectangle across both lobes: the lobe that winds the other way must not cut it
    points = [(10 * x, 10 * y) for x, y in BOWS[bow]]
    drawn, shapes = Wiring().polygon("nwell", points), filled(np.array(points, dtype=float))
    if under:
        drawn.rect("nwell", 500, 500, 3500, 3500)
        shapes.append(shapely.box(500, 500, 3500, 3500))
    source = open_layout(drawn.write(tmp_path / "bow.gds"), technology=technology())
    regions = derive_regions(source, technology(), None, Workers())
    found = shapely.union_all(regions.shapes["nwell"])
    wanted = shapely.transform(shapely.union_all(shapes), lambda xy: xy / 1000)
    assert shapely.symmetric_difference(found, wanted).area < 1e-6


@pytest.mark.parametrize("seed", range(3))
def test_random_walks_keep_their_areas_up_to_the_regions(seed):
    # crossings lie between grid points: the regions' grid is 1/16 of a database unit
    rng = random.Random(seed)
    drawn, wanted = Wiring(), 0.0
    for number in range(60):
        walk = [(rng.randint(0, 3), rng.randint(0, 3)) for _ in range(rng.randint(3, 8))]
        if number % 2:
            walk += [(2 * walk[0][0] - x, y) for x, y in walk]
        points = [
            (160 * x + 4000 * (number % 10), 160 * y + 4000 * (number // 10)) for x, y in walk
        ]
        drawn.polygon("nwell", points)
        wanted += enclosed(points) / 1e6
    with TemporaryDirectory() as folder:
        source = open_layout(drawn.write(Path(folder) / "walks.gds"), technology=technology())
        regions = derive_regions(source, technology(), None, Workers())
    assert float(shapely.area(regions.shapes["nwell"]).sum()) == pytest.approx(wanted, abs=2e-4)
