"""Every candidate thyristor evaluated and ranked.

In go the layout's pairs and their resistances; out comes `Sites`, one row a pair, worst
first.  The one idea: every pair gets the closed forms, only the worst get the exact fold.

The loop gain is stated at one probe current: the technology's ``probe_current_a`` flows as
*collector* current in both transistors.  With ``beta`` at that current (I_C/I_B, high
injection included) ``r_pi = V_T / I_B = V_T beta / I_C`` and::

    T = [bn R_s(K,A) / (R_s(K,K) + r_pi,n)] [bp R_w(A,C) / (R_w(A,A) + r_pi,p)]

Each pair is judged twice: as two single emitters, and as two patches (all emitters of the
body within the patch radius driven together, which carry the probe current between them).
A patch has a lower self-resistance and a larger area, hence a higher knee current and
saturation current.  A single emitter's transfer resistance is limited to its largest
self-potential, a patch's to the patch value.  The one of higher loop gain is reported, with
all its numbers, ceiling and trigger currents included.

The ceiling uses low-injection gains.  Trigger currents are NaN where it is below 1; of the
first `EXACT_SITES` rows they are the exact fold with high injection (NaN where that forbids
firing), of the others first order with the gains at the probe current.  Order: loop gain
falling, then first-order trigger current rising (NaN last), both to `RANK_DIGITS` digits,
then pair index.
"""

from __future__ import annotations

from dataclasses import dataclass, fields

import numpy as np
from numpy.typing import NDArray

from latchscan.constants import thermal_voltage_v
from latchscan.layout.model import Floats, Ints, Layout, Pairs, frozen
from latchscan.parasitics.model import Resistances, Transfers
from latchscan.pnpn.circuit import LoopCircuit, Shunt, Transistor, conductance_and_share
from latchscan.pnpn.gain import (
    gain_at_current,
    lateral_npn_beta,
    saturation_current_at_temperature,
    vertical_pnp_beta,
)
from latchscan.pnpn.loop import (
    first_order_triggers,
    loop_gain_ceiling,
    stage_gain,
    trigger_substrate,
    trigger_well,
)
from latchscan.pnpn.model import Sites
from latchscan.pnpn.sources import Sources, collect_sources, pair_places_um
from latchscan.technology.model import LateralNpn, Technology, VerticalPnp

EXACT_SITES = 1000
"""Sites, from the worst, whose trigger currents are the exact fold of the loop."""

REVERSE_BETA_NPN = 1.0
REVERSE_BETA_PNP = 0.1
"""Reverse gains matter only once the loop has fired; customary values, from memory."""

RANK_DIGITS = 9
"""Digits of the loop gain that rank; equal places of an array tie instead of shuffling."""


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class _Ends:
    """Columns (m,) of the two ends of every pair, seen as single emitters or as patches."""

    well_self_ohm: Floats
    well_transfer_ohm: Floats
    substrate_self_ohm: Floats
    substrate_transfer_ohm: Floats
    anode_area_um2: Floats
    cathode_area_um2: Floats


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class _Gains:
    """Columns (m,): gains at the probe current, the loop's ceiling and its gain."""

    beta_npn: Floats
    beta_pnp: Floats
    ceiling: Floats
    loop_gain: Floats


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class _Table:
    """All columns (m,) of the sites in the pairs' order, and their ranking."""

    ends: _Ends
    gains: _Gains
    patch: NDArray[np.bool_]
    substrate_a: Floats
    well_a: Floats
    order: Ints

    def spread(self, rows: Ints, count: int) -> _Table:
        """Put the columns into `rows` of `count`; the other rows have no numbers."""

        def spread(column: Floats) -> Floats:
            wide = np.full(count, np.nan)
            wide[rows] = column
            return wide

        def spread_all(part: _Ends | _Gains) -> dict[str, Floats]:
            return {one.name: spread(getattr(part, one.name)) for one in fields(part)}

        patch = np.zeros(count, dtype=np.bool_)
        patch[rows] = self.patch
        return _Table(
            ends=_Ends(**spread_all(self.ends)),
            gains=_Gains(**spread_all(self.gains)),
            patch=patch,
            substrate_a=spread(self.substrate_a),
            well_a=spread(self.well_a),
            order=rows[self.order],
        )


