"""The thyristor as a circuit: two cross-coupled transistors and their equations.

In go transistors and resistances, numbers or columns of many circuits at once; out comes the
state of a circuit for a given voltage of one base.  The one idea: with that voltage given,
everything else follows in closed form, without any iteration.

Notation: A is the anode (p+ in the well), C the place of the well where the NPN's electrons
are collected, K the cathode (n+ in the substrate).  ``v = VS`` is the rise of the
substrate at K, ``u = VDD - VW`` the drop of the well at A, ``V_T = kT/q``.

Transport form, both transistors sharing the well-substrate junction, with
``fe = exp(v/V_T)``, ``fp = exp(u/V_T)``, ``j = exp((v + u - VDD)/V_T)``::

    Icn = ISn (fe - j)/qn - (ISn/bRn) (j - 1)    Ibn = (ISn/bn) (fe - 1) + (ISn/bRn) (j - 1)
    Icp = ISp (fp - j)/qp - (ISp/bRp) (j - 1)    Ibp = (ISp/bp) (fp - 1) + (ISp/bRp) (j - 1)

``q = 1/2 + sqrt(1/4 + IS (f - 1)/I_K)`` is Gummel and Poon's base charge with high injection;
an infinite knee current I_K gives 1 and the plain transport form.

Two-port form of the bodies::

    well:       u = R_w(A,A) (Itw - Ibp) + R_w(A,C) Icn
    substrate:  v = R_s(K,K) (Its - Ibn) + R_s(K,A) Icp

``Itw`` are electrons the well collects at A, ``Its`` holes pushed into the substrate at K.
The one-resistance case is ``R_w(A,C) = R_w(A,A) = Rw`` and ``R_s(K,A) = R_s(K,K) = Rs``:
dividing by Rw and Rs leaves ``(VDD - VW)/Rw + Ibp - Icn - Itw = 0`` and
``Icp + Its - Ibn - VS/Rs = 0``, Kirchhoff's law at one well node and one substrate node.

Linearised, ``du (1 + R_w(A,A)/r_pi,p) = R_w(A,C) gm_n dv`` and alike for v; the determinant
vanishes, and either injected current is stationary, where the loop gain
``T = [bn R_s(K,A)/(R_s(K,K) + r_pi,n)] [bp R_w(A,C)/(R_w(A,A) + r_pi,p)]`` is 1
(``gm = beta/r_pi``).

Exchanging npn with pnp, well with substrate and u with v leaves all equations as they are;
the well side is therefore the substrate side of the mirrored circuit.

References
----------
R. R. Troutman, *Latchup in CMOS Technology*, Kluwer, 1986 (shunted alphas, differential
latch-up criterion).
C. Hu, IEEE Transactions on Electron Devices 31, 1984 (the same criterion).
H. K. Gummel and H. C. Poon, Bell System Technical Journal 49, 827, 1970.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import NamedTuple

import numpy as np
from scipy.special import wrightomega

from latchscan.constants import BOLTZMANN_J_PER_K, ELEMENTARY_CHARGE_C
from latchscan.errors import ConvergenceError
from latchscan.layout.model import Floats

Column = float | Floats
"""One value, or one value a circuit."""


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Transistor:
    """One bipolar transistor; each field a number or a column of n circuits.

    Attributes
    ----------
    saturation_current_a
        Transport saturation current, above 0 [A].
    beta, reverse_beta
        Low-injection forward and reverse current gains, above 0.
    knee_current_a
        Current of the onset of high injection; infinite means never [A].
    """

    saturation_current_a: Column
    beta: Column
    reverse_beta: Column
    knee_current_a: Column = math.inf


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Shunt:
    """What ties one base to its rail; each field a number or a column of n circuits.

    Attributes
    ----------
    self_ohm
        Voltage at the base for 1 A into the base, above 0; infinite for an untied body [ohm].
    transfer_ohm
        Voltage at the base for 1 A where the other transistor's collector current enters
        the body, at least 0 [ohm].  Of no effect where `self_ohm` is infinite: what enters
        an untied body can leave it through the base only.
    """

    self_ohm: Column
    transfer_ohm: Column


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class LoopCircuit:
    """A parasitic thyristor as a circuit, or n of them as columns.

    Attributes
    ----------
    npn, pnp
        The two transistors.
    well, substrate
        What ties the PNP's base (the well) and the NPN's base (the substrate).
    supply_v
        Supply VDD, above 0 [V].
    temperature_k
        Absolute temperature [K].

    Raises
    ------
    ConvergenceError
        A field is NaN or outside its range.
    """

    npn: Transistor
    pnp: Transistor
    well: Shunt
    substrate: Shunt
    supply_v: Column
    temperature_k: Column

    def __post_init__(self) -> None:
        side = side_of(self)
        for name in Side._fields:
            values: Floats = getattr(side, name)
            least_is_zero = name.endswith(("conductance_s", "share"))
            good = values >= 0.0 if least_is_zero else values > 0.0
            if not np.all(good):
                raise ConvergenceError(
                    f"loop circuit: {name}; expected a positive number,"
                    f" got {values[~good].flat[0]:g}"
                )

    def mirrored(self) -> LoopCircuit:
        """Return the same circuit with the roles of npn and pnp, well and substrate exchanged."""
        return LoopCircuit(
            npn=self.pnp,
            pnp=self.npn,
            well=self.substrate,
            substrate=self.well,
            supply_v=self.supply_v,
            temperature_k=self.temperature_k,
        )


def one_resistance(ohm: Column) -> Shunt:
    """Shunt of a base whose body is a single node behind one resistance [ohm]."""
    return Shunt(self_ohm=ohm, transfer_ohm=ohm)


class Side(NamedTuple):
    """A circuit as columns (n,), seen from the base that is forced (near)."""

    vt: Floats
    supply_v: Floats
    near_is: Floats
    near_beta: Floats
    near_reverse: Floats
    near_knee: Floats
    near_conductance_s: Floats
    near_share: Floats
    far_is: Floats
    far_beta: Floats
    far_reverse: Floats
    far_knee: Floats
    far_conductance_s: Floats
    far_share: Floats


def conductance_and_share(shunt: Shunt) -> tuple[Floats, Floats]:
    """Return conductance 1/R(self) and share R(transfer)/R(self), with their limits."""
    own = np.asarray(shunt.self_ohm, dtype=np.float64)
    transfer = np.asarray(shunt.transfer_ohm, dtype=np.float64)
    untied, shorted = np.isinf(own), own == 0
    with np.errstate(divide="ignore"):
        share = np.where(untied, 1.0, transfer / np.where(untied | shorted, 1.0, own))
        return 1.0 / own, np.where(shorted, 0.0, share)


def side_of(circuit: LoopCircuit) -> Side:
    """Columns of a circuit with the NPN's base, the substrate, as the near one."""
    near, far = circuit.npn, circuit.pnp
    near_g, near_share = conductance_and_share(circuit.substrate)
    far_g, far_share = conductance_and_share(circuit.well)
    temperature = np.asarray(circuit.temperature_k, dtype=np.float64)
    columns = (
        BOLTZMANN_J_PER_K * temperature / ELEMENTARY_CHARGE_C,
        circuit.supply_v,
        near.saturation_current_a,
        near.beta,
        near.reverse_beta,
        near.knee_current_a,
        near_g,
        near_share,
        far.saturation_current_a,
        far.beta,
        far.reverse_beta,
        far.knee_current_a,
        far_g,
        far_share,
    )
    spread = np.broadcast_arrays(*(np.asarray(c, dtype=np.float64) for c in columns))
    return Side(*(np.atleast_1d(column) for column in spread))


