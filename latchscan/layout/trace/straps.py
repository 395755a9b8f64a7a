"""Poly that straps nodes: its merged polygons and the contacts that lead to each node.

Nearly all poly of a block touches one node only and is never looked at again.  The rest is
fetched in one look-up around the boxes of its components, and found among what comes by the
first element of each.
"""

from __future__ import annotations

from typing import Any

import numpy as np
import shapely

from latchscan.layout.connections import STRAP
from latchscan.layout.derive.geometry import SUBGRID
from latchscan.layout.derive.stitching import Rings, pick_rings
from latchscan.layout.model import Geometries, Ints
from latchscan.layout.trace.devices import Device, Ground, Terminal, boxes_in_um, in_um
from latchscan.layout.trace.elements import (
    elements_of_polygons,
    elements_of_rings,
)
from latchscan.layout.trace.table import Table, fill_table
from latchscan.layout.trace.tiles import (
    components_of,
    drawn_elements,
    polygon_rings,
)


def straps_of(ground: Ground, chosen: Ints) -> list[Device]:
    """Devices of the components of poly in `chosen`, ascending; each touches several nodes."""
    polygons = merged_poly(ground, chosen)
    whole, stack = ground.whole, ground.stack
    first = np.searchsorted(whole.crossing[:, 0], chosen, side="left")
    last = np.searchsorted(whole.crossing[:, 0], chosen, side="right")
    found = []
    for component, polygon, low, high in zip(
        chosen.tolist(), polygons, first.tolist(), last.tolist(), strict=True
    ):
        node, boxes = whole.crossing[low:high, 1], whole.crossing_box[low:high]
        terminals = tuple(
            Terminal(
                component=home,
                shape=_union(boxes_in_um(boxes[node == home], ground.unit_um)),
                contacts=int(np.count_nonzero(node == home)),
            )
            for home in np.unique(node).tolist()
        )
        sort = stack.sorts[int(whole.sort()[component])]
        found.append(Device(kind=STRAP, conductor=sort.name, polygon=polygon, terminals=terminals))
    return found


def merged_poly(ground: Ground, chosen: Ints) -> Geometries:
    """One merged polygon [um] for each of the components of poly in `chosen`."""
    found = np.empty(len(chosen), dtype=np.object_)
    if not len(chosen):
        return found
    boxes = ground.whole.box[chosen]
    table = _fetched(ground, boxes)
    sets = [table.box_set(table.sort_rows(s)) for s in range(len(ground.stack.sorts))]
    component = components_of(ground.stack, table, sets)
    order = np.argsort(component, kind="stable")
    starts = np.searchsorted(component[order], np.arange(int(component.max(initial=-1)) + 2))
    wanted = {tuple(row): place for place, row in enumerate(ground.whole.first[chosen].tolist())}
    keys = table.keys(np.arange(table.size)).tolist()
    for row, key in enumerate(keys):
        place = wanted.get(tuple(key))
        if place is not None and found[place] is None:
            own = order[starts[component[row]] : starts[component[row] + 1]]
            bent = table.slanted(own)
            plain = np.array([shape is None for shape in bent], dtype=np.bool_)
            parts = [*shapely.box(*table.boxes[own[plain]].astype(np.float64).T), *bent[~plain]]
            found[place] = in_um(_union(np.array(parts, dtype=np.object_)), ground.unit_um)
    return found


def _union(parts: Geometries) -> Any:
    return shapely.normalize(shapely.union_all(parts))


def _fetched(ground: Ground, boxes: Ints) -> Table:
    """All poly whose box meets any of the boxes [grid steps]; nothing of other sorts."""
    source, stack = ground.source, ground.stack
    around = np.hstack([boxes[:, :2] // SUBGRID, -(-boxes[:, 2:] // SUBGRID)])
    sorts = []
    for number, sort in enumerate(stack.sorts):
        if not stack.is_poly(number):
            sorts.append(elements_of_rings(polygon_rings({}, ())))
        elif sort.expression:
            sorts.append(elements_of_polygons(_near(ground, sort.name, boxes), ground.unit_um))
        else:
            rings = polygon_rings(source.near(around, sort.pairs), sort.pairs)
            sorts.append(drawn_elements(source, sort, _distinct_rings(rings)))
    low, high = boxes[:, :2].min(axis=0) // SUBGRID, -(-boxes[:, 2:].max(axis=0) // SUBGRID)
    block = (int(low[0]), int(low[1]), int(high[0]), int(high[1]))
    return fill_table(sorts, (), np.zeros((0, 2), dtype=np.int64), block, block)


def _near(ground: Ground, name: str, boxes: Ints) -> Geometries:
    polygons = ground.derived[name]
    drawn = boxes_in_um(boxes, ground.unit_um)
    near = shapely.STRtree(polygons).query(drawn)[1]
    return np.asarray(polygons[np.unique(near)], dtype=np.object_)


def _distinct_rings(rings: Rings) -> Rings:
    """Rings that came from several boxes once."""
    points, first = rings.points, rings.first.tolist()
    known: dict[bytes, int] = {}
    for row in range(rings.count):
        known.setdefault(points[first[row] : first[row + 1]].tobytes(), row)
    return pick_rings(rings, np.array(sorted(known.values()), dtype=np.int64))
