"""Silicon: doping from resistivity, mobility from doping and temperature.

In go numbers of the technology file, out come doping densities [cm^-3], mobilities
[cm^2/(V s)] and the factors by which sheet resistances and resistivities grow between the
temperature at which the technology gives them and the temperature of a scan.

References
----------
ASTM F723-99 (also SEMI MF723), *Standard Practice for Conversion Between Resistivity and
Dopant Density for Boron-Doped, Phosphorus-Doped, and Arsenic-Doped Silicon*.
N. D. Arora, J. R. Hauser, D. J. Roulston, "Electron and hole mobilities in silicon as a
function of concentration and temperature", IEEE Trans. Electron Devices 29, 292-295, 1982.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

from latchscan.constants import REFERENCE_TEMPERATURE_K
from latchscan.technology.model import Technology

_ARORA_REFERENCE_K = 300.0


@dataclass(frozen=True, slots=True, kw_only=True)
class Carrier:
    """Constants of Arora's mobility fit for one carrier at 300 K."""

    floor_cm2_vs: float
    lattice_cm2_vs: float
    lattice_exponent: float
    doping_cm3: float


ELECTRONS = Carrier(
    floor_cm2_vs=88.0, lattice_cm2_vs=7.4e8, lattice_exponent=-2.33, doping_cm3=1.26e17
)
HOLES = Carrier(
    floor_cm2_vs=54.3, lattice_cm2_vs=1.36e8, lattice_exponent=-2.23, doping_cm3=2.35e17
)


def boron_doping_cm3(resistivity_ohm_cm: float) -> float:
    """Boron density of p-type silicon at 23 C.

    Parameters
    ----------
    resistivity_ohm_cm
        Resistivity [ohm cm], above 0.

    Returns
    -------
    float
        Dopant density [cm^-3].

    Notes
    -----
    ``N = 1.330e16 / r + 1.082e17 / (r (1 + (54.56 r)^1.105))``.

    References
    ----------
    ASTM F723, resistivity to dopant density, boron.

    Examples
    --------
    >>> f"{boron_doping_cm3(10.0):.3e}"
    '1.340e+15'
    """
    r = resistivity_ohm_cm
    return 1.330e16 / r + 1.082e17 / (r * (1.0 + math.pow(54.56 * r, 1.105)))


def phosphorus_doping_cm3(resistivity_ohm_cm: float) -> float:
    """Phosphorus density of n-type silicon at 23 C.

    Parameters
    ----------
    resistivity_ohm_cm
        Resistivity [ohm cm], above 0.

    Returns
    -------
    float
        Dopant density [cm^-3].

    Notes
    -----
    ``N = 6.242e18 / r * 10^Z`` with Z a ratio of cubics in ``x = log10 r``.

    References
    ----------
    ASTM F723, resistivity to dopant density, phosphorus.

    Examples
    --------
    >>> f"{phosphorus_doping_cm3(10.0):.3e}"
    '4.445e+14'
    """
    x = math.log10(resistivity_ohm_cm)
    above = -3.1083 + x * (-3.2626 + x * (-1.2196 + x * -0.13923))
    below = 1.0 + x * (1.0265 + x * (0.38755 + x * 0.041833))
    return 6.242e18 / resistivity_ohm_cm * math.pow(10.0, above / below)


def mobility_cm2_vs(carrier: Carrier, doping_cm3: float, temperature_k: float) -> float:
    """Mobility of a carrier in silicon [cm^2/(V s)].

    Parameters
    ----------
    carrier
        `ELECTRONS` or `HOLES`.
    doping_cm3
        Total doping [cm^-3], not negative.
    temperature_k
        Temperature [K]; the fit was made for 200..500 K.

    Notes
    -----
    With ``t = T / 300 K``:
    ``floor t^-0.57 + lattice T^exponent / (1 + 0.88 t^-0.146 N / (doping t^2.4))``.

    References
    ----------
    Arora, Hauser, Roulston 1982, eqs. 8 (electrons) and 13 (holes).

    Examples
    --------
    >>> round(mobility_cm2_vs(HOLES, 1e14, 300.0))
    461
    """
    t = temperature_k / _ARORA_REFERENCE_K
    lattice = carrier.lattice_cm2_vs * math.pow(temperature_k, carrier.lattice_exponent)
    impurities = 0.88 * math.pow(t, -0.146) * doping_cm3 / (carrier.doping_cm3 * math.pow(t, 2.4))
    return carrier.floor_cm2_vs * math.pow(t, -0.57) + lattice / (1.0 + impurities)


def resistance_factor(
    carrier: Carrier, doping_cm3: float, temperature_k: float, reference_k: float
) -> float:
    """Resistance at a temperature over the resistance at the reference temperature.

    Every dopant is taken as ionised, so that only the mobility changes; that holds from
    about 200 K to where intrinsic carriers matter (above 450 K for 1e14 cm^-3).
    """
    return mobility_cm2_vs(carrier, doping_cm3, reference_k) / mobility_cm2_vs(
        carrier, doping_cm3, temperature_k
    )


def sheet_temperature_factor(technology: Technology, temperature_k: float) -> float:
    """Factor on n-well sheet resistances between the file's temperature and this one."""
    doping = technology.wells.nwell_doping_cm3.typical
    return resistance_factor(ELECTRONS, doping, temperature_k, REFERENCE_TEMPERATURE_K)


def pwell_temperature_factor(technology: Technology, temperature_k: float) -> float:
    """Factor on substrate resistivities and p-well sheet resistances, likewise.

    The doping is that of the uppermost substrate layer, from its resistivity.
    """
    doping = boron_doping_cm3(technology.substrate.layers[0].resistivity_ohm_cm.typical)
    return resistance_factor(HOLES, doping, temperature_k, REFERENCE_TEMPERATURE_K)
