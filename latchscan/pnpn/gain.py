"""Current gains and saturation currents of the two parasitic transistors.

In go base widths, emitter areas, the technology's transistor numbers and a temperature; out
come current gains and saturation currents as columns, one row a transistor.  The one idea:
the vertical PNP's gain belongs to the process, the lateral NPN's to the layout, and both
move with current and temperature by the same two laws.

References
----------
H. K. Gummel and H. C. Poon, "An Integral Charge Control Model of Bipolar Transistors",
Bell System Technical Journal 49, 827, 1970 (Gummel numbers, high injection).
S. M. Sze, *Physics of Semiconductor Devices*, 2nd edition, 1981, chapter 3 (base transport,
saturation current with temperature); equations from memory.
"""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import ArrayLike, NDArray

from latchscan.constants import (
    BOLTZMANN_J_PER_K,
    ELEMENTARY_CHARGE_C,
    REFERENCE_TEMPERATURE_K,
)
from latchscan.layout.model import Floats
from latchscan.technology.model import LateralNpn, VerticalPnp

BAND_GAP_EV = 1.12
"""Band gap of silicon at room temperature [eV]."""

LARGEST_ALPHA = 1.0 - 1.0e-6
"""An alpha of 1 has no finite current gain; recombination forbids it in any real base."""


def base_transport_factor(base_width_um: ArrayLike, diffusion_length_um: float) -> Floats:
    """Share of the injected minority carriers that crosses the base [1].

    Parameters
    ----------
    base_width_um
        Width W of the neutral base, any shape, at least 0 [um].
    diffusion_length_um
        Diffusion length L of the minority carriers, above 0 [um].

    Returns
    -------
    Floats
        ``sech(W / L)``, the shape of `base_width_um`.

    Notes
    -----
    One dimension, an ideal sink at W, low injection.

    Examples
    --------
    >>> float(base_transport_factor(0.0, 300.0))
    1.0
    """
    decay = np.exp(-np.asarray(base_width_um, dtype=np.float64) / diffusion_length_um)
    # exp(-x) cannot overflow where cosh(x) does
    factor: Floats = 2.0 * decay / (1.0 + decay * decay)
    return factor


def emitter_efficiency(base_gummel: float, emitter_gummel: float) -> float:
    """Share of the emitter current carried into the base, ``1 / (1 + G_B / G_E)`` [1].

    Parameters
    ----------
    base_gummel, emitter_gummel
        Gummel numbers G_B and G_E of base and emitter, above 0, in one unit.

    Examples
    --------
    >>> emitter_efficiency(1.0, 99.0)
    0.99
    """
    return 1.0 / (1.0 + base_gummel / emitter_gummel)


def current_gain(alpha: ArrayLike) -> Floats:
    """Common-emitter gain ``beta = alpha / (1 - alpha)`` of a common-base gain [1].

    `alpha` is limited to `LARGEST_ALPHA`.

    Examples
    --------
    >>> float(current_gain(0.5))
    1.0
    """
    limited = np.minimum(np.asarray(alpha, dtype=np.float64), LARGEST_ALPHA)
    gain: Floats = limited / (1.0 - limited)
    return gain


def gain_at_temperature(beta: ArrayLike, temperature_k: float, exponent: float) -> Floats:
    """Current gain at a temperature, ``beta (T / T0)^m`` with T0 the reference [1]."""
    scale = (temperature_k / REFERENCE_TEMPERATURE_K) ** exponent
    gain: Floats = np.asarray(beta, dtype=np.float64) * scale
    return gain


def gain_at_current(
    beta: ArrayLike, collector_current_a: ArrayLike, knee_current_a: ArrayLike
) -> Floats:
    """Current gain with high injection in the base [1].

    Parameters
    ----------
    beta
        Low-injection gain.
    collector_current_a
        Collector current I_C, at least 0 [A].
    knee_current_a
        Knee current I_KF, above 0 [A].

    Notes
    -----
    Gummel and Poon's normalised base charge obeys ``q_b = 1/2 + sqrt(1/4 + I_F / I_KF)``
    with ``I_C = I_F / q_b`` (equations of section III there, Early effect left out), hence
    ``q_b = 1 + I_C / I_KF`` and ``beta(I_C) = beta / (1 + I_C / I_KF)``: flat below the
    knee, falling as ``I_KF / I_C`` above it.  This is the ratio I_C / I_B; its differential
    counterpart is lower, by up to a factor of 2.

    Examples
    --------
    >>> float(gain_at_current(10.0, 1e-3, 1e-3))
    5.0
    """
    ratio = np.asarray(collector_current_a, dtype=np.float64) / np.asarray(knee_current_a)
    gain: Floats = np.asarray(beta, dtype=np.float64) / (1.0 + ratio)
    return gain


def saturation_current_at_temperature(current_a: ArrayLike, temperature_k: float) -> Floats:
    """Saturation current (or its density) at a temperature [unit of `current_a`].

    Parameters
    ----------
    current_a
        Value at `REFERENCE_TEMPERATURE_K`.
    temperature_k
        Absolute temperature T [K].

    Notes
    -----
    ``I_S ~ T^3 exp(-E_g / kT)`` with a constant band gap, `BAND_GAP_EV`.
    """
    gap_k = BAND_GAP_EV * ELEMENTARY_CHARGE_C / BOLTZMANN_J_PER_K
    ratio = temperature_k / REFERENCE_TEMPERATURE_K
    exponent = gap_k * (1.0 / REFERENCE_TEMPERATURE_K - 1.0 / temperature_k)
    current: Floats = np.asarray(current_a, dtype=np.float64) * ratio**3 * math.exp(exponent)
    return current


def lateral_npn_beta(base_width_um: ArrayLike, npn: LateralNpn, temperature_k: float) -> Floats:
    """Low-injection gain of the lateral NPN in closed form of its base width [1].

    Parameters
    ----------
    base_width_um
        Distance from the cathode to the well's edge [um].
    npn
        Numbers of the technology file.
    temperature_k
        Absolute temperature [K].

    Notes
    -----
    ``alpha = emitter_efficiency lateral_share sech(W / L)`` and
    ``beta = calibration alpha / (1 - alpha)``.  The lateral share stands for the electrons
    that head for the well instead of downwards; without it ``sech`` alone would give
    gains of ten thousand.  Published gains of this kind are rare: the band is about 3x.
    """
    transport = base_transport_factor(base_width_um, npn.electron_diffusion_length_um.typical)
    alpha = npn.emitter_efficiency.typical * npn.lateral_share.typical * transport
    beta = npn.calibration.typical * current_gain(alpha)
    return gain_at_temperature(beta, temperature_k, npn.beta_temperature_exponent.typical)


def vertical_pnp_beta(
    over_buried: NDArray[np.bool_], pnp: VerticalPnp, temperature_k: float
) -> Floats:
    """Low-injection gain of the vertical PNP by region [1].

    Parameters
    ----------
    over_buried
        True where the emitter lies over the buried layer.
    pnp
        Numbers of the technology file; without ``beta_over_buried`` one gain serves both.
    temperature_k
        Absolute temperature [K].
    """
    buried = pnp.beta if pnp.beta_over_buried is None else pnp.beta_over_buried
    beta = np.where(over_buried, buried.typical, pnp.beta.typical)
    return gain_at_temperature(beta, temperature_k, pnp.beta_temperature_exponent.typical)
