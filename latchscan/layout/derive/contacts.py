"""Contacts: which of them lie on a tap, and where drawn ones make up one contact.

A block holds millions of contacts and few of them matter: those on taps.  Only the contacts
around a tap are ever fetched; everything here is columns of boxes x0, y0, x1, y1.
"""

from __future__ import annotations

import numpy as np
import shapely
from numpy.typing import NDArray

from latchscan.layout.model import Ints
from latchscan.layout.runs import within_runs

EVEN = 4
"""Boxes are alike if the longest side is no more than so many times the usual one."""
NO_BOXES = np.zeros((0, 4), dtype=np.int64)


def distinct_boxes(boxes: Ints) -> Ints:
    """(m, 4) the boxes (n, 4), each once, sorted by (y0, x0)."""
    if len(boxes) < 2:
        return boxes
    ranked = boxes[np.lexsort((boxes[:, 3], boxes[:, 2], boxes[:, 0], boxes[:, 1]))]
    fresh = np.ones(len(ranked), dtype=np.bool_)
    x0, y0, x1, y1 = (ranked[1:] != ranked[:-1]).T
    fresh[1:] = x0 | y0 | x1 | y1
    return np.asarray(ranked[fresh])


def meets_any(boxes: Ints, others: Ints) -> NDArray[np.bool_]:
    """(n,) whether each of the boxes (n, 4) overlaps any of the others (m, 4) with area."""
    found = np.zeros(len(boxes), dtype=np.bool_)
    if len(boxes) and len(others):
        row, other = shapely.STRtree(shapely.box(*others.T)).query(shapely.box(*boxes.T))
        one, two = boxes[row], others[other]
        shared = (one[:, :2] < two[:, 2:]) & (two[:, :2] < one[:, 2:])
        found[row[shared.all(axis=1)]] = True
    return found


def merged_boxes(boxes: Ints) -> Ints:
    """Boxes that overlap or share an edge replaced by the box around them.

    The result is the same in whatever parts and order boxes are merged.
    """
    while len(boxes) > 1:
        row, other = _linked(boxes)
        if not len(row):
            return boxes
        lead = np.arange(len(boxes))
        while True:
            least = np.minimum(lead[row], lead[other])
            np.minimum.at(lead, row, least)
            np.minimum.at(lead, other, least)
            if np.array_equal(lead[row], lead[other]):
                break
        _, group = np.unique(lead, return_inverse=True)
        order = np.argsort(group, kind="stable")
        first = np.searchsorted(group[order], np.arange(group.max() + 1))
        low = np.minimum.reduceat(boxes[order, :2], first)
        boxes = np.hstack([low, np.maximum.reduceat(boxes[order, 2:], first)])
    return boxes


def _linked(boxes: Ints) -> tuple[Ints, Ints]:
    """Pairs of boxes that overlap or share more than a corner."""
    sides = boxes[:, 2:] - boxes[:, :2]
    even = sides.max() <= EVEN * np.median(sides)
    row, other = (_in_squares if even else _in_tree)(boxes)
    low = np.maximum(boxes[row, :2], boxes[other, :2])
    high = np.minimum(boxes[row, 2:], boxes[other, 2:])
    (dx, dy) = (high - low).T
    linked = (dx >= 0) & (dy >= 0) & ((dx > 0) | (dy > 0))
    return row[linked], other[linked]


def _in_tree(boxes: Ints) -> tuple[Ints, Ints]:
    """Pairs of boxes that meet, each once."""
    drawn = shapely.box(*boxes.T)
    row, other = shapely.STRtree(drawn).query(drawn)
    later = row < other
    return row[later], other[later]


def _in_squares(boxes: Ints) -> tuple[Ints, Ints]:
    """Pairs of boxes that may meet, each once: those that begin in the same or next squares.

    The squares are as large as the largest box; no tree of a million boxes is needed.
    """
    side = int((boxes[:, 2:] - boxes[:, :2]).max()) + 1
    column, line = ((boxes[:, :2] - boxes[:, :2].min(axis=0)) // side).T
    # a free line between two columns keeps the last square of one off the first of the next
    step = int(line.max()) + 3
    square = column * step + line + 1
    order = np.argsort(square, kind="stable")
    square = square[order]
    rows = np.arange(len(boxes))
    same = (rows + 1, np.searchsorted(square, square + 1, side="right"))
    beside = (
        np.searchsorted(square, square + step - 1, side="left"),
        np.searchsorted(square, square + step + 1, side="right"),
    )
    found = [
        (np.repeat(rows, b - a), np.repeat(a, b - a) + within_runs(b - a))
        for a, b in (same, beside)
    ]
    one, two = (np.concatenate(part) for part in zip(*found, strict=True))
    return order[one], order[two]


def merged_across(boxes: Ints, x_seams: Ints, y_seams: Ints) -> Ints:
    """The same for boxes that are merged already within the tiles between the seams.

    Parameters
    ----------
    boxes
        (n, 4) boxes; whatever can be merged needs a box that reaches a seam.
    x_seams, y_seams
        Places of the upright and of the level seams, ascending.
    """
    if len(boxes) < 2:
        return boxes
    # a partner of a box that reaches a seam is no farther from it than the largest box
    reach = int((boxes[:, 2:] - boxes[:, :2]).max())
    near = _reaches(boxes[:, 0::2], x_seams, reach) | _reaches(boxes[:, 1::2], y_seams, reach)
    # a box on a seam comes from both tiles
    beside = distinct_boxes(boxes[near])
    boxes = np.concatenate([boxes[~near], beside])
    if len(beside) < 2 or not len(_linked(beside)[0]):
        return boxes
    return merged_boxes(boxes)


def _reaches(spans: Ints, seams: Ints, reach: int) -> NDArray[np.bool_]:
    """(n,) whether intervals (n, 2), widened by `reach`, hold a seam."""
    low = np.searchsorted(seams, spans[:, 0] - reach, side="left")
    high = np.searchsorted(seams, spans[:, 1] + reach, side="right")
    return np.asarray(low < high)
