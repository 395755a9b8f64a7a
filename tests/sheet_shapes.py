"""Small sheets for tests: rings of points in, `SheetProblem` and `SheetSources` out."""

from __future__ import annotations

from collections.abc import Sequence
from itertools import pairwise

import numpy as np

from latchscan.fields.sheet import SheetProblem, SheetSources, no_sources

Ring = Sequence[tuple[float, float]]


class Sheet:
    """A sheet under construction; rings run with the domain on their left."""

    def __init__(self, *conductance_s: float) -> None:
        self.conductance = conductance_s
        self.rows: list[tuple[tuple[float, float], tuple[float, float], int, int, int, bool]] = []
        self.resistance: list[float] = []

    def node(self, resistance_ohm: float = 0.0) -> int:
        """Add a contact node."""
        self.resistance.append(resistance_ohm)
        return len(self.resistance) - 1

    def line(
        self,
        points: Ring,
        *,
        domain: int = 0,
        other: int = -1,
        node: int = -1,
        cut: bool = False,
    ) -> Sheet:
        """Add the segments between consecutive points."""
        for a, b in pairwise(points):
            self.rows.append((a, b, domain, other, node, cut))
        return self

    def problem(self) -> SheetProblem:
        """Return the finished sheet."""
        a, b, left, right, node, cut = zip(*self.rows, strict=True)
        return SheetProblem(
            conductance_s=np.array(self.conductance, dtype=float),
            start_um=np.array(a, dtype=float),
            end_um=np.array(b, dtype=float),
            left=np.array(left),
            right=np.array(right),
            node=np.array(node),
            cut=np.array(cut),
            node_resistance_ohm=np.array(self.resistance, dtype=float),
        )


def box(x0: float, y0: float, x1: float, y1: float) -> Ring:
    """Corners of a rectangle, counter-clockwise."""
    return [(x0, y0), (x1, y0), (x1, y1), (x0, y1)]


def circle(radius: float, count: int) -> Ring:
    """Closed regular polygon, counter-clockwise, of the same area as the circle."""
    turn = 2 * np.pi * np.arange(count + 1) / count
    size = radius * np.sqrt(2 * np.pi / count / np.sin(2 * np.pi / count))
    corners = np.stack([size * np.cos(turn), size * np.sin(turn)], axis=1)[:-1].tolist()
    points = [(x, y) for x, y in corners]
    return [*points, points[0]]


def spread(*rings: Ring, domain: Sequence[int] | None = None) -> SheetSources:
    """One source of 1 A over each ring's area."""
    points = [np.array(ring, dtype=float) for ring in rings]
    count = len(rings)
    return SheetSources(
        edge_start_um=np.concatenate(points),
        edge_end_um=np.concatenate([np.roll(p, -1, axis=0) for p in points]),
        first=np.cumsum([0, *(len(p) for p in points)]),
        owner=np.arange(count),
        domain=np.zeros(count, dtype=int) if domain is None else np.array(domain),
        weight=np.ones(count),
    )


def injected(*nodes: int) -> SheetSources:
    """1 A forced into each of the given contact nodes."""
    nothing = no_sources()
    return SheetSources(
        edge_start_um=nothing.edge_start_um,
        edge_end_um=nothing.edge_end_um,
        first=nothing.first,
        owner=nothing.owner,
        domain=nothing.domain,
        weight=nothing.weight,
        injected_node=np.array(nodes),
    )
