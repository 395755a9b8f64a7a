"""Contacts and nets of the strips of a ring.

In: rings, the layout and its source.  Out: for every ring the boxes of its contacts and how
many of them are on which net.  Contacts of taps are known; those of diffusions are fetched
from the source, around the strips alone.
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
import shapely

from latchscan.layout.connections import Ties
from latchscan.layout.derive.contacts import distinct_boxes
from latchscan.layout.enclose.search import Enclosure
from latchscan.layout.enclose.strips import NWELL_STRIP, OF_TAPS
from latchscan.layout.model import WELL_TAP, Floats, Geometries, Ints, Layout
from latchscan.layout.runs import offsets, within_runs
from latchscan.layout.source import LayoutSource
from latchscan.technology.model import Technology
from latchscan.technology.quantities import layer_numbers

NO_BOXES = np.zeros((0, 4))


def contacts_and_nets(
    source: LayoutSource,
    layout: Layout,
    ties: Ties,
    emitter_net: Ints,
    rings: Sequence[Enclosure],
    technology: Technology,
) -> tuple[list[Floats], Ints]:
    """Contacts and net of every ring.

    Parameters
    ----------
    source, technology
        Where contacts of diffusions are; none are found where the role `contact` is an
        expression of several layers.
    layout, ties, emitter_net
        What the strips are and which nets they are on.
    rings
        The rings.

    Returns
    -------
    boxes
        For every ring (c, 4) boxes [um].
    net
        (r,) the net of most contacts (of diffusions: of most area), the first of equals; -1
        where none is known.
    """
    boxes: list[Floats] = []
    net = np.full(len(rings), -1, dtype=np.int64)
    well_taps = np.flatnonzero(layout.taps.kind == WELL_TAP)
    tree = shapely.STRtree(layout.taps.polygons[well_taps])
    for row, ring in enumerate(rings):
        strips = list(ring.outline.strips)
        rows = ring.quest.strip_row[strips]
        if ring.quest.material in OF_TAPS or ring.quest.material == NWELL_STRIP:
            taps = rows
            if ring.quest.material == NWELL_STRIP:
                inside = tree.query(ring.quest.strips[strips], predicate="intersects")[1]
                taps = np.unique(well_taps[inside])
                taps = taps[np.isin(layout.taps.body[taps], ring.quest.strip_body[strips])]
            boxes.append(_of_taps(layout, taps))
            net[row] = _most(ties.tap_net[taps], layout.taps.contact_count[taps])
        else:
            boxes.append(_around(source, technology, ring.quest.strips[strips]))
            net[row] = _most(emitter_net[rows], layout.emitters.area_um2[rows])
    return boxes, net


def _of_taps(layout: Layout, taps: Ints) -> Floats:
    first = layout.taps.contact_first
    count = first[taps + 1] - first[taps]
    return np.asarray(
        layout.taps.contact_box_um[np.repeat(first[taps], count) + within_runs(count)]
    )


def _most(net: Ints, weight: Floats | Ints) -> int:
    """The net with the largest weight, the first of equals; -1 where none has any."""
    known = (net >= 0) & (weight > 0)
    if not known.any():
        return -1
    names, place = np.unique(net[known], return_inverse=True)
    return int(names[np.argmax(np.round(np.bincount(place, weights=weight[known]), 6))])


def _around(source: LayoutSource, technology: Technology, strips: Geometries) -> Floats:
    """Boxes of the contacts on strips, drawn on the layer of the role `contact`."""
    layer = technology.layers.get(technology.roles.contact)
    if layer is None:
        return NO_BOXES
    pairs = {layer_numbers(pair) for pair in layer.gds}
    unit = source.database_unit_um
    asked = np.rint(shapely.bounds(strips).reshape(-1, 4) / unit).astype(np.int64)
    found = [np.zeros((0, 4), dtype=np.int64)]
    for columns in source.near(asked, pairs).values():
        if len(columns):
            low = np.minimum.reduceat(columns.points, columns.first[:-1])
            found.append(np.hstack([low, np.maximum.reduceat(columns.points, columns.first[:-1])]))
    boxes = distinct_boxes(np.concatenate(found)) * unit
    on = np.unique(shapely.STRtree(shapely.box(*boxes.T)).query(strips, predicate="intersects")[1])
    return np.asarray(boxes[on], dtype=np.float64)


def joined(lists: Sequence[Ints]) -> tuple[Ints, Ints]:
    """(n + 1,) offsets of lists and the lists end to end."""
    first = offsets(np.array([len(item) for item in lists], dtype=np.int64))
    return first, np.concatenate([np.zeros(0, dtype=np.int64), *lists])
