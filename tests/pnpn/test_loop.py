"""Firing and holding against values computed by an independent script.

The acceptance values carry four digits; a value passes within half a unit of the last.  Some
were rounded twice (0.262648 by way of 0.26265), hence the few percent of a unit beyond.
"""

from __future__ import annotations

import math
from typing import Any

import numpy as np
import pytest
from scipy.optimize import brentq, minimize_scalar

from latchscan.errors import ConvergenceError
from latchscan.pnpn.circuit import LoopCircuit, Shunt, Transistor, one_resistance
from latchscan.pnpn.holding import holding_current_a, holding_current_first_order, holding_point
from latchscan.pnpn.loop import (
    first_order_triggers,
    loop_gain,
    loop_gain_ceiling,
    shunted_alphas,
    trigger_substrate,
    trigger_well,
)

SET_A: dict[str, Any] = {
    "bn": 5.0,
    "bp": 20.0,
    "rw": 500.0,
    "rs": 300.0,
    "i_s": 1e-16,
    "brn": 1.0,
    "brp": 0.1,
    "vdd": 3.3,
    "t": 300.15,
    "knee": math.inf,
}
SET_B = SET_A | {"bn": 2.0, "bp": 1.7, "rw": 5e3, "rs": 1e3, "i_s": 1e-17, "vdd": 1.8}
# betas ~ T^1.5 and T^1.7 from 25 C; saturation current 1e-16 A at 25 C, T^3 exp(-1.12 eV/kT)
ROOM = SET_A | {"t": 298.15}
HOT_IS = (
    1e-16 * (398.15 / 298.15) ** 3 * math.exp(1.12 / 8.617333262e-5 * (1 / 298.15 - 1 / 398.15))
)
HOT = SET_A | {"t": 398.15, "bn": 7.716, "bp": 32.70, "rw": 663.1, "rs": 566.8, "i_s": HOT_IS}


def circuit(values: dict[str, Any]) -> LoopCircuit:
    def transistor(which: str) -> Transistor:
        return Transistor(
            saturation_current_a=values["i_s"],
            beta=values["b" + which],
            reverse_beta=values["br" + which],
            knee_current_a=values["knee"],
        )

    return LoopCircuit(
        npn=transistor("n"),
        pnp=transistor("p"),
        well=one_resistance(values["rw"]),
        substrate=one_resistance(values["rs"]),
        supply_v=values["vdd"],
        temperature_k=values["t"],
    )


def four_digits(expected: float) -> Any:
    """Match a value printed with four digits."""
    last = 10.0 ** (math.floor(math.log10(expected)) - 3)
    return pytest.approx(expected, abs=0.55 * last, rel=0)


def scaled(factor: float) -> dict[str, Any]:
    return SET_A | {"rw": 500.0 * factor, "rs": 300.0 * factor}


# substrate trigger, well trigger, holding current [A], holding voltage [V]
ACCEPTANCE = {
    "A": (SET_A, 2.857e-3, 1.689e-3, 4.734e-3, 0.8998),
    "A bn 0.5": (SET_A | {"bn": 0.5}, 5.382e-3, 1.690e-3, 8.566e-3, 0.9257),
    "A bn 0.1": (SET_A | {"bn": 0.1}, 17.61e-3, 1.697e-3, 43.93e-3, 0.9893),
    "A bn 0.0505": (SET_A | {"bn": 0.0505}, 37.14e-3, 1.874e-3, 4.485, 1.212),
    "A R x10": (scaled(10), 0.2627e-3, 0.1555e-3, 0.4367e-3, 0.8383),
    "A R x100": (scaled(100), 0.02395e-3, 0.01420e-3, 0.03998e-3, 0.7765),
    "A R x0.01": (scaled(0.01), 331.6e-3, 195.6e-3, 546.6e-3, 1.0226),
    "B": (SET_B, 0.8495e-3, 0.5821e-3, 2.229e-3, 0.9575),
}


@pytest.mark.parametrize("case", ACCEPTANCE)
def test_acceptance_sets(case: str) -> None:
    values, substrate, well, holding, supply = ACCEPTANCE[case]
    loop = circuit(values)
    assert float(trigger_substrate(loop).injected_a) == four_digits(substrate)
    assert float(trigger_well(loop).injected_a) == four_digits(well)
    assert holding_current_a(loop) == four_digits(holding)
    assert holding_point(loop).supply_v == four_digits(supply)


def test_current_at_the_holding_voltage() -> None:
    assert holding_point(circuit(SET_A)).current_a == four_digits(7.219e-3)


@pytest.mark.parametrize(
    ("values", "substrate", "well", "supply"),
    [(ROOM, 2.837e-3, 1.677e-3, 0.8937), (HOT, 1.156e-3, 0.943e-3, 0.7617)],
)
def test_hot_scan(values: dict[str, Any], substrate: float, well: float, supply: float) -> None:
    loop = circuit(values)
    assert float(trigger_substrate(loop).injected_a) == four_digits(substrate)
    assert float(trigger_well(loop).injected_a) == pytest.approx(well, abs=0.6e-6)
    assert holding_point(loop).supply_v == four_digits(supply)


