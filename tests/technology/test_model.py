"""The typed values themselves: bare numbers, ranges, conversions, immutability."""

from __future__ import annotations

import pytest
from pydantic import ValidationError

from latchscan.technology.load import load_technology
from latchscan.technology.model import Quantity, Rules, SubstrateLayer


def test_a_bare_number_is_a_typical_value() -> None:
    assert Quantity.model_validate(3) == Quantity(typical=3.0)
    assert Quantity.model_validate({"typical": 3.0}) == Quantity(typical=3.0)


@pytest.mark.parametrize("value", [True, "3", None, float("inf"), float("nan"), 10**400, [3.0]])
def test_what_is_no_number(value: object) -> None:
    with pytest.raises(ValidationError):
        Quantity.model_validate(value)


@pytest.mark.parametrize(
    "value",
    [
        {"low": 2.0, "typical": 1.0},
        {"typical": 1.0, "high": 0.5},
        {"typical": 1.0, "assumption": True},
        {"typical": 1.0, "low": 0.5, "assumption": True},
        {"low": 1.0, "high": 2.0},
    ],
)
def test_ranges_that_are_none(value: object) -> None:
    with pytest.raises(ValidationError):
        Quantity.model_validate(value)


def test_ends_may_meet_the_middle() -> None:
    value = Quantity.model_validate({"low": 1.0, "typical": 1.0, "high": 1.0, "assumption": True})
    assert (value.low, value.high) == (1.0, 1.0)


def test_resistivity_in_inside_units() -> None:
    """10 ohm cm = 0.1 ohm m = 1e5 ohm um (SI prefixes)."""
    layer = SubstrateLayer.model_validate({"resistivity_ohm_cm": 10.0, "thickness_um": 300.0})
    assert layer.resistivity_ohm_um == 1.0e5


def test_values_are_frozen() -> None:
    technology = load_technology("larch180").technology
    with pytest.raises(ValidationError, match="frozen"):
        technology.loop.supply_v = 3.3
    with pytest.raises(ValidationError, match="frozen"):
        technology.transistors.vertical_pnp.beta.typical = 3.0


def test_quantities_are_found_inside_mappings_too() -> None:
    found = dict(load_technology("larch180").technology.quantities())
    assert found["conductors.layers.metal1.sheet_resistance_ohm_sq"].typical == 0.08
    assert found["conductors.connections.via3.resistance_ohm"].typical == 3.0
    assert found["conductors.resistors.poly_resistor.contact_resistance_ohm"].typical == 9.0
    assert found["substrate.layers[0].thickness_um"].typical == 300.0
    conductors = [key for key in found if key.startswith("conductors.")]
    assert len(conductors) == 6 + 4 + 2 * 3  # Conductors, connections, resistors; by hand.


def test_conductors_keep_the_order_of_the_file() -> None:
    """From the silicon upwards: the uppermost takes a general text."""
    conductors = load_technology("larch180").technology.conductors
    assert conductors is not None
    names = ("diffusion", "poly", "metal1", "metal2", "metal3", "metal4")
    assert tuple(conductors.layers) == names
    assert [conductor.kind for conductor in conductors.layers.values()] == [
        "diffusion",
        "poly",
        *["metal"] * 4,
    ]


LEAST_RULES = {
    "tap-distance": {"p_diffusion_max_um": 20.0, "n_diffusion_max_um": 20.0},
    "tap-reach": {"max_um": 6.0},
    "injector-spacing": {"min_um": 15.0},
    "well-resistance": {"max_ohm": 2000.0},
    "loop-gain": {"max_gain": 1.0},
}
DEFAULTS = {
    # severity and limits that a file leaves out; common practice, no published source
    "net-names": ("watch", {}),
    "tie-net": ("fail", {}),
    "tie-conflict": ("fail", {}),
    "tie-resistance": ("fail", {"max_ohm": 50.0}),
    "forward-bias": ("fail", {"max_v": 0.0}),
    "well-spacing": ("watch", {"min_um": 3.0}),
    "isolation-gap": ("fail", {}),
    "ring-gap": ("fail", {"max_um": 0.0}),
    "ring-width": ("watch", {"majority_min_um": 0.5, "minority_min_um": 0.5}),
    "ring-contacts": ("watch", {"min_share": 0.5}),
    "ring-net": ("fail", {}),
    "ring-missing": ("watch", {"n_injector": ("majority",), "p_injector": ("majority",)}),
    "double-ring": ("watch", {"driver_within_um": 50.0, "core_within_um": 50.0}),
}


@pytest.mark.parametrize("name", DEFAULTS)
def test_limits_that_a_file_may_leave_out(name: str) -> None:
    rule = getattr(Rules.model_validate(LEAST_RULES), name.replace("-", "_"))
    severity, limits = DEFAULTS[name]
    assert rule.model_dump() == {"source": "", "severity": severity, **limits}


def test_rings_may_be_asked_of_nobody() -> None:
    rules = Rules.model_validate({**LEAST_RULES, "ring-missing": {"n_injector": []}})
    assert rules.ring_missing.n_injector == ()
    assert rules.ring_missing.p_injector == ("majority",)
