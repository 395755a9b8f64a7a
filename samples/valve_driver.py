"""Draw ``valve_driver.gds``, the block that the README scans.

The block is invented: four outputs that switch irrigation valves, their pads, a strip of
control logic, an isolated p-well for the sense amplifier and a diffusion resistor, in the
invented process ``larch180``.  Sound parts come first; then the *islands*: small patches, each
with one planted fault or one near-miss.  `FAULTS` and `NEAR_MISSES` say which rule must find
what, where, and with which measure; the tests read these tables.

Run ``python samples/valve_driver.py [OUT.gds]``; the bytes are the same every time.
"""

from __future__ import annotations

import datetime
import sys
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path

import gdstk

LAYERS = {
    "nwell": (3, 0),
    "deep_nwell": (4, 0),
    "active": (10, 0),
    "poly": (15, 0),
    "nplus": (12, 0),
    "pplus": (13, 0),
    "contact": (20, 0),
    "metal1": (21, 0),
    "pad": (30, 0),
    "resistor_marker": (41, 0),
    "injector_marker": (42, 0),
    "text": (60, 0),
}
"""Layer/datatype of each layer, as ``techfiles/larch180.yaml`` names them."""

WIDTH_UM, HEIGHT_UM = 500.0, 400.0
CONTACT_UM, CONTACT_PITCH_UM, CONTACT_INSET_UM = 0.22, 0.5, 0.14
IMPLANT_OVERLAP_UM = 0.2


@dataclass(frozen=True, slots=True, kw_only=True)
class Planted:
    """One planted fault or near-miss.

    Attributes
    ----------
    name
        What was planted.
    rule
        Rule that must find it, or must just not.
    x_um, y_um
        Where the worst measure lies.
    measured
        The measure there in the rule's unit, worked out by hand; None where it is a field
        solution (resistance, loop gain) that no hand calculation gives.
    """

    name: str
    rule: str
    x_um: float
    y_um: float
    measured: float | None = None


class Drawing:
    """One layout cell and the shapes of the process, all lengths in um."""

    def __init__(self, library: gdstk.Library, name: str) -> None:
        self.cell = library.new_cell(name)
        self.contact = library["contact"]

    def rect(self, layer: str, x0: float, y0: float, x1: float, y1: float) -> None:
        """Draw a rectangle."""
        number, datatype = LAYERS[layer]
        self.cell.add(gdstk.rectangle((x0, y0), (x1, y1), layer=number, datatype=datatype))

    def contacts(self, x0: float, y0: float, x1: float, y1: float) -> None:
        """Fill a rectangle with contacts under metal."""
        inner = 2 * CONTACT_INSET_UM + CONTACT_UM
        self.cell.add(
            gdstk.Reference(
                self.contact,
                (x0 + CONTACT_INSET_UM, y0 + CONTACT_INSET_UM),
                columns=int((x1 - x0 - inner) / CONTACT_PITCH_UM + 1e-6) + 1,
                rows=int((y1 - y0 - inner) / CONTACT_PITCH_UM + 1e-6) + 1,
                spacing=(CONTACT_PITCH_UM, CONTACT_PITCH_UM),
            )
        )
        self.rect("metal1", x0, y0, x1, y1)

    def diffusion(self, kind: str, x0: float, y0: float, x1: float, y1: float) -> None:
        """Draw an active area with its implant; kind is "p" or "n"."""
        self.rect("active", x0, y0, x1, y1)
        grow = IMPLANT_OVERLAP_UM
        self.rect(f"{kind}plus", x0 - grow, y0 - grow, x1 + grow, y1 + grow)

    def strap(self, kind: str, x0: float, y0: float, x1: float, y1: float) -> None:
        """Draw a contacted diffusion: a tap in its own body, a source elsewhere."""
        self.diffusion(kind, x0, y0, x1, y1)
        self.contacts(x0, y0, x1, y1)

    def ring(
        self, kind: str, x0: float, y0: float, x1: float, y1: float, *, width: float = 1.0
    ) -> None:
        """Draw a closed contacted ring whose outer edge is the given box."""
        self.strap(kind, x0, y0, x1, y0 + width)
        self.strap(kind, x0, y1 - width, x1, y1)
        self.strap(kind, x0, y0 + width, x0 + width, y1 - width)
        self.strap(kind, x1 - width, y0 + width, x1, y1 - width)

    def transistors(
        self, kind: str, x0: float, y0: float, *, gates: int, width: float, pitch: float = 1.0
    ) -> None:
        """Draw one active crossed by gates: ``gates + 1`` sources and drains."""
        self.diffusion(kind, x0, y0, x0 + gates * pitch + 0.6, y0 + width)
        for gate in range(gates):
            left = x0 + 0.6 + gate * pitch
            self.rect("poly", left, y0 - 0.3, left + pitch - 0.6, y0 + width + 0.3)
        for piece in range(gates + 1):
            left = x0 + piece * pitch
            self.contacts(left, y0, left + 0.6, y0 + width)

    def label(self, text: str, x: float, y: float) -> None:
        """Write a pin name at a point."""
        number, texttype = LAYERS["text"]
        self.cell.add(gdstk.Label(text, (x, y), layer=number, texttype=texttype))

    def place(
        self,
        cell: gdstk.Cell,
        x: float,
        y: float,
        *,
        mirrored: bool = False,
        columns: int = 1,
        step: float = 0.0,
    ) -> None:
        """Place a cell, upside down where `mirrored`, as a row of `columns`."""
        self.cell.add(
            gdstk.Reference(
                cell, (x, y), x_reflection=mirrored, columns=columns, rows=1, spacing=(step, 0)
            )
        )


