"""One tile: its shapes as elements, which of them touch, and what hangs together.

In: a `TraceTask`, small enough to send to another process.  Out: `TileNets`, columns of the
tile's components with all that tells which components of other tiles are the same.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from latchscan.layout.components import connected
from latchscan.layout.derive.geometry import SUBGRID, bounding_boxes
from latchscan.layout.derive.stitching import Rings, join_rings
from latchscan.layout.derive.windows import BoxDbu
from latchscan.layout.file.tables import Pair
from latchscan.layout.file.walk import PolygonColumns
from latchscan.layout.model import Geometries, Ints
from latchscan.layout.source import LayoutSource
from latchscan.layout.trace.drawn import Shapes, open_shapes
from latchscan.layout.trace.elements import Elements, cut_out, elements_of_rings
from latchscan.layout.trace.stack import PADS, Sort, Stack
from latchscan.layout.trace.table import Table, fill_table
from latchscan.layout.trace.touching import (
    BoxSet,
    joining_between,
    joining_within,
    touching_between,
)

MOST_EDGES = 1 << 22
"""Touching pairs after which components are formed to let go of them."""


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Given:
    """What a tile is given besides the layout: the derived shapes and labels that meet it.

    Attributes
    ----------
    derived
        Sort -> elements of its derived shapes.
    probes
        Elements of every probe's polygons.
    label
        (l,) numbers of the labels that lie in the tile.
    label_at
        (l, 2) their points [grid steps].
    label_sorts
        (l, conductors) the conductors that each may name.
    """

    derived: dict[int, Elements]
    probes: tuple[Elements, ...]
    label: Ints
    label_at: Ints
    label_sorts: NDArray[np.bool_]


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class TraceTask:
    """A few tiles [database units], what each is given, and the box of the whole block."""

    source: LayoutSource
    stack: Stack
    tiles: tuple[BoxDbu, ...]
    given: tuple[Given, ...]
    block: BoxDbu


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Hits:
    """Elements of sorts that polygons of probes touch (h).

    Attributes
    ----------
    probe, number
        (h,) the probe and which of its polygons.
    sort, component
        (h,) sort of the element and the component it belongs to.
    box
        (h, 4) its box [grid steps].
    polygon
        (h,) the element where it is slanted, else None.
    """

    probe: Ints
    number: Ints
    sort: Ints
    component: Ints
    box: Ints
    polygon: Geometries


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class TileNets:
    """Components of a tile (k) and what they have in common with other tiles.

    Attributes
    ----------
    count
        (k, sorts) shapes of each sort; every shape is counted in one tile only.
    box
        (k, 4) box around the component's elements [grid steps].
    first
        (k, 5) the component's first element: (sort, slanted or not) and y0, x0, y1, x1.
    border, border_component
        (b, 5) elements that reach the tile's border, equal in every tile; their components.
    crossing, crossing_box
        (c, 2) components of poly and of other sorts that touch; (c, 4) box where they do.
    piece, piece_component
        (p, 2) sort and number of the derived shapes that the tile counts; their components.
    label, label_sort, label_component
        (l,) labels that lie on a shape, its sort and component.
    hits
        What the probes touch.
    shapes
        What is drawn of components that may be part of a net with a name or a pad.
    """

    count: Ints
    box: Ints
    first: Ints
    border: Ints
    border_component: Ints
    crossing: Ints
    crossing_box: Ints
    piece: Ints
    piece_component: Ints
    label: Ints
    label_sort: Ints
    label_component: Ints
    hits: Hits
    shapes: Shapes


def trace_tiles(task: TraceTask) -> list[TileNets]:
    """Components of every tile of a task."""
    found = []
    for tile, given in zip(task.tiles, task.given, strict=True):
        table = fill_table(
            _sorts(task, tile, given), given.probes, given.label_at, tile, task.block
        )
        found.append(_trace(task.stack, table, given))
    return found


def _sorts(task: TraceTask, tile: BoxDbu, given: Given) -> list[Elements]:
    """Elements of every sort that meet the tile."""
    columns = task.source.window(tile, task.stack.pairs())
    found = []
    for number, sort in enumerate(task.stack.sorts):
        if sort.expression:
            found.append(given.derived[number])
            continue
        rings = polygon_rings(columns, sort.pairs)
        found.append(drawn_elements(task.source, sort, rings))
    return found


def polygon_rings(columns: dict[Pair, PolygonColumns], pairs: tuple[Pair, ...]) -> Rings:
    """Polygons of some layer/datatype pairs as rings [grid steps]."""
    return join_rings(
        [Rings(points=columns[p].points * SUBGRID, first=columns[p].first) for p in pairs]
    )


def drawn_elements(source: LayoutSource, sort: Sort, rings: Rings) -> Elements:
    """Elements of a drawn sort's polygons [grid steps], markers cut out."""
    if not sort.less:
        return elements_of_rings(rings)
    return elements_of_rings(*cut_out(rings, _markers(source, sort, rings)))


def _markers(source: LayoutSource, sort: Sort, rings: Rings) -> Rings:
    """Marker polygons around all of the rings: each ring sees the same ones in every tile."""
    if not rings.count:
        return rings
    boxes = bounding_boxes(rings)
    low, high = boxes[:, :2].min(axis=0) // SUBGRID, -(-boxes[:, 2:].max(axis=0) // SUBGRID)
    around = (int(low[0]), int(low[1]), int(high[0]), int(high[1]))
    return polygon_rings(source.window(around, sort.less), sort.less)