@pytest.mark.parametrize(
    "values",
    [SET_A | {"bn": 0.05}, SET_A | {"bn": 0.04}, SET_B | {"bn": 0.5}],
)
def test_no_latched_state_is_nan(values: dict[str, Any]) -> None:
    loop = circuit(values)
    assert float(loop_gain_ceiling(loop)) <= 1.0
    assert math.isnan(float(trigger_substrate(loop).injected_a))
    assert math.isnan(float(trigger_well(loop).injected_a))
    assert math.isnan(holding_current_a(loop))
    assert math.isnan(holding_point(loop).supply_v)


def test_loop_gain_at_the_fold_is_one() -> None:
    loop = circuit(SET_A)
    for fold in (trigger_substrate(loop), trigger_well(loop)):
        assert float(loop_gain(loop, fold.npn_base_a, fold.pnp_base_a)) == pytest.approx(
            1.0, abs=5e-5
        )


def test_shunted_alphas_at_the_fold() -> None:
    loop = circuit(SET_A)
    fold = trigger_substrate(loop)
    npn, pnp = shunted_alphas(loop, fold.npn_base_a, fold.pnp_base_a)
    assert (float(npn), float(pnp)) == (four_digits(0.7906), four_digits(0.2094))


def test_fold_of_a_two_port_loop_has_gain_one() -> None:
    loop = circuit(SET_A)
    loop = LoopCircuit(
        npn=loop.npn,
        pnp=loop.pnp,
        well=Shunt(self_ohm=800.0, transfer_ohm=150.0),
        substrate=Shunt(self_ohm=400.0, transfer_ohm=90.0),
        supply_v=3.3,
        temperature_k=300.15,
    )
    for fold in (trigger_substrate(loop), trigger_well(loop)):
        gain = float(loop_gain(loop, fold.npn_base_a, fold.pnp_base_a))
        assert gain == pytest.approx(1.0, abs=1e-4)


def reference_injection(values: dict[str, Any], v: float) -> float:
    """Its(VS) from the equations as published, the well's voltage by bracketing.

    One resistance a body; Gummel and Poon's charge for the two forward currents.
    """
    vt = 1.380649e-23 * values["t"] / 1.602176634e-19
    i_s, bn, bp = values["i_s"], values["bn"], values["bp"]

    def currents(vw: float) -> tuple[float, float, float, float]:
        j = math.exp((v - vw) / vt)
        fe, fp = math.exp(v / vt), math.exp((values["vdd"] - vw) / vt)
        qn, qp = (0.5 + math.sqrt(0.25 + i_s * (f - 1) / values["knee"]) for f in (fe, fp))
        icn = i_s * (fe - j) / qn - i_s / values["brn"] * (j - 1)
        ibn = i_s / bn * (fe - 1) + i_s / values["brn"] * (j - 1)
        icp = i_s * (fp - j) / qp - i_s / values["brp"] * (j - 1)
        ibp = i_s / bp * (fp - 1) + i_s / values["brp"] * (j - 1)
        return icn, ibn, icp, ibp

    def well(vw: float) -> float:
        icn, _, _, ibp = currents(vw)
        return (values["vdd"] - vw) / values["rw"] + ibp - icn

    low = max(v, values["vdd"]) - 1.2
    vw = brentq(well, low, values["vdd"] + 0.5, xtol=1e-15, rtol=1e-14)
    _, ibn, icp, _ = currents(vw)
    return ibn + v / values["rs"] - icp


@pytest.mark.parametrize(
    "values",
    [SET_A, scaled(10), SET_A | {"knee": 1e-2}, SET_A | {"knee": 1e-3}],
)
def test_fold_by_bracketing_the_published_equations(values: dict[str, Any]) -> None:
    peak = minimize_scalar(
        lambda v: -reference_injection(values, v),
        bounds=(0.5, 0.815),
        method="bounded",
        options={"xatol": 1e-9},
    )
    fold = trigger_substrate(circuit(values))
    assert float(fold.injected_a) == pytest.approx(-peak.fun, rel=1e-8)
    assert 0.51 < peak.x < 0.814


def test_high_injection_raises_the_trigger_until_nothing_fires() -> None:
    currents = [
        float(trigger_substrate(circuit(SET_A | {"knee": knee})).injected_a)
        for knee in (math.inf, 1e-2, 1e-3, 1e-4)
    ]
    assert currents == sorted(currents)
    assert math.isnan(
        float(trigger_substrate(circuit(SET_A | {"bn": 0.2, "knee": 1e-5})).injected_a)
    )


@pytest.mark.parametrize("values", [SET_A, ROOM, HOT, SET_B, scaled(10), SET_A | {"bn": 0.5}])
def test_first_order_is_within_twelve_percent(values: dict[str, Any]) -> None:
    # the band stated for V_BE from the junction law at the current and temperature
    loop = circuit(values)
    substrate, well = first_order_triggers(loop)
    assert float(substrate) == pytest.approx(float(trigger_substrate(loop).injected_a), rel=0.12)
    assert float(well) == pytest.approx(float(trigger_well(loop).injected_a), rel=0.12)


