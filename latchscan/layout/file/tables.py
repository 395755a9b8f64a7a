"""The plain tables a layout file becomes: what the reading child hands to its parent.

Only numpy arrays and strings, so that they travel through a file without any code in it and
are shared with forked workers at no cost.  Coordinates are whole database units; transforms
and array vectors are float64, exact for every multiple of a quarter turn.
"""

from __future__ import annotations

import json
from dataclasses import dataclass
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from latchscan.layout.model import Floats, Ints, frozen

Pair = tuple[int, int]
"""A layer number and its datatype (or texttype)."""

_ARRAYS = (
    "polygon_points",
    "polygon_first",
    "polygon_cell",
    "polygon_pair",
    "reference_parent",
    "reference_child",
    "reference_matrix",
    "reference_origin",
    "reference_counts",
    "reference_vectors",
    "label_cell",
    "label_pair",
    "label_points",
)


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Tables:
    """A layout library as columns.

    Attributes
    ----------
    database_unit_um
        Length of one database unit [um].
    cell_names
        (c,) names of the cells in the file's order.
    pairs
        Layer/datatype pairs that `polygon_pair` and `label_pair` point into.
    file_pairs, file_text_pairs
        All pairs that shapes and texts of the file use, read or not.
    missing
        (parent cell, name) of references to cells that the file does not hold.
    dropped_count
        Polygons without area that were left out.
    polygon_points
        (N, 2) vertices (x, y) [database units], counter-clockwise, closing vertex left out.
    polygon_first
        (n + 1,) offsets of the polygons in `polygon_points`.
    polygon_cell, polygon_pair
        (n,) cell and pair of each polygon; rows are sorted by (cell, pair).
    reference_parent, reference_child
        (r,) cells; rows are sorted by parent.
    reference_matrix
        (r, 4) a, b, c, d of x' = a x + b y, y' = c x + d y.
    reference_origin
        (r, 2) position of the first instance [database units].
    reference_counts
        (r, 2) columns and rows of a regular array, 1 and 1 for a single reference.
    reference_vectors
        (r, 4) column vector (x, y) and row vector (x, y) [database units].
    label_cell, label_pair, label_points, label_texts
        Texts: cell, pair, (l, 2) positions [database units], strings.
    """

    database_unit_um: float
    cell_names: tuple[str, ...]
    pairs: tuple[Pair, ...]
    file_pairs: tuple[Pair, ...]
    file_text_pairs: tuple[Pair, ...]
    missing: tuple[tuple[str, str], ...]
    dropped_count: int
    polygon_points: Ints
    polygon_first: Ints
    polygon_cell: Ints
    polygon_pair: Ints
    reference_parent: Ints
    reference_child: Ints
    reference_matrix: Floats
    reference_origin: Floats
    reference_counts: Ints
    reference_vectors: Floats
    label_cell: Ints
    label_pair: Ints
    label_points: Ints
    label_texts: tuple[str, ...]


def save_tables(tables: Tables, path: Path) -> None:
    """Write the tables to an uncompressed npz file."""
    words = {
        "database_unit_um": tables.database_unit_um,
        "cell_names": tables.cell_names,
        "pairs": tables.pairs,
        "file_pairs": tables.file_pairs,
        "file_text_pairs": tables.file_text_pairs,
        "missing": tables.missing,
        "dropped_count": tables.dropped_count,
        "label_texts": tables.label_texts,
    }
    # ASCII escapes keep lone surrogates of damaged names alive
    text = np.frombuffer(json.dumps(words).encode("ascii"), dtype=np.uint8)
    arrays: dict[str, NDArray[np.generic]] = {name: getattr(tables, name) for name in _ARRAYS}
    with path.open("wb") as stream:
        np.savez(stream, allow_pickle=False, words=text, **arrays)


def load_tables(path: Path) -> Tables:
    """Read the tables back, every array read-only."""
    with np.load(path, allow_pickle=False) as data:
        words = json.loads(data["words"].tobytes())
        arrays = {name: frozen(data[name]) for name in _ARRAYS}
    return Tables(
        database_unit_um=words["database_unit_um"],
        cell_names=tuple(words["cell_names"]),
        pairs=_pairs(words["pairs"]),
        file_pairs=_pairs(words["file_pairs"]),
        file_text_pairs=_pairs(words["file_text_pairs"]),
        missing=tuple((parent, child) for parent, child in words["missing"]),
        dropped_count=words["dropped_count"],
        label_texts=tuple(words["label_texts"]),
        **arrays,
    )


def _pairs(rows: list[list[int]]) -> tuple[Pair, ...]:
    return tuple((layer, datatype) for layer, datatype in rows)
