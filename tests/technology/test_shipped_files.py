"""The shipped technologies say what they should.

Source of the numbers of open130: the published layout rules (revision 0.4) and process
specification (revision 1.2) of the open-source PDK SG13G2, as listed beside each check.
"""

from __future__ import annotations

import fnmatch
import math
from pathlib import Path

import pytest

from latchscan.technology.expressions import names_in, parse_expression, reach_um
from latchscan.technology.load import load_technology
from latchscan.technology.model import Quantity, Technology


@pytest.fixture(scope="module")
def open130() -> Technology:
    return load_technology("open130").technology


@pytest.fixture(scope="module")
def larch180() -> Technology:
    return load_technology("larch180").technology


def test_every_number_of_open130_has_a_source_or_is_an_assumption(open130: Technology) -> None:
    found = dict(open130.quantities())
    # wells, substrate, the two transistors; conductors, connections, resistors: counted by hand
    assert len(found) == 6 + 4 + 5 + 7 + 9 + 7 + 2 * 3
    assert found["substrate.layers[0].thickness_um"].assumption
    for where, quantity in found.items():
        assert bool(quantity.source) != quantity.assumption, where


def members(quantity: Quantity | None) -> tuple[float | None, float, float | None]:
    assert quantity is not None
    return quantity.low, quantity.typical, quantity.high


def test_published_numbers_of_open130(open130: Technology) -> None:
    """Process specification revision 1.2; limits: layout rules revision 0.4, section 7.2."""
    (stack,) = open130.substrate.layers
    assert members(stack.resistivity_ohm_cm) == (37.5, 50.0, 62.5)
    assert stack.resistivity_ohm_um == 50.0e4
    assert members(open130.wells.well_tap_contact_resistance_ohm) == (8.0, 17.0, 22.0)
    assert members(open130.substrate.substrate_tap_contact_resistance_ohm) == (8.0, 17.0, 22.0)
    assert members(open130.wells.isolated_pwell_sheet_resistance_ohm_sq)[1] == 3000.0
    assert open130.loop.supply_v == 1.2
    assert open130.rules.tap_distance.p_diffusion_max_um == 20.0
    assert open130.rules.tap_distance.n_diffusion_max_um == 20.0
    assert open130.rules.tap_reach.max_um == 6.0
    conductors = open130.conductors
    assert conductors is not None
    metals = {name: c for name, c in conductors.layers.items() if c.kind == "metal"}
    assert {name: metal.sheet_resistance_ohm_sq.typical for name, metal in metals.items()} == {
        "metal1": 0.110,
        **dict.fromkeys(("metal2", "metal3", "metal4", "metal5"), 0.088),
        "top_metal1": 0.018,
        "top_metal2": 0.011,
    }
    for name in ("via1", "via2", "via3"):
        assert members(conductors.connections[name].resistance_ohm) == (5.0, 9.0, 20.0)
    assert members(conductors.connections["contact"].resistance_ohm) == (8.0, 17.0, 22.0)


def test_texts_of_open130(open130: Technology) -> None:
    """Layer table of the layout rules, revision 0.4: label 1 of metal 1, text 25 of all metals."""
    assert open130.conductors is not None
    layers = open130.conductors.layers
    assert layers["metal1"].texts == ("8/25", "8/1")
    for name in ("metal2", "metal3", "metal4", "metal5", "top_metal1", "top_metal2"):
        assert layers[name].texts == (open130.layers[name].gds[0].replace("/0", "/25"),)


def test_remarks_of_open130(open130: Technology) -> None:
    """The texts that stand on the PDK's own device cells, and names that nets may have."""

    def is_remark(text: str) -> bool:
        patterns = open130.labels.remark_names
        return any(fnmatch.fnmatchcase(text.lower(), pattern.lower()) for pattern in patterns)

    on_devices = ("sub!", "Ae=1*1*0.07*0.90", "c=74.620f", "C=74.832f", "r=1m", "layer=M1")
    names_of_devices = (
        "dant",
        "diodevdd_2kv",
        "diodevss_4kv",
        "nmoscl_2",
        "scr1",
        "npn13G2",
        "rfpmosHV",
    )
    assert all(map(is_remark, (*on_devices, *names_of_devices)))
    names_of_pins = ("VDD", "VSS", "PAD", "A", "Q_N", "TIE", "PLUS", "MINUS", "sub", "nmos_gate")
    assert not any(map(is_remark, names_of_pins))


