"""Join the results of the wells and of the substrate into one table each."""

from __future__ import annotations

import numpy as np

from latchscan.layout.model import Floats, frozen
from latchscan.parasitics.model import BodyFields, Resistances, Transfers


def join_families(wells: BodyFields, substrate: BodyFields) -> tuple[Resistances, Transfers]:
    """One row for every source and pair, each taken from the family that solved it.

    A row that neither family solved stays NaN.
    """

    def join(first: Floats, second: Floats) -> Floats:
        return frozen(np.where(np.isnan(first), second, first))

    left, right = wells.resistances, substrate.resistances
    resistances = Resistances(
        mean_ohm=join(left.mean_ohm, right.mean_ohm),
        max_ohm=join(left.max_ohm, right.max_ohm),
        patch_ohm=join(left.patch_ohm, right.patch_ohm),
        relative_error=join(left.relative_error, right.relative_error),
    )
    transfers = Transfers(
        well_ohm=join(wells.transfers.well_ohm, substrate.transfers.well_ohm),
        substrate_ohm=join(wells.transfers.substrate_ohm, substrate.transfers.substrate_ohm),
    )
    return resistances, transfers
