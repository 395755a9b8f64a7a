"""How wide strips are at their narrowest, and how much of them is near a contact.

In: the strips of a ring.  Out: numbers and a place.  The least width is twice the largest
distance by which a strip can be eroded and still be one piece (for a closed ring: still
closed).  So a thin spur does not make a strip thin, and a neck or a slot that it has to
squeeze past does, wherever it is and whichever way it runs.
"""

from __future__ import annotations

from typing import Any

import numpy as np
import shapely

from latchscan.layout.model import Floats, Geometries

WIDTH_DIGITS = 3
"""Widths are rounded to a nanometre: erosion rounds its own results by about 0.01 %."""
EROSION_STEP_UM = 1e-5
"""Erosions are tried in steps down to this [um]."""
QUARTER = 32
"""Chords of a quarter circle: rounds the way past a corner to 0.03 % of the erosion."""
SHARE_DIGITS = 9
"""Shares are rounded to this many digits: what moving a drawing changes is noise."""
LEAST_KEPT = 0.8
"""Part of a strip's length and height that must be left of it; a shorter spur is none of it."""
SLACK_UM = 1e-4
"""How far from its limit an erosion stops when the narrow place is looked for [um]."""
LENGTH_STEP_UM = 1e-2
"""Narrow places count as equally long in steps of this size [um]."""


def least_width(strips: Geometries, enclosed: Any) -> tuple[float, Floats]:
    """Least width of strips and the place (x, y) where it is [um].

    Parameters
    ----------
    strips
        (n,) polygons of a ring, at least one.
    enclosed
        What the ring encloses: a strip that holds it in a hole must stay closed.
    """
    found: list[tuple[float, float, float]] = []
    for strip in strips:
        holes = shapely.polygons(shapely.get_rings(strip)[1:])
        closed = bool(shapely.covers(holes, enclosed).any())
        width, (x, y) = _narrowest(strip, enclosed if closed else None)
        found.append((round(width, WIDTH_DIGITS), y, x))
    width, y, x = min(found)
    return width, np.array([x, y])


def _narrowest(strip: Any, obstacle: Any | None) -> tuple[float, tuple[float, float]]:
    x0, y0, x1, y1 = strip.bounds
    if obstacle is None and shapely.area(strip) == (x1 - x0) * (y1 - y0):
        return min(x1 - x0, y1 - y0), ((x0 + x1) / 2, (y0 + y1) / 2)
    whole, broken = 0.0, min(x1 - x0, y1 - y0) / 2 + EROSION_STEP_UM
    if obstacle is not None:
        # eroded from both sides, it is gone at half of their distance at the latest
        inner, outer = _hole_around(strip, obstacle), shapely.get_exterior_ring(strip)
        broken = min(broken, float(shapely.distance(inner, outer)) / 2 + EROSION_STEP_UM)
    while broken - whole > EROSION_STEP_UM:
        middle = (whole + broken) / 2
        if _holds(strip, middle, obstacle):
            whole = middle
        else:
            broken = middle
    return whole + broken, _place(strip, whole, obstacle)


def _hole_around(strip: Any, obstacle: Any) -> Any:
    holes = shapely.polygons(shapely.get_rings(strip)[1:])
    return shapely.get_exterior_ring(holes[shapely.covers(holes, obstacle)][0])


def _eroded(strip: Any, by_um: float) -> Geometries:
    """Pieces that are left, none if nothing is."""
    parts = shapely.get_parts(strip.buffer(-by_um, quad_segs=QUARTER))
    return np.asarray(parts[~shapely.is_empty(parts)])


def _holds(strip: Any, by_um: float, obstacle: Any | None) -> bool:
    """Whether an eroded strip is still one strip: closed if it has to be, else as long."""
    parts = _eroded(strip, by_um)
    if len(parts) != 1:
        return False
    if obstacle is not None:
        return bool(
            shapely.covers(shapely.polygons(shapely.get_rings(parts[0])[1:]), obstacle).any()
        )
    x0, y0, x1, y1 = strip.bounds
    u0, v0, u1, v1 = parts[0].bounds
    kept_x, kept_y = u1 - u0 + 2 * by_um, v1 - v0 + 2 * by_um
    return bool(kept_x >= LEAST_KEPT * (x1 - x0) and kept_y >= LEAST_KEPT * (y1 - y0))


