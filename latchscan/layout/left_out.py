"""Parts of the layout that the block file leaves out of the judgement.

What lies there stays drawn: it still ties, conducts and collects.  But no site with a half
inside such a box is evaluated, and no rule reports a place inside one.
"""

from __future__ import annotations

from dataclasses import fields, replace

import numpy as np
import shapely
from numpy.typing import NDArray

from latchscan.layout.model import Floats, Layout, Pairs, frozen


def inside_any(x_um: Floats, y_um: Floats, boxes_um: Floats) -> NDArray[np.bool_]:
    """Whether each point (x, y) lies in any of the boxes (k, 4), edges included.

    Examples
    --------
    >>> inside_any(np.array([1.0, 5.0]), np.zeros(2), np.array([[0.0, 0.0, 2.0, 2.0]])).tolist()
    [True, False]
    """
    found = np.zeros(len(x_um), dtype=np.bool_)
    for x0, y0, x1, y1 in boxes_um.tolist():
        found |= (x_um >= x0) & (x_um <= x1) & (y_um >= y0) & (y_um <= y1)
    return found


def pairs_outside(pairs: Pairs, layout: Layout, boxes_um: Floats) -> Pairs:
    """The pairs of which neither anode nor cathode is centred in any of the boxes (k, 4) [um]."""
    if not len(boxes_um):
        return pairs
    emitters = layout.emitters.box_um.reshape(-1, 4)
    bodies = np.array([shapely.total_bounds(body.polygons) for body in layout.bodies])
    sources = np.concatenate([emitters, bodies.reshape(-1, 4)])
    centre = (sources[:, :2] + sources[:, 2:]) / 2
    gone = inside_any(centre[:, 0], centre[:, 1], boxes_um)
    kept = ~(gone[pairs.anode] | gone[pairs.cathode])
    columns = {f.name: frozen(getattr(pairs, f.name)[kept]) for f in fields(pairs)}
    return replace(pairs, **columns)
