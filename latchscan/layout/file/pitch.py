"""The pitch at which a layout's most-expanded cell repeats."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from latchscan.layout.file.hierarchy import instance_counts
from latchscan.layout.file.placements import all_placements
from latchscan.layout.file.tables import Tables
from latchscan.layout.model import Floats, Ints

REPEATS = 16
"""A pitch counts when the cell stands at least at so many places along each axis."""
MOST_PLACEMENTS = 4_000_000
"""Cells placed more often than this are not looked at for a pitch."""


def repeat_pitch(tables: Tables, order: Ints, top: int) -> tuple[int, int] | None:
    """Pitch (x, y) [database units] of the most-expanded cell, or None.

    The pitch is the smallest shift that takes the cell's places, those with the same
    orientation, onto places of the cell again all over the layout, along each axis.
    """
    own = np.bincount(tables.polygon_cell, minlength=len(tables.cell_names)).tolist()
    counts = instance_counts(tables, order, top)
    weights = [
        count * polygons if polygons > 1 else 0 for count, polygons in zip(counts, own, strict=True)
    ]
    cell = max(range(len(weights)), key=weights.__getitem__)
    if not weights[cell] or not REPEATS <= counts[cell] <= MOST_PLACEMENTS:
        return None
    copies = all_placements(tables, top=top, order=order, cells=[cell])[cell]
    places = copies.shift[_commonest(copies.matrix)]
    pitch_x, pitch_y = _period(places[:, 0]), _period(places[:, 1])
    return (pitch_x, pitch_y) if pitch_x and pitch_y else None


def _commonest(matrix: Floats) -> NDArray[np.bool_]:
    """Rows that equal the most frequent row."""
    kind = np.zeros(len(matrix), dtype=np.int64)
    for column in matrix.T:
        values, number = np.unique(column, return_inverse=True)
        kind = kind * len(values) + number
    _, kind, counts = np.unique(kind, return_inverse=True, return_counts=True)
    return np.asarray(kind == np.argmax(counts))


def _period(places: Floats) -> int | None:
    """Smallest shift that maps the distinct positions onto each other, edges aside."""
    distinct = np.unique(np.floor(places + 0.5).astype(np.int64))
    if len(distinct) < REPEATS:
        return None
    known = set(distinct.tolist())
    for candidate in (distinct[1 : len(distinct) // 2 + 1] - distinct[0]).tolist():
        shifted = distinct[distinct + candidate <= distinct[-1]] + candidate
        if all(place in known for place in shifted.tolist()):
            return int(candidate)
    return None
