"""Division of a pin's current among junctions, against circuit laws."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.constants import elementary_charge, k

from latchscan.pnpn.sharing import junction_shares

CURRENT_A = 0.1
TEMPERATURE_K = 398.15


@settings(deadline=None)
@given(st.lists(st.floats(1e-18, 1e-12), min_size=1, max_size=6))
def test_without_resistance_areas_decide(saturation: list[float]) -> None:
    # Source: Shockley's diode law; equal voltages give currents as the saturation currents
    given_a = np.array(saturation)
    found = junction_shares(given_a, np.zeros(len(given_a)), CURRENT_A, TEMPERATURE_K)
    assert found == pytest.approx(given_a / given_a.sum())


@settings(deadline=None)
@given(
    st.lists(
        st.tuples(st.floats(1e-18, 1e-12), st.sampled_from([0.0, 1e-3, 1.0, 50.0, 2e3, 1e6])),
        min_size=1,
        max_size=6,
    ),
    st.floats(1e-6, 1.0),
)
def test_all_branches_have_one_voltage(
    branches: list[tuple[float, float]], current_a: float
) -> None:
    # Source: Kirchhoff's laws with Shockley's diode law, V = V_T ln(I/I_S) + I R in each branch
    saturation, resistance = (np.array(column) for column in zip(*branches, strict=True))
    found = junction_shares(saturation, resistance, current_a, TEMPERATURE_K)
    assert found.sum() == pytest.approx(1.0)
    thermal_v = k * TEMPERATURE_K / elementary_charge
    carrying = found > 1e-12
    amps = found[carrying] * current_a
    volts = thermal_v * np.log(amps / saturation[carrying]) + amps * resistance[carrying]
    assert np.ptp(volts) < 1e-6 * max(1.0, float(np.abs(volts).max()))


def test_a_series_resistor_keeps_current_away() -> None:
    # Source: two equal junctions, one behind 100 ohm: at 0.1 A the difference of the currents is
    # V_T ln(I1/I2) = I2 100 ohm; by hand at 398.15 K (V_T = 34.31 mV): I2 = 1.448 mA
    found = junction_shares(np.array([1e-16, 1e-16]), np.array([0.0, 100.0]), 0.1, TEMPERATURE_K)
    second_a = found[1] * 0.1
    thermal_v = k * TEMPERATURE_K / elementary_charge
    assert thermal_v * np.log((0.1 - second_a) / second_a) == pytest.approx(second_a * 100.0)
    assert second_a == pytest.approx(1.448e-3, rel=1e-3)
