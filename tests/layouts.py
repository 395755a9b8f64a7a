"""A small builder of test blocks on the layers of ``techfiles/larch180.yaml``.

    block().nwell(0, 0, 30, 10).tap("n", 1, 1, 2, 9).emitter("p", 10, 3, 14, 7).write(path)

Lengths are in um.  `turned` and `fractured` give the same block drawn in another way, for
tests that nothing may depend on how a block is drawn.
"""

from __future__ import annotations

import datetime
import random
from pathlib import Path
from typing import Self

import gdstk
from valve_driver import LAYERS

CONTACT_UM = 0.22


class Block:
    """One cell under construction; every method returns the block itself."""

    def __init__(self, name: str = "block") -> None:
        self.library = gdstk.Library(name, unit=1e-6, precision=1e-9)
        self.cell = self.library.new_cell(name)

    def rect(self, layer: str, x0: float, y0: float, x1: float, y1: float) -> Self:
        """Draw a rectangle on a named layer."""
        return self.polygon(layer, [(x0, y0), (x1, y0), (x1, y1), (x0, y1)])

    def polygon(self, layer: str, points: list[tuple[float, float]]) -> Self:
        """Draw a polygon on a named layer."""
        number, datatype = LAYERS[layer]
        self.cell.add(gdstk.Polygon(points, layer=number, datatype=datatype))
        return self

    def nwell(self, x0: float, y0: float, x1: float, y1: float) -> Self:
        """Draw an n-well."""
        return self.rect("nwell", x0, y0, x1, y1)

    def emitter(self, kind: str, x0: float, y0: float, x1: float, y1: float) -> Self:
        """Draw a diffusion of kind "p" or "n"."""
        self.rect("active", x0, y0, x1, y1)
        return self.rect(f"{kind}plus", x0 - 0.1, y0 - 0.1, x1 + 0.1, y1 + 0.1)

    def tap(
        self, kind: str, x0: float, y0: float, x1: float, y1: float, *, contacted: bool = True
    ) -> Self:
        """Draw a tap with contacts about 1 um apart, or none."""
        self.emitter(kind, x0, y0, x1, y1)
        columns, rows = max(1, int(x1 - x0)), max(1, int(y1 - y0))
        for column in range(columns if contacted else 0):
            for row in range(rows):
                x = round(x0 + (column + 0.5) * (x1 - x0) / columns, 3)
                y = round(y0 + (row + 0.5) * (y1 - y0) / rows, 3)
                half = CONTACT_UM / 2
                self.rect("contact", x - half, y - half, x + half, y + half)
        return self

    def injector(self, kind: str, x0: float, y0: float, x1: float, y1: float) -> Self:
        """Draw a diffusion under an injector marker."""
        return self.emitter(kind, x0, y0, x1, y1).rect("injector_marker", x0, y0, x1, y1)

    def label(self, text: str, x: float, y: float) -> Self:
        """Write a pin name."""
        number, texttype = LAYERS["text"]
        self.cell.add(gdstk.Label(text, (x, y), layer=number, texttype=texttype))
        return self

    def write(self, path: Path) -> Path:
        """Write the GDSII file and return its path."""
        self.library.write_gds(path, timestamp=datetime.datetime(2000, 1, 1))
        return path


def block(name: str = "block") -> Block:
    """Start a new block."""
    return Block(name)


def rows_block(seed: int) -> Block:
    """Two rows of wells and diffusions with random sizes, taps and one injector."""
    rng = random.Random(seed)
    drawn = block()
    for row in range(2):
        y = 22.0 * row
        drawn.nwell(0, y + 10, 60, y + 18)
        drawn.tap("n", 1, y + 12, 2, y + 16).tap("p", 1, y + 2, 2, y + 6)
        drawn.tap("p", 58, y + 2, 59, y + 6)
        x = 4.0
        while x < 52:
            width, height = rng.choice((0.6, 1.2, 3.0)), rng.choice((1.0, 2.4))
            drawn.emitter("p", x, y + 12, round(x + width, 3), y + 12 + height)
            if rng.random() < 0.7:
                drawn.emitter("n", x, y + 4, round(x + width, 3), y + 4 + height)
            x = round(x + width + rng.choice((0.6, 1.5, 4.0)), 3)
    return drawn.injector("n", 30, -6, 34, -2).label("PIN", 5, -4)


def turned(drawn: Block, *, quarter_turns: int, mirrored: bool, move: tuple[float, float]) -> Block:
    """The same block placed by one reference: mirrored in x, turned, then moved."""
    placed = Block(f"placed_{drawn.cell.name}")
    placed.library.add(*drawn.library.cells)
    placed.cell.add(
        gdstk.Reference(
            drawn.cell, move, rotation=quarter_turns * 1.5707963267948966, x_reflection=mirrored
        )
    )
    return placed


def fractured(drawn: Block, seed: int) -> Block:
    """The same block with every polygon cut into overlapping pieces at random lines."""
    rng = random.Random(seed)
    cut = Block("fractured")
    for shape in drawn.cell.get_polygons():
        (x0, y0), (x1, y1) = shape.bounding_box()
        vertical = x1 - x0 > y1 - y0
        low, high = (x0, x1) if vertical else (y0, y1)
        middle = round(low + (high - low) * rng.uniform(0.2, 0.8), 3)
        overlap = rng.choice((0.0, round(0.1 * (high - middle), 3)))
        for first, last in ((low, middle + overlap), (middle, high)):
            box = ((first, y0), (last, y1)) if vertical else ((x0, first), (x1, last))
            pieces = gdstk.boolean(
                shape, gdstk.rectangle(*box), "and", layer=shape.layer, datatype=shape.datatype
            )
            cut.cell.add(*pieces)
    cut.cell.add(*drawn.cell.get_labels())
    return cut
