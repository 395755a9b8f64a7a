"""Which pieces of diffusion a tap, a contact or an emitter lies on.

In: polygons and the pieces of the diffusion conductors.  Out: (shape, piece) pairs.
"""

from __future__ import annotations

import numpy as np
import shapely

from latchscan.layout.connections import Nets
from latchscan.layout.model import Floats, Geometries, Ints, Taps
from latchscan.layout.runs import within_runs

LEAST_AREA_UM2 = 1e-6
"""Areas below one square nanometre are rounding, not overlap."""


def pieces_beneath(shapes: Geometries, pieces: Geometries) -> tuple[Ints, Ints]:
    """(shape, piece) pairs that overlap with area, sorted.

    Notes
    -----
    Pieces are the prepared side: most shapes lie wholly on one, which no overlay has to tell.
    """
    if not len(shapes) or not len(pieces):
        return np.zeros(0, dtype=np.int64), np.zeros(0, dtype=np.int64)
    tree = shapely.STRtree(shapes)
    piece, shape = tree.query(pieces, predicate="intersects")
    whole = np.zeros(len(shapes), dtype=np.bool_)
    sole = np.bincount(shape, minlength=len(shapes)) == 1
    whole[tree.query(pieces, predicate="covers")[1]] = True
    certain = (whole & sole)[shape]
    rest = np.flatnonzero(~certain)
    area = shapely.area(shapely.intersection(shapes[shape[rest]], pieces[piece[rest]]))
    kept = certain.copy()
    kept[rest] = area > LEAST_AREA_UM2
    shape, piece = shape[kept], piece[kept]
    order = np.lexsort((piece, shape))
    return shape[order].astype(np.int64), piece[order].astype(np.int64)


def contacts_of_taps(taps: Taps, nets: Nets) -> tuple[Ints, Ints, Ints, Floats]:
    """Every contact of a tap with the piece beneath it.

    Returns
    -------
    tap, contact, piece
        (c,) indices; contacts that lie on no piece of their tap are left out.
    area_um2
        (c,) contacted area of the tap on the piece [um2].
    """
    contacted = np.flatnonzero(taps.contact_count > 0)
    row, piece = pieces_beneath(taps.polygons[contacted], nets.piece_polygons)
    tap = contacted[row]
    count = taps.contact_count[tap]
    contact = np.repeat(taps.contact_first[tap], count) + within_runs(count)
    tap, piece = np.repeat(tap, count), np.repeat(piece, count)
    boxes = shapely.box(*taps.contact_box_um[contact].T)
    several = np.bincount(row, minlength=len(contacted))[np.searchsorted(contacted, tap)] > 1
    area = np.asarray(shapely.area(boxes), dtype=np.float64)
    area[several] = shapely.area(
        shapely.intersection(boxes[several], nets.piece_polygons[piece[several]])
    )
    kept = area > 0.0
    return tap[kept], contact[kept], piece[kept], area[kept]