def test_measured_gain_of_open130(open130: Technology) -> None:
    """Measured over 14 devices: 0.87 to 1.97 at 27 C, x1.41 to x2.03 from 25 to 125 C."""
    pnp = open130.transistors.vertical_pnp
    low, _, high = members(pnp.beta)
    assert (low, high) == (0.87, 1.97)
    exponent = pnp.beta_temperature_exponent
    ratio = (125.0 + 273.15) / (25.0 + 273.15)
    assert exponent.low is not None
    assert exponent.high is not None
    assert math.isclose(ratio**exponent.low, 1.41, rel_tol=0.005)
    assert math.isclose(ratio**exponent.high, 2.03, rel_tol=0.005)


def test_layers_of_open130(open130: Technology) -> None:
    """Layer table of the layout rules, revision 0.4."""
    drawn = {
        "active": "1/0",
        "poly": "5/0",
        "contact": "6/0",
        "nplus_drawn": "7/0",
        "nplus_block": "7/21",
        "metal1": "8/0",
        "passivation": "9/0",
        "pplus": "14/0",
        "salicide_block": "28/0",
        "nwell": "31/0",
        "buried_drawn": "32/0",
        "buried_block": "32/21",
        "substrate_recognition": "40/0",
        "pad_recognition": "41/0",
        "thick_oxide": "44/0",
        "pwell_drawn": "46/0",
        "pwell_block": "46/21",
        "esd_recognition": "99/30",
        "top_metal2": "134/0",
        "boundary": "189/4",
    }
    assert {name: open130.layers[name].gds[0] for name in drawn} == drawn
    assert open130.labels.layers == ("63/0",)


POINTS = {
    # name: drawn layers over the point, roles it has; layout rules revision 0.4, section 4.2
    "bare field": (set(), {"pwell"}),
    "n-well": ({"nwell"}, {"nwell"}),
    "p-well block": ({"pwell_block"}, set()),
    "p-well drawn over a block": ({"pwell_block", "pwell_drawn"}, {"pwell"}),
    "n-well tie": ({"active", "nwell"}, {"nwell", "well_tap"}),
    "n-well tie under a gate": ({"active", "nwell", "poly"}, {"nwell", "well_tap"}),
    "no tie where n+ is blocked": ({"active", "nwell", "nplus_block"}, {"nwell"}),
    "substrate tie": ({"active", "pplus"}, {"pwell", "substrate_tap"}),
    "substrate tie under a gate": ({"active", "pplus", "poly"}, {"pwell", "substrate_tap"}),
    "no tie without a p-well": ({"active", "pplus", "pwell_block"}, set()),
    "p+ source": ({"active", "pplus", "nwell"}, {"nwell", "p_diffusion_in_nwell"}),
    "p gate": ({"active", "pplus", "nwell", "poly"}, {"nwell"}),
    "n+ source": ({"active"}, {"pwell", "n_diffusion_outside_nwell"}),
    "n gate": ({"active", "poly"}, {"pwell"}),
    "n+ drawn in p+": (
        {"active", "pplus", "nplus_drawn"},
        {"pwell", "substrate_tap", "n_diffusion_outside_nwell"},
    ),
}


def covered(technology: Technology, text: str, drawn: set[str]) -> bool:
    """Value of an expression at a point, by Python's own grammar of and, or, not."""
    names = {}
    for name in names_in(parse_expression(text)):
        derived = technology.derived.get(name)
        names[name] = name in drawn if derived is None else covered(technology, derived, drawn)
    return bool(eval(text, {"__builtins__": {}}, names))


