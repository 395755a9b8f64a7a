"""What is settled when a layout is opened: top cell, layers, missing cells, bounding box."""

from __future__ import annotations

import difflib
from collections.abc import Iterable, Mapping
from pathlib import Path

import numpy as np

from latchscan.caveats import Caveat
from latchscan.errors import LayoutError
from latchscan.layout.file.hierarchy import (
    cell_boxes,
    exact_box,
    reachable,
    top_cells,
)
from latchscan.layout.file.outlines import LARGEST_COORDINATE
from latchscan.layout.file.tables import Pair, Tables
from latchscan.layout.model import Floats, Ints
from latchscan.technology.expressions import names_in, parse_expression
from latchscan.technology.model import Technology

LISTED = 10
"""Most cells that an error lists."""


def choose_top(
    path: Path, tables: Tables, order: Ints, top: str | None, expected: list[Pair]
) -> tuple[int, list[Caveat]]:
    """The top cell, and notes on top cells passed over.

    Raises
    ------
    LayoutError
        If the named cell is absent, no cell has a shape on an expected layer, or several do.
    """
    if top is not None:
        if top not in tables.cell_names:
            close = difflib.get_close_matches(top, tables.cell_names, n=3, cutoff=0.5)
            names = [tables.cell_names[cell] for cell in top_cells(tables)]
            known = ", ".join(close or names[:LISTED]) or "none"
            raise LayoutError(
                f"{path}: there is no cell {top!r}",
                hint=("nearest names: " if close else "top cells: ") + known,
            )
        tops = [tables.cell_names.index(top)]
    else:
        tops = top_cells(tables)
    everything = np.ones(len(tables.polygon_cell), dtype=np.bool_)
    boxes, _ = cell_boxes(tables, order, everything)
    filled = [cell for cell in tops if boxes[cell, 0] <= boxes[cell, 2]]
    if not filled:
        raise LayoutError(
            f"{path}: no shape on any layer of the technology; expected some of"
            f" {_shown(expected)}, the file has {_shown(tables.file_pairs)}",
            hint="is this the right technology file?",
        )
    if len(filled) > 1:
        raise LayoutError(
            f"{path}: {len(filled)} top cells hold technology layers:"
            f" {_sizes(tables, filled, boxes)}; expected one",
            hint="choose one with --top CELL",
        )
    passed = sorted(tables.cell_names[cell] for cell in tops if cell not in filled)
    return filled[0], [Caveat(code="passed-over-cell", detail=name) for name in passed]


def _sizes(tables: Tables, cells: list[int], boxes: Floats) -> str:
    unit = tables.database_unit_um
    rows = [
        (
            (boxes[cell, 2] - boxes[cell, 0]) * unit,
            (boxes[cell, 3] - boxes[cell, 1]) * unit,
            tables.cell_names[cell],
        )
        for cell in cells
    ]
    rows.sort(key=lambda row: (-row[0] * row[1], row[2]))
    listed = [f"{name} ({width:.6g} x {height:.6g} um)" for width, height, name in rows[:LISTED]]
    more = f", and {len(rows) - LISTED} more" if len(rows) > LISTED else ""
    return ", ".join(listed) + more


def refuse_missing(path: Path, tables: Tables, top: int) -> None:
    """Raise `LayoutError` if a cell under `top` refers to a cell that the file lacks."""
    used = reachable(tables, top)
    names = {name for name, seen in zip(tables.cell_names, used.tolist(), strict=True) if seen}
    missing = [(parent, child) for parent, child in tables.missing if parent in names]
    if missing:
        parent, child = missing[0]
        more = f" (and {len(missing) - 1} more such references)" if len(missing) > 1 else ""
        raise LayoutError(
            f"{path}: cell {parent!r} refers to cell {child!r}, which the file does not hold{more}"
        )


def layer_notes(
    path: Path,
    tables: Tables,
    top: int,
    named: Mapping[str, tuple[Pair, ...]],
    label_pairs: set[Pair],
    technology: Technology,
) -> list[Caveat]:
    """Layers and shapes left out as caveats; an absent required layer is an error."""
    in_top = reachable(tables, top)[tables.polygon_cell]
    present = {tables.pairs[pair] for pair in np.unique(tables.polygon_pair[in_top]).tolist()}
    absent = [name for name, pairs in named.items() if present.isdisjoint(pairs)]
    required = [name for name in absent if technology.layers[name].required]
    if required:
        listed = ", ".join(f"{name} ({_shown(named[name])})" for name in required)
        raise LayoutError(
            f"{path}: cell {tables.cell_names[top]!r} has no shape on the required"
            f" layer{'s' if len(required) > 1 else ''} {listed};"
            f" the file has {_shown(tables.file_pairs)}"
        )
    known = {pair for pairs in named.values() for pair in pairs} | label_pairs
    unnamed = sorted({*tables.file_pairs, *tables.file_text_pairs} - known)
    missed = [name for name in absent if name in _role_layers(technology)]
    notes = [Caveat(code="absent-layer", detail=", ".join(missed))] if missed else []
    if tables.dropped_count:
        notes.append(Caveat(code="flat-shapes", detail=str(tables.dropped_count)))
    if unnamed:
        notes.append(Caveat(code="unnamed-layer", detail=_shown(unnamed)))
    return notes


def _role_layers(technology: Technology) -> set[str]:
    """Names of the layers that some role is derived from."""
    waiting = [text for text in technology.roles.model_dump().values() if text]
    seen: set[str] = set()
    while waiting:
        for name in names_in(parse_expression(waiting.pop())):
            if name not in seen:
                seen.add(name)
                if name in technology.derived:
                    waiting.append(technology.derived[name])
    return seen & set(technology.layers)


def bounding_box(path: Path, tables: Tables, order: Ints, top: int) -> tuple[int, int, int, int]:
    """Tight box of `top` over every layer that was read [database units].

    Raises
    ------
    LayoutError
        If anything under `top` lies where coordinates no longer add exactly.
    """
    used = reachable(tables, top)
    chosen = used[tables.polygon_cell]
    boxes, references = cell_boxes(tables, order, chosen)
    box = boxes[top]
    inside = references[used[tables.reference_parent] & (references[:, 0] <= references[:, 2])]
    if not max(np.abs(box).max(), np.abs(inside).max(initial=0)) <= LARGEST_COORDINATE:
        raise LayoutError(
            f"{path}: shapes of cell {tables.cell_names[top]!r} lie beyond"
            f" {LARGEST_COORDINATE:.3g} database units"
        )
    matrix = tables.reference_matrix[used[tables.reference_parent]]
    if ((matrix[:, 0] != 0) & (matrix[:, 1] != 0)).any():
        box = exact_box(tables, order, top, chosen)
    x0, y0, x1, y1 = (int(value) for value in np.floor(box + 0.5))
    return (x0, y0, x1, y1)


def _shown(pairs: Iterable[Pair], most: int = 24) -> str:
    listed = [f"{layer}/{datatype}" for layer, datatype in pairs]
    more = f" and {len(listed) - most} more" if len(listed) > most else ""
    return ", ".join(listed[:most]) + more if listed else "none"
