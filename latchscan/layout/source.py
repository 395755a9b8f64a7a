"""A layout file opened under a technology: the polygons and texts of any window of it.

In goes a path, out comes a `LayoutSource`: checked (the top cell is settled, the required
layers are there, no cycles, no missing cells), with notes on what was ignored.  No polygon
is expanded before a window asks for it.
"""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass
from pathlib import Path

import numpy as np

from latchscan.caveats import Caveat
from latchscan.layout.file.guard import file_sha256, read_layout
from latchscan.layout.file.hierarchy import parents_first, polygon_counts
from latchscan.layout.file.library import Library
from latchscan.layout.file.pitch import repeat_pitch
from latchscan.layout.file.placements import placed_texts
from latchscan.layout.file.settling import bounding_box, choose_top, layer_notes, refuse_missing
from latchscan.layout.file.tables import Pair, load_tables
from latchscan.layout.file.walk import PolygonColumns
from latchscan.layout.model import Box, Ints, Label
from latchscan.technology.model import Technology
from latchscan.technology.quantities import layer_numbers

__all__ = ["LayoutSource", "PolygonColumns", "open_layout"]


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class LayoutSource:
    """One top cell of a layout file, ready to give polygons and texts by window.

    Attributes
    ----------
    path, name, sha256
        The file, its name without folders, and the SHA-256 of its bytes.
    top
        Name of the top cell.
    bbox_dbu
        (x0, y0, x1, y1) of the top cell over all layers that the technology names
        [database units].
    database_unit_um
        Length of one database unit [um].
    notes
        What was ignored or passed over on opening.
    """

    path: Path
    name: str
    sha256: str
    top: str
    bbox_dbu: tuple[int, int, int, int]
    database_unit_um: float
    notes: tuple[Caveat, ...]
    _library: Library

    @property
    def bbox_um(self) -> Box:
        """The bounding box in um."""
        x0, y0, x1, y1 = (_clean(value * self.database_unit_um) for value in self.bbox_dbu)
        return (x0, y0, x1, y1)

    def window(
        self, box_dbu: tuple[int, int, int, int], pairs: Iterable[Pair]
    ) -> dict[Pair, PolygonColumns]:
        """Polygons whose bounding box meets a box.

        Parameters
        ----------
        box_dbu
            (x0, y0, x1, y1) [database units]; touching counts as meeting.
        pairs
            Layer/datatype pairs that the technology names; others come back empty.

        Returns
        -------
        dict
            For each pair the polygons, unclipped and counter-clockwise.
        """
        return self._library.walker(pairs).window(box_dbu)

    def near(self, boxes_dbu: Ints, pairs: Iterable[Pair]) -> dict[Pair, PolygonColumns]:
        """Polygons whose bounding box meets any of the boxes (k, 4), as `window` gives them.

        All boxes are looked up in one walk; what meets several of them comes several times.
        """
        return self._library.walker(pairs).windows(boxes_dbu.astype(np.float64))

    def labels(self, pairs: Iterable[Pair]) -> tuple[Label, ...]:
        """Texts of the whole hierarchy on these layer/texttype pairs, sorted by (y, x, text)."""
        library = self._library
        x, y, row = placed_texts(library.tables, library.order, library.top, set(pairs))
        tables = library.tables
        unit = self.database_unit_um
        names = [tables.pairs[pair] for pair in tables.label_pair[row].tolist()]
        places = zip((x * unit).tolist(), (y * unit).tolist(), row.tolist(), names, strict=True)
        return tuple(
            Label(
                text=tables.label_texts[text],
                layer=layer,
                texttype=texttype,
                x_um=_clean(x_um),
                y_um=_clean(y_um),
            )
            for x_um, y_um, text, (layer, texttype) in places
        )

    def total_polygons(self, pairs: Iterable[Pair]) -> int:
        """Polygons of the top's hierarchy on these pairs after expansion, without expanding."""
        library = self._library
        wanted = set(pairs)
        named = np.array([pair in wanted for pair in library.tables.pairs], dtype=np.bool_)
        chosen = named[library.tables.polygon_pair]
        return polygon_counts(library.tables, library.order, chosen)[library.top]

    def repeat_pitch_dbu(self) -> tuple[int, int] | None:
        """Pitch (x, y) at which the most-expanded cell repeats along both axes, or None."""
        library = self._library
        return repeat_pitch(library.tables, library.order, library.top)


def open_layout(
    path: Path | str, *, technology: Technology, top: str | None = None
) -> LayoutSource:
    """Open a layout file and settle its top cell.

    Parameters
    ----------
    path
        A GDSII or OASIS file, either of them gzipped.
    technology
        Names the layers to read and which of them are required.
    top
        Name of the top cell; None takes the only top-level cell with technology layers.

    Raises
    ------
    LayoutError
        If the file cannot be read, its cells form a cycle or miss a cell, no or several
        top cells are left, a required layer is absent, or coordinates are too large.
    """
    path = Path(path)
    sha256 = file_sha256(path)
    named = {
        name: tuple(layer_numbers(text) for text in layer.gds)
        for name, layer in technology.layers.items()
    }
    shape_pairs = sorted({pair for pairs in named.values() for pair in pairs})
    label_pairs = {layer_numbers(text) for text in technology.text_layers()}
    folder = read_layout(
        path, shape_pairs=shape_pairs, text_pairs=sorted(label_pairs.union(shape_pairs))
    )
    tables = load_tables(folder.path)
    order = parents_first(tables, str(path))
    index, notes = choose_top(path, tables, order, top, shape_pairs)
    refuse_missing(path, tables, index)
    notes += layer_notes(path, tables, index, named, label_pairs, technology)
    return LayoutSource(
        path=path,
        name=path.name,
        sha256=sha256,
        top=tables.cell_names[index],
        bbox_dbu=bounding_box(path, tables, order, index),
        database_unit_um=_clean(tables.database_unit_um),
        notes=tuple(notes),
        _library=Library(tables, order=order, top=index, folder=folder),
    )


def _clean(value: float) -> float:
    """Without the last bits that a unit conversion left behind."""
    return float(f"{value:.12g}")
