"""Shapes full of small targets, cut into cells with one target each.

In: shapes and the boxes that belong to each (taps and their contacts).  Out: convex pieces
of the shapes, each with a target that is near.  Targets mostly stand in rows and columns; a
piece cut halfway between them has its own target nearest to all of its points, so that its
corners decide on its largest distance.  Where targets stand otherwise the cut is as right,
only no help, and the search goes on from there.
"""

from __future__ import annotations

import numpy as np

from latchscan.layout.derive.slabs import ranked_levels, upright_parts
from latchscan.layout.measure.convex import Pieces, box_corners, cut_convex
from latchscan.layout.model import Floats, Geometries, Ints
from latchscan.layout.runs import within_runs

CROWD = 4
"""Targets in a rectangle from which on it is worth cutting."""
SPARSE = 4
"""Cells for each target beyond which rows and columns are no order of the targets."""
SAME_UM = 1e-5
"""Centres this near to each other stand in one row [um]."""


def cut_crowds(shapes: Geometries, boxes: Floats, owner: Ints) -> tuple[Pieces, Ints]:
    """Convex pieces of shapes and a target near to each.

    Parameters
    ----------
    shapes
        (n,) valid shapely polygons [um].
    boxes
        (m, 4) targets x0, y0, x1, y1 [um].
    owner
        (m,) the shape that each target belongs to.

    Returns
    -------
    pieces
        Pieces that together cover the shapes, sorted by shape.
    near
        (p,) a target of the same shape for each piece, -1 where none is known.

    Raises
    ------
    GeometryError
        If a shape that is no upright polygon crosses itself.
    """
    rectangles, of_shape, slanted = upright_parts(shapes)
    cells, of_cell, near = _cut_rectangles(rectangles, of_shape, boxes, owner)
    others = cut_convex(shapes[slanted])
    shape = np.concatenate([of_shape[of_cell], slanted[others.owner]])
    order = np.argsort(shape, kind="stable")
    corners = np.concatenate([box_corners(cells), others.corners_um])
    near = np.concatenate([near, np.full(len(others.owner), -1)])
    return Pieces(corners_um=corners[order], owner=shape[order]), near[order]


def _cut_rectangles(
    rectangles: Floats, of_shape: Ints, boxes: Floats, owner: Ints
) -> tuple[Floats, Ints, Ints]:
    """Cells (p, 4), the rectangle of each, and its target or -1."""
    centre = 0.5 * (boxes[:, :2] + boxes[:, 2:])
    rectangle = _rectangle_of(rectangles, of_shape, centre, owner)
    target = np.flatnonzero(rectangle >= 0)
    count = np.bincount(rectangle[target], minlength=len(rectangles))
    target = target[count[rectangle[target]] >= CROWD]
    columns, rows = (
        _Lines(rectangles[:, axis::2], rectangle[target], centre[target, axis]) for axis in (0, 1)
    )
    crowded = columns.count * rows.count <= SPARSE * count
    x_count = np.where(crowded, columns.count, 1)
    y_count = np.where(crowded, rows.count, 1)
    first = np.concatenate([[0], np.cumsum(x_count * y_count)])
    of_cell = np.repeat(np.arange(len(rectangles)), np.diff(first))
    iy, ix = np.divmod(within_runs(np.diff(first)), x_count[of_cell])
    cells = rectangles[of_cell]
    cut = crowded[of_cell]
    cells[cut, 0::2] = columns.spans[columns.first[of_cell[cut]] + ix[cut]]
    cells[cut, 1::2] = rows.spans[rows.first[of_cell[cut]] + iy[cut]]
    near = np.full(len(cells), -1)
    target_in, home = crowded[rectangle[target]], rectangle[target]
    place = first[home] + (rows.rank - rows.first[home]) * x_count[home]
    place += columns.rank - columns.first[home]
    near[place[target_in]] = target[target_in]
    return cells, of_cell, near


class _Lines:
    """Columns (or rows) of targets in each rectangle, along one axis.

    Attributes
    ----------
    spans
        (c, 2) from halfway to the column before to halfway to the next, sorted by rectangle;
        a rectangle without targets is one column.
    first
        (r,) each rectangle's first column.
    count
        (r,) how many it has.
    rank
        (t,) the column of each target.
    """

    def __init__(self, sides: Floats, rectangle: Ints, centre: Floats) -> None:
        every = np.arange(len(sides))
        empty = every[np.bincount(rectangle, minlength=len(sides)) == 0]
        home, place, rank = ranked_levels(
            np.concatenate([rectangle, empty]),
            np.rint(np.concatenate([centre, sides[empty, 0]]) / SAME_UM),
        )
        place = place * SAME_UM
        self.rank = rank[: len(rectangle)]
        self.count = np.bincount(home, minlength=len(sides))
        self.first = np.cumsum(self.count) - self.count
        # the mean of the true centres: the rounded place would leave the ridge by a little
        total = np.bincount(self.rank, weights=centre, minlength=len(home))
        held = np.bincount(self.rank, minlength=len(home))
        place = np.where(held > 0, total / np.maximum(held, 1), place)
        middle = 0.5 * (place[1:] + place[:-1])
        joined = home[1:] == home[:-1]
        low, high = sides[home, 0], sides[home, 1]
        low[1:][joined] = middle[joined]
        high[:-1][joined] = middle[joined]
        self.spans = np.column_stack([low, high])


def _rectangle_of(rectangles: Floats, of_shape: Ints, centre: Floats, owner: Ints) -> Ints:
    """(m,) the rectangle of a target's shape that holds its centre, or -1."""
    found = np.full(len(centre), -1)
    if not len(rectangles):
        return found
    # slabs of a shape do not overlap, nor do rectangles in a slab: two searches in order
    fresh = np.ones(len(rectangles), dtype=np.bool_)
    fresh[1:] = (of_shape[1:] != of_shape[:-1]) | (rectangles[1:, 1] != rectangles[:-1, 1])
    slab = np.cumsum(fresh) - 1
    at = _last_before(of_shape[fresh], rectangles[fresh, 1], owner, centre[:, 1])
    inside = _last_before(slab, rectangles[:, 0], at, centre[:, 0])
    box = rectangles[inside]
    held = (inside >= 0) & (of_shape[inside] == owner)
    held &= ((box[:, :2] <= centre) & (centre <= box[:, 2:])).all(axis=1)
    found[held] = inside[held]
    return found


def _last_before(group: Ints, start: Floats, asked: Ints, value: Floats) -> Ints:
    """Last row, in rows sorted by (group, start), that is not behind (asked, value)."""
    # complex numbers compare by their real parts first: one search over two keys
    return np.asarray(np.searchsorted(group + 1j * start, asked + 1j * value, side="right") - 1)