def test_holding_formula_by_hand() -> None:
    # [20 6 0.8/500 + 5 21 0.8/300] / 99 = (0.192 + 0.28) / 99
    formula = holding_current_first_order(circuit(SET_A), 0.8, 0.8)
    assert float(formula) == pytest.approx(0.472 / 99)


def test_holding_current_is_the_formula_at_its_own_junction_voltages() -> None:
    # both transistors active and no saturation: the formula is exact [derived]
    vt = 1.380649e-23 * 300.15 / 1.602176634e-19
    npn_v = pnp_v = 0.8
    for _ in range(50):
        npn_a = (100 * pnp_v / 500 + 5 * npn_v / 300) / 99
        pnp_a = (100 * npn_v / 300 + 20 * pnp_v / 500) / 99
        npn_v, pnp_v = vt * math.log1p(npn_a / 1e-16), vt * math.log1p(pnp_a / 1e-16)
    loop = circuit(SET_A)
    formula = float(holding_current_first_order(loop, npn_v, pnp_v))
    assert formula == pytest.approx(npn_a + pnp_a, rel=1e-12)
    assert holding_current_a(loop) == pytest.approx(formula, rel=1e-6)


def test_a_supply_below_the_holding_voltage_holds_nothing() -> None:
    assert math.isnan(holding_current_a(circuit(SET_A | {"vdd": 0.89})))
    assert holding_current_a(circuit(SET_A | {"vdd": 0.91})) > 4.734e-3


def test_series_resistance_turns_off_earlier() -> None:
    loop = circuit(SET_A)
    bare, fed = holding_point(loop), holding_point(loop, series_ohm=100.0)
    # the least of V + R I lies between both currents and above V_H + R I_H [derived]
    assert holding_current_a(loop) < fed.current_a < bare.current_a
    assert bare.supply_v + 100.0 * holding_current_a(loop) < fed.supply_v
    assert fed.supply_v < bare.supply_v + 100.0 * bare.current_a


def test_untied_bodies_are_the_limit_of_large_resistances() -> None:
    for key, other in (("rw", "rs"), ("rs", "rw")):
        untied = circuit(SET_A | {key: math.inf})
        large = circuit(SET_A | {key: 1e9})
        for trigger in (trigger_substrate, trigger_well):
            limit = float(trigger(untied).injected_a)
            assert limit > 0.0, other
            assert limit == pytest.approx(float(trigger(large).injected_a), rel=1e-3)
        assert holding_point(untied).supply_v == pytest.approx(
            holding_point(large).supply_v, abs=1e-5
        )


def test_a_loop_without_any_shunt_fires_by_itself() -> None:
    untied = circuit(SET_A | {"rw": math.inf, "rs": math.inf})
    assert float(trigger_substrate(untied).injected_a) == 0.0
    assert float(trigger_well(untied).injected_a) == 0.0
    assert float(loop_gain(untied, 1e-9, 1e-9)) == pytest.approx(100.0)


def test_no_coupling_never_fires() -> None:
    loop = circuit(SET_A)
    apart = LoopCircuit(
        npn=loop.npn,
        pnp=loop.pnp,
        well=Shunt(self_ohm=500.0, transfer_ohm=0.0),
        substrate=loop.substrate,
        supply_v=3.3,
        temperature_k=300.15,
    )
    assert float(loop_gain_ceiling(apart)) == 0.0
    assert math.isnan(float(trigger_substrate(apart).injected_a))


@pytest.mark.parametrize("change", [{"vdd": 50.0}, {"t": 218.15, "i_s": 1e-24}, {"t": 473.15}])
def test_exponentials_do_not_overflow(change: dict[str, Any]) -> None:
    loop = circuit(SET_A | change)
    assert 0.0 < float(trigger_substrate(loop).injected_a) < 1.0
    assert 0.0 < holding_point(loop).supply_v < 2.0


@pytest.mark.parametrize("change", [{"bn": -1.0}, {"rs": math.nan}, {"t": 0.0}, {"i_s": 0.0}])
def test_impossible_circuits_are_refused(change: dict[str, Any]) -> None:
    with pytest.raises(ConvergenceError, match="expected a positive number"):
        circuit(SET_A | change)


def test_holding_takes_one_circuit() -> None:
    with pytest.raises(ConvergenceError, match="one circuit"):
        holding_point(circuit(SET_A | {"bn": np.array([1.0, 2.0])}))


def test_columns_equal_single_circuits() -> None:
    cases = [values for values, *_ in ACCEPTANCE.values()] + [HOT, SET_B | {"bn": 0.5}]
    columns = circuit({key: np.array([case[key] for case in cases]) for key in SET_A})
    for trigger in (trigger_substrate, trigger_well):
        single = [float(trigger(circuit(case)).injected_a) for case in cases]
        np.testing.assert_allclose(trigger(columns).injected_a, single, rtol=1e-12)
