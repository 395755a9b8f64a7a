"""Metals over the benchmark layouts: what the tracing of nets is measured on.

`wired_chip` puts seven metals and 2.3 million vias over the mixed-signal chip: supply straps
that alternate between two nets, arrays of vias at their crossings, signal wires between the
straps, and vias down to the metal of taps and sources wherever a strap of their supply passes.
`RowRouter` wires rows of standard cells: straps over the rails, and from every output a route
to the inputs of cells nearby.  Layers are those of ``techfiles/open130.yaml``.
"""

from __future__ import annotations

import random
from dataclasses import dataclass, field
from pathlib import Path

import gdstk

METALS = ((8, 0), (10, 0), (30, 0), (50, 0), (67, 0), (126, 0), (134, 0))
METAL1_TEXT = (8, 25)
POLY, CONTACT = (5, 0), (6, 0)
VIAS = ((19, 0), (29, 0), (49, 0), (66, 0), (125, 0), (133, 0))
VIA_UM, VIA_PITCH_UM = 0.2, 0.5
TEXT = (63, 0)
VSS, VDD = 0, 1
SUPPLIES = ("VSS", "VDD")
CHIP_PITCH_UM, CHIP_STRAP_UM = 8.0, 4.0
TRACK_UM = 0.42
TRACKS_A_ROW = 9
"""Tracks that a row of cells holds; the first is the rail's."""
STRAP_TRACKS = 48
"""A supply strap takes one upright track of so many."""

Pin = tuple[int, float]
"""Row of a pin and its x [um]."""
Branch = tuple[Pin, tuple[int, int]]
"""A pin, and the row and track along which it is reached."""


def rectangle(
    cell: gdstk.Cell, pair: tuple[int, int], x0: float, y0: float, x1: float, y1: float
) -> None:
    """Draw one rectangle [um]."""
    corners = (round(x0, 3), round(y0, 3)), (round(x1, 3), round(y1, 3))
    cell.add(gdstk.rectangle(*corners, layer=pair[0], datatype=pair[1]))


def write_text(cell: gdstk.Cell, pair: tuple[int, int], text: str, x: float, y: float) -> None:
    """Write a label [um]."""
    cell.add(gdstk.Label(text, (round(x, 3), round(y, 3)), layer=pair[0], texttype=pair[1]))


class Straps:
    """Straps of two supplies, one metal a direction, joined by arrays of vias."""

    def __init__(self, library: gdstk.Library, top: gdstk.Cell, side_um: float) -> None:
        self.top = top
        self.side_um = side_um
        self.library = library
        self.vias: dict[int, gdstk.Cell] = {}

    def via(self, metal: int) -> gdstk.Cell:
        """Return the cell of one via between a metal (counted from 0) and the next one up."""
        if metal not in self.vias:
            self.vias[metal] = self.library.new_cell(f"via_{metal + 1}")
            rectangle(self.vias[metal], VIAS[metal], 0, 0, VIA_UM, VIA_UM)
        return self.vias[metal]

    def drop(self, metal: int, x: float, y: float, *, columns: int = 1, rows: int = 1) -> None:
        """Place an array of vias whose first one begins at a point [um]."""
        self.top.add(
            gdstk.Reference(
                self.via(metal),
                (round(x, 3), round(y, 3)),
                columns=columns,
                rows=rows,
                spacing=(VIA_PITCH_UM, VIA_PITCH_UM),
            )
        )

    def draw(self, metal: int, *, pitch_um: float, width_um: float) -> None:
        """Parallel straps on a metal (counted from 0); even metals run upright."""
        for number in range(int(self.side_um / pitch_um)):
            low = round(number * pitch_um + pitch_um / 4, 3)
            along = (0.0, self.side_um)
            across = (low, round(low + width_um, 3))
            (x0, x1), (y0, y1) = (across, along) if metal % 2 == 0 else (along, across)
            rectangle(self.top, METALS[metal], x0, y0, x1, y1)

    def join(self, metal: int, *, pitches_um: tuple[float, float], columns: int, rows: int) -> None:
        """Arrays of vias where straps of one net cross on a metal and the next one up."""
        lower, upper = (int(self.side_um / pitch) for pitch in pitches_um)
        for one in range(lower):
            for other in range(one % 2, upper, 2):
                places = [
                    round(number * pitch + pitch / 4 + 0.15, 3)
                    for number, pitch in zip((one, other), pitches_um, strict=True)
                ]
                x, y = places if metal % 2 == 0 else places[::-1]
                self.drop(metal, x, y, columns=columns, rows=rows)

    def feed(self, supply: int, x0: float, y0: float, x1: float, y1: float) -> None:
        """Vias from an upright bar of metal 1 up to every strap of its supply that crosses it."""
        columns = max(1, int((x1 - x0 - VIA_UM - 0.1) / VIA_PITCH_UM + 1e-6) + 1)
        for number in range(supply, int(self.side_um / CHIP_PITCH_UM), 2):
            low = number * CHIP_PITCH_UM + CHIP_PITCH_UM / 4
            if y0 <= low and low + CHIP_STRAP_UM <= y1:
                self.drop(0, x0 + 0.05, low + 0.15, columns=columns, rows=7)


