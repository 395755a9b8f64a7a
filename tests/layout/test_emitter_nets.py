"""The net of every emitter against the largest overlap over all pairs (shapely)."""

from __future__ import annotations

import dataclasses

import numpy as np
import pytest
import shapely
import synthetic_scan
from hypothesis import given, settings
from hypothesis import strategies as st

from latchscan.layout.connections import Nets
from latchscan.layout.emitter_nets import emitter_nets
from latchscan.layout.model import Layout
from latchscan.layout.unconnected import no_nets

corner = st.integers(0, 12)
size = st.integers(1, 6)
boxes = st.lists(st.tuples(corner, corner, size, size), min_size=0, max_size=8)


def shapes(drawn: list[tuple[int, int, int, int]]) -> np.ndarray:
    column = np.empty(len(drawn), dtype=np.object_)
    column[:] = [shapely.box(x, y, x + w, y + h) for x, y, w, h in drawn]
    return column


def drawn_layout(emitters: np.ndarray) -> Layout:
    layout = synthetic_scan.evidence().layout
    ids = np.array([f"n-{row + 1}" for row in range(len(emitters))], dtype=np.str_)
    return dataclasses.replace(
        layout, emitters=dataclasses.replace(layout.emitters, ids=ids, polygons=emitters)
    )


def nets_of(pieces: np.ndarray, node: np.ndarray) -> Nets:
    """Pieces on nodes; node i is on net i // 2."""
    return dataclasses.replace(
        no_nets(), piece_polygons=pieces, piece_node=node, node_net=np.arange(20) // 2
    )


@settings(max_examples=60, deadline=None)
@given(boxes, boxes, st.integers(0, 3))
def test_the_largest_overlap_decides(
    emitters: list[tuple[int, int, int, int]], pieces: list[tuple[int, int, int, int]], skip: int
) -> None:
    drawn, conducting = shapes(emitters), shapes(pieces)
    node = np.arange(len(pieces)) - skip
    node[node < 0] = -1
    found = emitter_nets(drawn_layout(drawn), nets_of(conducting, node))
    assert len(found) == len(emitters)
    for row, emitter in enumerate(drawn):
        area = shapely.area(shapely.intersection(emitter, conducting))
        area[node < 0] = 0.0
        if not len(area) or area.max() == 0.0:
            assert found[row] == -1
        else:
            assert found[row] == node[np.argmax(area)] // 2, "the first of equals"


def test_without_conductors_no_net_is_known() -> None:
    layout = synthetic_scan.evidence().layout
    assert set(emitter_nets(layout, no_nets()).tolist()) == {-1}


def test_finds_every_net_of_the_synthetic_block() -> None:
    measured = synthetic_scan.evidence(connected=True)
    found = emitter_nets(measured.layout, measured.connections.nets)
    injectors = measured.connections.injectors
    assert found[injectors.emitter].tolist() == injectors.net.tolist()
    assert (found >= 0).all()


@pytest.mark.parametrize("order", [(0, 1), (1, 0)])
def test_touching_along_an_edge_is_no_overlap(order: tuple[int, int]) -> None:
    pieces = shapes([(4, 0, 4, 4), (2, 0, 2, 4)])[list(order)]
    found = emitter_nets(drawn_layout(shapes([(4, 0, 2, 4)])), nets_of(pieces, np.array([0, 2])))
    assert found.tolist() == [order.index(0)]
