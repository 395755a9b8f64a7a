"""What the field solutions say of every emitter and every candidate thyristor.

Resistances are potentials per ampere forced into the emitter, spread evenly over its area.
"""

from __future__ import annotations

from dataclasses import dataclass

from latchscan.layout.model import Floats


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Resistances:
    """Resistance from every source to the taps of its body.

    Rows are the n emitters followed by one row a body (b); a body's row is finite only for an
    isolated p-well that acts as the anode of the n-well around it.  A body without a
    contacted tap has infinite resistance.

    Attributes
    ----------
    mean_ohm
        (n + b,) mean potential over the source itself for 1 A into it.
    max_ohm
        (n + b,) largest potential over the source itself for 1 A into it.
    patch_ohm
        (n + b,) mean potential over the source when every source of its body that comes
        within the patch radius of it is driven together, 1 A in all, evenly per area.
    relative_error
        (n + b,) estimated relative error of `mean_ohm`.
    """

    mean_ohm: Floats
    max_ohm: Floats
    patch_ohm: Floats
    relative_error: Floats


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Transfers:
    """Transfer resistances of the candidate thyristors, aligned with the pairs (m).

    Attributes
    ----------
    well_ohm
        (m,) potential at the anode for 1 A collected at the well's edge, R_w(A, C).
    substrate_ohm
        (m,) potential at the cathode for 1 A of holes arriving under the anode, R_s(K, A).
    """

    well_ohm: Floats
    substrate_ohm: Floats


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class BodyFields:
    """Results of one family of bodies: resistances of its sources, transfers of the pairs.

    Rows that belong to the other family are NaN.  The wells' family fills `transfers.well_ohm`
    of every pair and `transfers.substrate_ohm` of the pairs whose cathode lies in an isolated
    p-well; the substrate's family fills `transfers.substrate_ohm` of the others.

    Attributes
    ----------
    resistances, transfers
        See `Resistances` and `Transfers`.
    """

    resistances: Resistances
    transfers: Transfers
