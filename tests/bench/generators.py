"""Layouts for the benchmarks, on the layers of ``techfiles/open130.yaml``.

Run ``python tests/bench/generators.py NAME OUT.gds`` with one of the names in `MAKERS`.
Sizes follow real blocks: a mixed-signal chip with one large power well, an SRAM macro whose
cells overlap and mirror, rows of standard cells with a seeded random order of cells.
"""

from __future__ import annotations

import datetime
import random
import sys
from pathlib import Path

import gdstk
from wiring import (
    CONTACT,
    METAL1_TEXT,
    METALS,
    POLY,
    VDD,
    VSS,
    CellPins,
    RowRouter,
    add_chip_wiring,
    flatten,
    rectangle,
    wire_logic_cell,
    wire_tap_cell,
    write_text,
)

ACTIVE, P_IMPLANT, N_WELL = (1, 0), (14, 0), (31, 0)
CONTACT_SIZE, CONTACT_PITCH = 0.16, 0.36


def box(
    cell: gdstk.Cell, pair: tuple[int, int], x0: float, y0: float, x1: float, y1: float
) -> None:
    """Draw one rectangle [um]."""
    cell.add(gdstk.rectangle((x0, y0), (x1, y1), layer=pair[0], datatype=pair[1]))


class Library:
    """A library with one cell that holds a single contact, placed as arrays."""

    def __init__(self) -> None:
        self.library = gdstk.Library("bench", unit=1e-6, precision=1e-9)
        self.wired = False
        self.pins: dict[str, CellPins] = {}
        self.feeds: list[tuple[int, float, float, float, float]] = []
        self.contact = self.cell("contact")
        box(self.contact, CONTACT, 0, 0, CONTACT_SIZE, CONTACT_SIZE)

    def cell(self, name: str) -> gdstk.Cell:
        """Return a new empty cell of the library."""
        return self.library.new_cell(name)

    def contacts(self, cell: gdstk.Cell, x0: float, y0: float, x1: float, y1: float) -> None:
        """Fill a rectangle with contacts, 0.07 um inside its edges."""
        columns = max(1, int((x1 - x0 - 0.14 - CONTACT_SIZE) / CONTACT_PITCH + 1e-6) + 1)
        rows = max(1, int((y1 - y0 - 0.14 - CONTACT_SIZE) / CONTACT_PITCH + 1e-6) + 1)
        cell.add(
            gdstk.Reference(
                self.contact,
                (round(x0 + 0.07, 3), round(y0 + 0.07, 3)),
                columns=columns,
                rows=rows,
                spacing=(CONTACT_PITCH, CONTACT_PITCH),
            )
        )
        if self.wired:
            box(cell, METALS[0], x0, y0, x1, y1)

    def tap(self, cell: gdstk.Cell, kind: str, x0: float, y0: float, x1: float, y1: float) -> None:
        """Draw a contacted tap; kind "n" for wells, "p" for the substrate."""
        box(cell, ACTIVE, x0, y0, x1, y1)
        if kind == "p":
            box(cell, P_IMPLANT, x0 - 0.1, y0 - 0.1, x1 + 0.1, y1 + 0.1)
        self.contacts(cell, x0, y0, x1, y1)

    def comb(
        self,
        cell: gdstk.Cell,
        kind: str,
        origin: tuple[float, float],
        *,
        fingers: int,
        width: float,
        pitch: float = 1.0,
    ) -> None:
        """Draw one active crossed by `fingers` gates: fingers + 1 emitters."""
        x0, y0 = origin
        x1, y1 = x0 + pitch * fingers + 0.5, y0 + width
        box(cell, ACTIVE, x0, y0, x1, y1)
        if kind == "p":
            box(cell, P_IMPLANT, x0 - 0.2, y0 - 0.2, x1 + 0.2, y1 + 0.2)
        for finger in range(fingers):
            gate = round(x0 + 0.5 + finger * pitch, 3)
            box(cell, POLY, gate, y0 - 0.2, round(gate + pitch - 0.5, 3), y1 + 0.2)
        for piece in range(fingers + 1):
            left = round(x0 + piece * pitch, 3)
            self.contacts(cell, left + 0.1, y0, left + 0.4, y1)

    def join(
        self,
        cell: gdstk.Cell,
        fingers: int,
        corner: tuple[float, float],
        *,
        height: float,
        bars: tuple[float, float, float],
        source: float,
    ) -> None:
        """Bars of metal 1 over the drains and under the sources of a comb of pitch 1.

        `bars` are where both begin and end in x and how wide they are; the sources' bar lies
        `source` below the comb, the drains' 0.3 above.
        """
        if not self.wired:
            return
        x, y = corner
        left, right, width = bars
        under, over = y - source, y + height + 0.3
        rectangle(cell, METALS[0], left, under - width, right, under)
        rectangle(cell, METALS[0], left, over, right, over + width)
        for piece in range(fingers + 1):
            low, high = (y + height, over) if piece % 2 else (under, y)
            rectangle(cell, METALS[0], x + piece + 0.1, low, x + piece + 0.4, high)

    def feed(self, supply: int, x0: float, y0: float, x1: float, y1: float) -> None:
        """Say that an upright bar of metal 1 of the top cell belongs to a supply."""
        if self.wired:
            self.feeds.append((supply, x0, y0, x1, y1))

    def write(self, path: Path) -> None:
        """Write the GDSII file, the same bytes every time."""
        self.library.write_gds(path, timestamp=datetime.datetime(2000, 1, 1))


