"""Grouping against a brute-force graph: networkx components over all pairs of boxes."""

from __future__ import annotations

import networkx
import numpy as np
import pytest
import shapely

from latchscan.rules.breaks import Breaks
from latchscan.rules.grouping import group

REACH_UM = 10.0


def breaks_at(boxes: np.ndarray, body: np.ndarray, reason: np.ndarray) -> Breaks:
    """Breaks with the given boxes; the measure falls with the row."""
    count = len(boxes)
    measured = np.arange(count, 0, -1.0)
    return Breaks(
        member=np.arange(count),
        subject=np.array([f"m-{row:04d}" for row in range(count)]),
        body=body,
        reason=reason,
        x_um=boxes[:, 0],
        y_um=boxes[:, 1],
        measured=measured,
        limit=np.ones(count),
        excess=measured,
        box_um=boxes,
        grouping_um=REACH_UM,
    )


def random_breaks(seed: int, count: int = 220, side_um: float = 260.0) -> Breaks:
    """Boxes of mixed size that form a few dozen groups."""
    random = np.random.default_rng(seed)
    corner = random.uniform(-side_um / 2, side_um / 2, (count, 2))
    size = random.uniform(0.2, 14.0, (count, 2))
    return breaks_at(
        np.hstack((corner, corner + size)),
        random.integers(0, 3, count),
        random.integers(0, 2, count),
    )


def brute_force(breaks: Breaks) -> set[frozenset[int]]:
    graph = networkx.Graph()
    graph.add_nodes_from(range(len(breaks)))
    shapes = shapely.box(*breaks.box_um.T)
    for one in range(len(breaks)):
        near = shapely.distance(shapes[one], shapes) <= REACH_UM
        same = (breaks.body == breaks.body[one]) & (breaks.reason == breaks.reason[one])
        graph.add_edges_from((one, int(other)) for other in np.flatnonzero(near & same))
    return {frozenset(part) for part in networkx.connected_components(graph)}


@pytest.mark.parametrize("seed", [1, 2, 3, 4])
def test_groups_equal_the_components_of_the_whole_graph(seed: int) -> None:
    breaks = random_breaks(seed)
    found = group(breaks)
    expected = brute_force(breaks)
    assert 5 < len(expected) < len(breaks)
    assert {frozenset(rows.tolist()) for rows in found} == expected
    firsts = [rows[0] for rows in found]
    assert firsts == sorted(firsts), "the worst group comes first"
    assert all(rows.tolist() == sorted(rows.tolist()) for rows in found)


@pytest.mark.parametrize("shift", [(3.3, -1.7), (1234.56, 987.0)])
def test_groups_do_not_depend_on_where_the_block_lies(shift: tuple[float, float]) -> None:
    breaks = random_breaks(5)
    moved = breaks_at(breaks.box_um + np.array([*shift, *shift]), breaks.body, breaks.reason)
    assert [rows.tolist() for rows in group(moved)] == [rows.tolist() for rows in group(breaks)]


def test_the_gap_itself_still_joins_and_a_little_more_does_not() -> None:
    zero = np.zeros(2, dtype=np.int64)
    joined = np.array([(0.0, 0.0, 1.0, 1.0), (11.0, 0.0, 12.0, 1.0)])
    assert len(group(breaks_at(joined, zero, zero))) == 1
    parted = joined + np.array([(0, 0, 0, 0), (1e-6, 0, 1e-6, 0)])
    assert len(group(breaks_at(parted, zero, zero))) == 2
    assert len(group(breaks_at(joined, np.array([0, 1]), zero))) == 2


def test_equal_measures_are_ordered_by_position() -> None:
    boxes = np.array([(50.0, 9.0, 51, 10), (0.0, 0.0, 1, 1), (80.0, 0.0, 81, 1)])
    zero = np.zeros(3, dtype=np.int64)
    breaks = breaks_at(boxes, zero, zero)
    breaks.excess[:] = 1.0
    assert [rows[0] for rows in group(breaks)] == [1, 2, 0]


def test_nothing_gives_no_group() -> None:
    nothing = np.empty(0, dtype=np.int64)
    assert group(breaks_at(np.empty((0, 4)), nothing, nothing)) == ()
