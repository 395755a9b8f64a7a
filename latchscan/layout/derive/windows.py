"""Shapes sorted into windows: columns of numbers until a window is asked for.

In: the rectangles and other shapes of a tile's layers.  Out: for any window of the tile what
is drawn in it, relative to its corner, and a key that equal windows share.
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from dataclasses import dataclass
from itertools import pairwise

import numpy as np
from numpy.typing import NDArray

from latchscan.layout.derive.derivation import Program
from latchscan.layout.derive.evaluation import DrawnLayer, Window
from latchscan.layout.derive.geometry import both, bounding_boxes, draw_boxes, draw_rings, to_rings
from latchscan.layout.derive.stitching import Rings, join_rings, no_rings, select_rings
from latchscan.layout.model import Ints
from latchscan.layout.runs import within_runs

BoxDbu = tuple[int, int, int, int]

CUT_FROM_POINTS = 12
"""Shapes with more points than this are cut at the windows' edges before they are sorted."""


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Grid:
    """The windows of a tile [grid steps]."""

    tile: BoxDbu
    size: tuple[int, int]
    counts: tuple[int, int]
    margin: int

    def frame(self, index: int) -> BoxDbu:
        """Box of a window."""
        iy, ix = divmod(index, self.counts[0])
        x0, y0 = self.tile[0] + ix * self.size[0], self.tile[1] + iy * self.size[1]
        return (
            x0,
            y0,
            min(x0 + self.size[0], self.tile[2]),
            min(y0 + self.size[1], self.tile[3]),
        )


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class SortedShapes:
    """A layer's shapes by window: columns and the offsets of the windows in them."""

    boxes: Ints
    box_first: Ints
    rings: Rings
    ring_index: Ints
    ring_first: Ints


def sort_layers(
    program: Program, shapes: Mapping[str, tuple[Ints, Rings]], grid: Grid
) -> dict[str, dict[str, SortedShapes]]:
    """Layer name -> sorted shapes, for the frames and the margin frames."""
    cut = {name: (boxes, _cut(rings, grid)) for name, (boxes, rings) in shapes.items()}
    groups = {
        "narrow": (program.layers(wide=False), 0),
        "wide": (program.layers(wide=True), grid.margin),
    }
    return {
        group: {name: _sort(*cut[name], grid, margin) for name in names}
        for group, (names, margin) in groups.items()
    }


def _cut(rings: Rings, grid: Grid) -> Rings:
    """Large shapes cut along the windows' edges, so that each window sees only its part.

    Shapes with edges of other than multiples of 45 degrees stay whole: their cuts would
    have to be rounded.
    """
    if not rings.count:
        return rings
    boxes = bounding_boxes(rings)
    spans = ((boxes[:, 2:] - boxes[:, :2]) > np.array(grid.size)).any(axis=1)
    large = spans & (np.diff(rings.first) > CUT_FROM_POINTS) & _octilinear(rings)
    if not large.any():
        return rings
    parts = [select_rings(rings, ~large)]
    x_cuts = grid.tile[0] + grid.size[0] * np.arange(1, grid.counts[0])
    y_cuts = grid.tile[1] + grid.size[1] * np.arange(1, grid.counts[1])
    low, high = boxes[large].min(axis=0)[:2], boxes[large].max(axis=0)[2:]
    for x0, x1 in _spans(low[0], x_cuts, high[0]):
        column = both(
            draw_rings(select_rings(rings, large & (boxes[:, 0] < x1) & (boxes[:, 2] > x0))),
            draw_boxes(np.array([[x0, low[1], x1, high[1]]])),
        )
        if not column:
            continue
        strip = to_rings(column)
        strip_boxes = bounding_boxes(strip)
        for y0, y1 in _spans(low[1], y_cuts, high[1]):
            meets = (strip_boxes[:, 1] < y1) & (strip_boxes[:, 3] > y0)
            piece = both(
                draw_rings(select_rings(strip, meets)), draw_boxes(np.array([[x0, y0, x1, y1]]))
            )
            parts.append(to_rings(piece))
    return join_rings(parts)


def _spans(low: int, cuts: Ints, high: int) -> Iterable[tuple[int, int]]:
    """Consecutive spans of an interval cut at the places inside it."""
    places = [int(low), *(int(cut) for cut in cuts if low < cut < high), int(high)]
    return pairwise(places)


def _octilinear(rings: Rings) -> NDArray[np.bool_]:
    """(r,) whether all edges of a ring run at multiples of 45 degrees."""
    following = np.arange(1, len(rings.points) + 1)
    following[rings.first[1:] - 1] = rings.first[:-1]
    turn = np.abs(rings.points[following] - rings.points)
    plain = (turn == 0).any(axis=1) | (turn[:, 0] == turn[:, 1])
    return np.asarray(np.logical_and.reduceat(plain, rings.first[:-1]))