def power_array(
    library: Library,
    kind: str,
    origin: tuple[float, float],
    *,
    rows: int,
    columns: int,
    fingers: int,
    every: int,
) -> gdstk.Cell:
    """Rows of comb devices with a tap strip after every `every` rows, ringed by a tap.

    Its wires are those of an array at `origin` in the top cell.
    """
    device = library.cell(f"power_{kind}")
    library.comb(device, kind, (0, 0), fingers=fingers, width=7.0)
    bars = (-1.05, fingers + 0.5, 0.2)
    library.join(device, fingers, (0, 0), height=7.0, bars=bars, source=0.2)
    array = library.cell(f"power_array_{kind}")
    step_x, step_y = fingers + 1.5, 8.2
    tap = "n" if kind == "p" else "p"
    right = columns * step_x
    y = 3.0
    for row in range(rows):
        array.add(
            gdstk.Reference(
                device, (3.0, round(y, 3)), columns=columns, rows=1, spacing=(step_x, 1)
            )
        )
        if library.wired:
            rectangle(array, METALS[0], 0.5, y - 0.4, 3.0, y - 0.2)
            write_text(array, METAL1_TEXT, f"OUT_{kind}{row}", 4.0, y + 7.4)
        y += step_y
        if row % every == every - 1 and row != rows - 1:
            library.tap(array, tap, 3.0, y, right, y + 0.6)
            if library.wired:
                rectangle(array, METALS[0], 0.5, y, 3.0, y + 0.6)
            y += 1.6
    top, edge = round(y + 1.0, 3), round(right + 4.0, 3)
    for strip in (
        (0.5, 0.5, edge - 0.5, 1.1),
        (0.5, top - 1.1, edge - 0.5, top - 0.5),
        (0.5, 1.1, 1.1, top - 1.1),
        (edge - 1.1, 1.1, edge - 0.5, top - 1.1),
    ):
        library.tap(array, tap, *(round(value, 3) for value in strip))
    for left in (0.5, edge - 1.1):
        x, y = origin[0] + left, origin[1]
        library.feed(VDD if kind == "p" else VSS, x, y + 1.1, x + 0.6, y + top - 1.1)
    if kind == "p":
        box(array, N_WELL, 0, 0, edge, top)
    return array


CELL_HEIGHT = 3.78


def logic_cells(library: Library) -> list[tuple[gdstk.Cell, float]]:
    """Six standard cells of growing width and a tap cell (last), with their widths [um]."""
    cells = []
    for index, fingers in enumerate((1, 1, 2, 3, 5, 8)):
        cell = library.cell(f"logic_{index}")
        width = round(fingers * 0.96 + 0.96, 3)
        library.comb(cell, "n", (0.2, 0.5), fingers=fingers, width=0.74, pitch=0.9)
        library.comb(cell, "p", (0.2, 2.0), fingers=fingers, width=1.12, pitch=0.9)
        box(cell, N_WELL, -0.24, 1.75, width + 0.24, CELL_HEIGHT + 0.4)
        if library.wired:
            library.pins[cell.name] = wire_logic_cell(cell, fingers, width, CELL_HEIGHT)
        cells.append((cell, width))
    tap = library.cell("tap_cell")
    library.tap(tap, "p", 0.3, 0.4, 0.66, 1.2)
    library.tap(tap, "n", 0.3, 2.4, 0.66, 3.4)
    box(tap, N_WELL, -0.24, 1.75, 0.96 + 0.24, CELL_HEIGHT + 0.4)
    if library.wired:
        wire_tap_cell(tap, 0.96, CELL_HEIGHT)
    return [*cells, (tap, 0.96)]


