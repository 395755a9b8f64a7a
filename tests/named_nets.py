"""Nets made of names alone, for what reads names: labels, bond pads and diffusions by net.

    named_nets({0: ["VDD"], 1: ["OUT"]}, loose=["TYPO"], pads=[1], pieces=[0, 1, 1])

Every net is one node and lies one um above the one before; every value is invented.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import replace

import numpy as np
import shapely

from latchscan.layout.connections import Nets
from latchscan.layout.model import Geometries, Label
from latchscan.layout.unconnected import no_nets


def named_nets(
    names: Mapping[int, Sequence[str]] | Sequence[Sequence[str]],
    *,
    loose: Sequence[str] = (),
    pads: Sequence[int] = (),
    pieces: Sequence[int] = (),
) -> Nets:
    """Nets with these names; `pads` and `pieces` list the net of each bond pad and diffusion."""
    rows = dict(names.items() if isinstance(names, Mapping) else enumerate(names))
    count = max(rows, default=-1) + 1
    labels = [(text, net) for net in sorted(rows) for text in sorted(rows[net])]
    labels += [(text, -1) for text in loose]
    return replace(
        no_nets(),
        ids=np.array([f"net-{net + 1}" for net in range(count)], dtype=np.str_),
        names=tuple(tuple(sorted(set(rows.get(net, ())))) for net in range(count)),
        box_um=np.array([(0, net, 1, net + 1) for net in range(count)], float).reshape(-1, 4),
        layers=("metal1",),
        shape_count=np.ones((count, 1), dtype=np.int64),
        node_net=np.arange(count),
        piece_polygons=_boxes(pieces),
        piece_node=np.array(pieces, dtype=np.int64),
        pad_polygons=_boxes(pads),
        pad_node=np.array(pads, dtype=np.int64),
        shape_total=np.zeros(count, dtype=np.int64),
        labels=tuple(
            Label(text=text, layer=60, texttype=0, x_um=0.5, y_um=float(net) + 0.5)
            for text, net in labels
        ),
        label_node=np.array([net for _, net in labels], dtype=np.int64),
        label_conductor=tuple("metal1" if net >= 0 else "any" for _, net in labels),
    )


def _boxes(nets: Sequence[int]) -> Geometries:
    boxes = np.empty(len(nets), dtype=np.object_)
    boxes[:] = [shapely.box(0, net, 1, net + 1) for net in nets]
    return boxes