def _sort(boxes: Ints, rings: Rings, grid: Grid, margin: int) -> SortedShapes:
    """Shapes by the windows (widened by the margin) that they overlap."""
    box_row, box_window = _windows_of(boxes, grid, margin)
    chosen = boxes[box_row]
    order = np.lexsort((chosen[:, 3], chosen[:, 2], chosen[:, 1], chosen[:, 0], box_window))
    ring_row, ring_window = _windows_of(bounding_boxes(rings), grid, margin)
    ring_order = np.argsort(ring_window, kind="stable")
    edges = np.arange(grid.counts[0] * grid.counts[1] + 1)
    return SortedShapes(
        boxes=chosen[order],
        box_first=np.searchsorted(box_window[order], edges),
        rings=rings,
        ring_index=ring_row[ring_order],
        ring_first=np.searchsorted(ring_window[ring_order], edges),
    )


def _windows_of(boxes: Ints, grid: Grid, margin: int) -> tuple[Ints, Ints]:
    """Rows of `boxes` and windows for every overlap of the two."""
    corner, size = np.array(grid.tile[:2]), np.array(grid.size)
    last = np.array(grid.counts) - 1
    low = np.maximum((boxes[:, :2] - margin - corner) // size, 0)
    high = np.minimum((boxes[:, 2:] + margin - 1 - corner) // size, last)
    span = np.maximum(high - low + 1, 0)
    total = span[:, 0] * span[:, 1]
    row = np.repeat(np.arange(len(boxes)), total)
    place = within_runs(total)
    iy, ix = np.divmod(place, span[row, 0])
    return row, (low[row, 1] + iy) * grid.counts[0] + low[row, 0] + ix


def cut_window(
    grid: Grid, index: int, columns: Mapping[str, Mapping[str, SortedShapes]], block: Ints
) -> tuple[Window, Ints]:
    """A window with all that is drawn in it, and its corner (x, y) [grid steps].

    Parameters
    ----------
    grid
        The tile's windows.
    index
        Number of the window, row by row.
    columns
        The tile's shapes as `sort_layers` gives them.
    block
        (4,) the analysed box [grid steps].
    """
    frame = np.array(grid.frame(index), dtype=np.int64)
    corner = frame[:2]
    around = np.array([-grid.margin, -grid.margin, grid.margin, grid.margin])
    local = frame - np.tile(corner, 2)
    margin_frame = local + around
    inside = block - np.tile(corner, 2)
    block_frame = np.concatenate(
        [np.maximum(margin_frame[:2], inside[:2]), np.minimum(margin_frame[2:], inside[2:])]
    )
    window = Window(
        frame=_tuple(local),
        margin_frame=_tuple(margin_frame),
        block_frame=_tuple(block_frame),
        narrow=_layers(columns["narrow"], index, corner, local),
        wide=_layers(columns["wide"], index, corner, margin_frame),
    )
    return window, corner


def _tuple(box: Ints) -> BoxDbu:
    x0, y0, x1, y1 = box.tolist()
    return (x0, y0, x1, y1)


def _layers(
    columns: Mapping[str, SortedShapes], index: int, corner: Ints, frame: Ints
) -> dict[str, DrawnLayer]:
    layers = {}
    for name, column in columns.items():
        start, end = column.box_first[index], column.box_first[index + 1]
        rows = column.ring_index[column.ring_first[index] : column.ring_first[index + 1]]
        if start == end and not len(rows):
            continue
        boxes = column.boxes[start:end] - np.tile(corner, 2)
        boxes[:, :2] = np.maximum(boxes[:, :2], frame[:2])
        boxes[:, 2:] = np.minimum(boxes[:, 2:], frame[2:])
        # the last windows of a tile are cut off: what lay beyond them is now inside out
        boxes = boxes[(boxes[:, 0] < boxes[:, 2]) & (boxes[:, 1] < boxes[:, 3])]
        layers[name] = DrawnLayer(boxes=boxes, rings=_picked(column.rings, rows, corner))
    return layers


def _picked(rings: Rings, rows: Ints, corner: Ints) -> Rings:
    if not len(rows):
        return no_rings()
    first = rings.first
    parts = [rings.points[first[row] : first[row + 1]] for row in rows.tolist()]
    sizes = [len(part) for part in parts]
    return Rings(
        points=np.concatenate(parts) - corner, first=np.cumsum([0, *sizes], dtype=np.int64)
    )


def window_key(window: Window) -> tuple[object, ...]:
    """The window's whole content as a key: equal keys have equal results."""
    parts: list[object] = [window.frame, window.block_frame]
    for group in (window.narrow, window.wide):
        for name, layer in group.items():
            rings = layer.rings
            parts += [name, layer.boxes.tobytes(), rings.points.tobytes(), rings.first.tobytes()]
        parts.append(None)
    return tuple(parts)