# --- sound parts ---------------------------------------------------------------------------


ROW_UM = 8.0
GROUP_UM = 17.6


def logic_cell(library: gdstk.Library, name: str, gates: int) -> gdstk.Cell:
    """One logic cell: n below, p above, its part of the row's well."""
    drawing = Drawing(library, name)
    drawing.transistors("n", 0.4, 1.0, gates=gates, width=1.6)
    drawing.transistors("p", 0.4, 4.8, gates=gates, width=2.2)
    drawing.rect("nwell", -0.4, 4.0, gates + 1.8, ROW_UM + 0.4)
    return drawing.cell


def tap_cell(library: gdstk.Library) -> gdstk.Cell:
    """A cell with one well tap and one substrate tap."""
    drawing = Drawing(library, "row_tap")
    drawing.strap("p", 0.5, 0.8, 1.5, 2.8)
    drawing.strap("n", 0.5, 4.8, 1.5, 7.0)
    drawing.rect("nwell", -0.4, 4.0, 2.4, ROW_UM + 0.4)
    return drawing.cell


def logic_group(library: gdstk.Library) -> tuple[gdstk.Cell, gdstk.Cell]:
    """A tap cell and four logic cells, the unit that rows repeat; and the tap cell."""
    tap = tap_cell(library)
    drawing = Drawing(library, "row_group")
    drawing.place(tap, 0, 0)
    x = 2.0
    for name, gates in (("latch", 5), ("gate", 2), ("inverter", 1), ("gate_b", 2)):
        drawing.place(logic_cell(library, name, gates), x, 0)
        x += gates + 1.4
    return drawing.cell, tap


def logic(drawing: Drawing, library: gdstk.Library, x: float, y: float) -> None:
    """Twelve rows of control logic, every second one upside down."""
    group, tap = logic_group(library)
    columns = 11
    for row in range(12):
        mirrored = row % 2 == 1
        base = y + (row + 1 if mirrored else row) * ROW_UM
        drawing.place(group, x, base, mirrored=mirrored, columns=columns, step=GROUP_UM)
        drawing.place(tap, x + columns * GROUP_UM, base, mirrored=mirrored)


def output_driver(library: gdstk.Library) -> gdstk.Cell:
    """A pull-down and a pull-up with closed tap rings, marked as reached from a pad."""
    drawing = Drawing(library, "output_driver")
    drawing.ring("p", 0, 0, 30, 44, width=1.5)
    drawing.transistors("n", 4.7, 7, gates=20, width=30)
    drawing.rect("injector_marker", 4, 6, 26, 38)
    drawing.ring("p", 50, 0, 106, 44, width=1.5)
    drawing.rect("nwell", 53, 3, 103, 41)
    drawing.ring("n", 54, 4, 102, 40, width=1.5)
    for lower in (7.5, 24.0):
        drawing.transistors("p", 59.7, lower, gates=36, width=12.5)
    drawing.strap("n", 58, 21.3, 98, 22.7)
    drawing.rect("injector_marker", 59, 7, 97, 37)
    return drawing.cell