CONDUCTING = {
    # name: file, drawn layers over the point, conductors and resistors there
    "diffusion": ("larch180", {"active", "nplus"}, {"diffusion"}),
    "well tap": ("larch180", {"active", "nplus", "nwell"}, {"diffusion"}),
    "gate": ("larch180", {"active", "poly"}, {"poly"}),
    "poly resistor": ("larch180", {"poly", "resistor_marker"}, {"poly_resistor"}),
    "poly resistor over a diffusion": (
        "larch180",
        {"active", "poly", "resistor_marker"},
        {"poly_resistor"},
    ),
    "diffusion resistor": ("larch180", {"active", "resistor_marker"}, {"diffusion_resistor"}),
    "well resistor": ("larch180", {"nwell", "well_resistor_marker"}, {"well_resistor"}),
    "its head": (
        "larch180",
        {"nwell", "well_resistor_marker", "active", "nplus"},
        {"well_resistor", "diffusion"},
    ),
    "marker over nothing": ("larch180", {"resistor_marker", "well_resistor_marker"}, set()),
    "metal under a pad": ("larch180", {"metal4", "pad"}, {"metal4"}),
    "open gate": ("open130", {"active", "poly"}, {"poly"}),
    "head of rsil": ("open130", {"poly"}, {"poly"}),
    "rsil": ("open130", {"poly_resistor", "resistor_recognition"}, {"rsil"}),
    "rppd": ("open130", {"poly_resistor", "salicide_block", "pplus"}, {"rppd"}),
    "rhigh": (
        "open130",
        {"poly_resistor", "salicide_block", "pplus", "nplus_drawn"},
        {"rhigh"},
    ),
    "body drawn on poly too": ("open130", {"poly", "poly_resistor"}, {"rsil"}),
    "blocked salicide alone": ("open130", {"poly", "salicide_block"}, {"poly"}),
    "top metal": ("open130", {"top_metal2", "passivation", "pad_recognition"}, {"top_metal2"}),
}


@pytest.mark.parametrize(("file", "drawn", "names"), CONDUCTING.values(), ids=CONDUCTING)
def test_what_conducts_where(file: str, drawn: set[str], names: set[str]) -> None:
    """Bodies of resistors part their conductor, so no point is in both; from the files' plan."""
    technology = load_technology(file).technology
    assert technology.conductors is not None
    shapes = {**technology.conductors.layers, **technology.conductors.resistors}
    assert {n for n, part in shapes.items() if covered(technology, part.shape, drawn)} == names


@pytest.mark.parametrize(("drawn", "roles"), POINTS.values(), ids=POINTS)
def test_derivations_of_open130(open130: Technology, drawn: set[str], roles: set[str]) -> None:
    flat = ("nwell", "pwell", "well_tap", "substrate_tap", "p_diffusion_in_nwell")
    found = {
        role
        for role in (*flat, "n_diffusion_outside_nwell")
        if covered(open130, getattr(open130.roles, role), drawn)
    }
    assert found == roles


def test_buried_layer_of_open130_needs_no_shape(open130: Technology) -> None:
    """n-well at least 3.0 um wide, grown by 1.0 um (layout rules, section 4.2)."""
    buried = parse_expression(open130.derived["buried"])
    assert set(names_in(buried)) == {"nwell", "buried_drawn", "buried_block"}
    assert reach_um(buried) == 4.0


def test_sheets_over_a_buried_layer_are_parallel(larch180: Technology, open130: Technology) -> None:
    """Two conducting sheets over each other: 1/R = 1/R_1 + 1/R_2 (any circuit text)."""
    for wells in (larch180.wells, open130.wells):
        assert wells.nwell_over_buried_sheet_resistance_ohm_sq is not None
        assert wells.buried_sheet_resistance_ohm_sq is not None
        both = wells.nwell_over_buried_sheet_resistance_ohm_sq.typical
        well = wells.nwell_sheet_resistance_ohm_sq.typical
        buried = wells.buried_sheet_resistance_ohm_sq.typical
        assert math.isclose(1 / both, 1 / well + 1 / buried, rel_tol=1e-9)


def test_larch180_demands_its_two_main_layers(larch180: Technology) -> None:
    assert [name for name, layer in larch180.layers.items() if layer.required] == [
        "nwell",
        "active",
    ]
    assert larch180.loop.supply_v == 1.8


@pytest.mark.parametrize("name", ["larch180", "open130"])
def test_numbers_are_commented(repository: Path, name: str) -> None:
    """A range is explained at most three lines above it."""
    lines = (repository / "techfiles" / f"{name}.yaml").read_text().splitlines()
    ranges = [i for i, line in enumerate(lines) if "low:" in line and "typical:" in line]
    assert ranges
    for index in ranges:
        assert any("#" in line for line in lines[index - 3 : index + 1]), lines[index]
