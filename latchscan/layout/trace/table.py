"""All elements of a tile in one table of rows, each once and in an order of its own.

Rows: the elements of the sorts, sort by sort (rectangles by place, then slanted ones by
place), then those of the probes, then the points of the labels.
"""

from __future__ import annotations

import hashlib
from dataclasses import dataclass
from typing import Any

import numpy as np
import shapely
from numpy.typing import NDArray

from latchscan.layout.derive.geometry import SUBGRID
from latchscan.layout.derive.windows import BoxDbu
from latchscan.layout.model import Geometries, Ints
from latchscan.layout.trace.elements import Elements
from latchscan.layout.trace.touching import BoxSet

FEW_PARTNERS = 8
"""Polygons with fewer partners than this are not worth preparing."""


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Table:
    """Elements of a tile.

    Attributes
    ----------
    tile
        (4,) the tile [grid steps].
    size
        Elements of sorts: the first rows.
    boxes
        (n, 4) box of every row [grid steps].
    polygon
        (n,) index among `polygons` of a slanted element, -1 for a rectangle.
    polygons
        Slanted elements [grid steps].
    sort_first
        (sorts + 1,) offsets of the sorts' rows.
    owned
        (size,) whether the lower left corner of each element of a sort lies in the tile.
    probe_first
        (probes + 2,) offsets of the probes' rows, of the labels' and the end.
    probe_shape
        (n - size,) number of the probe's polygon or the label.
    shape, shape_sort, element, counted
        (s,) for the leading element of every shape: the shape's number, its sort, the row of
        the element, and whether this tile counts the shape.
    """

    tile: Ints
    size: int
    boxes: Ints
    polygon: Ints
    polygons: Geometries
    sort_first: Ints
    owned: NDArray[np.bool_]
    probe_first: Ints
    probe_shape: Ints
    shape: Ints
    shape_sort: Ints
    element: Ints
    counted: NDArray[np.bool_]

    def sort_rows(self, sort: int) -> Ints:
        """Rows of a sort."""
        return np.arange(self.sort_first[sort], self.sort_first[sort + 1])

    def probe_rows(self, probe: int) -> Ints:
        """Rows of a probe."""
        return np.arange(self.probe_first[probe], self.probe_first[probe + 1])

    def label_rows(self) -> Ints:
        """Rows of the labels."""
        return np.arange(self.probe_first[-2], self.probe_first[-1])

    def box_set(self, rows: Ints) -> BoxSet:
        """Rows, ready to be asked which of them touch."""
        return BoxSet(self.boxes, rows, self.tile, self.polygon[rows] < 0)

    def slanted(self, rows: Ints) -> Geometries:
        """(r,) polygons of the slanted rows, None for rectangles."""
        found = np.full(len(rows), None, dtype=np.object_)
        which = self.polygon[rows] >= 0
        found[which] = self.polygons[self.polygon[rows[which]]]
        return found

    def really(self, one: Ints, other: Ints) -> tuple[Ints, Ints]:
        """Of pairs whose boxes touch those whose shapes do."""
        if not len(self.polygons):
            return one, other
        unsure = np.flatnonzero((self.polygon[one] >= 0) | (self.polygon[other] >= 0))
        if not len(unsure):
            return one, other
        touch = np.ones(len(one), dtype=np.bool_)
        # the slanted partner first: it is the prepared one
        swap = self.polygon[one[unsure]] < 0
        first = np.where(swap, other[unsure], one[unsure])
        second = np.where(swap, one[unsure], other[unsure])
        left = self.polygons[self.polygon[first]]
        often, count = np.unique(self.polygon[first], return_counts=True)
        shapely.prepare(self.polygons[often[count >= FEW_PARTNERS]])
        touch[unsure] = shapely.intersects(left, self._shapes(second))
        return one[touch], other[touch]

    def _shapes(self, rows: Ints) -> Geometries:
        shapes = self.slanted(rows)
        plain = np.flatnonzero(self.polygon[rows] < 0)
        boxes = self.boxes[rows[plain]].astype(np.float64)
        point = boxes[:, 0] == boxes[:, 2]
        shapes[plain[point]] = shapely.points(boxes[point, :2])
        shapes[plain[~point]] = shapely.box(*boxes[~point].T)
        return shapes

    def keys(self, rows: Ints) -> Ints:
        """(r, 5) what orders elements: sort and slantedness, then y0, x0, y1, x1."""
        sort = np.searchsorted(self.sort_first, rows, side="right") - 1
        kind = 2 * sort + (self.polygon[rows] >= 0)
        return np.column_stack([kind, self.boxes[rows][:, [1, 0, 3, 2]]])

    def border(self) -> Ints:
        """Rows of sorts that reach the tile's border."""
        boxes = self.boxes[: self.size]
        out = (boxes[:, :2] <= self.tile[:2]) | (boxes[:, 2:] >= self.tile[2:])
        return np.flatnonzero(out.any(axis=1))

    def identities(self, rows: Ints) -> Ints:
        """(r, 5) what is equal for equal elements only, in every tile."""
        found = self.keys(rows)
        for place in np.flatnonzero(self.polygon[rows] >= 0).tolist():
            found[place, 1:] = _digest(self.polygons[self.polygon[rows[place]]])
        return found


