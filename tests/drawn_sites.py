"""Sites of the chips in `drawn_chips`: a cell of its own with its ports and its truth.

Lengths are in um, in the site's own coordinates.  Devices that pins drive stand at the end.
"""

from __future__ import annotations

import random
from dataclasses import dataclass
from typing import Any

import gdstk
import numpy as np
import shapely
from valve_driver import LAYERS

ALL_LAYERS = {**LAYERS, "well_resistor_marker": (43, 0)}
CONTACT_UM, CONTACT_PITCH_UM, CONTACT_INSET_UM = 0.22, 0.5, 0.14
PORT_UM, PORT_STEP_UM = 0.6, 1.3
POLY_OHM_SQ, MARKED_POLY_OHM_SQ, MARKED_DIFFUSION_OHM_SQ = 8.0, 300.0, 80.0
CONTACT_OHM = 9.0
SUPPLIES, GROUNDS = ("VDD", "VDDIO"), ("VSS", "VSSIO")
LEVELS = {
    "VDD": "{low_v: 1.62, typical_v: 1.8, high_v: 1.98}",
    "VDDIO": "{low_v: 2.97, typical_v: 3.3, high_v: 3.63}",
}
Point = tuple[float, float]
Box = tuple[float, float, float, float]


@dataclass(slots=True, kw_only=True)
class Reached:
    """A diffusion, or a whole well, that a pin reaches: its middle and the way's resistance."""

    pin: str
    polarity: str
    at: Point
    whole_well: bool = False
    ohm: float = 0.0
    tolerance: float = 0.02


@dataclass(slots=True, kw_only=True)
class Held:
    """An n-well or isolated p-well by the middle of its box, the nets that hold it, and how."""

    kind: str
    at: Point
    nets: tuple[str | None, ...]
    rail: str | None
    ohm: float = 0.0


@dataclass(slots=True, kw_only=True)
class Ring:
    """A ring by its box: what it is, and its openings (width and middle)."""

    kind: str
    material: str
    box: Box
    net: str | None
    suits: bool | None
    gaps: list[tuple[float, Point]]
    width: float
    share: float | None
    style: str


class Site:
    """One cell under construction with its ports and its truth, in its own coordinates."""

    def __init__(
        self, library: gdstk.Library, name: str, rng: random.Random, quarters: int = 0
    ) -> None:
        self.quarters = quarters
        self.library, self.rng, self.name = library, rng, name
        self.cell = library.new_cell(name)
        self.ports: list[tuple[float, float, str]] = []
        self.reached: list[Reached] = []
        self.held: list[Held] = []
        self.rings: list[Ring] = []
        self.openings: list[tuple[float, Point]] = []
        self.unringed: list[Point] = []

    def rect(self, layer: str, x0: float, y0: float, x1: float, y1: float) -> None:
        number, datatype = ALL_LAYERS[layer]
        corners = [(round(x0, 3), round(y0, 3)), (round(x1, 3), round(y1, 3))]
        self.cell.add(gdstk.rectangle(*corners, layer=number, datatype=datatype))

    def shape(self, layer: str, shape: Any) -> None:
        """Draw a shapely polygon without holes, on the database grid."""
        number, datatype = ALL_LAYERS[layer]
        points = [(round(x, 3), round(y, 3)) for x, y in shapely.get_coordinates(shape)[:-1]]
        self.cell.add(gdstk.Polygon(points, layer=number, datatype=datatype))

    def contacts(self, area: Any, within: Box | None = None) -> list[Any]:
        """Fill an area with contacts where they fit, in rows and columns from its corner."""
        x0, y0, x1, y1 = area.bounds
        steps = [int((high - low) / CONTACT_PITCH_UM) + 1 for low, high in ((x0, x1), (y0, y1))]
        column, row = (axis.ravel() for axis in np.meshgrid(*(np.arange(step) for step in steps)))
        x = np.round(x0 + CONTACT_INSET_UM + column * CONTACT_PITCH_UM, 3)
        y = np.round(y0 + CONTACT_INSET_UM + row * CONTACT_PITCH_UM, 3)
        boxes = shapely.box(x, y, x + CONTACT_UM, y + CONTACT_UM)
        room = area.buffer(1e-6 - CONTACT_INSET_UM, join_style="mitre")
        if within is not None:
            room = shapely.intersection(room, shapely.box(*within))
        shapely.prepare(room)
        found = boxes[shapely.covers(room, boxes)]
        for box in found:
            self.rect("contact", *box.bounds)
        return list(found)

    def strap(self, kind: str, x0: float, y0: float, x1: float, y1: float) -> int:
        """Draw a contacted diffusion under metal 1; return its contacts."""
        self.diffusion(kind, x0, y0, x1, y1)
        self.rect("metal1", x0, y0, x1, y1)
        return len(self.contacts(shapely.box(x0, y0, x1, y1)))

    def diffusion(self, kind: str, x0: float, y0: float, x1: float, y1: float) -> None:
        self.rect("active", x0, y0, x1, y1)
        self.rect(f"{kind}plus", x0 - 0.2, y0 - 0.2, x1 + 0.2, y1 + 0.2)

    def port(self, net: str, *boxes: Box) -> None:
        """Lead a net up from somewhere in boxes of metal 1, apart from all others."""
        half, axis = PORT_UM / 2, self.quarters % 2
        for _ in range(4000):
            x0, y0, x1, y1 = self.rng.choice(boxes)
            at = (round(self.rng.uniform(x0, x1), 3), round(self.rng.uniform(y0, y1), 3))
            if all(abs(at[axis] - other[axis]) >= PORT_STEP_UM for other in self.ports):
                break
        else:
            raise ValueError(f"no room for a port in {self.name}")
        x, y = at
        for layer in ("metal1", "metal2", "metal3"):
            self.rect(layer, x - half, y - half, x + half, y + half)
        for layer in ("via1", "via2"):
            self.rect(layer, x - 0.13, y - 0.13, x + 0.13, y + 0.13)
        self.ports.append((x, y, net))


