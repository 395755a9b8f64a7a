"""What is drawn of the nets that a person asks for: rectangles of metal and poly, and the rest.

In: a tile's table and components.  Out: `Shapes`, the tile's own part of what may belong to a
net with a name or a pad; once the nets are known, `shapes_of_nets` keeps what does.  A tile
owns the elements whose lower left corner lies in it and hands them out whole, so that no seam
shows.  What ends inside a tile and has neither label nor pad there is nobody's that is asked
for: nearly all of a block's wiring never leaves its tile.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import shapely
from numpy.typing import NDArray

from latchscan.layout.components import connected
from latchscan.layout.derive.geometry import SUBGRID
from latchscan.layout.model import Floats, Geometries, Ints
from latchscan.layout.runs import within_runs
from latchscan.layout.trace.rectangles import joined_runs
from latchscan.layout.trace.stack import Stack
from latchscan.layout.trace.table import Table

MOST_SHAPES = 20_000
"""Shapes of one net that are kept: the largest by area, the lowest and leftmost of equals."""


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Shapes:
    """Rectangles (n) and slanted shapes (p) of conductors other than diffusion.

    Attributes
    ----------
    box
        (n, 4) x0, y0, x1, y1 [grid steps]; those that continue each other are one.
    box_component, box_sort
        (n,) component and sort of each.
    polygon
        (p,) shapely polygons [grid steps].
    polygon_component, polygon_sort
        (p,) component and sort of each.
    """

    box: NDArray[np.int32]
    box_component: Ints
    box_sort: Ints
    polygon: Geometries
    polygon_component: Ints
    polygon_sort: Ints


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class NetShapes:
    """The columns of `Nets` that tell what is drawn of its nets; see there."""

    net: Ints
    layer: Ints
    box_um: Floats
    polygon: Geometries
    total: Ints


def open_shapes(stack: Stack, table: Table, component: Ints, crossing: Ints, ends: Ints) -> Shapes:
    """The tile's own shapes of all components that may be part of a net that is asked for.

    Parameters
    ----------
    component
        (n,) component of every element.
    crossing
        (c, 2) components that are on one net although they are not one.
    ends
        Components that go on in other tiles, or have a label or a pad.
    """
    total = int(component.max(initial=-1)) + 1
    cluster = connected(total, crossing[:, 0], crossing[:, 1])
    going_on = np.zeros(total, dtype=np.bool_)
    going_on[cluster[ends]] = True
    wanted = table.owned & going_on[cluster][component]
    first = table.sort_first
    shown = [n for n in range(stack.conductor_count) if stack.sorts[n].kind != "diffusion"]
    rows = [first[sort] + np.flatnonzero(wanted[first[sort] : first[sort + 1]]) for sort in shown]
    row = np.concatenate([np.zeros(0, dtype=np.int64), *rows])
    sort = np.repeat(np.array(shown, dtype=np.int64), [len(one) for one in rows])
    plain = table.polygon[row] < 0
    sorts = len(stack.sorts)
    key = component[row[plain]] * sorts + sort[plain]
    box, key = joined_runs(table.boxes[row[plain]], key, 0)
    return Shapes(
        box=box.astype(np.int32),
        box_component=key // sorts,
        box_sort=key % sorts,
        polygon=table.polygons[table.polygon[row[~plain]]],
        polygon_component=component[row[~plain]],
        polygon_sort=sort[~plain],
    )


def shapes_of_nets(shapes: Shapes, net: Ints, nets: int, sorts: int, unit_um: float) -> NetShapes:
    """What is drawn of some nets.

    Parameters
    ----------
    net
        (components,) net of every component, -1 for those that are not asked for.
    nets, sorts
        How many nets and sorts there are.
    """
    owner = net[shapes.box_component]
    rows = np.flatnonzero(owner >= 0)
    key = owner[rows] * sorts + shapes.box_sort[rows]
    box, key = joined_runs(shapes.box[rows].astype(np.int64), key, 0)
    box, key = joined_runs(box, key, 1)
    polygon, polygon_key = _distinct_polygons(shapes, net, sorts)
    bounds = np.rint(shapely.bounds(polygon)).astype(np.int64).reshape(-1, 4)
    side = box[:, 2:] - box[:, :2]
    area = np.concatenate([side[:, 0] * side[:, 1], np.rint(shapely.area(polygon))])
    outline = np.concatenate([np.full(len(box), None, dtype=np.object_), polygon])
    box, key = np.concatenate([box, bounds]), np.concatenate([key, polygon_key])
    place = (box[:, 2], box[:, 3], box[:, 0], box[:, 1], key % sorts)
    total = np.bincount(key // sorts, minlength=nets)
    largest = np.lexsort((*place, -area, key // sorts))
    kept = np.zeros(len(key), dtype=np.bool_)
    kept[largest[within_runs(total) < MOST_SHAPES]] = True
    order = np.lexsort((*place, key // sorts))
    order = order[kept[order]]
    outline = outline[order]
    slanted = np.flatnonzero(outline != np.array(None))
    outline[slanted] = shapely.transform(outline[slanted], lambda p: p / SUBGRID * unit_um)
    return NetShapes(
        net=key[order] // sorts,
        layer=key[order] % sorts,
        box_um=box[order] / SUBGRID * unit_um,
        polygon=outline,
        total=total,
    )


def _distinct_polygons(shapes: Shapes, net: Ints, sorts: int) -> tuple[Geometries, Ints]:
    """Slanted shapes of the nets that are asked for, equal ones once, and their keys."""
    owner = net[shapes.polygon_component]
    rows = np.flatnonzero(owner >= 0)
    key = owner[rows] * sorts + shapes.polygon_sort[rows]
    polygon = shapely.normalize(shapes.polygon[rows])
    told = list(zip(key.tolist(), shapely.to_wkb(polygon).tolist(), strict=True))
    first = {one: row for row, one in reversed(list(enumerate(told)))}
    order = np.array([first[one] for one in sorted(first)], dtype=np.int64)
    return np.asarray(polygon[order], dtype=np.object_), key[order]
