"""Gains and saturation currents against closed forms and published curves."""

from __future__ import annotations

import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy.optimize import brentq

from latchscan.constants import REFERENCE_TEMPERATURE_K
from latchscan.pnpn.gain import (
    base_transport_factor,
    current_gain,
    emitter_efficiency,
    gain_at_current,
    gain_at_temperature,
    lateral_npn_beta,
    saturation_current_at_temperature,
    vertical_pnp_beta,
)
from latchscan.technology.model import Technology


@pytest.mark.parametrize("ratio", [0.0, 0.01, 0.5, 1.0, 3.0])
def test_base_transport_is_the_hyperbolic_secant(ratio: float) -> None:
    # one-dimensional diffusion into a sink (Sze 1981, chapter 3; from memory)
    assert base_transport_factor(300.0 * ratio, 300.0) == pytest.approx(1 / math.cosh(ratio))


def test_base_transport_survives_a_base_of_ten_thousand_lengths() -> None:
    assert float(base_transport_factor(1.0e6, 100.0)) == 0.0


def test_secant_alone_gives_absurd_lateral_gains() -> None:
    # alpha/(1 - alpha) of sech(0.01) is 1/(0.01^2/2) = 2e4 to first order [derived]
    assert float(current_gain(base_transport_factor(3.0, 300.0))) == pytest.approx(2e4, rel=1e-3)


def test_emitter_efficiency_and_gain_are_gummel_numbers() -> None:
    # without recombination beta = G_E / G_B (Gummel and Poon 1970)
    assert float(current_gain(emitter_efficiency(2.0, 14.0))) == pytest.approx(7.0)


def test_alpha_of_one_stays_finite() -> None:
    assert math.isfinite(float(current_gain(1.0)))


@pytest.mark.parametrize("current_a", [1e-7, 1e-5, 1e-4, 1e-3, 1e-1])
def test_high_injection_is_gummel_and_poons_base_charge(current_a: float) -> None:
    # solve I_C = I_F / q_b, q_b = 1/2 + sqrt(1/4 + I_F / I_KF) numerically for I_F
    knee, beta = 1e-4, 30.0

    def excess(forward: float) -> float:
        return forward / (0.5 + math.sqrt(0.25 + forward / knee)) - current_a

    forward = brentq(excess, 0.0, 1e6, xtol=1e-18, rtol=1e-13)
    assert float(gain_at_current(beta, current_a, knee)) == pytest.approx(
        current_a / (forward / beta), rel=1e-9
    )


def test_temperature_laws_at_the_reference_change_nothing() -> None:
    assert float(gain_at_temperature(7.0, REFERENCE_TEMPERATURE_K, 1.7)) == 7.0
    assert float(saturation_current_at_temperature(1e-16, REFERENCE_TEMPERATURE_K)) == 1e-16


def test_hot_gain_is_inside_the_measured_band() -> None:
    # open 130 nm process, vertical PNP, 25 to 125 C: x1.41..2.03 for exponents 1.4..2.4
    for exponent in (1.4, 2.4):
        cold, hot = (gain_at_temperature(1.0, t, exponent) for t in (298.15, 398.15))
        assert 1.41 <= float(hot / cold) <= 2.03


def junction_v(current_a: float, temperature_k: float) -> float:
    saturation = float(saturation_current_at_temperature(1e-16, temperature_k))
    return 8.617333262e-5 * temperature_k * math.log(current_a / saturation)


@pytest.mark.parametrize("current_a", [1e-6, 1e-5, 1e-4])
def test_junction_voltage_falls_as_silicon_does(current_a: float) -> None:
    # V_BE at constant current falls 1.5..2.1 mV/K (device texts, from memory)
    slope = (junction_v(current_a, 398.15) - junction_v(current_a, 300.15)) / 98.0
    assert -2.1e-3 <= slope <= -1.5e-3


@pytest.mark.parametrize("current_a", [1e-8, 1e-3])
def test_junction_voltage_slope_is_the_laws_own(current_a: float) -> None:
    # differentiate V = V_T log(I/I_S), I_S ~ T^3 exp(-E_g/kT): (V - E_g/q - 3 V_T)/T [derived]
    t = 340.0
    slope = (junction_v(current_a, t + 0.01) - junction_v(current_a, t - 0.01)) / 0.02
    expected = (junction_v(current_a, t) - 1.12 - 3 * 8.617333262e-5 * t) / t
    assert slope == pytest.approx(expected, rel=1e-5)


def test_lateral_gain_by_hand(technology: Technology) -> None:
    # alpha = 0.99 0.8 sech(30/300) = 0.792/1.0050042 = 0.788057 -> beta 3.71825
    npn = technology.transistors.lateral_npn
    beta = lateral_npn_beta(30.0, npn, REFERENCE_TEMPERATURE_K)
    assert float(beta) == pytest.approx(3.71825, rel=1e-5)


@given(width=st.floats(0.0, 1e3), wider=st.floats(0.0, 1e3))
def test_a_wider_base_never_raises_the_gain(
    technology: Technology, width: float, wider: float
) -> None:
    npn = technology.transistors.lateral_npn
    narrow, wide = lateral_npn_beta(np.array([width, width + wider]), npn, 398.15)
    assert wide <= narrow


def test_vertical_gain_by_region(technology: Technology) -> None:
    pnp = technology.transistors.vertical_pnp
    beta = vertical_pnp_beta(np.array([False, True]), pnp, REFERENCE_TEMPERATURE_K)
    assert beta.tolist() == [20.0, 2.0]
    one_gain = pnp.model_copy(update={"beta_over_buried": None})
    beta = vertical_pnp_beta(np.array([False, True]), one_gain, REFERENCE_TEMPERATURE_K)
    assert beta.tolist() == [20.0, 20.0]
