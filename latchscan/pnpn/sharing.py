"""How a pin's forced current divides among the diffusions that it reaches.

In: injectors with their areas and series resistances.  Out: the same with their shares.  Every
injector is a junction in series with a resistance, and all of a pin and polarity are parallel:
one voltage carries the whole current.  With no resistance the shares are those of the areas.

The voltage across a junction and a resistance in series has the Lambert function's form; the
Wright omega function takes the exponent without overflow (R. M. Corless and D. J. Jeffrey,
"The Wright omega function", 2002).
"""

from __future__ import annotations

from dataclasses import replace

import numpy as np
from scipy.optimize import brentq
from scipy.special import wrightomega

from latchscan.constants import BOLTZMANN_J_PER_K, ELEMENTARY_CHARGE_C
from latchscan.layout.connections import ABOVE_SUPPLY, BY_PIN, Injectors, Pins
from latchscan.layout.model import Floats, frozen
from latchscan.pnpn.gain import saturation_current_at_temperature
from latchscan.technology.model import Technology


def share_currents(
    injectors: Injectors, pins: Pins, technology: Technology, temperature_k: float
) -> Injectors:
    """The injectors with the share that each takes of its pin's test current.

    Parameters
    ----------
    injectors
        Rows with area [um2] and series resistance [ohm]; a resistance that is not known counts
        as none, which gives that row the largest share it can have.
    pins
        Their test currents [A].
    technology
        Saturation currents of both junctions.
    temperature_k
        Temperature [K].
    """
    transistors = technology.transistors
    density = np.where(
        injectors.polarity == ABOVE_SUPPLY,
        transistors.vertical_pnp.saturation_current_density_a_um2.typical,
        transistors.lateral_npn.saturation_current_density_a_um2.typical,
    )
    saturation_a = saturation_current_at_temperature(density * injectors.area_um2, temperature_k)
    share = np.full(len(injectors.pin), np.nan)
    driven = np.flatnonzero(injectors.reason == BY_PIN)
    groups = injectors.pin[driven] * 2 + injectors.polarity[driven]
    for group in np.unique(groups).tolist():
        rows = driven[groups == group]
        current_a = float(pins.test_current_a[group // 2])
        if current_a > 0.0:
            share[rows] = junction_shares(
                saturation_a[rows],
                np.nan_to_num(injectors.resistance_ohm[rows], nan=0.0),
                current_a,
                temperature_k,
            )
    return replace(injectors, share=frozen(share))


def junction_shares(
    saturation_a: Floats, resistance_ohm: Floats, current_a: float, temperature_k: float
) -> Floats:
    """Shares of parallel junctions with series resistances.

    Parameters
    ----------
    saturation_a
        (n,) saturation currents, above 0 [A].
    resistance_ohm
        (n,) series resistances, at least 0 [ohm].
    current_a
        The whole current, above 0 [A].
    temperature_k
        Temperature [K].

    Returns
    -------
    Floats
        (n,) shares that add up to 1.

    Notes
    -----
    ``V = V_T ln(I/I_S) + I R`` for each; where R > 0, with omega the Wright function,
    ``I = (V_T/R) omega(V/V_T + ln(I_S R/V_T))``.

    Examples
    --------
    >>> junction_shares(np.array([1e-16, 3e-16]), np.zeros(2), 0.1, 300.0).round(6).tolist()
    [0.25, 0.75]
    """
    thermal_v = BOLTZMANN_J_PER_K * temperature_k / ELEMENTARY_CHARGE_C
    bare = resistance_ohm <= 0.0
    if bare.all():
        return np.asarray(saturation_a / saturation_a.sum(), dtype=np.float64)
    held = np.where(bare, 1.0, resistance_ohm)
    offset = np.log(saturation_a * held / thermal_v)

    def currents_a(voltage_v: float) -> Floats:
        direct = saturation_a * np.exp(np.where(bare, voltage_v / thermal_v, 0.0))
        through = thermal_v / held * np.real(wrightomega(voltage_v / thermal_v + offset))
        return np.asarray(np.where(bare, direct, through), dtype=np.float64)

    # all without resistance would need less voltage, the easiest one alone more
    low_v = thermal_v * float(np.log(current_a / saturation_a.sum()))
    alone_v = thermal_v * np.log(current_a / saturation_a) + current_a * resistance_ohm
    high_v = float(alone_v.min())
    slack_v = 1e-9 * max(1.0, abs(low_v), abs(high_v))
    voltage_v = brentq(
        lambda v: float(currents_a(v).sum()) - current_a, low_v - slack_v, high_v + slack_v
    )
    found = currents_a(voltage_v)
    return np.asarray(found / found.sum(), dtype=np.float64)
