"""The typed values themselves: bare numbers, ranges, conversions, immutability."""

from __future__ import annotations

import pytest
from pydantic import ValidationError

from latchscan.technology.load import load_technology
from latchscan.technology.model import Quantity, SubstrateLayer


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