def add_chip_wiring(
    library: gdstk.Library,
    top: gdstk.Cell,
    side_um: float,
    feeds: list[tuple[int, float, float, float, float]],
) -> None:
    """Straps on metals 2 to 7 with 2.2 million vias, and 40 000 signal wires between them.

    `feeds` are upright bars of metal 1, each with the supply it belongs to.
    """
    straps = Straps(library, top, side_um)
    pitch = CHIP_PITCH_UM
    for metal in (1, 2, 3, 4):
        straps.draw(metal, pitch_um=pitch, width_um=CHIP_STRAP_UM)
    for metal in (5, 6):
        straps.draw(metal, pitch_um=40.0, width_um=20.0)
    for metal, columns, rows in ((1, 6, 8), (2, 8, 6), (3, 6, 8)):
        straps.join(metal, pitches_um=(pitch, pitch), columns=columns, rows=rows)
    straps.join(4, pitches_um=(pitch, 40.0), columns=6, rows=8)
    straps.join(5, pitches_um=(40.0, 40.0), columns=8, rows=8)
    for feed in feeds:
        straps.feed(*feed)
    _signal_wires(straps, side_um)
    for number, name in enumerate(SUPPLIES):
        at = 40.0 * number + 20.0
        write_text(top, TEXT, name, at, at)


def _signal_wires(straps: Straps, side_um: float) -> None:
    """Bends of metal 2 and metal 3 in the gaps between straps, none touching another."""
    seeded = random.Random(1)
    lying, standing = Tracks(4.0), Tracks(4.0)
    placed = 0
    while placed < 20_000:
        columns = seeded.randrange(int(side_um / CHIP_PITCH_UM) - 1), seeded.randrange(12)
        lines = seeded.randrange(int(side_um / CHIP_PITCH_UM) - 1), seeded.randrange(12)
        x, y = (place * CHIP_PITCH_UM + 6.3 + 0.3 * track for place, track in (columns, lines))
        reach = seeded.uniform(10.0, 90.0)
        left, low = max(0.0, x - reach), max(0.0, y - reach)
        if not (lying.free(lines, left, x) and standing.free(columns, low, y)):
            continue
        lying.take(lines, left, x)
        standing.take(columns, low, y)
        rectangle(straps.top, METALS[1], left, y, x + 0.2, y + 0.2)
        rectangle(straps.top, METALS[2], x, low, x + 0.2, y + 0.2)
        straps.drop(1, x, y)
        placed += 1


