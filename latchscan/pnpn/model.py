"""The value that the thyristor evaluation passes on: one row a site."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from latchscan.layout.model import Floats, Ints


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Sites:
    """Evaluated thyristors, worst first.

    Attributes
    ----------
    ids
        (m,) ``site-1`` is the worst.
    pair
        (m,) index into the pairs.
    x_um, y_um
        (m,) middle of the shortest line from anode to cathode.
    well_resistance_ohm, substrate_resistance_ohm
        (m,) self-resistances R_w(A, A) and R_s(K, K) that were used.
    well_transfer_ohm, substrate_transfer_ohm
        (m,) R_w(A, C) and R_s(K, A) that were used.
    beta_pnp, beta_npn
        (m,) current gains at the probe current, high injection included.
    loop_gain_ceiling
        (m,) loop gain at unlimited current; below 1 the site cannot latch.
    loop_gain
        (m,) loop gain at the probe current.
    trigger_current_a
        (m,) the lesser of the two trigger currents below; NaN where nothing fires.
    trigger_well_a, trigger_substrate_a
        (m,) electrons collected by the well, holes pushed into the substrate, that fire it.
    patch
        (m,) True where the patch resistance gave the worse loop gain, False for the single
        emitter.
    """

    ids: NDArray[np.str_]
    pair: Ints
    x_um: Floats
    y_um: Floats
    well_resistance_ohm: Floats
    substrate_resistance_ohm: Floats
    well_transfer_ohm: Floats
    substrate_transfer_ohm: Floats
    beta_pnp: Floats
    beta_npn: Floats
    loop_gain_ceiling: Floats
    loop_gain: Floats
    trigger_current_a: Floats
    trigger_well_a: Floats
    trigger_substrate_a: Floats
    patch: NDArray[np.bool_]