def shape_of(circuit: LoopCircuit) -> tuple[int, ...]:
    """Shape that results of a circuit have: () for numbers, (n,) for columns."""
    fields = (
        *(getattr(t, f) for t in (circuit.npn, circuit.pnp) for f in Transistor.__slots__),
        *(getattr(t, f) for t in (circuit.well, circuit.substrate) for f in Shunt.__slots__),
        circuit.supply_v,
        circuit.temperature_k,
    )
    return np.broadcast_shapes(*(np.shape(field) for field in fields))


class State(NamedTuple):
    """Voltages and currents of both transistors; any shape that ends in (n,)."""

    near_v: Floats
    far_v: Floats
    near_collector_a: Floats
    near_base_a: Floats
    far_collector_a: Floats
    far_base_a: Floats
    injected_a: Floats


def _base_charge(saturation_a: Floats, forward: Floats, knee_a: Floats) -> Floats:
    charge: Floats = 0.5 + np.sqrt(np.maximum(0.25 + saturation_a * (forward - 1.0) / knee_a, 0.0))
    return charge


def _far_base(side: Side, slope_a: Floats, current_a: Floats) -> tuple[Floats, Floats]:
    """Solve ``g u + slope exp(u/V_T) = current`` for u and exp(u/V_T).

    Notes
    -----
    With Wright's omega function, ``omega + log(omega) = z``:
    ``z = log(slope/(g V_T)) + current/(g V_T)``, ``exp(u/V_T) = omega g V_T/slope``.
    The logarithmic form never overflows.  For g = 0 the linear term is absent.
    """
    g_vt = side.far_conductance_s * side.vt
    with np.errstate(divide="ignore", invalid="ignore", over="ignore"):
        scale = slope_a / g_vt
        drive = current_a / g_vt
        omega = wrightomega(np.log(scale) + drive)
        # far below turn-on omega underflows, there the linear term alone holds
        forward = np.where(drive - omega < -700.0, 0.0, np.exp(np.minimum(drive - omega, 700.0)))
        steep = omega > 1.0
        forward = np.where(steep, omega / scale, forward)
        voltage = side.vt * np.where(steep, np.log(np.where(steep, forward, 1.0)), drive - omega)
        untied = np.broadcast_to(g_vt == 0.0, forward.shape)
        open_forward = np.maximum(current_a / slope_a, 0.0)
        forward = np.where(untied, open_forward, forward)
        voltage = np.where(untied, side.vt * np.log(open_forward), voltage)
    return voltage, forward


