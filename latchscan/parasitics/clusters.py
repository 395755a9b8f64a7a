"""Emitters in groups that are solved together, on the layout's own pitch where it has one.

In go the emitters' boxes, out come groups of indices.  The idea: where most emitters
repeat at a pitch, groups are tiles of a multiple of it, so that equal groups in equal
surroundings come up again and need one solution; elsewhere groups are halved until they are
small.
"""

from __future__ import annotations

from collections import Counter
from itertools import pairwise

import numpy as np
from numpy.typing import NDArray

from latchscan.layout.model import Floats, Ints

MOST_EMITTERS = 64
_TILE_FACTOR = 1.75
"""Tiles of a repeating layout hold more: dense arrays leave room on the same grid."""
_REPEATING_SHARE = 0.6
_AS_GOOD = 0.02
"""Difference of two shares below which the smaller step serves as well."""
_AHEAD = (1, 2, 3, 4, 5, 6, 7, 8, 10, 12, 14, 16, 20, 24, 28, 32)
"""How many equal emitters of a row a step may pass over."""
_GAP_UM = 20.0
"""Emitters farther apart belong to different parts of a layout, each with its own pitch."""
_FEWEST_ALONE, _FEWEST_EQUALS = 8, 4
"""Emitters of an island, and islands alike, that make it worth a window of its own."""
_FEWEST_TO_REPEAT = 500
_CANDIDATES = 24
_KEY_PER_UM = 1000.0
_WIDEST_UM = 45.0
"""A group never spreads wider: the grid over it would be too coarse for an emitter."""


def cluster_emitters(boxes_um: Floats, most: int = MOST_EMITTERS) -> list[Ints]:
    """Groups of about `most` emitters at most that lie together.

    Parameters
    ----------
    boxes_um
        (n, 4) x0, y0, x1, y1 [um].

    Returns
    -------
    list of ndarray
        Ascending indices; every emitter is in one group.  Moving all boxes together
        changes nothing.
    """
    if len(boxes_um) == 0:
        return []
    middle = (boxes_um[:, :2] + boxes_um[:, 2:]) / 2.0
    result: list[Ints] = []
    rest: list[Ints] = []
    dense = int(_TILE_FACTOR * most)
    islands = _islands(boxes_um, np.arange(len(boxes_um), dtype=np.int64))
    alike = _equals(boxes_um, islands)
    for island, equals in zip(islands, alike, strict=True):
        if _FEWEST_ALONE <= len(island) <= most and equals >= _FEWEST_EQUALS:
            result.extend(_halve(middle, island, most))
            continue
        pitch = repeat_pitch(boxes_um[island])
        if pitch is None:
            rest.append(island)
            continue
        place = middle[island]
        for tile in _tiles(place, _tile_size(place, pitch, dense)):
            result.extend(_halve(middle, island[tile], dense))
    if rest:
        result.extend(_halve(middle, np.sort(np.concatenate(rest)), most))
    return result


def _equals(boxes_um: Floats, islands: list[Ints]) -> list[int]:
    """For each island the number of islands that look like it, itself among them."""
    keys = []
    for island in islands:
        boxes = boxes_um[island]
        grid = np.rint((boxes - np.tile(boxes[:, :2].min(axis=0), 2)) * _KEY_PER_UM)
        keys.append(grid[np.lexsort(grid.T)].tobytes())
    count = Counter(keys)
    return [count[key] for key in keys]


def _islands(boxes_um: Floats, group: Ints) -> list[Ints]:
    """Parts of a group that gaps wider than `_GAP_UM` set apart, straight across the group."""
    for axis in (0, 1):
        low, high = boxes_um[group, axis], boxes_um[group, axis + 2]
        order = np.argsort(low, kind="stable")
        gap = low[order][1:] - np.maximum.accumulate(high[order])[:-1]
        cuts = np.flatnonzero(gap > _GAP_UM) + 1
        if len(cuts):
            parts = np.split(order, cuts)
            return [found for part in parts for found in _islands(boxes_um, np.sort(group[part]))]
    return [group]


