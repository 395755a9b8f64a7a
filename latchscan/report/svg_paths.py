"""Many polygons as one path in whole nanometres from the frame's lower left corner.

Whole numbers keep the file small and exact; one path a layer keeps it fluent.  A layer with
more shapes than can be told apart is reduced to what can be seen.
"""

from __future__ import annotations

import numpy as np
import shapely
from numpy.typing import NDArray

from latchscan.layout.model import Floats, Geometries, Ints
from latchscan.report.frame import Frame
from latchscan.report.svg_parts import number

NM_PER_UM = 1000.0
LARGEST_SHAPE_COUNT = 40_000
PIXELS_PER_UNIT = 2.0
"""Resolution to which a crowded layer is reduced [pixels per page unit]."""


def nm_transform(frame: Frame) -> str:
    """Transform from whole nm, as paths carry them, to the page."""
    step = frame.scale / NM_PER_UM
    return f"matrix({step!r} 0 0 {-step!r} {number(frame.left)} {number(frame.top + frame.height)})"


def nm_width(frame: Frame, width: float) -> str:
    """Width of a line of `width` page units among paths in nm."""
    return number(width * NM_PER_UM / frame.scale)


def path_data(
    shapes: Geometries,
    frame: Frame,
    *,
    most: int | None = None,
    pixels_per_unit: float = PIXELS_PER_UNIT,
) -> str:
    """Path of all `shapes` (polygons and multipolygons), for the even-odd fill rule.

    More than `most` shapes (`LARGEST_SHAPE_COUNT` where None) are reduced to pixels.
    """
    parts = shapely.get_parts(shapes)
    parts = parts[~shapely.is_empty(parts)]
    if len(parts) > (LARGEST_SHAPE_COUNT if most is None else most):
        return _crowd_path(shapely.bounds(parts), frame, pixels_per_unit)
    bounds = shapely.bounds(parts)
    rectangular = (shapely.get_num_coordinates(parts) == 5) & np.isclose(
        shapely.area(parts), np.prod(bounds[:, 2:] - bounds[:, :2], axis=1), rtol=1e-9
    )
    rectangles = rectangles_path(_nm(bounds[rectangular].reshape(-1, 2), frame).reshape(-1, 4))
    return rectangles + "".join(_polygon_path(part, frame) for part in parts[~rectangular])


def _nm(points_um: Floats, frame: Frame) -> Ints:
    """(n, 2) points in whole nm from the frame's lower left corner."""
    corner = np.array(frame.box_um[:2])
    points: Ints = np.rint((points_um - corner) * NM_PER_UM).astype(np.int64)
    return points


def rectangles_path(corners_nm: Ints) -> str:
    """Path of rectangles given as x0, y0, x1, y1."""
    return "".join(
        f"M{x0} {y0}h{x1 - x0}v{y1 - y0}h{x0 - x1}z" for x0, y0, x1, y1 in corners_nm.tolist()
    )


def _polygon_path(polygon: shapely.Polygon, frame: Frame) -> str:
    """Path of one polygon with its holes, in steps from point to point."""
    data = []
    for ring in (polygon.exterior, *polygon.interiors):
        points = _nm(shapely.get_coordinates(ring)[:-1], frame)
        data.append(f"M{points[0, 0]} {points[0, 1]}l")
        data.append(" ".join(f"{dx} {dy}" for dx, dy in np.diff(points, axis=0).tolist()))
        data.append("z")
    return "".join(data)


def _crowd_path(bounds_um: Floats, frame: Frame, pixels_per_unit: float) -> str:
    """Path of the pixels that the boxes touch, in horizontal runs."""
    pixel_um = 1.0 / (frame.scale * pixels_per_unit)
    mask = covered(bounds_um, frame, pixel_um)
    rows, starts, ends = runs(mask)
    edges = np.column_stack((starts, rows, ends, rows + 1)) * pixel_um * NM_PER_UM
    return rectangles_path(np.rint(edges).astype(np.int64))


def covered(bounds_um: Floats, frame: Frame, pixel_um: float) -> NDArray[np.bool_]:
    """[iy, ix] pixels from the lower left corner that any of the boxes touches."""
    low, high = pixel_span(bounds_um, frame, pixel_um)
    shape = raster_shape(frame, pixel_um)
    steps = np.zeros((shape[0] + 1, shape[1] + 1), dtype=np.int64)
    np.add.at(steps, (low[:, 1], low[:, 0]), 1)
    np.add.at(steps, (high[:, 1], high[:, 0]), 1)
    np.add.at(steps, (low[:, 1], high[:, 0]), -1)
    np.add.at(steps, (high[:, 1], low[:, 0]), -1)
    return np.asarray(steps.cumsum(axis=0).cumsum(axis=1)[:-1, :-1] > 0)


def raster_shape(frame: Frame, pixel_um: float) -> tuple[int, int]:
    """Rows and columns of pixels that cover the frame."""
    x0, y0, x1, y1 = frame.box_um
    return (
        max(1, int(np.ceil((y1 - y0) / pixel_um - 1e-6))),
        max(1, int(np.ceil((x1 - x0) / pixel_um - 1e-6))),
    )


def pixel_span(bounds_um: Floats, frame: Frame, pixel_um: float) -> tuple[Ints, Ints]:
    """First and one-past-last pixel (ix, iy) of every box; at least one pixel each."""
    corner = np.array(frame.box_um[:2])
    rows, columns = raster_shape(frame, pixel_um)
    size = np.array([columns, rows])
    low = np.floor((bounds_um[:, :2] - corner) / pixel_um + 1e-6).astype(np.int64)
    high = np.ceil((bounds_um[:, 2:] - corner) / pixel_um - 1e-6).astype(np.int64)
    low = np.clip(low, 0, size - 1)
    return low, np.clip(high, low + 1, size)


def runs(mask: NDArray[np.bool_]) -> tuple[Ints, Ints, Ints]:
    """Row, first and one-past-last column of every horizontal run of True."""
    padded = np.zeros((mask.shape[0], mask.shape[1] + 2), dtype=np.int8)
    padded[:, 1:-1] = mask
    step = np.diff(padded, axis=1)
    rows, starts = np.nonzero(step == 1)
    _, ends = np.nonzero(step == -1)
    return rows, starts, ends