def logic_block(
    library: Library, name: str, cells: list[tuple[gdstk.Cell, float]], count: int, *, width: float
) -> gdstk.Cell:
    """`count` cells in rows mirrored in turn, a tap cell about every 24 um."""
    block = library.cell(name)
    seeded = random.Random(count)
    placed, row = 0, 0
    while placed < count:
        x, next_tap = 0.0, 0.0
        mirrored = row % 2 == 1
        y = (row + 1) * CELL_HEIGHT if mirrored else row * CELL_HEIGHT
        while x < width and placed < count:
            if x >= next_tap:
                cell, size = cells[-1]
                next_tap = x + 24.0
            else:
                cell, size = cells[seeded.randrange(len(cells) - 1)]
                placed += 1
            block.add(gdstk.Reference(cell, (round(x, 3), round(y, 3)), x_reflection=mirrored))
            x += size
        row += 1
    return block


def standard_cells(path: Path, count: int, *, wired: bool = False) -> None:
    """Rows of `count` standard cells in a roughly square block, with or without its wires."""
    library = Library()
    library.wired = wired
    cells = logic_cells(library)
    width = (count * 3.9 * CELL_HEIGHT) ** 0.5
    top = library.cell("TOP")
    rows = logic_block(library, "rows", cells, count, width=width)
    top.add(gdstk.Reference(rows, (0, 0)))
    if wired:
        RowRouter(library.library, top, library.pins, CELL_HEIGHT).wire(rows)
    library.write(path)


def mixed_signal_chip(path: Path) -> None:
    """1.4 x 1.4 mm: power wells, logic, analog wells, pads' guard rings; 22 400 emitters."""
    library = Library()
    draw_chip(library)
    library.write(path)


def wired_chip(path: Path, *, flat: bool = False) -> None:
    """The same chip under seven metals with 2.3 million vias, in arrays or one by one."""
    library = Library()
    library.wired = True
    top = draw_chip(library)
    add_chip_wiring(library.library, top, 1400.0, library.feeds)
    if flat:
        flatten(library.library, top, path)
    else:
        library.write(path)


def draw_chip(library: Library) -> gdstk.Cell:
    """Draw the devices of the chip and return its top cell."""
    top = library.cell("TOP")
    at = (60, 60), (700, 60)
    pmos = power_array(library, "p", at[0], rows=46, columns=39, fingers=6, every=3)
    nmos = power_array(library, "n", at[1], rows=13, columns=24, fingers=9, every=2)
    top.add(gdstk.Reference(pmos, at[0]))
    top.add(gdstk.Reference(nmos, at[1]))
    rows = logic_block(library, "rows", logic_cells(library), 520, width=110)
    top.add(gdstk.Reference(rows, (60, 620)))
    if library.wired:
        feed_rows(library, top, rows, (60, 620))
    draw_analog(library, top)
    ringed = library.cell("ringed")
    library.comb(ringed, "n", (4, 4), fingers=20, width=30.0)
    library.join(ringed, 20, (4, 4), height=30.0, bars=(4.1, 24.4, 0.4), source=3.4)
    for strip in ((0, 0, 30, 0.8), (0, 38, 30, 38.8), (0, 0.8, 0.8, 38), (29.2, 0.8, 30, 38)):
        library.tap(ringed, "p", *strip)
    for index in range(18):
        for y in (1300, 1200):
            x = 60 + 72 * index
            top.add(gdstk.Reference(ringed, (x, y)))
            library.feed(VSS, x, y + 0.8, x + 0.8, y + 38)
            library.feed(VSS, x + 29.2, y + 0.8, x + 30, y + 38)
            if library.wired:
                write_text(top, METAL1_TEXT, f"PAD_{index}_{y}", x + 10, y + 34.5)
    box(top, (189, 4), 0, 0, 1400, 1400)
    return top