def pads(drawing: Drawing, names: tuple[str, ...], y: float) -> None:
    """A row of bond pads with their pin names."""
    for index, name in enumerate(names):
        x = 14 + 60 * index
        drawing.rect("metal1", x, y, x + 50, y + 50)
        drawing.rect("pad", x + 2, y + 2, x + 48, y + 48)
        drawing.label(name, x + 25, y + 25)


def sense_amplifier(drawing: Drawing, x: float, y: float) -> None:
    """An isolated p-well, ringed and tapped as it should be."""
    isolated_pwell(drawing, x, y)
    drawing.ring("p", x + 8, y + 8, x + 44, y + 28)
    drawing.transistors("n", x + 16, y + 14, gates=18, width=8)


def diffusion_resistor(drawing: Drawing, x: float, y: float) -> None:
    """A p+ resistor along taps on both sides of its well."""
    frame(drawing, x, y)
    drawing.rect("nwell", x + 4, y + 8, x + 48, y + 28)
    drawing.strap("n", x + 5, y + 9, x + 47, y + 10)
    drawing.strap("n", x + 5, y + 26, x + 47, y + 27)
    drawing.diffusion("p", x + 8, y + 16, x + 44, y + 20)
    drawing.rect("resistor_marker", x + 10, y + 15.5, x + 42, y + 20.5)
    drawing.contacts(x + 8, y + 16, x + 10, y + 20)
    drawing.contacts(x + 42, y + 16, x + 44, y + 20)


# --- islands: one fault or near-miss each ----------------------------------------------------


ISLAND_UM = (52.0, 36.0)
ISLAND_STEP_UM = (56.0, 40.0)


def frame(drawing: Drawing, x: float, y: float) -> None:
    """A closed substrate tap ring that keeps an island to itself."""
    drawing.ring("p", x, y, x + ISLAND_UM[0], y + ISLAND_UM[1])


def isolated_pwell(drawing: Drawing, x: float, y: float) -> None:
    """A buried layer with a tapped n-well ring on it, around a p-well of 40 x 24 um."""
    frame(drawing, x, y)
    drawing.rect("deep_nwell", x + 3, y + 3, x + 49, y + 33)
    x0, y0, x1, y1 = x + 2.5, y + 2.5, x + 49.5, y + 33.5
    drawing.rect("nwell", x0, y0, x1, y + 6)
    drawing.rect("nwell", x0, y + 30, x1, y1)
    drawing.rect("nwell", x0, y + 6, x + 6, y + 30)
    drawing.rect("nwell", x + 46, y + 6, x1, y + 30)
    drawing.ring("n", x + 3.5, y + 3.5, x + 48.5, y + 32.5)


def one_ended_well(drawing: Drawing, x: float, y: float, reach: float) -> None:
    """A well with its only tap at the left; the last p+ ends `reach` um from it."""
    frame(drawing, x, y)
    drawing.rect("nwell", x + 4, y + 12, x + 48, y + 24)
    drawing.strap("n", x + 5, y + 13, x + 7, y + 23)
    drawing.strap("p", x + 9, y + 16, x + 13, y + 20)
    drawing.strap("p", x + 7 + reach - 6, y + 16, x + 7 + reach, y + 20)


def well_tapped_at_one_end(drawing: Drawing, x: float, y: float) -> Planted:
    """Fault: p+ 33 um from the only tap of its well."""
    one_ended_well(drawing, x, y, 33.0)
    return Planted(
        name="well tapped at one end only",
        rule="tap-distance",
        x_um=x + 40,
        y_um=y + 16,
        measured=33.0,
    )


def well_tapped_near_enough(drawing: Drawing, x: float, y: float) -> Planted:
    """Near-miss: p+ 19.9 um from the only tap of its well."""
    one_ended_well(drawing, x, y, 19.9)
    return Planted(
        name="p+ 19.9 um from its tap",
        rule="tap-distance",
        x_um=x + 26.9,
        y_um=y + 16,
        measured=19.9,
    )


