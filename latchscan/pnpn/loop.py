"""The regenerative loop of a thyristor: its gain and what fires it.

In goes a `LoopCircuit`, numbers or columns of many circuits at once; out come loop gain,
its ceiling and the trigger currents (`latchscan.pnpn.holding` says what keeps it on).  The
one idea: firing is the first maximum of an explicit function of one voltage, so nothing has
to be followed around a fold.
The equations are those of `latchscan.pnpn.circuit`.

A trigger current that does not exist is NaN.

References
----------
R. R. Troutman, *Latchup in CMOS Technology*, Kluwer, 1986 (shunted alphas, differential
latch-up criterion).
C. Hu, IEEE Transactions on Electron Devices 31, 1984 (the same criterion).
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from latchscan.errors import ConvergenceError
from latchscan.layout.model import Floats
from latchscan.pnpn.circuit import (
    Column,
    LoopCircuit,
    Side,
    State,
    shape_of,
    side_of,
    state_at_supply,
)

SCAN_POINTS = 384
"""Voltages at which a curve is looked at before its maximum is refined."""

LARGEST_CURRENT_A = 1.0e4
"""No base is followed beyond the voltage at which its transistor would carry this."""

GOLDEN_STEPS = 48
GOLDEN = (math.sqrt(5.0) - 1.0) / 2.0

LARGEST_RESIDUAL = 1.0e-6
"""Largest error of the far body's equation relative to its largest term."""


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Fold:
    """The point at which a forced current fires the loop; NaN where nothing fires.

    Attributes
    ----------
    injected_a
        Trigger current, at least 0 [A].
    npn_v, pnp_v
        Base-emitter voltages [V].
    npn_collector_a, npn_base_a, pnp_collector_a, pnp_base_a
        Currents of the two transistors [A].
    """

    injected_a: Floats
    npn_v: Floats
    pnp_v: Floats
    npn_collector_a: Floats
    npn_base_a: Floats
    pnp_collector_a: Floats
    pnp_base_a: Floats


def stage_gain(
    beta: Column, conductance_s: Column, share: Column, base_resistance_ohm: Column
) -> Floats:
    """Current gain of one transistor with its base shunted [1].

    Parameters
    ----------
    beta
        Current gain.
    conductance_s
        Conductance of the base's shunt, 1/R(self) [S].
    share
        R(transfer)/R(self) of the base's body.
    base_resistance_ohm
        Input resistance r_pi = V_T/I_B of the base [ohm].

    Notes
    -----
    ``beta R(transfer) / (R(self) + r_pi)``, written so that an untied base has a value.

    Examples
    --------
    >>> float(stage_gain(5.0, 0.01, 1.0, 100.0))
    2.5
    """
    gain: Floats = np.asarray(beta * share / (1.0 + base_resistance_ohm * conductance_s))
    return gain


def loop_gain(circuit: LoopCircuit, npn_base_a: Column, pnp_base_a: Column) -> Floats:
    """Gain around the loop with given base currents, low-injection betas [1].

    Parameters
    ----------
    circuit
        One circuit or columns.
    npn_base_a, pnp_base_a
        Base currents, above 0 [A].

    Notes
    -----
    ``T = [bn R_s(K,A)/(R_s(K,K) + r_pi,n)] [bp R_w(A,C)/(R_w(A,A) + r_pi,p)]``,
    ``r_pi = V_T/I_B``.
    """
    npn, pnp = _stage_gains(circuit, npn_base_a, pnp_base_a)
    return npn * pnp


def _stage_gains(
    circuit: LoopCircuit, npn_base_a: Column, pnp_base_a: Column
) -> tuple[Floats, Floats]:
    side = side_of(circuit)
    shape = shape_of(circuit)
    npn = stage_gain(side.near_beta, side.near_conductance_s, side.near_share, side.vt / npn_base_a)
    pnp = stage_gain(side.far_beta, side.far_conductance_s, side.far_share, side.vt / pnp_base_a)
    return npn.reshape(shape), pnp.reshape(shape)


def shunted_alphas(
    circuit: LoopCircuit, npn_base_a: Column, pnp_base_a: Column
) -> tuple[Floats, Floats]:
    """Common-base gains a_n*, a_p* of the two transistors with their bases shunted [1].

    Notes
    -----
    ``a* = b*/(1 + b*)`` with the stage gain b*; with one resistance R a base this is
    ``a/(1 + r_e/R)``, ``r_e = V_T/I_E``.  ``a_n* + a_p* >= 1`` and ``T >= 1`` are the same
    statement (Troutman 1986; Hu 1984).
    """
    npn, pnp = _stage_gains(circuit, npn_base_a, pnp_base_a)
    return npn / (1.0 + npn), pnp / (1.0 + pnp)


def loop_gain_ceiling(circuit: LoopCircuit) -> Floats:
    """Loop gain at unlimited current without high injection; below 1 nothing latches [1]."""
    side = side_of(circuit)
    ceiling = side.near_beta * side.near_share * side.far_beta * side.far_share
    return ceiling.reshape(shape_of(circuit))


def trigger_substrate(circuit: LoopCircuit) -> Fold:
    """Holes pushed into the substrate at the cathode that fire the loop.

    Raises
    ------
    ConvergenceError
        The state found does not satisfy the circuit's equations.

    Notes
    -----
    First maximum of ``Its(VS)``; the exact fold of the equations, high injection and the
    shared junction included.
    """
    side = side_of(circuit)
    state = first_maximum(side)
    shape = shape_of(circuit)
    return Fold(
        injected_a=state.injected_a.reshape(shape),
        npn_v=state.near_v.reshape(shape),
        pnp_v=state.far_v.reshape(shape),
        npn_collector_a=state.near_collector_a.reshape(shape),
        npn_base_a=state.near_base_a.reshape(shape),
        pnp_collector_a=state.far_collector_a.reshape(shape),
        pnp_base_a=state.far_base_a.reshape(shape),
    )


