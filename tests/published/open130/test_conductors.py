"""Conductors of ``techfiles/open130.yaml`` on the cells of an open 130 nm BiCMOS process.

Sources: the GDSII files of the Python wheel ``ihp-gdsfactory`` 2.0.1 (Apache-2.0), whose
resistor cells carry their value as text; the process's published layout rules (rev 0.4) for
pads.  Shapes are evaluated by `shapely` on the flat layout that `gdstk` reads, without any
code of the package but its parser of expressions.
"""

from __future__ import annotations

import re
from functools import lru_cache
from pathlib import Path

import gdstk
import pytest
import shapely
from shapely.geometry.base import BaseGeometry

from latchscan.technology.expressions import And, Expression, Name, Not, Or, parse_expression
from latchscan.technology.load import load_technology
from latchscan.technology.model import Conductors, Technology

EVERYWHERE = shapely.box(-1.0e3, -1.0e3, 1.0e3, 1.0e3)
VALUE = re.compile(r"r=(?P<number>[0-9.]+)(?P<kilo>k?)\Z")


@pytest.fixture(scope="module")
def technology() -> Technology:
    return load_technology("open130").technology


@pytest.fixture(scope="module")
def conductors(technology: Technology) -> Conductors:
    assert technology.conductors is not None
    return technology.conductors


@lru_cache(maxsize=16)
def cell(path: Path) -> gdstk.Cell:
    return next(cell for cell in gdstk.read_gds(path).cells if cell.name == path.stem)


def drawn(path: Path, technology: Technology, text: str) -> BaseGeometry:
    """Region of an expression in the flat cell [um]."""

    def region(expression: Expression) -> BaseGeometry:
        match expression:
            case Name(name) if name in technology.derived:
                return region(parse_expression(technology.derived[name]))
            case Name(name):
                pairs = [tuple(map(int, pair.split("/"))) for pair in technology.layers[name].gds]
                found = [
                    shapely.Polygon(polygon.points)
                    for layer, datatype in pairs
                    for polygon in cell(path).get_polygons(layer=layer, datatype=datatype)
                ]
                return shapely.set_precision(shapely.union_all(found), 0.001)
            case And(items):
                return shapely.intersection_all([region(item) for item in items])
            case Or(items):
                return shapely.union_all([region(item) for item in items])
            case Not(item):
                return EVERYWHERE - region(item)
        raise AssertionError(expression)

    return region(parse_expression(text))


@pytest.mark.parametrize("name", ["rsil", "rppd", "rhigh"])
def test_resistors_have_the_value_of_their_text(
    open_layouts: Path, technology: Technology, conductors: Conductors, name: str
) -> None:
    """Squares of the drawn body and the contacts of its two heads make the text's ohms."""
    path = open_layouts / f"{name}.gds"
    (text,) = [label.text for label in cell(path).get_labels() if label.text.startswith(f"{name} ")]
    value = VALUE.search(text)
    assert value is not None
    stated = float(value["number"]) * (1000.0 if value["kilo"] else 1.0)

    shapes = {n: drawn(path, technology, r.shape) for n, r in conductors.resistors.items()}
    assert [n for n, shape in shapes.items() if shape.area > 0.0] == [name]
    (body,) = shapely.get_parts(shapes[name])
    assert body.equals(shapely.box(*body.bounds))
    wiring = drawn(path, technology, conductors.layers["poly"].shape)
    assert wiring.intersection(body).area == 0.0
    heads = [part for part in shapely.get_parts(wiring) if part.intersects(body)]
    assert len(heads) == 2
    widths = {round(head.intersection(body).length, 6) for head in heads}
    assert len(widths) == 1
    width = widths.pop()
    device = conductors.resistors[name]
    contacts = drawn(path, technology, conductors.connections["contact"].shape)
    ohm = device.sheet_resistance_ohm_sq.typical * body.area / width**2
    for head in heads:
        count = sum(head.covers(part) for part in shapely.get_parts(contacts))
        assert count == 1
        ohm += device.contact_resistance_ohm.typical / count
    assert ohm == pytest.approx(stated, rel=1e-3)


@pytest.mark.parametrize("name", ["bondpad", "CuPillarPad"])
def test_pads_open_over_top_metal(
    open_layouts: Path, technology: Technology, conductors: Conductors, name: str
) -> None:
    """Passivation opening with pad recognition, on the net of top metal 2 (layout rules)."""
    path = open_layouts / f"{name}.gds"
    assert conductors.pads is not None
    pad = drawn(path, technology, conductors.pads.shape)
    assert len(shapely.get_parts(pad)) == 1
    assert pad.area > 100.0
    metal = drawn(path, technology, conductors.layers[conductors.pads.on].shape)
    assert metal.covers(pad)


def test_the_seal_ring_is_no_pad(
    open_layouts: Path, technology: Technology, conductors: Conductors
) -> None:
    """It opens the passivation too, but has no pad recognition."""
    path = open_layouts / "sealring_complete.gds"
    assert conductors.pads is not None
    assert drawn(path, technology, "passivation").area > 0.0
    assert drawn(path, technology, conductors.pads.shape).is_empty