def bar_in_well(drawing: Drawing, x: float, y: float, gap: float) -> None:
    """A p+ bar between two well taps `gap` um apart: its middle is farthest, no corner is."""
    frame(drawing, x, y)
    left, right = x + 26 - gap / 2, x + 26 + gap / 2
    drawing.rect("nwell", left - 1.6, y + 5, right + 1.6, y + 31)
    drawing.strap("n", left - 1, y + 6, left, y + 30)
    drawing.strap("n", right, y + 6, right + 1, y + 30)
    drawing.strap("p", left + 2, y + 16, right - 2, y + 20)


def bar_between_distant_taps(drawing: Drawing, x: float, y: float) -> Planted:
    """Fault: the middle of a long p+ bar is 22.25 um from either tap."""
    bar_in_well(drawing, x, y, 44.5)
    return Planted(
        name="long p+ bar between two taps",
        rule="tap-distance",
        x_um=x + 26,
        y_um=y + 16,
        measured=22.25,
    )


def bar_between_near_taps(drawing: Drawing, x: float, y: float) -> Planted:
    """Near-miss: the middle of a long p+ bar is 19.8 um from either tap."""
    bar_in_well(drawing, x, y, 39.6)
    return Planted(
        name="p+ bar with its middle 19.8 um from a tap",
        rule="tap-distance",
        x_um=x + 26,
        y_um=y + 16,
        measured=19.8,
    )


def isolated_pwell_with(drawing: Drawing, x: float, y: float, reach: float) -> None:
    """An isolated p-well with its tap at the left; the last n+ ends `reach` um from it."""
    isolated_pwell(drawing, x, y)
    drawing.strap("p", x + 8, y + 10, x + 9, y + 26)
    drawing.strap("n", x + 12, y + 16, x + 15, y + 20)
    drawing.strap("n", x + 9 + reach - 5, y + 16, x + 9 + reach, y + 20)


def isolated_pwell_tapped_at_one_end(drawing: Drawing, x: float, y: float) -> Planted:
    """Fault: n+ 27 um from the only tap of its isolated p-well."""
    isolated_pwell_with(drawing, x, y, 27.0)
    return Planted(
        name="isolated p-well tapped at one end only",
        rule="tap-distance",
        x_um=x + 36,
        y_um=y + 16,
        measured=27.0,
    )


def isolated_pwell_tapped_near_enough(drawing: Drawing, x: float, y: float) -> Planted:
    """Near-miss: n+ 19.5 um from the only tap of its isolated p-well."""
    isolated_pwell_with(drawing, x, y, 19.5)
    return Planted(
        name="n+ 19.5 um from the tap of its isolated p-well",
        rule="tap-distance",
        x_um=x + 28.5,
        y_um=y + 16,
        measured=19.5,
    )


def untied_isolated_pwell(drawing: Drawing, x: float, y: float) -> Planted:
    """Fault: an isolated p-well without any tap."""
    isolated_pwell(drawing, x, y)
    drawing.strap("n", x + 12, y + 16, x + 15, y + 20)
    return Planted(
        name="isolated p-well without a tap", rule="untied-body", x_um=x + 26, y_um=y + 18
    )


def untied_well(drawing: Drawing, x: float, y: float) -> Planted:
    """Fault: a well without any tap."""
    frame(drawing, x, y)
    drawing.rect("nwell", x + 10, y + 10, x + 30, y + 26)
    drawing.transistors("p", x + 13, y + 14, gates=6, width=6)
    return Planted(name="well without a tap", rule="untied-body", x_um=x + 20, y_um=y + 18)


def bare_tap(drawing: Drawing, x: float, y: float) -> Planted:
    """Fault: one of two well taps has no contact."""
    frame(drawing, x, y)
    drawing.rect("nwell", x + 8, y + 8, x + 40, y + 28)
    drawing.strap("n", x + 9, y + 9, x + 10, y + 27)
    drawing.diffusion("n", x + 30, y + 14, x + 31, y + 22)
    drawing.transistors("p", x + 13, y + 14, gates=8, width=6)
    return Planted(
        name="well tap without a contact", rule="uncontacted-tap", x_um=x + 30.5, y_um=y + 18
    )