def _digest(polygon: Any) -> Ints:
    digest = hashlib.blake2b(shapely.to_wkb(polygon), digest_size=32).digest()
    return np.frombuffer(digest, dtype=np.int64)


def fill_table(
    sorts: list[Elements],
    probes: tuple[Elements, ...],
    label_at: Ints,
    tile: BoxDbu,
    block: BoxDbu,
) -> Table:
    """The table of a tile [database units] of a block.

    Parameters
    ----------
    sorts, probes
        Elements of every sort and probe; those that do not meet the tile are left out.
    label_at
        (l, 2) points of the labels in the tile [grid steps].
    """
    frame = np.array(tile, dtype=np.int64) * SUBGRID
    last = np.array(block[2:], dtype=np.int64) * SUBGRID == frame[2:]
    inside = [elements.chosen(_meets(elements.boxes, frame)) for elements in sorts]
    ranked = [_distinct(elements) for elements in inside]
    asked = [elements.chosen(_meets(elements.boxes, frame)) for elements in probes]
    rows = [boxes for boxes, _, _ in ranked] + [elements.boxes for elements in asked]
    rows.append(np.hstack([label_at, label_at]))
    slanted = [polygons for _, polygons, _ in ranked] + [e.polygons for e in asked]
    slanted.append(np.zeros(0, dtype=np.object_))
    first = np.concatenate([[0], np.cumsum([len(boxes) for boxes in rows])])
    size = int(first[len(sorts)])
    leads = [np.flatnonzero(elements.lead) for elements in inside]
    corners = [e.boxes[lead, :2] for e, lead in zip(inside, leads, strict=True)]
    counted = [_owned(corner, frame, last) for corner in corners]
    boxes = np.concatenate(rows)
    return Table(
        tile=frame,
        size=size,
        boxes=boxes,
        polygon=_polygon_numbers(rows, slanted),
        polygons=np.concatenate(slanted),
        sort_first=first[: len(sorts) + 1],
        owned=_owned(boxes[:size, :2], frame, last),
        probe_first=first[len(sorts) :],
        probe_shape=np.concatenate([*(e.shape for e in asked), np.arange(len(label_at))]),
        shape=np.concatenate([e.shape[lead] for e, lead in zip(inside, leads, strict=True)]),
        shape_sort=np.repeat(np.arange(len(sorts)), [len(lead) for lead in leads]),
        element=np.concatenate(
            [
                start + inverse[lead]
                for start, (_, _, inverse), lead in zip(first, ranked, leads, strict=False)
            ]
        ),
        counted=np.concatenate(counted),
    )


def _meets(boxes: Ints, frame: Ints) -> NDArray[np.bool_]:
    outside = (boxes[:, :2] > frame[2:]) | (boxes[:, 2:] < frame[:2])
    return np.asarray(~outside.any(axis=1))


def _owned(corner: Ints, frame: Ints, last: NDArray[np.bool_]) -> NDArray[np.bool_]:
    """Whether points lie in the tile, whose upper edges belong to it at the block's end only."""
    below = (corner < frame[2:]) | (last & (corner == frame[2:]))
    return np.asarray(((corner >= frame[:2]) & below).all(axis=1))


def _distinct(elements: Elements) -> tuple[Ints, Geometries, Ints]:
    """Boxes in order of place with equal rectangles once, the polygons, the row of each."""
    plain = len(elements.boxes) - len(elements.polygons)
    order = _by_place(elements.boxes[:plain])
    boxes = elements.boxes[:plain][order]
    fresh = np.ones(plain, dtype=np.bool_)
    fresh[1:] = (boxes[1:] != boxes[:-1]).any(axis=1)
    slanted = _by_place(elements.boxes[plain:])
    inverse = np.empty(len(elements.boxes), dtype=np.int64)
    inverse[order] = np.cumsum(fresh) - 1
    kept = int(np.count_nonzero(fresh))
    inverse[plain + slanted] = kept + np.arange(len(slanted))
    found = np.concatenate([boxes[fresh], elements.boxes[plain:][slanted]])
    return found, elements.polygons[slanted], inverse


def _by_place(boxes: Ints) -> Ints:
    """Order by y0, x0, y1, x1."""
    if not len(boxes):
        return np.zeros(0, dtype=np.int64)
    # both coordinates fit into half a number each; the other two seldom decide
    low = boxes[:, :2] - boxes[:, :2].min(axis=0)
    packed = (low[:, 1] << 32) | low[:, 0]
    order = np.argsort(packed, kind="stable")
    ranked = packed[order]
    if not (ranked[1:] == ranked[:-1]).any():
        return order
    return np.lexsort((boxes[:, 2], boxes[:, 3], packed))


def _polygon_numbers(rows: list[Ints], slanted: list[Geometries]) -> Ints:
    found = []
    start = 0
    for boxes, polygons in zip(rows, slanted, strict=True):
        number = np.full(len(boxes), -1)
        number[len(boxes) - len(polygons) :] = start + np.arange(len(polygons))
        found.append(number)
        start += len(polygons)
    return np.concatenate(found)
