"""What an emitter is to a transistor: its area, its patch, its region and its place.

In go the layout and the technology; out come columns over the rows of `Resistances`: the n
emitters followed by one row a body, which counts only where an isolated p-well is the anode
of the n-well around it.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import shapely
from numpy.typing import NDArray
from scipy.spatial import cKDTree

from latchscan.layout.model import Floats, Geometries, Layout, Pairs, frozen

CHUNK = 4096
RADIUS_SLACK_UM = 1.0e-6
"""Arrays place neighbours exactly one radius away; rounding must not decide on them."""

RECTANGLE_AREA_TOLERANCE = 1.0e-9


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Sources:
    """Sources of current, one row each: n emitters, then b bodies.

    Attributes
    ----------
    area_um2
        (n + b,) area; of a body the area of its drawn polygons.
    patch_area_um2
        (n + b,) area of the emitters of the same body and kind whose centres lie within the
        patch radius, itself included; of a body its own area.
    over_buried
        (n + b,) True over the buried layer, which every isolated p-well needs below it.
    """

    area_um2: Floats
    patch_area_um2: Floats
    over_buried: NDArray[np.bool_]


def collect_sources(layout: Layout, patch_radius_um: float) -> Sources:
    """Columns of the emitters and bodies of a layout as sources of current."""
    emitters = layout.emitters
    body_area = np.array(
        [shapely.area(body.polygons).sum() for body in layout.bodies], dtype=np.float64
    )
    patch = _patch_area_um2(layout, patch_radius_um)
    return Sources(
        area_um2=frozen(np.concatenate([emitters.area_um2, body_area])),
        patch_area_um2=frozen(np.concatenate([patch, body_area])),
        over_buried=frozen(
            np.concatenate([emitters.over_buried, np.ones(body_area.size, dtype=np.bool_)])
        ),
    )


def _patch_area_um2(layout: Layout, radius_um: float) -> Floats:
    emitters = layout.emitters
    centre = 0.5 * (emitters.box_um[:, :2] + emitters.box_um[:, 2:])
    area = np.zeros(len(emitters.area_um2))
    group = emitters.body * 2 + emitters.kind
    for key in np.unique(group):
        members = np.flatnonzero(group == key)
        tree = cKDTree(centre[members])
        for start in range(0, members.size, CHUNK):
            some = members[start : start + CHUNK]
            near = cKDTree(centre[some]).sparse_distance_matrix(
                tree, radius_um + RADIUS_SLACK_UM, output_type="ndarray"
            )
            weights = emitters.area_um2[members[near["j"]]]
            area[some] = np.bincount(near["i"], weights=weights, minlength=some.size)
    return area


def pair_places_um(layout: Layout, pairs: Pairs) -> Floats:
    """Middle (x, y) of the shortest line from anode to cathode of every pair, (m, 2) [um].

    Notes
    -----
    Between two rectangles the middle of all shortest lines is taken, which does not depend
    on the layout's orientation; other shapes are left to the geometry library.
    """
    shapes = _source_shapes(layout)
    box = shapely.bounds(shapes)
    box_area = (box[:, 2] - box[:, 0]) * (box[:, 3] - box[:, 1])
    rectangle = shapely.area(shapes) >= box_area * (1.0 - RECTANGLE_AREA_TOLERANCE)
    first, second = box[pairs.anode], box[pairs.cathode]
    # where the intervals overlap this is the middle of the overlap, else of the gap
    low = np.maximum(first[:, :2], second[:, :2])
    high = np.minimum(first[:, 2:], second[:, 2:])
    place: Floats = 0.5 * (low + high)
    odd = np.flatnonzero(~(rectangle[pairs.anode] & rectangle[pairs.cathode]))
    if odd.size:
        lines = shapely.shortest_line(shapes[pairs.anode[odd]], shapes[pairs.cathode[odd]])
        ends = shapely.get_coordinates(lines).reshape(-1, 2, 2)
        place[odd] = ends.mean(axis=1)
    return place


def _source_shapes(layout: Layout) -> Geometries:
    wells = [
        shapely.MultiPolygon(list(body.polygons)) if body.kind == "isolated_pwell" else None
        for body in layout.bodies
    ]
    count = len(layout.emitters.polygons)
    shapes = np.empty(count + len(wells), dtype=np.object_)
    shapes[:count] = layout.emitters.polygons
    shapes[count:] = wells
    return shapes
