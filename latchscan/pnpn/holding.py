"""What keeps a fired thyristor on: holding currents and holding voltage.

In goes one `LoopCircuit`; out come the three quantities that are all called "holding" and
differ by up to a factor of two, under three names: the closed form, the current where the
branch with both transistors active meets the circuit's own supply, and the least supply with
the current there (with or without a series resistance).  The one
idea: along the near base's voltage the state for a given shared-junction voltage is closed
form, and the junction voltage that needs no injected current is unique.

A result that does not exist (nothing latches) is NaN.  The equations are those of
`latchscan.pnpn.circuit` with both injected currents 0.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from latchscan.errors import ConvergenceError
from latchscan.layout.model import Floats
from latchscan.pnpn.circuit import (
    Column,
    LoopCircuit,
    Side,
    State,
    shape_of,
    side_of,
    state_at_junction,
    state_at_supply,
)
from latchscan.pnpn.loop import SCAN_POINTS, first_maximum, golden_maximum, largest_voltage

BISECTION_STEPS = 56
AMPLE_SUPPLY_V = 1.0e3
"""A supply no holding voltage comes near [V]."""

DEEPEST_JUNCTION = -80.0
"""Junction voltage, in units of V_T, below which the shared junction carries nothing."""


@dataclass(frozen=True, slots=True, kw_only=True)
class HoldingPoint:
    """Least supply that keeps the loop on, and the supply current there.

    Attributes
    ----------
    supply_v
        Supply voltage, the drop across the series resistance included [V].
    current_a
        Supply current just before the loop turns off [A].
    """

    supply_v: float
    current_a: float


def holding_current_first_order(circuit: LoopCircuit, npn_v: Column, pnp_v: Column) -> Floats:
    """Supply current of the branch with both transistors active, given both V_BE [A].

    Notes
    -----
    Both bodies' equations with ``Ib = Ic/beta``, solved for Icn and Icp; the supply current
    is their sum.  With one resistance a body:
    ``I_H = [bp (bn + 1) VBEp/Rw + bn (bp + 1) VBEn/Rs] / (bn bp - 1)``.
    Low-injection betas; NaN where the loop gain's ceiling is not above 1.
    """
    side = side_of(circuit)
    both = side.near_beta * side.far_beta
    excess = both * side.near_share * side.far_share - 1.0
    near = npn_v * side.near_conductance_s
    far = pnp_v * side.far_conductance_s
    npn_a = both * side.near_share * far + side.near_beta * near
    pnp_a = both * side.far_share * near + side.far_beta * far
    able = excess > 0.0
    total = np.where(able, (npn_a + pnp_a) / np.where(able, excess, 1.0), np.nan)
    return total.reshape(shape_of(circuit))


def holding_current_a(circuit: LoopCircuit) -> float:
    """Supply current at which the branch with both transistors active meets the supply [A].

    NaN where nothing fires, or where what fires cannot hold at the circuit's supply.

    Raises
    ------
    ConvergenceError
        `circuit` is not a single circuit.

    Notes
    -----
    First zero of ``Its(VS)`` behind the fold.  It depends on the supply only where the
    supply is close to the holding voltage.
    """
    side = _single(circuit)
    root = _active_branch_v(side)
    if np.isnan(root):
        return float("nan")
    return _supply_current(state_at_supply(side, np.array([root])))


def _active_branch_v(side: Side) -> float:
    """Near base voltage of the first state without injection behind the fold, or NaN."""
    fold = first_maximum(side)
    fold_v = float(fold.near_v[0])
    if np.isnan(fold_v):
        return float("nan")
    if fold.injected_a[0] == 0.0:
        # an untied loop regenerates from nothing: the branch starts where the curve does
        return fold_v
    steps = np.linspace(fold_v, float(largest_voltage(side)[0]), SCAN_POINTS)
    holds = state_at_supply(side, steps).injected_a <= 0.0
    if not holds.any():
        return float("nan")
    first = int(np.argmax(holds))
    low, high = steps[first - 1], steps[first]
    for _ in range(BISECTION_STEPS):
        middle = 0.5 * (low + high)
        if state_at_supply(side, np.array([middle])).injected_a[0] <= 0.0:
            high = middle
        else:
            low = middle
    return float(high)


def holding_point(circuit: LoopCircuit, series_ohm: float = 0.0) -> HoldingPoint:
    """Least supply that keeps the loop on without injection, and the current there.

    Parameters
    ----------
    circuit
        One circuit; its own `supply_v` has no part in this.
    series_ohm
        Resistance between the supply and the thyristor, at least 0 [ohm].

    Raises
    ------
    ConvergenceError
        `circuit` is not a single circuit.

    Notes
    -----
    The supply at which the later minimum of ``Its(VS)`` touches 0 is the least supply over
    all states without injection, ``VDD = u + v - w`` (w the shared junction's voltage).
    """
    side = _single(circuit)
    start = _active_branch_v(side._replace(supply_v=np.array([AMPLE_SUPPLY_V])))
    if np.isnan(start):
        return HoldingPoint(supply_v=float("nan"), current_a=float("nan"))
    # below this voltage lie the off states, which need no injection either
    steps = np.linspace(start, float(largest_voltage(side)[0]), SCAN_POINTS)[1:]
    supply, _ = _latched(side, steps, series_ohm)
    if not np.isfinite(supply).any():
        return HoldingPoint(supply_v=float("nan"), current_a=float("nan"))
    least = int(np.argmin(supply))
    low = steps[max(least - 1, 0)]
    high = steps[min(least + 1, steps.size - 1)]
    place = golden_maximum(
        lambda v: -_latched(side, v, series_ohm)[0], np.array([low]), np.array([high])
    )
    supply, current = _latched(side, place, series_ohm)
    return HoldingPoint(supply_v=float(supply[0]), current_a=float(current[0]))


def _latched(side: Side, near_v: Floats, series_ohm: float) -> tuple[Floats, Floats]:
    """Supply voltage and current of the latched states at given near base voltages.

    Where no latched state has that base voltage the supply is infinite.
    """
    low = np.full(near_v.shape, DEEPEST_JUNCTION) * side.vt
    high = near_v.copy()

    def missing(w: Floats) -> Floats:
        return state_at_junction(side, near_v, np.exp(w / side.vt)).injected_a

    exists = missing(low) < 0.0
    for _ in range(BISECTION_STEPS):
        middle = 0.5 * (low + high)
        # the more the junction conducts, the less current is left for the bases
        above = missing(middle) > 0.0
        low, high = np.where(above, low, middle), np.where(above, middle, high)
    state = state_at_junction(side, near_v, np.exp(low / side.vt))
    current = state.near_collector_a + state.far_collector_a
    supply = state.far_v + near_v - low + series_ohm * current
    return np.where(exists, supply, np.inf), current


def _supply_current(state: State) -> float:
    # what crosses from the well into the substrate returns through the supply
    return float(state.near_collector_a[0] + state.far_collector_a[0])


def _single(circuit: LoopCircuit) -> Side:
    if shape_of(circuit) not in ((), (1,)):
        raise ConvergenceError(
            f"loop circuit: shape; expected one circuit, got shape {shape_of(circuit)}"
        )
    return side_of(circuit)
