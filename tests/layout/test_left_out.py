"""Boxes that are left out of the judgement.

Source: the meaning that the block file's documentation gives them; no published source.
"""

from __future__ import annotations

from pathlib import Path

import numpy as np
from layouts import block

from latchscan.layout.bodies import assemble_layout
from latchscan.layout.left_out import inside_any, pairs_outside
from latchscan.layout.pairs import find_pairs
from latchscan.layout.regions import derive_regions
from latchscan.layout.source import open_layout
from latchscan.tasks import Workers
from latchscan.technology.load import load_technology


def test_pairs_with_a_half_inside_are_left_out(tmp_path: Path) -> None:
    drawn = block().nwell(0, 0, 60, 10)
    for x in (5, 45):
        drawn.emitter("p", x, 3, x + 4, 7).emitter("n", x, -8, x + 4, -4)
    technology = load_technology("larch180").technology
    source = open_layout(drawn.write(tmp_path / "b.gds"), technology=technology)
    layout = assemble_layout(derive_regions(source, technology, None, Workers()), technology)
    pairs = find_pairs(layout, 20.0)
    assert len(pairs.anode) == 2
    assert len(pairs_outside(pairs, layout, np.zeros((0, 4))).anode) == 2
    cathode_only = np.array([[4.0, -9.0, 10.0, -3.0]])
    left = pairs_outside(pairs, layout, cathode_only)
    assert left.edge_um[:, 0].tolist() == [pairs.edge_um[1, 0]]
    assert len(pairs_outside(pairs, layout, np.array([[0.0, -10.0, 60.0, 10.0]])).anode) == 0


def test_edges_of_a_box_count() -> None:
    boxes = np.array([[0.0, 0.0, 1.0, 1.0], [5.0, 5.0, 6.0, 6.0]])
    x, y = np.array([1.0, 1.001, 5.5]), np.array([0.0, 0.5, 6.0])
    assert inside_any(x, y, boxes).tolist() == [True, False, True]