def evaluate_sites(
    layout: Layout,
    pairs: Pairs,
    resistances: Resistances,
    transfers: Transfers,
    technology: Technology,
    temperature_k: float,
) -> Sites:
    """Loop gain and trigger currents of every pair, worst first.

    Parameters
    ----------
    layout, pairs
        The emitters and the m candidate thyristors.
    resistances, transfers
        Their field solutions [ohm].
    technology
        Transistor numbers, supply and probe current.
    temperature_k
        Absolute temperature [K].

    Returns
    -------
    Sites
        One row a pair, in the order and with the trigger currents told above.  Pairs whose
        resistances have no solution (NaN) come last, all their numbers NaN.

    Raises
    ------
    ConvergenceError
        A fold fails its own check.
    """
    known = _solved(pairs, resistances, transfers)
    rows = np.flatnonzero(known)
    some = Pairs(**{f.name: getattr(pairs, f.name)[rows] for f in fields(pairs)})
    taken = Transfers(**{f.name: getattr(transfers, f.name)[rows] for f in fields(transfers)})
    table = _evaluated(layout, some, resistances, taken, technology, temperature_k)
    whole = table.spread(rows, len(known))
    order = np.concatenate([whole.order, np.flatnonzero(~known)])
    return _ranked(layout, pairs, whole, order)


def _solved(pairs: Pairs, resistances: Resistances, transfers: Transfers) -> NDArray[np.bool_]:
    """Whether both halves of a pair have their resistances; an untied one needs no transfer."""
    good = np.ones(len(pairs.anode), dtype=np.bool_)
    for source, transfer in (
        (pairs.anode, transfers.well_ohm),
        (pairs.cathode, transfers.substrate_ohm),
    ):
        own = resistances.mean_ohm[source]
        good &= np.isinf(own) | ~(np.isnan(own) | np.isnan(transfer))
    return good


def _evaluated(
    layout: Layout,
    pairs: Pairs,
    resistances: Resistances,
    transfers: Transfers,
    technology: Technology,
    temperature_k: float,
) -> _Table:
    """Evaluate pairs that all have their resistances."""
    sources = collect_sources(layout, technology.loop.patch_radius_um)
    views = (
        _single_ends(pairs, resistances, transfers, sources),
        _patch_ends(pairs, resistances, transfers, sources),
    )
    betas = _low_injection_betas(pairs, sources, technology, temperature_k)
    single, joint = (
        _gains(_circuit(ends, betas, technology, temperature_k), technology, temperature_k)
        for ends in views
    )
    patch = joint.loop_gain > single.loop_gain
    ends = _Ends(**_chosen(patch, views[1], views[0]))
    gains = _Gains(**_chosen(patch, joint, single))
    circuit = _circuit(ends, betas, technology, temperature_k)
    substrate, well, order = _triggers(circuit, gains)
    return _Table(
        ends=ends, gains=gains, patch=patch, substrate_a=substrate, well_a=well, order=order
    )


def _single_ends(
    pairs: Pairs, resistances: Resistances, transfers: Transfers, sources: Sources
) -> _Ends:
    # by reciprocity a transfer is a potential of the source's own field, which is largest
    # on the source itself; two separate solutions may break that by their errors
    largest = resistances.max_ohm
    return _Ends(
        well_self_ohm=resistances.mean_ohm[pairs.anode],
        well_transfer_ohm=_bounded(transfers.well_ohm, largest[pairs.anode]),
        substrate_self_ohm=resistances.mean_ohm[pairs.cathode],
        substrate_transfer_ohm=_bounded(transfers.substrate_ohm, largest[pairs.cathode]),
        anode_area_um2=sources.area_um2[pairs.anode],
        cathode_area_um2=sources.area_um2[pairs.cathode],
    )