def trigger_well(circuit: LoopCircuit) -> Fold:
    """Electrons collected by the well at the anode that fire the loop.

    Raises
    ------
    ConvergenceError
        The state found does not satisfy the circuit's equations.

    Notes
    -----
    First maximum of Itw: `trigger_substrate` of the mirrored circuit.
    """
    fold = trigger_substrate(circuit.mirrored())
    return Fold(
        injected_a=fold.injected_a,
        npn_v=fold.pnp_v,
        pnp_v=fold.npn_v,
        npn_collector_a=fold.pnp_collector_a,
        npn_base_a=fold.pnp_base_a,
        pnp_collector_a=fold.npn_collector_a,
        pnp_base_a=fold.npn_base_a,
    )


def first_order_triggers(circuit: LoopCircuit) -> tuple[Floats, Floats]:
    """Trigger currents from the substrate and from the well, in closed form [A].

    Notes
    -----
    ``Its = VBEn/R_s(K,K) + VBEp/(bn R_w(A,C))``, ``Itw = VBEp/R_w(A,A) + VBEn/(bp R_s(K,A))``
    with V_BE from the junction law at the currents ``Icn = VBEp/R_w(A,C)`` and
    ``Icp = VBEn/R_s(K,A)``, found by three substitutions from 0.7 V.  Low-injection betas.
    A body without a tie carries no current there: both values are then lower bounds.
    """
    side = side_of(circuit)
    near_g, far_g = side.near_conductance_s, side.far_conductance_s
    with np.errstate(divide="ignore"):
        near_transfer_g = np.where(near_g == 0.0, 0.0, near_g / side.near_share)
        far_transfer_g = np.where(far_g == 0.0, 0.0, far_g / side.far_share)
    npn_v = pnp_v = np.full(near_g.shape, 0.7)
    for _ in range(3):
        npn_v, pnp_v = (
            side.vt * np.log1p(pnp_v * far_transfer_g / side.near_is),
            side.vt * np.log1p(npn_v * near_transfer_g / side.far_is),
        )
    substrate = npn_v * near_g + pnp_v * far_transfer_g / side.near_beta
    well = pnp_v * far_g + npn_v * near_transfer_g / side.far_beta
    shape = shape_of(circuit)
    return substrate.reshape(shape), well.reshape(shape)


def largest_voltage(side: Side) -> Floats:
    """Voltage up to which the near base is followed [V]."""
    largest: Floats = side.vt * np.log1p(LARGEST_CURRENT_A / side.near_is)
    return largest


def first_maximum(side: Side) -> State:
    """State at the first maximum of the injected current along the near base's voltage.

    Columns without a maximum are NaN; an untied loop that regenerates from nothing has its
    maximum at the start.  Raises `ConvergenceError` where the state fails its equation.
    """
    # all features of the curve are V_T wide or wider, the scan steps are about V_T/5
    steps = np.linspace(0.0, 1.0, SCAN_POINTS)[:, None] * largest_voltage(side)
    injected = state_at_supply(side, steps).injected_a
    falling = injected[1:] < injected[:-1]
    exists = np.asarray(falling.any(axis=0))
    peak = np.argmax(falling, axis=0)
    column = np.arange(exists.size)
    low = steps[np.maximum(peak - 1, 0), column]
    high = steps[np.minimum(peak + 1, SCAN_POINTS - 1), column]
    place = golden_maximum(lambda v: state_at_supply(side, v).injected_a, low, high)
    state = state_at_supply(side, place)
    _check_far_body(side, state, exists)
    state = state._replace(injected_a=np.maximum(state.injected_a, 0.0))
    return State(*(np.where(exists, values, np.nan) for values in state))


def _check_far_body(side: Side, state: State, used: NDArray[np.bool_]) -> None:
    """Raise unless the far body's equation holds; an exact balance where it is untied."""
    terms = (
        side.far_conductance_s * state.far_v,
        state.far_base_a,
        -side.far_share * state.near_collector_a,
    )
    scale = np.max(np.abs(terms), axis=0) + side.far_is + side.near_is
    error = np.abs(sum(terms)) / scale
    bad = used & ~(error <= LARGEST_RESIDUAL)
    if bad.any():
        raise ConvergenceError(
            "loop circuit: the state at the trigger current; expected a relative residual of at"
            f" most {LARGEST_RESIDUAL:g}, got {error[bad].max():g}"
        )


def golden_maximum(function: Callable[[Floats], Floats], low: Floats, high: Floats) -> Floats:
    """Place of the maximum of a function that is unimodal in each column's bracket."""
    left = high - GOLDEN * (high - low)
    right = low + GOLDEN * (high - low)
    f_left, f_right = function(left), function(right)
    for _ in range(GOLDEN_STEPS):
        keep_left = f_left >= f_right
        high = np.where(keep_left, right, high)
        low = np.where(keep_left, low, left)
        fresh = np.where(keep_left, high - GOLDEN * (high - low), low + GOLDEN * (high - low))
        f_fresh = function(fresh)
        left, right = np.where(keep_left, fresh, right), np.where(keep_left, left, fresh)
        f_left, f_right = (
            np.where(keep_left, f_fresh, f_right),
            np.where(keep_left, f_left, f_fresh),
        )
    middle: Floats = 0.5 * (low + high)
    return middle
