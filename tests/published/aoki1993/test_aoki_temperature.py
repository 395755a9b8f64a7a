"""Fall of the trigger current with temperature.

Source: T. Aoki, IEEE Transactions on Electron Devices 40(11), 2023, 1993: between 10 and
125 C the trigger current falls by about 1.0 %/C (p-well shunt) and 0.6 %/C (n-well shunt).
Accepted bands 0.7..1.2 and 0.4..0.8: no circuit values are published with these slopes.
Here the loop has the temperature laws of silicon only, nothing is fitted: saturation
current T^3 exp(-1.12 eV/kT), gains T^1.5 and T^1.7, resistances through the two values
500 -> 663.1 ohm and 300 -> 566.8 ohm from 25 to 125 C (mobility; Arora et al., IEEE T-ED 29,
292, 1982).
"""

from __future__ import annotations

import math

import pytest

from latchscan.pnpn.circuit import LoopCircuit, Transistor, one_resistance
from latchscan.pnpn.gain import saturation_current_at_temperature
from latchscan.pnpn.loop import trigger_substrate, trigger_well

ROOM_K = 298.15
HOT_K = 398.15


def circuit(temperature_k: float) -> LoopCircuit:
    ratio = temperature_k / ROOM_K

    def scaled(room: float, hot: float) -> float:
        return room * ratio ** (math.log(hot / room) / math.log(HOT_K / ROOM_K))

    def transistor(beta: float, exponent: float, reverse: float) -> Transistor:
        return Transistor(
            saturation_current_a=saturation_current_at_temperature(1e-16, temperature_k),
            beta=beta * ratio**exponent,
            reverse_beta=reverse,
        )

    return LoopCircuit(
        npn=transistor(5.0, 1.5, 1.0),
        pnp=transistor(20.0, 1.7, 0.1),
        well=one_resistance(scaled(500.0, 663.1)),
        substrate=one_resistance(scaled(300.0, 566.8)),
        supply_v=3.3,
        temperature_k=temperature_k,
    )


@pytest.mark.parametrize(
    ("trigger", "least", "most"), [(trigger_substrate, 0.7, 1.2), (trigger_well, 0.4, 0.8)]
)
def test_trigger_current_falls_with_temperature(trigger, least: float, most: float) -> None:
    cold, hot = (float(trigger(circuit(273.15 + c)).injected_a) for c in (10.0, 125.0))
    percent_per_degree = 100.0 * math.log(cold / hot) / 115.0
    assert least <= percent_per_degree <= most


@pytest.mark.parametrize(("trigger", "computed"), [(trigger_substrate, 0.91), (trigger_well, 0.57)])
def test_slopes_by_an_independent_script(trigger, computed: float) -> None:
    cold, hot = (float(trigger(circuit(273.15 + c)).injected_a) for c in (10.0, 125.0))
    assert 100.0 * math.log(cold / hot) / 115.0 == pytest.approx(computed, abs=0.02)