def draw_analog(library: Library, top: gdstk.Cell) -> None:
    """56 analog wells, each with devices and taps of both kinds."""
    analog = library.cell("analog")
    box(analog, N_WELL, 0, 0, 24, 14)
    library.tap(analog, "n", 0.6, 0.6, 23.4, 1.2)
    library.comb(analog, "p", (2, 4), fingers=14, width=6.0)
    library.comb(analog, "n", (2, -9), fingers=14, width=5.0)
    library.tap(analog, "p", 0.6, -11.5, 23.4, -10.9)
    top.add(gdstk.Reference(analog, (300, 700), columns=7, rows=8, spacing=(40, 60)))
    if not library.wired:
        return
    library.join(analog, 14, (2, 4), height=6.0, bars=(2.1, 16.4, 0.4), source=2.6)
    library.join(analog, 14, (2, -9), height=5.0, bars=(2.1, 16.4, 0.4), source=2.0)
    for supply, low in ((VDD, 0.6), (VSS, -30.9)):
        rectangle(analog, METALS[0], 22.4, low, 23.2, low + 20.0)
        for place in range(56):
            x, y = 322.4 + 40 * (place % 7), 700 + 60 * (place // 7) + low
            library.feed(supply, x, y, x + 0.8, y + 20.0)


def feed_rows(
    library: Library, top: gdstk.Cell, rows: gdstk.Cell, origin: tuple[float, float]
) -> None:
    """Rails over rows of cells in the top cell, ground's joined on the left, others right."""
    (_, _), (right, upper) = rows.bounding_box()
    count = round(upper / CELL_HEIGHT)
    ends = (origin[0] - 2.0, origin[0] + right), (origin[0], origin[0] + right + 2.0)
    for rail in range(count + 1):
        y = origin[1] + rail * CELL_HEIGHT
        rectangle(top, METALS[0], ends[rail % 2][0], y - 0.2, ends[rail % 2][1], y + 0.2)
    for supply, x in ((VSS, ends[0][0]), (VDD, ends[1][1] - 0.6)):
        y0, y1 = origin[1] + supply * CELL_HEIGHT, origin[1] + count * CELL_HEIGHT
        rectangle(top, METALS[0], x, y0, x + 0.6, y1)
        library.feed(supply, x, y0, x + 0.6, y1)


def memory_macro(path: Path, rows: int = 128, columns: int = 100) -> None:
    """Mirrored bit cells with shared, overlapping shapes and strap rows with taps."""
    library = Library()
    bit = library.cell("bit")
    for x0, x1 in ((0.2, 0.42), (2.38, 2.6)):
        box(bit, ACTIVE, x0, -0.1, x1, 1.1)
    for x0, x1 in ((1.05, 1.2), (1.6, 1.75)):
        box(bit, ACTIVE, x0, -0.1, x1, 1.1)
    for y in (0.43,):
        box(bit, POLY, 0.1, y, 1.3, y + 0.14)
        box(bit, POLY, 1.5, y, 2.7, y + 0.14)
    box(bit, N_WELL, 0.75, -0.1, 2.05, 1.1)
    corner = [(0.85, -0.1), (1.95, -0.1), (1.95, 0.9), (1.9, 1.0), (1.95, 1.1), (0.85, 1.1)]
    bit.add(gdstk.Polygon(corner, layer=P_IMPLANT[0], datatype=P_IMPLANT[1]))
    for x, y in ((0.23, 0.92), (2.41, 0.92), (1.05, 0.92), (1.6, 0.92)):
        box(bit, CONTACT, x, y, x + CONTACT_SIZE, y + CONTACT_SIZE)
    strap = library.cell("strap")
    library.tap(strap, "n", 1.2, 0.4, 1.6, 0.8)
    library.tap(strap, "p", 0.14, 0.4, 0.5, 0.8)
    box(strap, N_WELL, 0.75, -0.1, 2.05, 1.3)
    group = library.cell("group")
    for row in range(16):
        flip = row % 2 == 1
        group.add(gdstk.Reference(bit, (0, row + 1 if flip else row), x_reflection=flip))
    group.add(gdstk.Reference(strap, (0, 16)))
    top = library.cell("TOP")
    top.add(
        gdstk.Reference(
            group, (0, 0), columns=columns, rows=max(1, rows // 16), spacing=(2.8, 17.2)
        )
    )
    library.write(path)


MAKERS = {
    "chip": mixed_signal_chip,
    "wired_chip": wired_chip,
    "wired_chip_flat": lambda path: wired_chip(path, flat=True),
    "wired_cells_100": lambda path: standard_cells(path, 100, wired=True),
    "wired_cells_1000": lambda path: standard_cells(path, 1000, wired=True),
    "wired_cells_3000": lambda path: standard_cells(path, 3000, wired=True),
    "wired_cells_10000": lambda path: standard_cells(path, 10000, wired=True),
    "memory": memory_macro,
    "cells_1000": lambda path: standard_cells(path, 1000),
    "cells_3000": lambda path: standard_cells(path, 3000),
    "cells_10000": lambda path: standard_cells(path, 10000),
}

if __name__ == "__main__":
    MAKERS[sys.argv[1]](Path(sys.argv[2]))
