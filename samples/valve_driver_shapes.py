"""Layers and shapes of the process ``larch180``, as ``valve_driver.py`` draws them.

All lengths are in um.  Diffusion, contacts and metal 1 come first, the wiring above them after.
"""

from __future__ import annotations

from dataclasses import dataclass

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
    "via1": (22, 0),
    "metal2": (23, 0),
    "via2": (24, 0),
    "metal3": (25, 0),
    "via3": (26, 0),
    "metal4": (27, 0),
    "pad": (30, 0),
    "resistor_marker": (41, 0),
    "injector_marker": (42, 0),
    "text": (60, 0),
}
"""Layer/datatype of each layer, as ``techfiles/larch180.yaml`` names them."""

CONTACT_UM, CONTACT_PITCH_UM, CONTACT_INSET_UM = 0.22, 0.5, 0.14
VIA_UM, VIA_PITCH_UM, VIA_INSET_UM = 0.26, 0.6, 0.1
IMPLANT_OVERLAP_UM = 0.2
CUTS = {
    "contact": (CONTACT_UM, CONTACT_PITCH_UM, CONTACT_INSET_UM),
    **{f"via{level}": (VIA_UM, VIA_PITCH_UM, VIA_INSET_UM) for level in (1, 2, 3)},
}
"""Size, pitch and least distance from the edge of the metal, of each kind of cut."""


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


def new_library() -> gdstk.Library:
    """Make a library with one cell for each kind of cut."""
    library = gdstk.Library("valve_driver", unit=1e-6, precision=1e-9)
    for name, (size, _, _) in CUTS.items():
        number, datatype = LAYERS[name]
        library.new_cell(name).add(
            gdstk.rectangle((0, 0), (size, size), layer=number, datatype=datatype)
        )
    return library


class Drawing:
    """One layout cell and the shapes of the process, all lengths in um."""

    def __init__(self, library: gdstk.Library, name: str) -> None:
        self.cell = library.new_cell(name)
        self.cuts = {name: library[name] for name in CUTS}

    def rect(self, layer: str, x0: float, y0: float, x1: float, y1: float) -> None:
        """Draw a rectangle."""
        number, datatype = LAYERS[layer]
        self.cell.add(gdstk.rectangle((x0, y0), (x1, y1), layer=number, datatype=datatype))

    def fill(self, cut: str, x0: float, y0: float, x1: float, y1: float) -> None:
        """Fill a rectangle with contacts or vias, at least one."""
        size, pitch, inset = CUTS[cut]
        inner = 2 * inset + size
        self.cell.add(
            gdstk.Reference(
                self.cuts[cut],
                (x0 + inset, y0 + inset),
                columns=int((x1 - x0 - inner) / pitch + 1e-6) + 1,
                rows=int((y1 - y0 - inner) / pitch + 1e-6) + 1,
                spacing=(pitch, pitch),
            )
        )

    def contacts(self, x0: float, y0: float, x1: float, y1: float) -> None:
        """Fill a rectangle with contacts under metal."""
        self.fill("contact", x0, y0, x1, y1)
        self.rect("metal1", x0, y0, x1, y1)

    def stack(
        self, x0: float, y0: float, x1: float, y1: float, *, lower: int = 1, upper: int
    ) -> None:
        """Fill a rectangle with all metals and vias from one metal up to another."""
        for level in range(lower, upper):
            self.rect(f"metal{level}", x0, y0, x1, y1)
            self.fill(f"via{level}", x0, y0, x1, y1)
        self.rect(f"metal{upper}", x0, y0, x1, y1)

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

    def hollow(
        self, layer: str, x0: float, y0: float, x1: float, y1: float, *, width: float
    ) -> None:
        """Draw a closed ring of one layer whose outer edge is the given box."""
        self.rect(layer, x0, y0, x1, y0 + width)
        self.rect(layer, x0, y1 - width, x1, y1)
        self.rect(layer, x0, y0 + width, x0 + width, y1 - width)
        self.rect(layer, x1 - width, y0 + width, x1, y1 - width)

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

    def fingers(self, x0: float, y0: float, y1: float, *, gates: int, first: int) -> None:
        """Lengthen the metal of every second piece of `transistors` from y0 to y1."""
        for piece in range(first, gates + 1, 2):
            self.rect("metal1", x0 + piece, y0, x0 + piece + 0.6, y1)

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


# --- islands: their frame and the rails of their row -----------------------------------------


ISLAND_UM = (52.0, 36.0)
ISLAND_STEP_UM = (56.0, 40.0)
RAILS_UM = {"VSS": (0.1, 0.9), "VDD": (36.4, 37.4), "VDDIO": (38.2, 39.2)}
"""Bottom and top of each metal 2 rail of a row of islands, above the island's lower edge."""


def rails(drawing: Drawing, x0: float, x1: float, y: float) -> None:
    """Draw the metal 2 rails of a row of islands whose lower edges are at `y`."""
    for bottom, top in RAILS_UM.values():
        drawing.rect("metal2", x0, y + bottom, x1, y + top)


def frame(drawing: Drawing, x: float, y: float) -> None:
    """Draw a closed substrate tap ring on VSS that keeps an island to itself."""
    drawing.ring("p", x, y, x + ISLAND_UM[0], y + ISLAND_UM[1])
    drawing.stack(x + 25, y + RAILS_UM["VSS"][0], x + 27, y + RAILS_UM["VSS"][1], upper=2)


def to_vss(drawing: Drawing, y: float, at_x: float, at_y: float) -> None:
    """Tie metal 1 at a point of the island at `y` to the rail VSS below it."""
    drawing.stack(at_x - 0.3, at_y - 0.3, at_x + 0.3, at_y + 0.3, upper=2)
    drawing.rect("metal2", at_x - 0.3, y + RAILS_UM["VSS"][0], at_x + 0.3, at_y)


def to_vdd(drawing: Drawing, y: float, at_x: float, at_y: float) -> None:
    """Tie metal 1 at a point of the island at `y` to the rail VDD above it."""
    drawing.stack(at_x - 0.3, at_y - 0.3, at_x + 0.3, at_y + 0.3, upper=2)
    drawing.rect("metal2", at_x - 0.3, at_y, at_x + 0.3, y + RAILS_UM["VDD"][1])


def to_vddio(drawing: Drawing, y: float, at_x: float, at_y: float) -> None:
    """Tie metal 1 at a point of the island at `y` to VDDIO; metal 3 passes over VDD."""
    bottom, top = y + RAILS_UM["VDDIO"][0], y + RAILS_UM["VDDIO"][1]
    drawing.stack(at_x - 0.3, at_y - 0.3, at_x + 0.3, at_y + 0.3, upper=3)
    drawing.rect("metal3", at_x - 0.3, at_y, at_x + 0.3, top)
    drawing.stack(at_x - 0.3, bottom, at_x + 0.3, top, lower=2, upper=3)


PAD_ROWS_UM = (8.0, 448.0)
PAD_UM = 50.0
"""Lower edges of both rows of bond pads, and their size."""


def to_pad(drawing: Drawing, at_x: float, at_y: float) -> None:
    """Lead metal 1 at a point straight up to metal 4, and there to the upper row of pads."""
    drawing.stack(at_x - 1, at_y - 1, at_x + 1, at_y + 1, upper=4)
    drawing.rect("metal4", at_x - 1, at_y, at_x + 1, PAD_ROWS_UM[1] + 1)
