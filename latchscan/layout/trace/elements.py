"""Shapes as elements: rectangles as rows of numbers, and what is slanted as polygons.

In: polygons of a sort, drawn or derived.  Out: `Elements` [grid steps].  Two elements conduct
where they touch, be they of one shape or of two; a shape without area has none.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import shapely
from numpy.typing import NDArray

from latchscan.layout.components import connected
from latchscan.layout.derive.geometry import (
    SUBGRID,
    bounding_boxes,
    draw_rings,
    merged,
    rings_to_polygons,
    to_rings,
    without,
)
from latchscan.layout.derive.slabs import upright_rings
from latchscan.layout.derive.stitching import Rings, join_rings, pick_rings, select_rings, stitch
from latchscan.layout.model import Geometries, Ints
from latchscan.layout.runs import offsets
from latchscan.layout.trace.rectangles import cut_filled
from latchscan.layout.trace.touching import BoxSet, touching_between


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Elements:
    """Parts of shapes, those that are no rectangles last.

    Attributes
    ----------
    boxes
        (n, 4) x0, y0, x1, y1 [grid steps].
    shape
        (n,) number of the shape that each is part of.  What is drawn as one but touches
        itself nowhere (but for a slit) is several shapes.
    lead
        (n,) True for the part of each shape that begins lowest, then leftmost.
    polygons
        (p,) shapely polygons [grid steps] of the last p elements.
    """

    boxes: Ints
    shape: Ints
    lead: NDArray[np.bool_]
    polygons: Geometries

    def chosen(self, rows: NDArray[np.bool_]) -> Elements:
        """Only the elements for which `rows`, (n,), is true."""
        slanted = rows[len(rows) - len(self.polygons) :]
        return Elements(
            boxes=self.boxes[rows],
            shape=self.shape[rows],
            lead=self.lead[rows],
            polygons=self.polygons[slanted],
        )


def elements_of_rings(rings: Rings, drawn: Ints | None = None) -> Elements:
    """Elements of drawn polygons, each of one ring that may overlap or touch itself.

    Parameters
    ----------
    rings
        Polygons [grid steps].
    drawn
        (r,) the drawn polygon that each ring was cut from; None where each is one itself.
    """
    sizes = np.diff(rings.first)
    boxes, is_box = _plain_boxes(rings, sizes)
    if is_box.all() and drawn is None:
        return _put_together(boxes, np.arange(len(boxes)), _no_boxes(), _none(), _no_polygons())
    other = select_rings(rings, ~is_box)
    upright = upright_rings(other.points, other.first)
    plain = select_rings(other, upright)
    cut, owner, whole = cut_filled(plain.points, plain.first, np.arange(plain.count))
    upright_rows = np.flatnonzero(upright)
    left_whole = np.zeros(other.count, dtype=np.bool_)
    left_whole[upright_rows[: len(whole)][whole]] = True
    every = np.concatenate([boxes, cut])
    ring = np.concatenate([np.flatnonzero(is_box), np.flatnonzero(~is_box)[upright_rows][owner]])
    loose = np.zeros(rings.count, dtype=np.bool_)
    loose[np.flatnonzero(~is_box)[upright_rows]] = ~_simple(plain)
    if drawn is not None:
        loose |= np.bincount(drawn)[drawn] > 1
        ring, loose = drawn[ring], loose[ring]
    else:
        loose = loose[ring]
    shape = _own_parts(every, ring, loose)
    polygons, polygon_shape = _clean_polygons(select_rings(other, ~upright | left_whole))
    return _put_together(
        every,
        shape,
        *_bounds(polygons),
        polygon_shape + int(shape.max(initial=-1)) + 1,
        polygons,
    )


def _simple(rings: Rings) -> NDArray[np.bool_]:
    """(r,) whether rings neither cross nor touch themselves."""
    if not rings.count:
        return np.zeros(0, dtype=np.bool_)
    return np.asarray(shapely.is_valid(_as_polygons(rings)))


def _as_polygons(rings: Rings) -> Geometries:
    owner = np.repeat(np.arange(rings.count), np.diff(rings.first))
    lines = shapely.linearrings(rings.points.astype(np.float64), indices=owner)
    return np.asarray(shapely.polygons(lines), dtype=np.object_)


def _own_parts(boxes: Ints, polygon: Ints, loose: NDArray[np.bool_]) -> Ints:
    """Number of the shape that each box belongs to: its polygon or one of its parts.

    Parts of a polygon touch nowhere: slits alone hold them together, or a marker parts them.
    Only boxes for which `loose` is true are asked.
    """
    shape = polygon.copy()
    rows = np.flatnonzero(loose)
    if not len(rows):
        return shape
    around = np.concatenate([boxes[rows, :2].min(axis=0), boxes[rows, 2:].max(axis=0)])
    own = BoxSet(boxes, rows, around)
    one, other = touching_between(own, own)
    same = polygon[one] == polygon[other]
    part = connected(len(boxes), one[same], other[same])
    shape[rows] = int(polygon.max()) + 1 + part[rows]
    return shape


def elements_of_polygons(polygons: Geometries, unit_um: float) -> Elements:
    """Elements of merged polygons [um], numbered as they come."""
    if not len(polygons):
        return _put_together(_no_boxes(), _none(), _no_boxes(), _none(), _no_polygons())
    rings, owner = shapely.get_rings(polygons, return_index=True)
    points, ring = shapely.get_coordinates(rings, return_index=True)
    steps = np.rint(points / unit_um * SUBGRID).astype(np.int64)
    closing = np.append(ring[1:] != ring[:-1], True)
    columns = Rings(
        points=steps[~closing],
        first=offsets(np.bincount(ring[~closing], minlength=len(rings))),
    )
    upright = np.ones(len(polygons), dtype=np.bool_)
    np.logical_and.at(upright, owner, upright_rings(columns.points, columns.first))
    plain = select_rings(columns, upright[owner])
    boxes, box_owner, whole = cut_filled(plain.points, plain.first, owner[upright[owner]])
    upright[: len(whole)] &= ~whole
    slanted = np.flatnonzero(~upright)
    shapes = shapely.transform(polygons[slanted], lambda p: np.rint(p / unit_um * SUBGRID))
    return _put_together(boxes, box_owner, *_bounds(shapes), slanted, shapes)


def cut_out(rings: Rings, markers: Rings) -> tuple[Rings, Ints]:
    """Drawn polygons without what any of the marker polygons covers.

    Parameters
    ----------
    rings, markers
        Polygons [grid steps]; those that no marker's box meets stay as they are.

    Returns
    -------
    rings, drawn
        What is left, and for each ring the polygon that it is left of.
    """
    same = np.arange(rings.count)
    if not rings.count or not markers.count:
        return rings, same
    boxes = np.concatenate([bounding_boxes(rings), bounding_boxes(markers)])
    around = np.concatenate([boxes[:, :2].min(axis=0), boxes[:, 2:].max(axis=0)])
    marks = np.arange(rings.count, len(boxes))
    row, mark = touching_between(BoxSet(boxes, same, around), BoxSet(boxes, marks, around))
    if not len(row):
        return rings, same
    pairs = np.unique(np.column_stack([row, mark - rings.count]), axis=0)
    hit = np.zeros(rings.count, dtype=np.bool_)
    hit[pairs[:, 0]] = True
    parts, drawn = [select_rings(rings, ~hit)], [np.flatnonzero(~hit)]
    for index, chosen in _grouped(pairs):
        corner = rings.points[rings.first[index]]
        one = _moved(pick_rings(rings, np.array([index])), -corner)
        left = without(draw_rings(one), draw_rings(_moved(pick_rings(markers, chosen), -corner)))
        parts.append(_moved(to_rings(left), corner))
        drawn.append(np.full(parts[-1].count, index))
    return join_rings(parts), np.concatenate(drawn)


def _grouped(pairs: Ints) -> list[tuple[int, Ints]]:
    rows, first = np.unique(pairs[:, 0], return_index=True)
    return list(zip(rows.tolist(), np.split(pairs[:, 1], first[1:]), strict=True))


def _moved(rings: Rings, by: Ints) -> Rings:
    return Rings(points=rings.points + by, first=rings.first)


def _plain_boxes(rings: Rings, sizes: Ints) -> tuple[Ints, NDArray[np.bool_]]:
    """Boxes of the rings that are rectangles with an area, and which rings these are."""
    four = sizes == 4
    corners = rings.points if four.all() else rings.points[np.repeat(four, sizes)]
    x, y = corners.reshape(-1, 4, 2).transpose(2, 1, 0)
    flat = (y[0] == y[1]) & (x[1] == x[2]) & (y[2] == y[3]) & (x[3] == x[0])
    flat |= (x[0] == x[1]) & (y[1] == y[2]) & (x[2] == x[3]) & (y[3] == y[0])
    flat &= (x[0] != x[2]) & (y[0] != y[2])
    boxes = np.column_stack(
        [
            np.minimum(x[0], x[2])[flat],
            np.minimum(y[0], y[2])[flat],
            np.maximum(x[0], x[2])[flat],
            np.maximum(y[0], y[2])[flat],
        ]
    )
    is_box = np.zeros(len(sizes), dtype=np.bool_)
    is_box[np.flatnonzero(four)[flat]] = True
    return boxes, is_box


def _clean_polygons(rings: Rings) -> tuple[Geometries, Ints]:
    """Valid polygons [grid steps] of slanted rings, and the part of a ring (n,) of each.

    A ring that crosses or touches itself becomes the lobes that it winds around; lobes that
    touch are one part.
    """
    if not rings.count:
        return _no_polygons(), _none()
    simple = _as_polygons(rings)
    valid = shapely.is_valid(simple)
    parts, shape = [simple[valid]], [np.flatnonzero(valid)]
    total = rings.count
    for index in np.flatnonzero(~valid).tolist():
        corner = rings.points[rings.first[index]]
        one = _moved(pick_rings(rings, np.array([index])), -corner)
        lobes = rings_to_polygons(stitch(to_rings(merged(draw_rings(one)))), float(SUBGRID))
        left, right = shapely.STRtree(lobes).query(lobes, predicate="intersects")
        parts.append(shapely.transform(lobes, lambda points, by=corner: points + by))
        shape.append(total + connected(len(lobes), left, right))
        total += len(lobes)
    return np.concatenate(parts), np.concatenate(shape)


def _put_together(
    boxes: Ints, shape: Ints, slanted_boxes: Ints, slanted: Ints, polygons: Geometries
) -> Elements:
    every = np.concatenate([boxes, slanted_boxes])
    owner = np.concatenate([shape, slanted])
    lead = np.ones(len(owner), dtype=np.bool_)
    order = np.argsort(owner, kind="stable")
    ranked = owner[order]
    if len(ranked) and (ranked[1:] == ranked[:-1]).any():
        order = np.lexsort((every[:, 2], every[:, 3], every[:, 0], every[:, 1], owner))
        ranked = owner[order]
        lead[order[1:]] = ranked[1:] != ranked[:-1]
    return Elements(boxes=every, shape=owner, lead=lead, polygons=polygons)


def _bounds(polygons: Geometries) -> tuple[Ints]:
    found = np.rint(shapely.bounds(polygons)).astype(np.int64).reshape(-1, 4)
    return (np.asarray(found, dtype=np.int64),)


def _no_boxes() -> Ints:
    return np.zeros((0, 4), dtype=np.int64)


def _none() -> Ints:
    return np.zeros(0, dtype=np.int64)


def _no_polygons() -> Geometries:
    return np.zeros(0, dtype=np.object_)
