"""The shipped technologies say what they should.

Source of the numbers of open130: the published layout rules (revision 0.4) and process
specification (revision 1.2) of the open-source PDK SG13G2, as listed beside each check.
"""

from __future__ import annotations

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
    assert len(found) == 6 + 4 + 5 + 7  # wells, substrate, the two transistors; counted by hand
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
    assert open130.labels.layers == ("63/0", "8/25")


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
