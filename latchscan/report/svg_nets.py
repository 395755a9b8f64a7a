"""What is drawn of nets, as short paths: few shapes as they are, many in pixels.

All nets together may take `MOST_CHARACTERS` of the picture: what a net needs little of is left
to the others, and a net that needs more than its share is drawn in coarser pixels.
"""

from __future__ import annotations

from collections.abc import Callable
from functools import partial
from typing import Any

import numpy as np
import shapely

from latchscan.layout.connections import Nets
from latchscan.layout.model import Floats, Geometries, Ints
from latchscan.layout.trace.rectangles import joined_runs
from latchscan.report.frame import Frame
from latchscan.report.relations import nets_of_nodes
from latchscan.report.svg_paths import (
    NM_PER_UM,
    covered,
    path_data,
    pixel_span,
    raster_shape,
    rectangles_path,
    runs,
)

FILL_RULE = "nonzero"
MOST_CHARACTERS = 1_000_000
"""Length of the paths of all nets together."""
MOST_OF_ONE = 120_000
"""Length of one net's path."""
MOST_DRAWN = 1500
"""Shapes up to which a net is drawn as it is."""
SMALLEST_SIDE = 0.5
"""Wiring that is shorter than this is not drawn, unless all of it is [page units]."""
FINEST_PIXEL = 1.0
"""Side of a pixel of a net of many shapes [page units]."""
SHORTEST_RECTANGLE = len("M0 0h1v1h-1z")
COARSER = 1.5
"""How much coarser pixels get from one try to the next until the path is short enough."""


def net_outline(nets: Nets, members: Ints) -> Geometries:
    """What is drawn of some nets in silicon and to bond: pieces of diffusion and bond pads."""
    pieces = nets.piece_polygons[on_nets(nets, nets.piece_node, members)]
    pads = nets.pad_polygons[on_nets(nets, nets.pad_node, members)]
    return np.asarray(np.concatenate((pieces, pads)), dtype=np.object_)


def net_wiring(nets: Nets, members: Ints) -> tuple[Floats, Geometries]:
    """What is drawn of some nets in metal and poly.

    Returns
    -------
    boxes, polygons
        (n, 4) rectangles x0, y0, x1, y1 [um] and (p,) slanted shapes [um].
    """
    own = np.isin(nets.shape_net, members)
    boxes, polygons = nets.shape_box_um[own], nets.shape_polygon[own]
    slanted = polygons != np.array(None)
    return boxes[~slanted], polygons[slanted]


def on_nets(nets: Nets, nodes: Ints, members: Ints) -> Ints:
    """Rows of `nodes` that belong to the nets `members`."""
    return np.flatnonzero(np.isin(nets_of_nodes(nets, nodes), members))


def wiring_words(nets: Nets, members: Ints) -> str:
    """How much of the nets' wiring is drawn, "" where all of it is."""
    kept = int(np.count_nonzero(np.isin(nets.shape_net, members)))
    total = int(nets.shape_total[members].sum())
    return "" if kept >= total else f"wiring shown: the {kept} largest of {total} shapes"


def net_paths(nets: Nets, members: list[Ints], frame: Frame) -> list[tuple[str, str]]:
    """Path of the wiring and path of diffusions and pads of some groups of nets.

    Paths are in nm from the frame's lower left corner, for the fill rule `FILL_RULE`,
    and together no longer than `MOST_CHARACTERS` but for what no coarser pixel shortens.
    """
    writers = [
        writer
        for own in members
        for writer in (_wiring_writer(nets, own, frame), _outline_writer(nets, own, frame))
    ]
    paths = [write(MOST_OF_ONE) for write in writers]
    limit = fair_share([len(path) for path in paths], MOST_CHARACTERS)
    paths = [
        path if len(path) <= limit else write(limit)
        for path, write in zip(paths, writers, strict=True)
    ]
    return list(zip(paths[::2], paths[1::2], strict=True))


def fair_share(lengths: list[int], total: int) -> int:
    """The most that each may have so that all together have no more than `total`.

    Examples
    --------
    >>> fair_share([10, 50, 90], 100)
    45
    >>> fair_share([10, 20], 100)
    20
    """
    left = total
    for done, length in enumerate(sorted(lengths)):
        share = left // (len(lengths) - done)
        if length > share:
            return share
        left -= length
    return max(lengths, default=0)