def far_contacts(drawing: Drawing, x: float, y: float, length: float) -> None:
    """A substrate tap bar that runs on `length` um beyond its contacts' right edge."""
    frame(drawing, x, y)
    drawing.diffusion("p", x + 10, y + 17.64, x + 13.86 + length, y + 18.36)
    drawing.contacts(x + 10, y + 17.75, x + 14, y + 18.25)


def tap_beyond_contacts(drawing: Drawing, x: float, y: float) -> Planted:
    """Fault: a substrate tap reaches 26 um beyond its last contact."""
    far_contacts(drawing, x, y, 26.0)
    return Planted(
        name="substrate tap 26 um beyond its last contact",
        rule="tap-reach",
        x_um=x + 39.86,
        y_um=y + 17.64,
        measured=(26.0**2 + 0.25**2) ** 0.5,
    )


def tap_just_beyond_contacts(drawing: Drawing, x: float, y: float) -> Planted:
    """Near-miss: a substrate tap reaches 5.9 um beyond its last contact."""
    far_contacts(drawing, x, y, 5.9)
    return Planted(
        name="substrate tap 5.9 um beyond its last contact",
        rule="tap-reach",
        x_um=x + 19.76,
        y_um=y + 17.64,
        measured=(5.9**2 + 0.25**2) ** 0.5,
    )


def injector_beside_well(drawing: Drawing, x: float, y: float, spacing: float) -> None:
    """An n+ diode `spacing` um to the left of a tapped well."""
    frame(drawing, x, y)
    drawing.strap("n", x + 30 - spacing - 6, y + 15, x + 30 - spacing, y + 21)
    drawing.rect("nwell", x + 30, y + 8, x + 48, y + 28)
    drawing.ring("n", x + 31, y + 9, x + 47, y + 27)
    drawing.strap("p", x + 36, y + 14, x + 42, y + 22)


def marked_injector_too_near(drawing: Drawing, x: float, y: float) -> Planted:
    """Fault: a marked injector 6 um from a well."""
    injector_beside_well(drawing, x, y, 6.0)
    drawing.rect("injector_marker", x + 18, y + 15, x + 24, y + 21)
    return Planted(
        name="marked injector 6 um from a well",
        rule="injector-spacing",
        x_um=x + 24,
        y_um=y + 15,
        measured=6.0,
    )


def labelled_injector_too_near(drawing: Drawing, x: float, y: float) -> Planted:
    """Fault: a diode that a pin label names, 9 um from a well."""
    injector_beside_well(drawing, x, y, 9.0)
    drawing.label("FLOW", x + 18, y + 18)
    return Planted(
        name="pin diode 9 um from a well",
        rule="injector-spacing",
        x_um=x + 21,
        y_um=y + 15,
        measured=9.0,
    )


def labelled_injector_far_enough(drawing: Drawing, x: float, y: float) -> Planted:
    """Near-miss: a diode that a pin label names, 15.1 um from a well."""
    injector_beside_well(drawing, x, y, 15.1)
    drawing.label("LEVEL", x + 12, y + 18)
    return Planted(
        name="pin diode 15.1 um from a well",
        rule="injector-spacing",
        x_um=x + 14.9,
        y_um=y + 15,
        measured=15.1,
    )


def supply_label_near(drawing: Drawing, x: float, y: float) -> Planted:
    """Near-miss: a diffusion beside a well whose label is a supply, so no injector."""
    injector_beside_well(drawing, x, y, 4.0)
    drawing.label("VSS", x + 23, y + 18)
    return Planted(
        name="grounded diffusion 4 um from a well",
        rule="injector-spacing",
        x_um=x + 26,
        y_um=y + 15,
        measured=4.0,
    )


def narrow_neck(drawing: Drawing, x: float, y: float) -> Planted:
    """Fault: p+ at the end of a well arm 1.6 um narrow, within tap distance."""
    frame(drawing, x, y)
    drawing.rect("nwell", x + 6, y + 8, x + 14, y + 28)
    drawing.rect("nwell", x + 14, y + 17, x + 32, y + 18.6)
    drawing.ring("n", x + 7, y + 9, x + 13, y + 27)
    drawing.strap("p", x + 28, y + 17.4, x + 31, y + 18.2)
    return Planted(
        name="p+ at the end of a narrow well arm",
        rule="well-resistance",
        x_um=x + 29.5,
        y_um=y + 17.8,
    )


