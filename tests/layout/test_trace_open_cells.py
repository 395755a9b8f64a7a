"""Nets of all cells of an open 130 nm BiCMOS process against brute force.

Sources: the GDSII files of the Python wheel ``ihp-gdsfactory`` 2.0.1 (Apache-2.0); gdstk,
shapely and networkx for the flat graph of what touches.
"""

from __future__ import annotations

import fnmatch
from pathlib import Path

import gdstk
import pytest
from net_layouts import shipped_technology, traced
from net_reference import reference_nets, told

from latchscan.technology.model import Technology

FOLDER = Path(__file__).parent.parent / ".data" / "open130"
BLANK = ("L2_IND_LVS.gds", "NoFillerStack.gds")
"""Files without a shape on any layer of the technology."""
FILES = sorted(path.name for path in FOLDER.glob("*.gds") if path.name not in BLANK)


def texts(path: Path, top: str, technology: Technology) -> list[tuple[str, str, float, float]]:
    """(text, conductor, x, y) [database units] of the texts that may name a net."""
    assert technology.conductors is not None
    own = {pair: name for name, c in technology.conductors.layers.items() for pair in c.texts}
    general = set(technology.labels.layers) - set(own)
    library = gdstk.read_gds(path)
    cell = next(cell for cell in library.cells if cell.name == top)
    scale = library.unit / library.precision
    found = []
    for label in cell.get_labels():
        pair = f"{label.layer}/{label.texttype}"
        remark = any(sign.isspace() for sign in label.text) or label.text.lower() == top.lower()
        remark |= any(
            fnmatch.fnmatchcase(label.text.lower(), pattern.lower())
            for pattern in technology.labels.remark_names
        )
        if remark or not (pair in own or pair in general):
            continue
        x, y = (round(value * scale) for value in label.origin)
        found.append((label.text, own.get(pair, "any"), x, y))
    return found


def test_the_open_layouts_are_there(open_layouts: Path) -> None:
    assert len(FILES) == len(list(open_layouts.glob("*.gds"))) - len(BLANK)


@pytest.mark.parametrize("name", FILES)
def test_cells_are_traced_as_by_brute_force(name: str) -> None:
    path, technology = FOLDER / name, shipped_technology()
    tops = gdstk.read_gds(path).top_level()
    top = max(tops, key=lambda cell: len(cell.get_polygons())).name
    expected = reference_nets(path, top, technology, texts(path, top, technology))
    assert told(traced(path, technology, top=top)) == expected
    assert told(traced(path, technology, top=top, tile_um=7.0)) == expected