class Tracks:
    """Which cells along which tracks are taken."""

    def __init__(self, step_um: float = TRACK_UM) -> None:
        self.step_um = step_um
        self.taken: set[tuple[tuple[int, int], int]] = set()

    def _cells(self, low: float, high: float) -> range:
        return range(int((low - 0.15) // self.step_um), int((high + 0.35) // self.step_um) + 1)

    def free(self, track: tuple[int, int], low: float, high: float) -> bool:
        """Whether nothing lies on a track between two places [um], nor next to them."""
        return all((track, cell) not in self.taken for cell in self._cells(low, high))

    def take(self, track: tuple[int, int], low: float, high: float) -> None:
        """Take that part of the track."""
        self.taken.update((track, cell) for cell in self._cells(low, high))


def wire_logic_cell(cell: gdstk.Cell, fingers: int, width: float, height: float) -> CellPins:
    """Rails, sources on them, drains of both kinds joined, and a contact on every gate."""
    _rails(cell, width, height)
    outputs, inputs = [], []
    for piece in range(fingers + 1):
        low = 0.3 + 0.9 * piece
        if piece % 2:
            rectangle(cell, METALS[0], low, 1.24, low + 0.3, 2.0)
            outputs.append(round(low + 0.15, 3))
        else:
            rectangle(cell, METALS[0], low, 0.0, low + 0.3, 0.5)
            rectangle(cell, METALS[0], low, 3.12, low + 0.3, height)
    for finger in range(fingers):
        gate = 0.7 + 0.9 * finger
        rectangle(cell, POLY, gate, 1.44, gate + 0.4, 1.8)
        rectangle(cell, CONTACT, gate + 0.12, 1.54, gate + 0.28, 1.7)
        rectangle(cell, METALS[0], gate + 0.1, 0.32, gate + 0.3, 3.46)
        inputs.append(round(gate + 0.2, 3))
    return CellPins(tuple(outputs), tuple(inputs))


def wire_tap_cell(cell: gdstk.Cell, width: float, height: float) -> None:
    """Rails, and both taps on them."""
    _rails(cell, width, height)
    rectangle(cell, METALS[0], 0.3, 0.0, 0.66, 0.4)
    rectangle(cell, METALS[0], 0.3, 3.4, 0.66, height)


def _rails(cell: gdstk.Cell, width: float, height: float) -> None:
    for y in (0.0, height):
        rectangle(cell, METALS[0], 0.0, y - 0.2, width, y + 0.2)


@dataclass(frozen=True, slots=True)
class CellPins:
    """Where a standard cell may be reached: x of its outputs and inputs [um]."""

    outputs: tuple[float, ...]
    inputs: tuple[float, ...]


OUTPUT_TRACKS, INPUT_TRACKS = range(2, 8), range(1, 9)
"""Lying tracks of a row, counted from the cell's ground, that pass over the pins' metal."""


@dataclass(slots=True)
class RowRouter:
    """Routes over rows of cells: metal 2 lies along a row's tracks, metal 3 stands across.

    Attributes
    ----------
    library, top
        Where the routes are drawn.
    pins
        Pins of every cell by its name.
    cell_height_um
        Height of a row.
    """

    library: gdstk.Library
    top: gdstk.Cell
    pins: dict[str, CellPins]
    cell_height_um: float
    lying: Tracks = field(default_factory=Tracks)
    standing: Tracks = field(default_factory=Tracks)

    def wire(self, rows: gdstk.Cell) -> None:
        """Straps over the rails; from every output a trunk with branches to inputs nearby."""
        straps = Straps(self.library, self.top, 0.0)
        (_, _), (right, upper) = rows.bounding_box()
        self._supplies(straps, right, round(upper / self.cell_height_um))
        outputs: list[Pin] = []
        inputs: dict[int, list[float]] = {}
        for reference in rows.references:
            pins = self.pins.get(reference.cell.name, CellPins((), ()))
            row = round(reference.origin[1] / self.cell_height_um) - int(reference.x_reflection)
            outputs += [(row, reference.origin[0] + x) for x in pins.outputs]
            inputs.setdefault(row, []).extend(reference.origin[0] + x for x in pins.inputs)
        seeded = random.Random(2)
        count = 0
        for row, x in outputs:
            wanted = []
            for _ in range(seeded.randrange(1, 4)):
                beside = row + seeded.randrange(-1, 2)
                near = [place for place in inputs.get(beside, []) if abs(place - x) < 6.0]
                if near:
                    wanted.append((beside, seeded.choice(near)))
                    inputs[beside].remove(wanted[-1][1])
            count += self._route(straps, (row, x), wanted, count)

    def _supplies(self, straps: Straps, right: float, rows: int) -> None:
        """Straps of metal 3, each over all rows, on the rails of its own supply."""
        for strap in range(int(right / (STRAP_TRACKS * TRACK_UM))):
            x = (strap * STRAP_TRACKS + STRAP_TRACKS // 2) * TRACK_UM
            upper = rows * self.cell_height_um
            rectangle(self.top, METALS[2], x - 0.2, -0.2, x + 0.2, upper + 0.2)
            for rail in range(strap % 2, rows + 1, 2):
                y = rail * self.cell_height_um
                rectangle(self.top, METALS[1], x - 0.2, y - 0.1, x + 0.2, y + 0.1)
                straps.drop(0, x - 0.1, y - 0.1)
                straps.drop(1, x - 0.1, y - 0.1)
            if strap < len(SUPPLIES):
                write_text(self.top, TEXT, SUPPLIES[strap], x, self.cell_height_um / 2)

    def _route(
        self,
        straps: Straps,
        source: Pin,
        wanted: list[Pin],
        count: int,
    ) -> int:
        """Route one net on the first tracks that are free; how many nets were routed."""
        middle = round(source[1] / TRACK_UM)
        for step in range(16):
            column = middle + (step + 1) // 2 * (1 if step % 2 else -1)
            if column < 0 or column % STRAP_TRACKS == STRAP_TRACKS // 2:
                continue
            branches: list[Branch] = []
            for pin in (source, *wanted):
                tracks = INPUT_TRACKS if branches else OUTPUT_TRACKS
                track = self._track(pin, column, tracks, [taken for _, taken in branches])
                if track is not None:
                    branches.append((pin, track))
                elif not branches:
                    break
            heights = [self._height(track) for _, track in branches]
            low, high = min(heights, default=0.0), max(heights, default=0.0)
            if len(branches) > 1 and self.standing.free((column, 0), low, high):
                self._draw(straps, column, branches)
                if count % 64 == 0:
                    write_text(self.top, TEXT, f"S{count}", column * TRACK_UM, low)
                return 1
        return 0

    def _track(
        self, pin: Pin, column: int, tracks: range, others: list[tuple[int, int]]
    ) -> tuple[int, int] | None:
        """A free lying track between a pin and an upright one: the row and which of its tracks."""
        row, x = pin
        low, high = sorted((x, column * TRACK_UM))
        for track in tracks:
            own = (row, TRACKS_A_ROW - track if row % 2 else track)
            if own not in others and self.lying.free(own, low - 0.1, high - 0.1):
                return own
        return None

    def _height(self, track: tuple[int, int]) -> float:
        return track[0] * self.cell_height_um + track[1] * TRACK_UM

    def _draw(
        self,
        straps: Straps,
        column: int,
        branches: list[Branch],
    ) -> None:
        """A trunk on metal 3 and a branch on metal 2 to each pin."""
        x = column * TRACK_UM
        heights = [self._height(track) for _, track in branches]
        rectangle(self.top, METALS[2], x - 0.1, min(heights) - 0.1, x + 0.1, max(heights) + 0.1)
        self.standing.take((column, 0), min(heights), max(heights))
        for (pin, track), y in zip(branches, heights, strict=True):
            low, high = sorted((pin[1], x))
            self.lying.take(track, low - 0.1, high - 0.1)
            rectangle(self.top, METALS[1], low - 0.1, y - 0.1, high + 0.1, y + 0.1)
            straps.drop(0, pin[1] - 0.1, y - 0.1)
            straps.drop(1, x - 0.1, y - 0.1)


def flatten(library: gdstk.Library, top: gdstk.Cell, path: Path) -> None:
    """Write the top cell without any hierarchy: every via a polygon of its own."""
    flat = gdstk.Library("flat", unit=1e-6, precision=1e-9)
    flat.add(top.copy("TOP").flatten())
    flat.write_gds(path)
