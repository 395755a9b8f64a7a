"""Nets and links written by hand, for tests that need no drawing.

    wiring = Wiring()
    rail = wiring.node("VDD", at=(0, 0), pieces=[(0, 0, 1, 1)])
    far = wiring.node(beside=rail, pieces=[(9, 0, 10, 1)])
    wiring.strap(rail, far, ohm=300.0)
    nets, links = wiring.nets(), wiring.links()

Nodes are numbered as they are written, nets by their first node; boxes are in um.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field

import numpy as np
import shapely

from latchscan.layout.connections import STRAP, Links, Nets, Resistors
from latchscan.layout.model import Label

Box = tuple[float, float, float, float]


@dataclass
class Wiring:
    """Nodes, the nets they form and the resistances between them."""

    node_net: list[int] = field(default_factory=list)
    labels: list[tuple[str, float, float, int, str]] = field(default_factory=list)
    pieces: list[tuple[Box, int]] = field(default_factory=list)
    pads: list[tuple[Box, int]] = field(default_factory=list)
    boxes: list[Box] = field(default_factory=list)
    resistors: list[tuple[str, int, int, float]] = field(default_factory=list)

    def node(
        self,
        *names: str,
        at: tuple[float, float] = (0.0, 0.0),
        pieces: Sequence[Box] = (),
        pads: Sequence[Box] = (),
        beside: int | None = None,
    ) -> int:
        """A new node with labels at a point, diffusions and pads; `beside` a node of its net."""
        node = len(self.node_net)
        net = max(self.node_net, default=-1) + 1 if beside is None else self.node_net[beside]
        self.node_net.append(net)
        self.labels += [(name, *at, node, "metal1") for name in names]
        self.pieces += [(box, node) for box in pieces]
        self.pads += [(box, node) for box in pads]
        self.boxes.append((*at, *at))
        return node

    def loose_label(self, name: str, x: float, y: float, expected: str = "metal1") -> None:
        """A label on no shape."""
        self.labels.append((name, x, y, -1, expected))

    def loose_pad(self, box: Box) -> None:
        """A bond pad on no conductor."""
        self.pads.append((box, -1))

    def strap(self, one: int, other: int, ohm: float) -> None:
        """Poly between two nodes of one net."""
        self.resistors.append((STRAP, one, other, ohm))

    def resistor(self, one: int, other: int, ohm: float) -> None:
        """A marked resistor between two nodes."""
        self.resistors.append(("poly_resistor", one, other, ohm))

    def nets(self) -> Nets:
        """The nets."""
        count = max(self.node_net, default=-1) + 1
        names: list[set[str]] = [set() for _ in range(count)]
        labels = sorted(self.labels, key=lambda label: (label[2], label[1], label[0]))
        for text, _, _, node, _ in labels:
            if node >= 0:
                names[self.node_net[node]].add(text)
        boxes = [
            [box for box, net in zip(self.boxes, self.node_net, strict=True) if net == k]
            + [
                box
                for box, node in self.pieces + self.pads
                if node >= 0 and self.node_net[node] == k
            ]
            for k in range(count)
        ]
        box_um = [
            (*np.min(found, axis=0)[:2], *np.max(found, axis=0)[2:])
            for found in map(np.array, boxes)
        ]
        return Nets(
            ids=np.array([f"net-{k + 1}" for k in range(count)], dtype=np.str_),
            names=tuple(tuple(sorted(found)) for found in names),
            box_um=np.array(box_um, dtype=np.float64).reshape(-1, 4),
            layers=("diffusion", "poly", "metal1"),
            shape_count=np.ones((count, 3), dtype=np.int64),
            node_net=_ints(self.node_net),
            piece_polygons=_boxes([box for box, _ in self.pieces]),
            piece_node=_ints([node for _, node in self.pieces]),
            pad_polygons=_boxes([box for box, _ in self.pads]),
            pad_node=_ints([node for _, node in self.pads]),
            **no_shapes(count),
            labels=tuple(
                Label(text=text, layer=8, texttype=25, x_um=x, y_um=y)
                for text, x, y, _, _ in labels
            ),
            label_node=_ints([node for _, _, _, node, _ in labels]),
            label_conductor=tuple(conductor for *_, conductor in labels),
            resistors=self._resistors(),
        )

    def links(self) -> Links:
        """The resistances."""
        return Links(
            resistor=np.arange(len(self.resistors)),
            node=_ints([(a, b) for _, a, b, _ in self.resistors]).reshape(-1, 2),
            ohm=np.array([ohm for *_, ohm in self.resistors], dtype=np.float64),
        )

    def _resistors(self) -> Resistors:
        count = len(self.resistors)
        body = [(0.0, 0.0, 1.0, 1.0)] * count
        ends = _boxes([(0.0, 0.0, 0.1, 1.0), (0.9, 0.0, 1.0, 1.0)] * count)
        return Resistors(
            kind=np.array([kind for kind, *_ in self.resistors], dtype=np.str_),
            conductor=np.array(["poly"] * count, dtype=np.str_),
            polygons=_boxes(body),
            terminal_first=2 * np.arange(count + 1),
            terminal_node=_ints([node for _, a, b, _ in self.resistors for node in (a, b)]),
            terminal_shape=ends,
            terminal_contacts=np.ones(2 * count, dtype=np.int64),
        )


def no_shapes(nets: int) -> dict[str, np.ndarray]:
    """Columns of `Nets` that tell that nothing is drawn of so many nets."""
    return {
        "shape_net": _ints([]),
        "shape_layer": _ints([]),
        "shape_box_um": np.zeros((0, 4)),
        "shape_polygon": np.zeros(0, dtype=np.object_),
        "shape_total": np.zeros(nets, dtype=np.int64),
    }


def _ints(values: Sequence[object]) -> np.ndarray:
    return np.array(values, dtype=np.int64)


def _boxes(boxes: Sequence[Box]) -> np.ndarray:
    found = np.empty(len(boxes), dtype=np.object_)
    found[:] = [shapely.box(*box) for box in boxes]
    return found
