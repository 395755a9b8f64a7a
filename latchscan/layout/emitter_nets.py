"""The net of every emitter: that of the diffusion it is drawn in.

In: the layout's emitters and the nets.  Out: one net an emitter.
"""

from __future__ import annotations

import numpy as np
import shapely

from latchscan.layout.connections import Nets
from latchscan.layout.model import Ints, Layout
from latchscan.layout.naming.footing import pieces_beneath


def emitter_nets(layout: Layout, nets: Nets) -> Ints:
    """Net of every emitter.

    Parameters
    ----------
    layout
        Its emitters (n).
    nets
        Their pieces of diffusion.

    Returns
    -------
    (n,) integer array
        The net of the piece that covers most of the emitter, the first of equals; -1 where
        none does or where the technology names no conductors.
    """
    emitters = layout.emitters
    found = np.full(len(emitters.ids), -1, dtype=np.int64)
    emitter, piece = pieces_beneath(emitters.polygons, nets.piece_polygons)
    node = nets.piece_node[piece]
    emitter, piece, node = emitter[node >= 0], piece[node >= 0], node[node >= 0]
    area = np.zeros(len(emitter))
    several = np.bincount(emitter, minlength=len(found))[emitter] > 1
    area[several] = shapely.area(
        shapely.intersection(
            emitters.polygons[emitter[several]], nets.piece_polygons[piece[several]]
        )
    )
    # rounded, so that equal shares tie in whichever order an overlay adds them up
    order = np.lexsort((piece, -np.round(area, 6), emitter))
    row, first = np.unique(emitter[order], return_index=True)
    found[row] = nets.node_net[node[order][first]]
    return found