def _wiring_writer(nets: Nets, members: Ints, frame: Frame) -> Callable[[int], str]:
    """What writes the wiring of some nets in no more than so many characters."""
    boxes, polygons = net_wiring(nets, members)
    boxes = boxes[_seen(boxes, frame)]
    polygons = polygons[_seen(_bounds(polygons), frame)]
    sides = np.concatenate([_longer_side(boxes), _longer_side(_bounds(polygons))])
    large = sides * frame.scale >= SMALLEST_SIDE
    if large.any():
        boxes, polygons = boxes[large[: len(boxes)]], polygons[large[len(boxes) :]]
    return partial(_path, boxes, polygons, frame)


def _outline_writer(nets: Nets, members: Ints, frame: Frame) -> Callable[[int], str]:
    """What writes the diffusions and pads of some nets in no more than so many characters."""
    shapes = net_outline(nets, members)
    shapes = shapes[_seen(_bounds(shapes), frame)]
    boxes = _bounds(shapes)
    full = np.prod(boxes[:, 2:] - boxes[:, :2], axis=1)
    bent = ~np.isclose(shapely.area(shapes), full, rtol=1e-9)
    return partial(_path, boxes[~bent], shapes[bent], frame)


def _path(boxes: Floats, polygons: Geometries, frame: Frame, most: int) -> str:
    """Path of rectangles and other shapes, as drawn if it is short enough, else in pixels."""
    if len(boxes) + len(polygons) <= MOST_DRAWN:
        # all turn the same way, holes the other: what overlaps is filled and needs no union
        turned = shapely.orient_polygons(shapely.simplify(polygons, 0.2 / frame.scale))
        shapes = np.concatenate([shapely.box(*boxes.T), turned])
        path = path_data(np.asarray(shapes, dtype=np.object_), frame)
        if len(path) <= most:
            return path
    return pixel_path(boxes, polygons, frame, most)


def _bounds(shapes: Geometries) -> Floats:
    return np.asarray(shapely.bounds(shapes).reshape(-1, 4), dtype=np.float64)


def _longer_side(boxes: Floats) -> Floats:
    return np.asarray((boxes[:, 2:] - boxes[:, :2]).max(axis=1, initial=0.0), dtype=np.float64)


def _seen(boxes: Floats, frame: Frame) -> Any:
    """(n,) whether boxes [um] meet the frame."""
    x0, y0, x1, y1 = frame.box_um
    low, high = boxes[:, :2], boxes[:, 2:]
    return ((low <= (x1, y1)) & (high >= (x0, y0))).all(axis=1)


def pixel_path(boxes: Floats, polygons: Geometries, frame: Frame, most: int) -> str:
    """Path of the pixels that shapes touch, as fine as `most` characters allow.

    Parameters
    ----------
    boxes
        (n, 4) rectangles [um].
    polygons
        (p,) other shapes [um], slanted or with holes.
    """
    side = FINEST_PIXEL
    while True:
        pixel_um = side / frame.scale
        mask = covered(np.concatenate([boxes, _slices(polygons, frame, pixel_um)]), frame, pixel_um)
        rows, starts, ends = runs(mask)
        pixels = np.column_stack((starts, rows, ends, rows + 1))
        pixels, _ = joined_runs(pixels, np.zeros(len(pixels), dtype=np.int64), 1)
        if len(pixels) * SHORTEST_RECTANGLE <= most or mask.size <= 1:
            path = rectangles_path(np.rint(pixels * pixel_um * NM_PER_UM).astype(np.int64))
            if len(path) <= most or mask.size <= 1:
                return path
        side *= COARSER


def _slices(polygons: Geometries, frame: Frame, pixel_um: float) -> Floats:
    """Boxes that follow shapes of any outline from one row of pixels to the next."""
    bounds = _bounds(polygons)
    low, high = pixel_span(bounds, frame, pixel_um)
    wide = ((high - low) > 1).all(axis=1)
    found = [bounds[~wide]]
    corner_y, across = frame.box_um[1], raster_shape(frame, pixel_um)[1] * pixel_um
    for polygon, first, last in zip(
        polygons[wide], low[wide, 1].tolist(), high[wide, 1].tolist(), strict=True
    ):
        edges = corner_y + np.arange(first, last + 1) * pixel_um
        x0 = frame.box_um[0]
        rows = shapely.box(x0, edges[:-1], x0 + across, edges[1:])
        parts = shapely.get_parts(shapely.intersection(rows, polygon))
        parts = parts[shapely.area(parts) > 0]
        # a hair inside its row, so that no rounding reaches into the next
        found.append(_bounds(parts) + np.array([0, 1, 0, -1]) * 1e-4 * pixel_um)
    return np.concatenate(found)
