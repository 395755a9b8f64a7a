"""Layouts of wiring for the tests of nets: a technology with texts on every conductor, a
drawing that labels what it draws, and random drawings of every kind of shape.

Coordinates are whole database units (nm).  Small multiples of `GRID` make shapes touch at
edges and corners often.
"""

from __future__ import annotations

import datetime
import math
import random
from functools import lru_cache
from pathlib import Path
from typing import Any, Self

import gdstk
import numpy as np
import shapely

from latchscan.layout.connections import Nets
from latchscan.layout.nets import trace_nets
from latchscan.layout.regions import Sizes
from latchscan.layout.source import open_layout
from latchscan.tasks import Workers
from latchscan.technology.conductors import Conductors
from latchscan.technology.load import load_technology
from latchscan.technology.model import Technology

GRID = 20
PAIRS = {
    "active": (1, 0),
    "poly": (5, 0),
    "contact": (6, 0),
    "metal1": (8, 0),
    "metal2": (10, 0),
    "pplus": (14, 0),
    "via1": (19, 0),
    "via2": (29, 0),
    "metal3": (30, 0),
    "nwell": (31, 0),
    "pad_recognition": (41, 0),
    "thick_oxide": (44, 0),
    "esd_recognition": (99, 30),
}
TEXT = {"poly": (5, 25), "metal1": (8, 25), "metal2": (10, 25), "metal3": (30, 25)}
GENERAL = (63, 0)
SHEET = {"sheet_resistance_ohm_sq": {"typical": 1.0, "source": "Invented"}}
RESISTANCE = {"resistance_ohm": {"typical": 1.0, "source": "Invented"}}
DEVICE = {**SHEET, "contact_resistance_ohm": {"typical": 1.0, "source": "Invented"}}


def conductors(**changes: object) -> dict[str, object]:
    """A section `conductors` with one diffusion, poly and three metals."""
    layers = {
        "diffusion": {"shape": "diffusion", "kind": "diffusion", **SHEET},
        "poly": {"shape": "poly", "kind": "poly", "texts": ["5/25"], **SHEET},
        "metal1": {"shape": "metal1", "texts": ["8/25"], **SHEET},
        "metal2": {"shape": "metal2", "texts": ["10/25"], **SHEET},
        "metal3": {"shape": "metal3", "texts": ["30/25"], **SHEET},
    }
    connections = {
        "contact": {"shape": "contact", "joins": ["diffusion", "poly", "metal1"], **RESISTANCE},
        "via1": {"shape": "via1", "joins": ["metal1", "metal2"], **RESISTANCE},
        "via2": {"shape": "via2", "joins": ["metal2", "metal3"], **RESISTANCE},
    }
    return {"layers": layers, "connections": connections, **changes}


@lru_cache(maxsize=1)
def _shipped() -> Technology:
    return load_technology("open130").technology


def technology(section: dict[str, object] | None = None) -> Technology:
    """The shipped technology with another section `conductors` and no layer required."""
    return _opened(Conductors.model_validate(section or conductors()))


def shipped_technology() -> Technology:
    """The shipped technology with no layer required."""
    shipped = _shipped().conductors
    assert shipped is not None
    return _opened(shipped)


def _opened(section: Conductors) -> Technology:
    own = {text for layer in section.layers.values() for text in layer.texts}
    texts = tuple(sorted({*own, *_shipped().labels.layers}))
    layers = {
        name: layer.model_copy(update={"required": False})
        for name, layer in _shipped().layers.items()
    }
    labels = _shipped().labels.model_copy(update={"layers": texts})
    changes = {"conductors": section, "labels": labels, "layers": layers}
    return _shipped().model_copy(update=changes)


class Wiring:
    """One cell under construction [database units]; every method returns the drawing itself."""

    def __init__(self, name: str = "wiring") -> None:
        self.library = gdstk.Library(name, unit=1e-6, precision=1e-9)
        self.cell = self.library.new_cell(name)
        self.labels: list[tuple[str, str, float, float]] = []

    def polygon(self, layer: str, points: list[tuple[int, int]]) -> Self:
        """Draw a polygon."""
        number, datatype = PAIRS[layer]
        scaled = [(x / 1000, y / 1000) for x, y in points]
        self.cell.add(gdstk.Polygon(scaled, layer=number, datatype=datatype))
        return self

    def rect(self, layer: str, x0: int, y0: int, x1: int, y1: int) -> Self:
        """Draw a rectangle."""
        return self.polygon(layer, [(x0, y0), (x1, y0), (x1, y1), (x0, y1)])

    def label(self, text: str, conductor: str, x: int, y: int) -> Self:
        """Write a text of a conductor, or a general one ("any")."""
        number, texttype = TEXT.get(conductor, GENERAL)
        self.cell.add(gdstk.Label(text, (x / 1000, y / 1000), layer=number, texttype=texttype))
        self.labels.append((text, conductor, x, y))
        return self

    def write(self, path: Path) -> Path:
        """Write the GDSII file and return its path."""
        self.library.write_gds(path, timestamp=datetime.datetime(2000, 1, 1))
        return path


