"""Nearest target of many points at once, each point looking only at targets of its group.

The one idea: every group is moved to a place of its own, so far from the others that one
tree answers for all groups and the nearest piece is always of the point's own group.  Only
the choice of a piece is made there; distances are measured where the pieces really are.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import shapely

from latchscan.layout.measure.convex import cut_convex, nearest_on_pieces
from latchscan.layout.model import Floats, Geometries, Ints

ROUNDING_UM = 1e-8
"""More than what moving a point can lose, so that no square misses what it should list [um]."""
FEW = 20
"""Target pieces on average in a square that is worth listing."""


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Targets:
    """Convex target pieces in one tree, each group moved to a place of its own.

    Attributes
    ----------
    corners
        (m, 4, 2) the pieces where they really are.
    tree
        Tree of the moved pieces; moved so far apart that the nearest piece of a moved point
        is always one of its own group.
    shift
        (g, 2) how far each group is moved.
    square
        (g,) half side of a square in which a group has few pieces on average.
    """

    corners: Floats
    tree: shapely.STRtree
    shift: Floats
    square: Floats

    def nearest(self, points: Floats, group: Ints) -> tuple[Ints, Floats]:
        """Index of the nearest target piece of (n, 2) points, and its distance (n,)."""
        index = self.tree.nearest(shapely.points(points + self.shift[group]))
        return index, nearest_on_pieces(points, self.corners[index])[0]

    def nearer(self, points: Floats, group: Ints, guess: Ints) -> tuple[Ints, Floats]:
        """The same, given for each point some target piece of its group that is not far.

        Listing what meets the square around a point is an order of magnitude cheaper than a
        search for the nearest, as long as the square is small.
        """
        index, distance = guess.copy(), nearest_on_pieces(points, self.corners[guess])[0]
        wide = distance > self.square[group]
        index[wide], distance[wide] = self.nearest(points[wide], group[wide])
        small = np.flatnonzero(~wide)
        moved = points[small] + self.shift[group[small]]
        half = distance[small, None] + ROUNDING_UM
        squares = shapely.box(*(moved - half).T, *(moved + half).T)
        point, piece = self.tree.query(squares)
        point = small[point]
        listed = nearest_on_pieces(points[point], self.corners[piece])[0]
        np.minimum.at(distance, point, listed)
        equal = listed == distance[point]
        index[point[equal]] = len(self.corners)
        np.minimum.at(index, point[equal], piece[equal])
        return index, distance


def place_targets(shapes: Geometries, members: Ints, targets: Geometries, owners: Ints) -> Targets:
    """Convex target pieces in a tree, ordered by position whatever their given order."""
    pieces = cut_convex(targets)
    group = owners[pieces.owner]
    corners = pieces.corners_um
    order = np.lexsort((*corners.reshape(len(corners), -1).T, group))
    return place_pieces(shapes, members, corners[order], group[order])


def place_pieces(shapes: Geometries, members: Ints, corners: Floats, group: Ints) -> Targets:
    """The same for convex pieces (m, 4, 2), each with its group, kept in their order."""
    box = _group_boxes(shapely.bounds(shapes), members, corners, group)
    area = (box[:, 2] - box[:, 0]) * (box[:, 3] - box[:, 1])
    shift = _shifts(box)
    # two to a node answers twice as fast as the default of ten (measured)
    tree = shapely.STRtree(_drawn(corners + shift[group][:, None, :]), node_capacity=2)
    return Targets(
        corners=corners,
        tree=tree,
        shift=shift,
        square=np.sqrt(FEW * area / np.bincount(group)) / 2.0,
    )


def _drawn(corners: Floats) -> Geometries:
    """Shapely polygons of convex pieces (m, 4, 2); boxes, nearly all, are made faster."""
    low, high = corners[:, 0], corners[:, 2]
    boxed = (corners[:, 1] == np.stack([high[:, 0], low[:, 1]], axis=1)).all()
    boxed = boxed and (corners[:, 3] == np.stack([low[:, 0], high[:, 1]], axis=1)).all()
    if boxed:
        return np.asarray(shapely.box(*low.T, *high.T))
    return np.asarray(shapely.polygons(corners))


def _group_boxes(bounds: Floats, members: Ints, corners: Floats, group: Ints) -> Floats:
    """Bounding box (g, 4) of the shapes and target pieces of each group."""
    count = int(members.max()) + 1
    box = np.tile([np.inf, np.inf, -np.inf, -np.inf], (count, 1))
    np.minimum.at(box[:, :2], members, bounds[:, :2])
    np.maximum.at(box[:, 2:], members, bounds[:, 2:])
    np.minimum.at(box[:, :2], group, corners.min(axis=1))
    np.maximum.at(box[:, 2:], group, corners.max(axis=1))
    return box


def _shifts(box: Floats) -> Floats:
    """Displacement (g, 2) of each group's box to shelves on which no two groups are near.

    A group gets a square of four times its diagonal and stands in the middle of its width: from
    any point of its box everything of its own is nearer than anything of another group, however
    small the groups beside it are.  Small shifts keep the rounding of moved points small.
    """
    if len(box) == 1:
        return np.zeros((1, 2))
    square = 4.0 * np.hypot(box[:, 2] - box[:, 0], box[:, 3] - box[:, 1])
    order = np.lexsort((box[:, 0], box[:, 1], square))
    start = np.cumsum(square[order]) - square[order]
    shelf_length = np.sqrt(np.sum(square**2)) + square.max()
    shelf = np.floor(start / shelf_length)
    place = np.empty((len(box), 2))
    place[order] = np.column_stack([start - shelf * shelf_length, shelf * 2.0 * square.max()])
    place[:, 0] += 0.375 * square
    return np.asarray(place - box[:, :2])