def repeat_pitch(boxes_um: Floats) -> tuple[float, float] | None:
    """Steps along x and y that carry most emitters onto equal ones [um].

    The smallest step is taken of those that carry about as many as the best one does: the
    fingers of a device repeat too, but the step from device to device carries more of them.
    A direction without such a step has pitch 0; None where neither direction has one.
    """
    if len(boxes_um) < _FEWEST_TO_REPEAT:
        return None
    grid = np.rint((boxes_um - boxes_um[:, :2].min(axis=0)[[0, 1, 0, 1]]) * _KEY_PER_UM)
    grid = grid.astype(np.int64)
    x, y = (_axis_pitch(grid, axis) / _KEY_PER_UM for axis in (0, 1))
    return (x, y) if x or y else None


def _axis_pitch(grid: Ints, axis: int) -> int:
    """Pitch along one axis in grid units, 0 where there is none."""
    size = grid[:, 2:] - grid[:, :2]
    order = np.lexsort((grid[:, axis], grid[:, 1 - axis], size[:, 0], size[:, 1]))
    row, alike = grid[order], size[order]
    steps = []
    for ahead in _AHEAD:
        same = np.all(alike[ahead:] == alike[:-ahead], axis=1)
        same &= row[ahead:, 1 - axis] == row[:-ahead, 1 - axis]
        steps.append((row[ahead:, axis] - row[:-ahead, axis])[same])
    step, count = np.unique(np.concatenate(steps), return_counts=True)
    likely = step[np.argsort(-count, kind="stable")[:_CANDIDATES]]
    likely = np.sort(likely[likely > 0])
    share = np.array([_repeating_share(grid, axis, int(step)) for step in likely])
    if share.max(initial=0.0) < _REPEATING_SHARE:
        return 0
    return int(likely[np.argmax(share >= share.max() - _AS_GOOD)])


def _repeating_share(grid: Ints, axis: int, step: int) -> float:
    """Share of emitters that land on an equal one when moved by a step."""
    moved = grid.copy()
    moved[:, axis] += step
    moved[:, axis + 2] += step
    return float(np.isin(_row_keys(moved), _row_keys(grid)).mean())


def _row_keys(grid: Ints) -> NDArray[np.uint64]:
    """One number a box; two boxes share one only by an improbable accident."""
    factors = np.array(
        [0x9E3779B97F4A7C15, 0xC2B2AE3D27D4EB4F, 0x165667B19E3779F9, 0xD6E8FEB86659FD93],
        dtype=np.uint64,
    )
    keys = np.zeros(len(grid), dtype=np.uint64)
    for column, factor in enumerate(factors):
        keys += grid[:, column].astype(np.uint64) * factor
    return keys


def _tile_size(middle: Floats, pitch: tuple[float, float], most: int) -> tuple[float, float]:
    """Multiples of the pitch that hold about three quarters of `most` emitters."""
    extent = np.maximum(np.ptp(middle, axis=0), 1e-3)
    side = float(np.sqrt(0.75 * most * extent.prod() / len(middle)))
    size = [side, side]
    # the coarser pitch first: the other side makes up for what its rounding adds
    for axis in np.argsort(pitch)[::-1]:
        wanted = side**2 / size[1 - axis]
        size[axis] = pitch[axis] * max(1, round(wanted / pitch[axis])) if pitch[axis] else wanted
    return size[0], size[1]


def _tiles(middle: Floats, size: tuple[float, float]) -> list[Ints]:
    # a little below the lowest emitter: rounding must not put its equals in another tile
    place = np.floor((middle - middle.min(axis=0) + 1e-4) / np.asarray(size)).astype(np.int64)
    order = np.lexsort((place[:, 0], place[:, 1]))
    change = np.any(np.diff(place[order], axis=0) != 0, axis=1)
    bounds = [0, *(np.flatnonzero(change) + 1).tolist(), len(order)]
    return [np.sort(order[a:b]) for a, b in pairwise(bounds)]


def _halve(middle: Floats, group: Ints, most: int) -> list[Ints]:
    """Halve a group across its longer side until every part is small enough."""
    inside = middle[group]
    if len(group) <= most and float(np.ptp(inside, axis=0).max()) <= _WIDEST_UM:
        return [group]
    axis = int(np.argmax(np.round(np.ptp(inside, axis=0), 4)))
    order = np.lexsort((np.round(inside[:, 1 - axis], 4), np.round(inside[:, axis], 4)))
    half = len(group) // 2
    low, high = np.sort(group[order[:half]]), np.sort(group[order[half:]])
    return _halve(middle, low, most) + _halve(middle, high, most)