def weak_pair(drawing: Drawing, x: float, y: float) -> Planted:
    """Fault: p+ and n+ side by side, both near the limit of their tap distances."""
    frame(drawing, x, y)
    drawing.rect("nwell", x + 4, y + 18.5, x + 26, y + 20.7)
    drawing.strap("n", x + 5, y + 19, x + 6, y + 20.2)
    drawing.strap("p", x + 13, y + 19, x + 25, y + 20.2)
    drawing.strap("n", x + 13, y + 16.8, x + 25, y + 18)
    return Planted(
        name="p+ and n+ side by side, taps far from both",
        rule="loop-gain",
        x_um=x + 19,
        y_um=y + 18.5,
    )


def distant_substrate_tap(drawing: Drawing, x: float, y: float) -> Planted:
    """Fault: n+ in the substrate 28 um from the nearest substrate tap."""
    drawing.strap("p", x, y - 2, x + 1, y + 6)
    drawing.strap("n", x + 25, y, x + 29, y + 4)
    return Planted(
        name="n+ far from every substrate tap",
        rule="tap-distance",
        x_um=x + 29,
        y_um=y,
        measured=28.0,
    )


FAULT_ISLANDS: tuple[Callable[[Drawing, float, float], Planted], ...] = (
    well_tapped_at_one_end,
    bar_between_distant_taps,
    isolated_pwell_tapped_at_one_end,
    untied_isolated_pwell,
    untied_well,
    bare_tap,
    tap_beyond_contacts,
    marked_injector_too_near,
    labelled_injector_too_near,
    narrow_neck,
    weak_pair,
)
NEAR_MISS_ISLANDS: tuple[Callable[[Drawing, float, float], Planted], ...] = (
    well_tapped_near_enough,
    bar_between_near_taps,
    isolated_pwell_tapped_near_enough,
    tap_just_beyond_contacts,
    labelled_injector_far_enough,
    supply_label_near,
)


def islands(drawing: Drawing) -> tuple[tuple[Planted, ...], tuple[Planted, ...]]:
    """Draw every island on a grid of four columns; return the faults and the near-misses."""
    planted = []
    for index, draw in enumerate(FAULT_ISLANDS + NEAR_MISS_ISLANDS):
        x = 264 + ISLAND_STEP_UM[0] * (index % 4)
        y = 130 + ISLAND_STEP_UM[1] * (index // 4)
        planted.append(draw(drawing, x, y))
    lone = distant_substrate_tap(drawing, 95.0, 280.0)
    return (*planted[: len(FAULT_ISLANDS)], lone), tuple(planted[len(FAULT_ISLANDS) :])


def draw_block() -> tuple[gdstk.Library, tuple[Planted, ...], tuple[Planted, ...]]:
    """Draw the whole block; return its library, the faults and the near-misses."""
    library = gdstk.Library("valve_driver", unit=1e-6, precision=1e-9)
    number, datatype = LAYERS["contact"]
    library.new_cell("contact").add(
        gdstk.rectangle((0, 0), (CONTACT_UM, CONTACT_UM), layer=number, datatype=datatype)
    )
    drawing = Drawing(library, "valve_driver")
    drawing.ring("p", 0, 0, WIDTH_UM, HEIGHT_UM, width=2.0)
    pads(drawing, ("VALVE0", "VALVE1", "VALVE2", "VALVE3", "VDD", "VSS", "CLOCK", "DATA"), 8)
    pads(drawing, ("FLOW", "LEVEL", "SUPPLY", "VSS", "RESET", "ALARM", "TEST", "VDD"), 342)
    driver = output_driver(library)
    for index in range(4):
        drawing.place(driver, 16 + 118 * index, 70)
    logic(drawing, library, 20, 130)
    sense_amplifier(drawing, 432, 290)
    diffusion_resistor(drawing, 20, 285)
    faults, near_misses = islands(drawing)
    return library, faults, near_misses


def main(path: Path) -> None:
    """Write the block as GDSII; a fixed time stamp keeps the bytes the same."""
    library, _, _ = draw_block()
    library.write_gds(path, timestamp=datetime.datetime(2000, 1, 1))


if __name__ == "__main__":
    main(Path(sys.argv[1] if len(sys.argv) > 1 else Path(__file__).with_name("valve_driver.gds")))
