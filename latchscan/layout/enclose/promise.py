"""Whether strips can make up a ring at all, told from their boxes.

In: boxes of injectors and of strips near them.  Out: which injectors are worth a search.  A
ring stands on at least three sides of what it encloses: two parallel rails, along every row of
standard cells, are none, however long they are.
"""

from __future__ import annotations

import numpy as np
import shapely

from latchscan.layout.connections import Flags
from latchscan.layout.enclose.outline import Outline
from latchscan.layout.model import Floats, Geometries, Ints

SIDES = 3
"""Sides of an injector on which strips must stand to be a ring."""
LEAST_ON_A_SIDE = 0.5
"""Part of the room's length that strips must bar on a side to stand there."""
LEAST_RISE = 0.2
"""Least extent of a strip across the view in that along it; less is a rail seen endwise."""
LEAST_IN_VIEW = 0.4
"""Part of a view 90 degrees wide that small strips must take up together."""


def promising(seat_box_um: Floats, seat: Ints, strip_box_um: Floats) -> Flags:
    """Which seats may have a ring.

    A seat that a strip's box surrounds always may.  Of rings of several strips only such are
    left out as are made of short pieces far away, below `LEAST_RISE` and `LEAST_IN_VIEW`.

    Parameters
    ----------
    seat_box_um
        (s, 4) boxes of what has to be enclosed.
    seat
        (m,) the seat of each pair of a seat and a strip near it.
    strip_box_um
        (m, 4) the strip's box of each pair.
    """
    own = seat_box_um[seat]
    around = (strip_box_um[:, :2] < own[:, :2]) & (strip_box_um[:, 2:] > own[:, 2:])
    found = np.zeros(len(seat_box_um), dtype=np.bool_)
    found[seat[around.all(axis=1)]] = True
    standing = np.zeros(len(seat_box_um), dtype=np.int64)
    for axis in (0, 1):
        for sign in (1.0, -1.0):
            standing += _stands(
                _turned(own, axis, sign), _turned(strip_box_um, axis, sign), seat, len(seat_box_um)
            )
    return np.asarray(found | (standing >= SIDES))


def _turned(box: Floats, axis: int, sign: float) -> Floats:
    """Boxes with the chosen axis first, mirrored so that the side looked at lies below."""
    along = np.sort(sign * box[:, [axis, axis + 2]], axis=1)
    return np.column_stack([along, box[:, 1 - axis], box[:, 3 - axis]])


def _stands(own: Floats, strip: Floats, seat: Ints, count: int) -> Flags:
    """(s,) whether strips stand below the seat along the first axis."""
    near, far = own[:, 0] - strip[:, 1], own[:, 0] - strip[:, 0]
    rise = strip[:, 3] - strip[:, 2]
    off = np.maximum(strip[:, 2] - own[:, 3], own[:, 2] - strip[:, 3])
    found = np.zeros(count, dtype=np.bool_)
    found[seat[(far > 0) & (rise >= LEAST_RISE * far) & (off <= far)]] = True
    whole = (near >= 0) & (off <= near)
    total = np.bincount(seat[whole], weights=rise[whole], minlength=count)
    nearest = np.full(count, np.inf)
    np.minimum.at(nearest, seat[whole], near[whole])
    height = np.zeros(count)
    height[seat] = own[:, 3] - own[:, 2]
    return found | (total >= LEAST_IN_VIEW * (2 * nearest + height))


def stands_around(outline: Outline, strips: Geometries, seat_box_um: Floats) -> bool:
    """Whether the strips of an open outline stand on enough sides of a seat.

    A side counts where strips beyond the seat bar at least `LEAST_ON_A_SIDE` of the room.
    """
    x0, y0, x1, y1 = seat_box_um.tolist()
    left, low, right, high = outline.room.bounds
    a, b, c, d = shapely.total_bounds(strips).tolist()
    views = (
        ((a, b, x0, d), 1, (low, high)),
        ((x1, b, c, d), 1, (low, high)),
        ((a, b, c, y0), 0, (left, right)),
        ((a, y1, c, d), 0, (left, right)),
    )
    standing = 0
    for (u0, v0, u1, v1), axis, room in views:
        if u1 > u0 and v1 > v0:
            parts = shapely.get_parts(shapely.intersection(strips, shapely.box(u0, v0, u1, v1)))
            parts = parts[shapely.area(parts) > 0]
            spans = shapely.bounds(parts).reshape(-1, 4)[:, [axis, axis + 2]]
            barred = _covered(np.clip(spans, *room))
            standing += barred >= LEAST_ON_A_SIDE * (room[1] - room[0])
    return standing >= SIDES


def _covered(spans: Floats) -> float:
    """Length of a line that is covered by spans (n, 2)."""
    if not len(spans):
        return 0.0
    spans = spans[np.lexsort((spans[:, 1], spans[:, 0]))]
    reached = np.concatenate([[-np.inf], np.maximum.accumulate(spans[:, 1])[:-1]])
    return float(np.maximum(0.0, spans[:, 1] - np.maximum(spans[:, 0], reached)).sum())
