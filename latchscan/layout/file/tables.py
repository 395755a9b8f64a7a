"""The plain tables a layout file becomes: what the reading child hands to its parent.

Only numpy arrays and strings, so that they travel through files without any code in them.
Every process that needs them maps the same files into its memory, which therefore holds them
once.  Coordinates are whole database units, in 32 bits where they fit; transforms and array
vectors are float64, exact for every multiple of a quarter turn.
"""

from __future__ import annotations

import json
import os
import shutil
import sys
import tempfile
import weakref
from dataclasses import dataclass
from pathlib import Path
from typing import Literal

import numpy as np

from latchscan.layout.model import Floats, Ints, frozen

Pair = tuple[int, int]
"""A layer number and its datatype (or texttype)."""

_ARRAYS = (
    "polygon_points",
    "polygon_first",
    "polygon_box",
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
    polygon_box
        (n, 4) bounding boxes x0, y0, x1, y1 of the polygons [database units].
    polygon_cell, polygon_pair
        (n,) cell and pair of each polygon; rows are sorted by (cell, pair), and where these
        are many, neighbours in the rows are neighbours in the plane.
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
    polygon_box: Ints
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


class TablesFolder:
    """A new folder for tables, removed with the last reference to it."""

    def __init__(self) -> None:
        self.path = Path(tempfile.mkdtemp(prefix="latchscan-"))
        # a forked worker inherits this object but must not remove the files
        self._finalizer = weakref.finalize(self, _remove, str(self.path), os.getpid())

    def remove(self) -> None:
        """Remove the folder at once."""
        self._finalizer()


def _remove(folder: str, owner: int) -> None:
    if os.getpid() == owner:
        shutil.rmtree(folder, ignore_errors=True)


def save_tables(tables: Tables, folder: Path) -> None:
    """Write the tables to a folder: a file for each array, one for all words."""
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
    (folder / "words.json").write_text(json.dumps(words), encoding="ascii")
    for name in _ARRAYS:
        np.save(folder / f"{name}.npy", getattr(tables, name), allow_pickle=False)


def load_tables(folder: Path) -> Tables:
    """The tables of a folder, every array read-only and read where it is looked at."""
    words = json.loads((folder / "words.json").read_text(encoding="ascii"))
    # there, a file that is in use could not be removed
    mode: Literal["r"] | None = None if sys.platform == "win32" else "r"
    arrays = {
        name: frozen(
            np.asarray(np.load(folder / f"{name}.npy", mmap_mode=mode, allow_pickle=False))
        )
        for name in _ARRAYS
    }
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