def _trace(stack: Stack, table: Table, given: Given) -> TileNets:
    sets = [table.box_set(table.sort_rows(sort)) for sort in range(len(stack.sorts))]
    component = components_of(stack, table, sets)
    total = int(component.max(initial=-1)) + 1
    _, lead = np.unique(component, return_index=True)
    counted = np.flatnonzero(table.counted)
    kind = component[table.element[counted]] * len(stack.sorts) + table.shape_sort[counted]
    count = np.bincount(kind, minlength=total * len(stack.sorts))
    box = np.empty((total, 4), dtype=np.int64)
    order = np.argsort(component, kind="stable")
    starts = np.searchsorted(component[order], np.arange(total))
    if total:
        ranked = table.boxes[: table.size][order]
        box[:, :2] = np.minimum.reduceat(ranked[:, :2], starts)
        box[:, 2:] = np.maximum.reduceat(ranked[:, 2:], starts)
    border = table.border()
    crossing, crossing_box = _crossings(stack, table, sets, component)
    is_derived = np.array([bool(sort.expression) for sort in stack.sorts], dtype=np.bool_)
    derived = counted[is_derived[table.shape_sort[counted]]]
    label, label_sort, label_component = _labels(stack, table, sets, given, component)
    hits = _hits(stack, table, sets, component)
    ends = (component[border], label_component, _under_pads(stack, hits))
    return TileNets(
        count=count.reshape(total, len(stack.sorts)),
        box=box,
        first=table.keys(lead),
        border=table.identities(border),
        border_component=component[border],
        crossing=crossing,
        crossing_box=crossing_box,
        piece=np.column_stack([table.shape_sort[derived], table.shape[derived]]),
        piece_component=component[table.element[derived]],
        label=label,
        label_sort=label_sort,
        label_component=label_component,
        hits=hits,
        shapes=open_shapes(stack, table, component, crossing, np.concatenate(ends)),
    )


def _under_pads(stack: Stack, hits: Hits) -> Ints:
    """Components that lie under a pad."""
    pads = [number for number, probe in enumerate(stack.probes) if probe.name == PADS]
    return hits.component[np.isin(hits.probe, pads)]


def components_of(stack: Stack, table: Table, sets: list[BoxSet]) -> Ints:
    """(n,) number of the component of every element: what touches and is one."""
    parts = [joining_within(one) for one in sets]
    parts += [joining_between(sets[a], sets[b]) for a, b in stack.joins]
    held: list[tuple[Ints, Ints]] = [(_none(), _none())]
    count = 0
    for part in parts:
        for pair in part:
            held.append(table.really(*pair))
            count += len(held[-1][0])
            if count > MOST_EDGES:
                component = connected(table.size, *_both(held))
                _, lead = np.unique(component, return_index=True)
                held, count = [(lead[component], np.arange(table.size))], 0
    return connected(table.size, *_both(held))


def _both(pairs: list[tuple[Ints, Ints]]) -> tuple[Ints, Ints]:
    one, other = zip(*pairs, strict=True)
    return np.concatenate(one), np.concatenate(other)


def _none() -> Ints:
    return np.zeros(0, dtype=np.int64)


def _crossings(
    stack: Stack, table: Table, sets: list[BoxSet], component: Ints
) -> tuple[Ints, Ints]:
    """Components of poly and others that touch, and the boxes of the contacts between them."""
    pairs, boxes = [np.zeros((0, 2), np.int64)], [np.zeros((0, 4), np.int64)]
    for poly, sort in stack.crossings:
        one, other = table.really(*touching_between(sets[poly], sets[sort]))
        place = table.boxes[other]
        if sort < stack.conductor_count:
            low = np.maximum(place[:, :2], table.boxes[one, :2])
            place = np.hstack([low, np.minimum(place[:, 2:], table.boxes[one, 2:])])
        pairs.append(np.column_stack([component[one], component[other]]))
        boxes.append(place)
    rows = np.unique(np.hstack([np.concatenate(pairs), np.concatenate(boxes)]), axis=0)
    return rows[:, :2], rows[:, 2:]


def _labels(
    stack: Stack, table: Table, sets: list[BoxSet], given: Given, component: Ints
) -> tuple[Ints, Ints, Ints]:
    """Labels on shapes: the label, the uppermost sort that it may name, the component."""
    points = table.box_set(table.label_rows())
    best = np.full((len(given.label), 2), -1)
    for sort in range(stack.conductor_count):
        row, element = table.really(*touching_between(points, sets[sort]))
        place = row - table.label_rows()[:1]
        allowed = given.label_sorts[place, sort]
        best[place[allowed], 0] = sort
        best[place[allowed], 1] = component[element[allowed]]
    found = np.flatnonzero(best[:, 0] >= 0)
    return given.label[found], best[found, 0], best[found, 1]


def _hits(stack: Stack, table: Table, sets: list[BoxSet], component: Ints) -> Hits:
    """Elements that the probes' polygons touch."""
    columns = [np.zeros((0, 8), dtype=np.int64)]
    polygons = [np.zeros(0, dtype=np.object_)]
    for number, probe in enumerate(stack.probes):
        rows = table.probe_rows(number)
        own = table.box_set(rows)
        for sort in probe.sorts if len(rows) else ():
            one, element = table.really(*touching_between(own, sets[sort]))
            if not len(one):
                continue
            pairs = np.unique(
                np.column_stack([table.probe_shape[one - table.size], element]), axis=0
            )
            element = pairs[:, 1]
            count = np.full(len(element), 1)
            columns.append(
                np.column_stack(
                    [
                        number * count,
                        pairs[:, 0],
                        sort * count,
                        component[element],
                        *table.boxes[element].T,
                    ]
                )
            )
            polygons.append(table.slanted(element))
    rows = np.concatenate(columns)
    return Hits(
        probe=rows[:, 0],
        number=rows[:, 1],
        sort=rows[:, 2],
        component=rows[:, 3],
        box=rows[:, 4:],
        polygon=np.concatenate(polygons),
    )