# --- devices: what a pin drives ---------------------------------------------------------------


def grown(box: Box, by: float) -> Box:
    """A box grown on all sides."""
    x0, y0, x1, y1 = box
    return round(x0 - by, 3), round(y0 - by, 3), round(x1 + by, 3), round(y1 + by, 3)


def middle(box: Box) -> Point:
    """Middle of a box."""
    return (box[0] + box[2]) / 2, (box[1] + box[3]) / 2


def diode(site: Site, kind: str, pin: str, rail: str) -> Box:
    """One contacted diffusion."""
    width, height = round(site.rng.uniform(1.5, 6), 3), round(site.rng.uniform(1.5, 6), 3)
    box = (0.0, 0.0, width, height)
    site.strap(kind, *box)
    site.port(pin, (0.4, 0.4, width - 0.4, height - 0.4))
    site.reached.append(Reached(pin=pin, polarity=polarity(kind), at=middle(box)))
    return box


def polarity(kind: str) -> str:
    """Which way a diffusion injects."""
    return "below_ground" if kind == "n" else "above_supply"


def fingers(site: Site, kind: str, pin: str, rail: str) -> Box:
    """A transistor of several fingers: every second piece a drain, the others on a rail."""
    gates, height = site.rng.randint(2, 9), round(site.rng.uniform(3, 12), 3)
    pitch, width = 1.2, 0.6
    right = gates * pitch + width
    site.diffusion(kind, 0, 0, right, height)
    for gate in range(gates):
        left = gate * pitch + width
        site.rect("poly", left + 0.1, -0.4, left + pitch - width - 0.1, height + 0.4)
        # the gap between gate and drain stays diffusion
    for piece in range(gates + 1):
        left = piece * pitch
        site.contacts(shapely.box(left, 0, left + width, height))
        drain = piece % 2 == 1
        site.rect("metal1", left, 0.0 if drain else -1.2, left + width, height + (1.2 * drain))
        if drain:
            x0, x1 = left - (0.1), left + width + 0.1
            if piece == gates:
                x1 = right
            at = ((x0 + x1) / 2, height / 2)
            site.reached.append(Reached(pin=pin, polarity=polarity(kind), at=at))
    site.rect("metal1", 0, -1.8, right, -1.2)
    site.rect("metal1", 0, height + 1.2, right, height + 1.8)
    site.port(rail, (0.3, -1.5, 0.4 * right - 0.1, -1.5))
    site.port(pin, (0.6 * right + 0.5, height + 1.5, right - 0.3, height + 1.5))
    return (0.0, -1.8, right, height + 1.8)


def behind_poly(site: Site, kind: str, pin: str, rail: str) -> Box:
    """A diode behind a marked poly resistor."""
    length, width = round(site.rng.uniform(4, 15), 3), round(site.rng.choice((0.6, 1.0, 2.0)), 3)
    head = max(width, 0.8)
    edge = (head - width) / 2
    site.rect("poly", 0, 0, head, head)
    site.rect("poly", head, edge, head + length, edge + width)
    site.rect("poly", head + length, 0, 2 * head + length, head)
    site.rect("resistor_marker", head, -0.3, head + length, head + 0.3)
    many = 0
    for left in (0.0, head + length):
        many = len(site.contacts(shapely.box(left, 0, left + head, head)))
        site.rect("metal1", left, 0, left + head, head)
    ohm = MARKED_POLY_OHM_SQ * length / width + 2 * CONTACT_OHM / many
    left = 2 * head + length + 1.0
    box = (left, 0.0, left + 3.0, 3.0)
    site.strap(kind, *box)
    site.rect("metal1", head + length, 0, left, head)
    site.port(pin, (0.3, 0.3, head - 0.3, head - 0.3))
    reached = Reached(pin=pin, polarity=polarity(kind), at=middle(box), ohm=ohm, tolerance=0.05)
    site.reached.append(reached)
    return (0.0, 0.0, left + 3.0, 3.0)


def behind_diffusion(site: Site, kind: str, pin: str, rail: str) -> Box:
    """A marked diffusion, itself a junction, and a diode behind it."""
    length, width = round(site.rng.uniform(5, 15), 3), round(site.rng.choice((0.8, 1.5, 2.5)), 3)
    head = 1.0
    right = 2 * head + length
    site.diffusion(kind, 0, 0, right, width)
    site.rect("resistor_marker", head, -0.3, head + length, width + 0.3)
    many = 0
    for left in (0.0, head + length):
        many = len(site.contacts(shapely.box(left, 0, left + head, width)))
        site.rect("metal1", left, 0, left + head, width)
    ohm = MARKED_DIFFUSION_OHM_SQ * length / width
    start = right + 1.0
    box = (start, 0.0, start + 2.5, 2.5)
    site.strap(kind, *box)
    site.rect("metal1", head + length, 0, start, width)
    site.port(pin, (0.35, 0.35, head - 0.35, width - 0.35))
    way = polarity(kind)
    site.reached.append(Reached(pin=pin, polarity=way, at=(right / 2, width / 2)))
    site.reached.append(
        Reached(pin=pin, polarity=way, at=middle(box), ohm=ohm, tolerance=0.05 + 30.0 / many / ohm)
    )
    return (0.0, 0.0, start + 2.5, max(2.5, width))


DEVICES = {
    "diode": diode,
    "fingers": fingers,
    "behind_poly": behind_poly,
    "behind_diffusion": behind_diffusion,
}