def _place(strip: Any, whole: float, obstacle: Any | None) -> tuple[float, float]:
    """Where a strip gives way: a point of what a little more erosion takes.

    Eroded almost to its limit, the narrow places are slivers; of those that hold the strip
    together the longest is taken, and of equal ones the lowest.
    """
    before = shapely.union_all(_eroded(strip, max(whole - SLACK_UM, 0.0)))
    rest = before.buffer(-2 * SLACK_UM).buffer(3 * SLACK_UM)
    slivers = shapely.get_parts(shapely.difference(before, rest))
    slivers = slivers[~shapely.is_empty(slivers)]
    if not len(slivers):
        slivers = shapely.get_parts(before)
    needed = [not _survives(before, sliver, obstacle) for sliver in slivers]
    if any(needed):
        slivers = slivers[needed]
    points = np.array([_middle(sliver) for sliver in slivers])
    length = np.rint(shapely.length(slivers) / LENGTH_STEP_UM)
    x, y = points[np.lexsort((points[:, 0], points[:, 1], -length))[0]]
    return float(x), float(y)


def _survives(whole: Any, sliver: Any, obstacle: Any | None) -> bool:
    """Whether what is left without a sliver is one piece, and closed if it has to be."""
    parts = shapely.get_parts(shapely.difference(whole, sliver.buffer(SLACK_UM / 4)))
    parts = parts[shapely.area(parts) > SLACK_UM**2]
    if len(parts) != 1 or obstacle is None:
        return len(parts) == 1
    return bool(shapely.covers(shapely.polygons(shapely.get_rings(parts[0])[1:]), obstacle).any())


def _middle(part: Any) -> Floats:
    """A point of a thin part near its middle."""
    centre = shapely.centroid(part)
    nearest = shapely.get_coordinates(shapely.shortest_line(part, centre))[0]
    return np.asarray(np.round(nearest, 6) + 0.0)


def contacted_share(strips: Geometries, contact_box_um: Floats, reach_um: float) -> float:
    """Share of strips' area no farther than a reach from a contact, in x and in y.

    Parameters
    ----------
    strips
        (n,) polygons that do not overlap.
    contact_box_um
        (c, 4) boxes of their contacts.
    reach_um
        By how much every contact's box is grown on each side [um].
    """
    if not len(contact_box_um):
        return 0.0
    grown = contact_box_um + np.array([-1.0, -1.0, 1.0, 1.0]) * reach_um
    # contacts stand in rows and columns: a union of thousands of boxes becomes one of a few
    runs = _run_together(_run_together(grown, 0), 1)
    reached = shapely.union_all(shapely.box(*runs.T))
    near = float(shapely.area(shapely.intersection(strips, reached)).sum())
    return min(1.0, round(near / float(shapely.area(strips).sum()), SHARE_DIGITS))


def _run_together(box: Floats, axis: int) -> Floats:
    """Boxes of one row (the same extent across an axis) that meet along it, joined."""
    across = np.unique(box[:, [1 - axis, 3 - axis]], axis=0, return_inverse=True)[1].reshape(-1)
    order = np.lexsort((box[:, axis], across))
    box, across = box[order], across[order]
    low, high = box[:, axis], box[:, axis + 2]
    # a stride that keeps one row's reach off the next row
    stride = across * (float(high.max() - low.min()) + 1.0)
    reached = np.maximum.accumulate(high + stride)
    fresh = np.ones(len(box), dtype=np.bool_)
    fresh[1:] = (low + stride)[1:] > reached[:-1]
    first = np.flatnonzero(fresh)
    return np.hstack([np.minimum.reduceat(box[:, :2], first),
                      np.maximum.reduceat(box[:, 2:], first)])  # fmt: skip