def _finish(
    side: Side, near_v: Floats, far_v: Floats, far_forward: Floats, junction: Floats
) -> State:
    """Evaluate all currents of a state, and the current it needs injected at the near base."""
    near_forward = np.exp(near_v / side.vt)
    near_charge = _base_charge(side.near_is, near_forward, side.near_knee)
    far_charge = _base_charge(side.far_is, far_forward, side.far_knee)
    near_back = side.near_is / side.near_reverse * (junction - 1.0)
    far_back = side.far_is / side.far_reverse * (junction - 1.0)
    near_collector = side.near_is * (near_forward - junction) / near_charge - near_back
    far_collector = side.far_is * (far_forward - junction) / far_charge - far_back
    near_base = side.near_is / side.near_beta * (near_forward - 1.0) + near_back
    far_base = side.far_is / side.far_beta * (far_forward - 1.0) + far_back
    injected = near_base + side.near_conductance_s * near_v - side.near_share * far_collector
    return State(near_v, far_v, near_collector, near_base, far_collector, far_base, injected)


def state_at_supply(side: Side, near_v: Floats) -> State:
    """State at the circuit's own supply for a given near base voltage.

    Notes
    -----
    With ``c = exp((v - VDD)/V_T)`` the junction factor is ``j = c fp``, and the far body's
    equation becomes ``g u + p fp = q``, monotone in u.
    """
    forward = np.exp(near_v / side.vt)
    charge = _base_charge(side.near_is, forward, side.near_knee)
    across = np.exp((near_v - side.supply_v) / side.vt)
    slope = side.far_is * (
        1.0 / side.far_beta + across / side.far_reverse
    ) + side.far_share * across * side.near_is * (1.0 / charge + 1.0 / side.near_reverse)
    current = side.far_is * (
        1.0 / side.far_beta + 1.0 / side.far_reverse
    ) + side.far_share * side.near_is * (forward / charge + 1.0 / side.near_reverse)
    far_v, far_forward = _far_base(side, slope, current)
    return _finish(side, near_v, far_v, far_forward, across * far_forward)


def state_at_junction(side: Side, near_v: Floats, junction: Floats) -> State:
    """State for given near base voltage and junction factor j; its supply is a result."""
    forward = np.exp(near_v / side.vt)
    charge = _base_charge(side.near_is, forward, side.near_knee)
    slope = np.broadcast_to(side.far_is / side.far_beta, np.shape(near_v))
    current = side.far_is * (
        1.0 / side.far_beta - (junction - 1.0) / side.far_reverse
    ) + side.far_share * side.near_is * (
        (forward - junction) / charge - (junction - 1.0) / side.near_reverse
    )
    far_v, far_forward = _far_base(side, slope, current)
    return _finish(side, near_v, far_v, far_forward, junction)