def _bounded(transfer_ohm: Floats, largest_ohm: Floats) -> Floats:
    """Transfer resistances between 0 and a bound; without a bound (NaN) only above 0."""
    # a far pair's transfer can come out as a rounding error below zero
    bounded: Floats = np.fmin(np.maximum(transfer_ohm, 0.0), largest_ohm)
    return np.where(np.isnan(transfer_ohm), np.nan, bounded)


def _patch_ends(
    pairs: Pairs, resistances: Resistances, transfers: Transfers, sources: Sources
) -> _Ends:
    known = ~np.isnan(resistances.patch_ohm)
    patch_ohm = np.where(known, resistances.patch_ohm, resistances.mean_ohm)
    well, substrate = patch_ohm[pairs.anode], patch_ohm[pairs.cathode]
    return _Ends(
        well_self_ohm=well,
        well_transfer_ohm=_bounded(transfers.well_ohm, well),
        substrate_self_ohm=substrate,
        substrate_transfer_ohm=_bounded(transfers.substrate_ohm, substrate),
        anode_area_um2=np.where(known, sources.patch_area_um2, sources.area_um2)[pairs.anode],
        cathode_area_um2=np.where(known, sources.patch_area_um2, sources.area_um2)[pairs.cathode],
    )


def _low_injection_betas(
    pairs: Pairs, sources: Sources, technology: Technology, temperature_k: float
) -> tuple[Floats, Floats]:
    """Gains of npn and pnp of every pair, (m,) each."""
    transistors = technology.transistors
    npn = lateral_npn_beta(pairs.base_width_um, transistors.lateral_npn, temperature_k)
    buried = sources.over_buried[pairs.anode]
    return npn, vertical_pnp_beta(buried, transistors.vertical_pnp, temperature_k)


def _circuit(
    ends: _Ends, betas: tuple[Floats, Floats], technology: Technology, temperature_k: float
) -> LoopCircuit:
    transistors = technology.transistors
    npn = _transistor(transistors.lateral_npn, ends.cathode_area_um2, temperature_k)
    pnp = _transistor(transistors.vertical_pnp, ends.anode_area_um2, temperature_k)
    return LoopCircuit(
        npn=Transistor(
            saturation_current_a=npn[0],
            knee_current_a=npn[1],
            beta=betas[0],
            reverse_beta=REVERSE_BETA_NPN,
        ),
        pnp=Transistor(
            saturation_current_a=pnp[0],
            knee_current_a=pnp[1],
            beta=betas[1],
            reverse_beta=REVERSE_BETA_PNP,
        ),
        well=Shunt(self_ohm=ends.well_self_ohm, transfer_ohm=ends.well_transfer_ohm),
        substrate=Shunt(self_ohm=ends.substrate_self_ohm, transfer_ohm=ends.substrate_transfer_ohm),
        supply_v=technology.loop.supply_v,
        temperature_k=temperature_k,
    )


def _transistor(
    numbers: LateralNpn | VerticalPnp, area_um2: Floats, temperature_k: float
) -> tuple[Floats, Floats]:
    """Saturation current and knee current [A] of emitters of given areas."""
    density = numbers.saturation_current_density_a_um2.typical
    saturation = saturation_current_at_temperature(density, temperature_k) * area_um2
    return saturation, numbers.knee_current_density_a_um2.typical * area_um2


def _gains(circuit: LoopCircuit, technology: Technology, temperature_k: float) -> _Gains:
    probe_a = technology.loop.probe_current_a
    stages, betas = [], []
    for transistor, shunt in (
        (circuit.npn, circuit.substrate),
        (circuit.pnp, circuit.well),
    ):
        beta = gain_at_current(transistor.beta, probe_a, transistor.knee_current_a)
        conductance, share = conductance_and_share(shunt)
        base_resistance = thermal_voltage_v(temperature_k) * beta / probe_a
        stages.append(stage_gain(beta, conductance, share, base_resistance))
        betas.append(beta)
    return _Gains(
        beta_npn=betas[0],
        beta_pnp=betas[1],
        ceiling=loop_gain_ceiling(circuit),
        loop_gain=stages[0] * stages[1],
    )


