"""The block cut into tiles, and what each tile is given.

Tiles hold about as many shapes as fit a process's cache and memory well; the result does not
depend on them.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from itertools import pairwise

import numpy as np
from numpy.typing import NDArray

from latchscan.layout.derive.geometry import SUBGRID
from latchscan.layout.derive.windows import BoxDbu
from latchscan.layout.model import Ints
from latchscan.layout.source import LayoutSource
from latchscan.layout.trace.elements import Elements
from latchscan.layout.trace.stack import Stack
from latchscan.layout.trace.tiles import Given, TraceTask

SHAPES_A_TILE = 60_000
"""Shapes that a tile should hold."""
SMALLEST_TILE_UM = 20.0
MOST_TILES_A_SIDE = 64
TASKS = 24
"""Enough tasks to keep some processes busy to the end; each carries what its tiles are given."""


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Asked:
    """Labels that are asked what they lie on: points [grid steps] and conductors that count."""

    at: Ints
    sorts: NDArray[np.bool_]


def share_out(
    source: LayoutSource,
    stack: Stack,
    derived: Mapping[int, Elements],
    probes: tuple[Elements, ...],
    labels: Asked,
    block: BoxDbu,
    tile_um: float | None,
) -> list[TraceTask]:
    """Tasks that together cover the block, each with a few tiles in a row."""
    x_cuts, y_cuts = _cuts(source, stack, block, tile_um)
    tiles: list[BoxDbu] = []
    given: list[Given] = []
    for y0, y1 in pairwise(y_cuts):
        row = (block[0], y0, block[2], y1)
        band = {sort: _in(elements, row) for sort, elements in derived.items()}
        asked = tuple(_in(elements, row) for elements in probes)
        in_row = _points_in(labels.at, row, block)
        for x0, x1 in pairwise(x_cuts):
            tile = (x0, y0, x1, y1)
            label = in_row[_points_in(labels.at[in_row], tile, block)]
            tiles.append(tile)
            given.append(
                Given(
                    derived={sort: _in(elements, tile) for sort, elements in band.items()},
                    probes=tuple(_in(elements, tile) for elements in asked),
                    label=label,
                    label_at=labels.at[label],
                    label_sorts=labels.sorts[label],
                )
            )
    share = max(1, len(tiles) // TASKS)
    return [
        TraceTask(
            source=source,
            stack=stack,
            tiles=tuple(tiles[start : start + share]),
            given=tuple(given[start : start + share]),
            block=block,
        )
        for start in range(0, len(tiles), share)
    ]


def _cuts(
    source: LayoutSource, stack: Stack, block: BoxDbu, tile_um: float | None
) -> tuple[list[int], list[int]]:
    width, height = block[2] - block[0], block[3] - block[1]
    unit = source.database_unit_um
    if tile_um is None:
        count = source.total_polygons(stack.pairs())
        side = (width * height / max(1.0, count / SHAPES_A_TILE)) ** 0.5
        side = max(side, SMALLEST_TILE_UM / unit, max(width, height) / MOST_TILES_A_SIDE)
    else:
        side = tile_um / unit
    cuts = []
    for low, length in ((block[0], width), (block[1], height)):
        parts = max(1, int(np.ceil(length / side - 1e-9)))
        cuts.append([low + length * part // parts for part in range(parts + 1)])
    return cuts[0], cuts[1]


def _in(elements: Elements, box: BoxDbu) -> Elements:
    """The elements that meet a box [database units]."""
    frame = np.array(box, dtype=np.int64) * SUBGRID
    boxes = elements.boxes
    outside = (boxes[:, :2] > frame[2:]) | (boxes[:, 2:] < frame[:2])
    return elements.chosen(np.asarray(~outside.any(axis=1)))


def _points_in(points: Ints, box: BoxDbu, block: BoxDbu) -> Ints:
    """Indices of the points in a box; its upper edges belong to it at the block's end only."""
    frame = np.array(box, dtype=np.int64) * SUBGRID
    last = np.array(block[2:], dtype=np.int64) * SUBGRID == frame[2:]
    below = (points < frame[2:]) | (last & (points == frame[2:]))
    return np.flatnonzero(((points >= frame[:2]) & below).all(axis=1))
