"""Currents forced into a sheet: spread over polygons or pushed into contacts."""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np

from latchscan.fields.sheet_kernels import Floats, Ints, Pieces, pieces_from_edges


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class SheetSources:
    """Currents of 1 A each: n spread over polygons, then those forced into contacts.

    Attributes
    ----------
    edge_start_um, edge_end_um
        (e, 2) directed edges of all pieces: outer rings counter-clockwise, holes clockwise.
    first
        (p + 1,) offsets of the pieces into the edges.
    owner
        (p,) source a piece belongs to, 0 .. n - 1, in rising order.
    domain
        (p,) domain the piece lies in.
    weight
        (p,) share of its owner's current that enters the piece; a source's pieces sum to 1.
    injected_node
        (i,) contact nodes into which 1 A is forced; they follow as sources n .. n + i - 1.
    """

    edge_start_um: Floats
    edge_end_um: Floats
    first: Ints
    owner: Ints
    domain: Ints
    weight: Floats
    injected_node: Ints = field(default_factory=lambda: np.empty(0, dtype=np.int64))

    @property
    def count(self) -> int:
        """Number n of sources spread over polygons."""
        return int(self.owner[-1]) + 1 if len(self.owner) else 0

    def pieces(self) -> Pieces:
        """Return the pieces with their moments."""
        return pieces_from_edges(self.edge_start_um, self.edge_end_um, self.first)


def no_sources() -> SheetSources:
    """Sources without any polygon."""
    nothing = np.empty(0, dtype=np.int64)
    return SheetSources(
        edge_start_um=np.empty((0, 2)),
        edge_end_um=np.empty((0, 2)),
        first=np.zeros(1, dtype=np.int64),
        owner=nothing,
        domain=nothing,
        weight=np.empty(0),
    )