def _chosen(
    patch: NDArray[np.bool_], joint: _Ends | _Gains, single: _Ends | _Gains
) -> dict[str, Floats]:
    return {
        field.name: np.where(patch, getattr(joint, field.name), getattr(single, field.name))
        for field in fields(single)
    }


def _triggers(circuit: LoopCircuit, gains: _Gains) -> tuple[Floats, Floats, Ints]:
    """Trigger currents from the substrate and from the well (m,), and the ranking (m,)."""
    substrate, well = first_order_triggers(
        LoopCircuit(
            npn=_with_beta(circuit.npn, gains.beta_npn),
            pnp=_with_beta(circuit.pnp, gains.beta_pnp),
            well=circuit.well,
            substrate=circuit.substrate,
            supply_v=circuit.supply_v,
            temperature_k=circuit.temperature_k,
        )
    )
    able = gains.ceiling >= 1.0
    substrate = np.where(able, substrate, np.nan)
    well = np.where(able, well, np.nan)
    order = np.lexsort((_rounded(np.fmin(substrate, well)), -_rounded(gains.loop_gain)))
    exact = order[:EXACT_SITES]
    exact = exact[able[exact]]
    worst = _rows(circuit, exact)
    substrate[exact] = trigger_substrate(worst).injected_a
    well[exact] = trigger_well(worst).injected_a
    return substrate, well, order


def _rounded(values: Floats) -> Floats:
    """Return the values to `RANK_DIGITS` significant digits; NaN stays NaN."""
    decades = np.floor(np.log10(np.maximum(values, 1.0e-30)))
    scale = 10.0 ** (RANK_DIGITS - 1 - decades)
    rounded: Floats = np.rint(values * scale) / scale
    return rounded


def _with_beta(transistor: Transistor, beta: Floats) -> Transistor:
    return Transistor(
        saturation_current_a=transistor.saturation_current_a,
        beta=beta,
        reverse_beta=transistor.reverse_beta,
        knee_current_a=transistor.knee_current_a,
    )


def _rows(circuit: LoopCircuit, rows: Ints) -> LoopCircuit:
    """Return some columns of a circuit whose other fields are plain numbers."""

    def some(part: Transistor | Shunt) -> dict[str, Floats]:
        values = {field.name: np.asarray(getattr(part, field.name)) for field in fields(part)}
        return {name: v[rows] if v.ndim else v for name, v in values.items()}

    return LoopCircuit(
        npn=Transistor(**some(circuit.npn)),
        pnp=Transistor(**some(circuit.pnp)),
        well=Shunt(**some(circuit.well)),
        substrate=Shunt(**some(circuit.substrate)),
        supply_v=circuit.supply_v,
        temperature_k=circuit.temperature_k,
    )


def _ranked(layout: Layout, pairs: Pairs, table: _Table, order: Ints) -> Sites:
    place = pair_places_um(layout, pairs)[order]
    ends, gains = table.ends, table.gains

    def ranked(column: Floats) -> Floats:
        return frozen(column[order])

    return Sites(
        ids=frozen(np.array([f"site-{rank + 1}" for rank in range(order.size)], dtype=np.str_)),
        pair=frozen(order),
        x_um=frozen(place[:, 0].copy()),
        y_um=frozen(place[:, 1].copy()),
        well_resistance_ohm=ranked(ends.well_self_ohm),
        substrate_resistance_ohm=ranked(ends.substrate_self_ohm),
        well_transfer_ohm=ranked(ends.well_transfer_ohm),
        substrate_transfer_ohm=ranked(ends.substrate_transfer_ohm),
        beta_pnp=ranked(gains.beta_pnp),
        beta_npn=ranked(gains.beta_npn),
        loop_gain_ceiling=ranked(gains.ceiling),
        loop_gain=ranked(gains.loop_gain),
        trigger_current_a=ranked(np.fmin(table.substrate_a, table.well_a)),
        trigger_well_a=ranked(table.well_a),
        trigger_substrate_a=ranked(table.substrate_a),
        patch=frozen(table.patch[order]),
    )