def traced(
    path: Path,
    tech: Technology,
    *,
    workers: Workers | None = None,
    top: str | None = None,
    **sizes: float,
) -> Nets:
    """Nets of a file."""
    source = open_layout(path, technology=tech, top=top)
    return trace_nets(source, tech, workers or Workers(), sizes=Sizes(**sizes))


def drawn_of(nets: Nets) -> dict[tuple[int, int], Any]:
    """(net, place of the conductor) -> the union of what is drawn of the net there [um]."""
    boxes = shapely.box(*nets.shape_box_um.T)
    slanted = nets.shape_polygon != np.array(None)
    boxes[slanted] = nets.shape_polygon[slanted]
    owner = np.column_stack([nets.shape_net, nets.shape_layer])
    return {
        (net, layer): shapely.union_all(boxes[(owner == (net, layer)).all(axis=1)])
        for net, layer in np.unique(owner, axis=0).tolist()
    }


def outline(rng: random.Random, kind: str) -> list[tuple[int, int]]:
    """A random outline about the origin."""
    a, b, c, d = (GRID * rng.randint(1, 6) for _ in range(4))
    w, h = a + b + GRID, c + d + GRID
    shapes = {
        "rectangle": [(0, 0), (w, 0), (w, h), (0, h)],
        "wire": [(0, 0), (8 * w, 0), (8 * w, GRID), (0, GRID)],
        "standing": [(0, 0), (GRID, 0), (GRID, 8 * h), (0, 8 * h)],
        "l": [(0, 0), (w, 0), (w, c), (a, c), (a, h), (0, h)],
        "keyhole": [
            (0, 0),
            (3 * w, 0),
            (3 * w, 3 * h),
            (0, 3 * h),
            (0, h),
            (w, h),
            (w, 2 * h),
            (2 * w, 2 * h),
            (2 * w, h),
            (0, h),
        ],
        "overlapping": [
            (0, 0),
            (w, 0),
            (w, h),
            (2 * w, h),
            (2 * w, -h),
            (a, -h),
            (a, 2 * h),
            (0, 2 * h),
        ],
        "touching": [
            (0, 0),
            (w, 0),
            (w, h),
            (2 * w, h),
            (2 * w, 2 * h),
            (w, 2 * h),
            (w, h),
            (0, h),
        ],
        "dumbbell": [
            (0, 0),
            (w, 0),
            (w, c),
            (2 * w, c),
            (2 * w, 0),
            (3 * w, 0),
            (3 * w, h),
            (2 * w, h),
            (2 * w, c),
            (w, c),
            (w, h),
            (0, h),
        ],
        "bow": [(0, 0), (3 * w, 3 * w), (3 * w, -w), (0, 2 * w)],
        "slanted": [(0, 0), (w, a), (w + b, h + a), (b, h)],
        "octagon": [
            (a, 0),
            (2 * a, 0),
            (3 * a, a),
            (3 * a, 2 * a),
            (2 * a, 3 * a),
            (a, 3 * a),
            (0, 2 * a),
            (0, a),
        ],
        "flat": [(0, 0), (w, 0), (2 * w, 0), (w, 0)],
    }
    return shapes[kind]


UPRIGHT = ("rectangle", "wire", "standing", "l", "keyhole", "overlapping", "touching", "dumbbell")
ALL_KINDS = (*UPRIGHT, "bow", "slanted", "octagon", "flat")


def random_wiring(seed: int, *, shapes: int = 60, side: int = 3000) -> Wiring:
    """Random shapes on all layers, a text of its own on each, arrays and turned references."""
    rng = random.Random(seed)
    drawn = Wiring()
    part = drawn.library.new_cell("part")
    layers = ("active", "poly", "metal1", "metal2", "metal3")
    for number in range(shapes):
        layer = rng.choice(layers)
        kind = rng.choice(UPRIGHT if layer in ("active", "poly") else ALL_KINDS)
        x, y = (GRID * rng.randint(0, side // GRID) for _ in range(2))
        points = [(x + px, y + py) for px, py in outline(rng, kind)]
        drawn.polygon(layer, points)
        if layer in TEXT:
            drawn.label(f"s{number}", layer, *points[0])
    for _ in range(shapes):
        layer = rng.choice(("contact", "via1", "via2"))
        x, y = (GRID * rng.randint(0, side // GRID) for _ in range(2))
        drawn.rect(layer, x, y, x + 2 * GRID, y + 2 * GRID)
    for layer in ("metal1", "via1", "metal2"):
        points = outline(rng, rng.choice(UPRIGHT))
        number, datatype = PAIRS[layer]
        scaled = [(x / 1000, y / 1000) for x, y in points]
        part.add(gdstk.Polygon(scaled, layer=number, datatype=datatype))
    for _ in range(3):
        at = tuple(GRID * rng.randint(0, side // GRID) / 1000 for _ in range(2))
        drawn.cell.add(
            gdstk.Reference(
                part,
                at,
                rotation=rng.randrange(4) * math.pi / 2,
                x_reflection=rng.random() < 0.5,
                columns=rng.randint(1, 3),
                rows=rng.randint(1, 3),
                spacing=(0.01 * rng.randint(5, 60), 0.01 * rng.randint(5, 60)),
            )
        )
    return drawn
