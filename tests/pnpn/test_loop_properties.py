"""Properties every loop must have, on generated circuits."""

from __future__ import annotations

from typing import Any

import numpy as np
from hypothesis import given, settings
from hypothesis import strategies as st

from latchscan.pnpn.circuit import LoopCircuit, Shunt, Transistor, one_resistance
from latchscan.pnpn.loop import (
    loop_gain,
    loop_gain_ceiling,
    shunted_alphas,
    trigger_substrate,
    trigger_well,
)


def decades(low: float, high: float) -> st.SearchStrategy[float]:
    return st.floats(np.log10(low), np.log10(high)).map(lambda x: float(10.0**x))


VALUES = st.fixed_dictionaries(
    {
        "npn": decades(0.05, 50.0),
        "pnp": decades(0.5, 200.0),
        "well": decades(10.0, 1e5),
        "substrate": decades(10.0, 1e5),
        "well_share": st.floats(0.05, 1.0),
        "substrate_share": st.floats(0.05, 1.0),
        "saturation": decades(1e-18, 1e-14),
        "knee": decades(1e-5, 1.0),
        "supply": st.floats(1.5, 6.0),
    }
)


def circuit(values: dict[str, float], knee: float | None = None) -> LoopCircuit:
    knee_a = values["knee"] if knee is None else knee

    def transistor(beta: float, reverse: float) -> Transistor:
        return Transistor(
            saturation_current_a=values["saturation"],
            beta=beta,
            reverse_beta=reverse,
            knee_current_a=knee_a,
        )

    return LoopCircuit(
        npn=transistor(values["npn"], 1.0),
        pnp=transistor(values["pnp"], 0.1),
        well=Shunt(self_ohm=values["well"], transfer_ohm=values["well"] * values["well_share"]),
        substrate=Shunt(
            self_ohm=values["substrate"],
            transfer_ohm=values["substrate"] * values["substrate_share"],
        ),
        supply_v=values["supply"],
        temperature_k=300.15,
    )


def never_raised(before: Any, after: Any) -> bool:
    """No trigger current counts as an infinite one."""
    first, second = (np.nan_to_num(x, nan=np.inf) for x in (before, after))
    return bool(second <= first * (1.0 + 1e-7) + 1e-15)


@given(values=VALUES, npn_base=decades(1e-9, 1e-2), pnp_base=decades(1e-9, 1e-2))
def test_troutmans_criterion_is_unit_loop_gain(
    values: dict[str, float], npn_base: float, pnp_base: float
) -> None:
    # a* = a/(1 + r_e/R) as in Troutman 1986 and Hu 1984, written out here for one resistance
    loop = circuit(values | {"well_share": 1.0, "substrate_share": 1.0})
    vt = 1.380649e-23 * 300.15 / 1.602176634e-19
    total = 0.0
    for beta, ohm, base in (
        (values["npn"], values["substrate"], npn_base),
        (values["pnp"], values["well"], pnp_base),
    ):
        emitter_resistance = vt / ((beta + 1.0) * base)
        total += beta / (beta + 1.0) / (1.0 + emitter_resistance / ohm)
    gain = float(loop_gain(loop, npn_base, pnp_base))
    assert abs(float(sum(shunted_alphas(loop, npn_base, pnp_base))) - total) < 1e-12
    if abs(gain - 1.0) > 1e-9:
        assert (gain >= 1.0) == (total >= 1.0)


@given(values=VALUES)
@settings(max_examples=40)
def test_gain_at_the_fold_is_one(values: dict[str, float]) -> None:
    loop = circuit(values, knee=np.inf)
    fold = trigger_substrate(loop)
    # leakage, and a shared junction about to conduct, are no part of the linear statement
    carries_current = min(float(fold.pnp_base_a), float(fold.npn_base_a)) > 1e-10
    if carries_current and values["supply"] - fold.npn_v - fold.pnp_v > -0.2:
        gain = float(loop_gain(loop, fold.npn_base_a, fold.pnp_base_a))
        assert abs(gain - 1.0) < 2e-3


@given(values=VALUES)
@settings(max_examples=40)
def test_a_ceiling_below_one_never_fires(values: dict[str, float]) -> None:
    loop = circuit(values)
    if float(loop_gain_ceiling(loop)) < 1.0:
        assert np.isnan(trigger_substrate(loop).injected_a)
        assert np.isnan(trigger_well(loop).injected_a)


@given(
    values=VALUES,
    which=st.sampled_from(["npn", "pnp", "well", "substrate"]),
    factor=st.floats(1.0, 5.0),
)
@settings(max_examples=50)
def test_more_gain_or_resistance_never_raises_a_trigger(
    values: dict[str, float], which: str, factor: float
) -> None:
    before = circuit(values)
    after = circuit(values | {which: values[which] * factor})
    for trigger in (trigger_substrate, trigger_well):
        assert never_raised(trigger(before).injected_a, trigger(after).injected_a)


@given(values=VALUES)
@settings(max_examples=15)
def test_full_sharing_is_the_one_resistance_loop(values: dict[str, float]) -> None:
    two_port = circuit(values | {"well_share": 1.0, "substrate_share": 1.0})
    one_port = LoopCircuit(
        npn=two_port.npn,
        pnp=two_port.pnp,
        well=one_resistance(values["well"]),
        substrate=one_resistance(values["substrate"]),
        supply_v=two_port.supply_v,
        temperature_k=two_port.temperature_k,
    )
    np.testing.assert_array_equal(
        trigger_substrate(two_port).injected_a, trigger_substrate(one_port).injected_a
    )


@given(values=VALUES, share=st.floats(0.2, 0.99))
@settings(max_examples=40)
def test_weaker_coupling_never_lowers_a_trigger(values: dict[str, float], share: float) -> None:
    near = circuit(values)
    apart = circuit(
        values
        | {
            "well_share": values["well_share"] * share,
            "substrate_share": values["substrate_share"] * share,
        }
    )
    for trigger in (trigger_substrate, trigger_well):
        assert never_raised(trigger(apart).injected_a, trigger(near).injected_a)
