"""Boundary segments of a sheet cut into panels that are short where the potential bends.

In go the segments and the sources that drive them; out come panels.  The one idea: a panel
may be as long as a share of its distance from the nearest driven source, shorter still at
the corners of contacts, where the current density is singular (like r**(-1/3) at a right
angle: Jackson, *Classical Electrodynamics*, 3rd ed., 1999, section 2.11), and no longer than
the channel it lines is wide.
"""

from __future__ import annotations

from dataclasses import dataclass
from itertools import pairwise

import numpy as np
from numpy.typing import NDArray

from latchscan.errors import GeometryError, ResolutionError
from latchscan.fields.sheet_kernels import Floats, Ints, Lines

MOST_PANELS = 6_000
"""A dense system of this many unknowns takes 0.3 GB, its solution three times that."""
_TOO_MANY = (
    f"sheet: the boundary needs more than {MOST_PANELS} panels; expected a smaller window or"
    " coarser panels"
)
_LEVELS = 40
MOUTH_INSET_UM = 0.5
"""How far from a corner its channel's width is measured."""
_KEY_PER_UM = 1.0e4


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class SheetProblem:
    """A sheet of uniform domains, its contacts and its outer edges.

    Attributes
    ----------
    conductance_s
        (d,) conductance per square of every domain [S].
    start_um, end_um
        (s, 2) end points of the boundary segments.
    left, right
        (s,) domain on either side of a segment as seen from start to end, or -1.
    node
        (s,) node of the contact whose edge the segment is, or -1; a contact's edge has a
        domain on one side only.
    cut
        (s,) True where the segment is no real edge but a cut through the sheet, which is
        solved once as an insulating edge and once as grounded metal.
    node_resistance_ohm
        (k,) resistance from every contact node to ground: 0 for a grounded node, inf for
        a floating one.
    """

    conductance_s: Floats
    start_um: Floats
    end_um: Floats
    left: Ints
    right: Ints
    node: Ints
    cut: NDArray[np.bool_]
    node_resistance_ohm: Floats

    def __post_init__(self) -> None:
        inside, contact = self.left >= 0, self.node >= 0
        if not np.all(inside | (self.right >= 0)):
            raise GeometryError("sheet: a boundary segment has no domain on either side")
        if np.any((contact | self.cut) & inside & (self.right >= 0)):
            raise GeometryError("sheet: a contact or a cut has a domain on both sides")


@dataclass(frozen=True, slots=True, kw_only=True)
class PanelRule:
    """How long a panel may be.

    Attributes
    ----------
    distance_share
        Of the distance from the nearest source; of half of what exceeds `far_um`.
    far_um
        Where panels begin to grow more slowly.
    size_share
        Of that source's width; keeps panels finite where a source touches an edge.
    corner_share, corner_growth
        At a contact's corner a panel is `corner_share` as long as elsewhere and may grow by
        `corner_growth` of its distance from the corner.
    interface_share
        Panels between two domains, which carry two unknowns, are this much shorter.
    channel_share
        Of the width of the channel between two insulating edges, and so too where the
        channel opens.
    neighbour_ratio
        Largest ratio of the lengths of panels that touch.
    smallest_um
        No panel is cut below this length.
    longest_um
        No panel is longer than this.
    """

    distance_share: float = 0.6
    far_um: float = 1.0
    size_share: float = 0.2
    corner_share: float = 0.25
    corner_growth: float = 0.5
    interface_share: float = 0.5
    channel_share: float = 0.5
    neighbour_ratio: float = 2.5
    smallest_um: float = 0.01
    longest_um: float = float("inf")

    def coarser(self, factor: float) -> PanelRule:
        """Return the rule that makes panels `factor` times as long."""
        return PanelRule(
            distance_share=self.distance_share * factor,
            far_um=self.far_um,
            size_share=self.size_share * factor,
            corner_share=self.corner_share,
            corner_growth=self.corner_growth,
            interface_share=self.interface_share,
            channel_share=self.channel_share * factor,
            neighbour_ratio=self.neighbour_ratio,
            smallest_um=self.smallest_um * factor,
            longest_um=self.longest_um * factor,
        )


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Panels:
    """Panels with a domain on the left of each, in the order of their segments.

    Attributes
    ----------
    lines
        (n,) the panels.
    left, right, node, cut
        (n,) see `SheetProblem`; `left` is never -1.
    """

    lines: Lines
    left: Ints
    right: Ints
    node: Ints
    cut: NDArray[np.bool_]


def cut_panels(
    problem: SheetProblem, source_box_um: Floats, source_size_um: Floats, rule: PanelRule
) -> Panels:
    """Panels of every boundary segment.

    Parameters
    ----------
    problem
        The sheet.
    source_box_um
        (b, 4) boxes x0, y0, x1, y1 of the sources near which the potential must be right.
    source_size_um
        (b,) width of the source each box belongs to.
    rule
        Panel lengths.

    Raises
    ------
    ResolutionError
        When the rule asks for more panels than a dense system can hold.
    """
    flip = problem.left < 0
    start = np.where(flip[:, None], problem.end_um, problem.start_um)
    end = np.where(flip[:, None], problem.start_um, problem.end_um)
    left = np.where(flip, problem.right, problem.left)
    right = np.where(flip, -1, problem.right)
    segments = _Segments.of(start, end, left, right, problem.node, problem.cut)
    least = source_size_um * rule.size_share
    mouth, width = _mouths(segments)
    boxes = np.concatenate([source_box_um, np.concatenate([mouth, mouth], axis=1)])
    least = np.concatenate([least, width * rule.channel_share])
    ends, owner = _bisect(segments, boxes, least, rule)
    step = segments.end[owner] - segments.start[owner]
    length = segments.length[owner]
    lines = Lines(
        start=segments.start[owner] + ends[:, :1] * step,
        along=step / length[:, None],
        length=(ends[:, 1] - ends[:, 0]) * length,
    )
    return Panels(
        lines=lines,
        left=left[owner],
        right=right[owner],
        node=problem.node[owner],
        cut=problem.cut[owner],
    )


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class _Segments:
    """Oriented segments and what the cutting rule needs to know of them."""

    start: Floats
    end: Floats
    length: Floats
    domain: Ints
    wall: NDArray[np.bool_]
    shared: NDArray[np.bool_]
    corner: NDArray[np.bool_]
    """(s, 2) whether the start and the end are corners with singular current density."""
    joint: Ints
    """(s, 2) number of the point where the segment starts and ends."""

    @classmethod
    def of(
        cls, start: Floats, end: Floats, left: Ints, right: Ints, node: Ints, cut: NDArray[np.bool_]
    ) -> _Segments:
        step = end - start
        length = np.hypot(step[:, 0], step[:, 1])
        contact = node >= 0
        ends = np.concatenate([start, end])
        key = np.rint(ends * _KEY_PER_UM).astype(np.int64)
        _, place = np.unique(key, axis=0, return_inverse=True)
        place = place.reshape(-1)
        along = step / length[:, None]
        # a joint is smooth when exactly two parallel segments of the same kind meet in it
        kind = np.where(contact, node, np.where(cut, -2, np.where(right >= 0, -3, -1)))
        order = np.argsort(place, kind="stable")
        first = np.concatenate([[0], np.cumsum(np.bincount(place))])
        smooth = np.zeros(len(first) - 1, dtype=bool)
        pair = np.flatnonzero(np.diff(first) == 2)
        a, b = order[first[pair]] % len(start), order[first[pair] + 1] % len(start)
        turn = along[a, 0] * along[b, 1] - along[a, 1] * along[b, 0]
        smooth[pair] = (np.abs(turn) < 1e-3) & (kind[a] == kind[b])
        corner = ~smooth[place].reshape(2, -1).T & contact[:, None]
        wall = ~contact & (right < 0) & ~cut
        return cls(
            start=start,
            end=end,
            length=length,
            domain=left,
            wall=wall,
            shared=right >= 0,
            corner=corner,
            joint=place.reshape(2, -1).T,
        )


def _mouths(segments: _Segments) -> tuple[Floats, Floats]:
    """Places (m, 2) where a channel opens, and its widths: current fans out there.

    They are the walls' corners that point into the sheet, where a wall faces another.
    """
    walls = np.flatnonzero(segments.wall)
    before = np.full(int(segments.joint.max()) + 1, -1)
    before[segments.joint[walls, 1]] = walls
    after = walls[before[segments.joint[walls, 0]] >= 0]
    before = before[segments.joint[after, 0]]
    along = (segments.end - segments.start) / segments.length[:, None]
    turn = along[before, 0] * along[after, 1] - along[before, 1] * along[after, 0]
    inward = (turn < -0.3) & (segments.domain[before] == segments.domain[after])
    before, after = before[inward], after[inward]
    width = np.full(len(after), np.inf)
    for wall, at_end in ((before, True), (after, False)):
        inset = np.minimum(0.5 * segments.length[wall], MOUTH_INSET_UM)[:, None] * along[wall]
        points = segments.end[wall] - inset if at_end else segments.start[wall] + inset
        np.minimum(width, _channel_width(segments, points, wall), out=width)
    open_ended = np.isfinite(width)
    return segments.start[after[open_ended]], width[open_ended]


def _bisect(
    segments: _Segments, boxes: Floats, least: Floats, rule: PanelRule
) -> tuple[Floats, Ints]:
    """Parameters (n, 2) of the panels along their segments and (n,) segment indices."""
    ends = np.tile([0.0, 1.0], (len(segments.length), 1))
    owner = np.arange(len(ends))
    done_ends, done_owner, total = [], [], 0
    for _ in range(_LEVELS):
        long = _too_long(segments, ends, owner, boxes, least, rule)
        done_ends.append(ends[~long])
        done_owner.append(owner[~long])
        total += len(done_ends[-1])
        ends, owner = ends[long], owner[long]
        if total + len(ends) > MOST_PANELS:
            raise ResolutionError(_TOO_MANY)
        if len(ends) == 0:
            break
        middle = ends.mean(axis=1)
        ends = np.concatenate(
            [np.stack([ends[:, 0], middle], 1), np.stack([middle, ends[:, 1]], 1)]
        )
        owner = np.concatenate([owner, owner])
    return _balance(segments, np.concatenate(done_ends), np.concatenate(done_owner), rule)


def _balance(
    segments: _Segments, ends: Floats, owner: Ints, rule: PanelRule
) -> tuple[Floats, Ints]:
    """Halve panels until none is much longer than one it touches."""
    joints = int(segments.joint.max()) + 1
    for _ in range(_LEVELS):
        order = np.lexsort((ends[:, 0], owner))
        ends, owner = ends[order], owner[order]
        length = (ends[:, 1] - ends[:, 0]) * segments.length[owner]
        count = np.arange(len(owner))
        inner = owner[1:] == owner[:-1]
        first = np.concatenate([[True], ~inner])
        last = np.concatenate([~inner, [True]])
        begin = np.where(first, segments.joint[owner, 0], joints + count - 1)
        finish = np.where(last, segments.joint[owner, 1], joints + count)
        shortest = np.full(joints + len(owner), np.inf)
        np.minimum.at(shortest, begin, length)
        np.minimum.at(shortest, finish, length)
        neighbour = np.minimum(shortest[begin], shortest[finish])
        long = length > rule.neighbour_ratio * neighbour * (1 + 1e-9)
        if not long.any():
            break
        middle = ends[long].mean(axis=1)
        ends = np.concatenate(
            [
                ends[~long],
                np.stack([ends[long, 0], middle], axis=1),
                np.stack([middle, ends[long, 1]], axis=1),
            ]
        )
        owner = np.concatenate([owner[~long], owner[long], owner[long]])
        if len(owner) > MOST_PANELS:
            raise ResolutionError(_TOO_MANY)
    return ends, owner


def _too_long(
    segments: _Segments,
    ends: Floats,
    owner: Ints,
    boxes: Floats,
    least: Floats,
    rule: PanelRule,
) -> NDArray[np.bool_]:
    length = (ends[:, 1] - ends[:, 0]) * segments.length[owner]
    allowed = np.full(len(ends), rule.longest_um)
    for place in (0.0, 0.5, 1.0):
        at = ends[:, 0] + place * (ends[:, 1] - ends[:, 0])
        points = segments.start[owner] + at[:, None] * (segments.end - segments.start)[owner]
        np.minimum(allowed, _allowed_near_sources(points, boxes, least, rule), out=allowed)
    allowed[segments.shared[owner]] *= rule.interface_share
    corner = segments.corner[owner]
    whole = segments.length[owner]
    gap = np.where(corner[:, 0], ends[:, 0] * whole, np.inf)
    gap = np.minimum(gap, np.where(corner[:, 1], (1 - ends[:, 1]) * whole, np.inf))
    allowed = np.minimum(allowed, rule.corner_share * allowed + rule.corner_growth * gap)
    allowed = np.maximum(allowed, rule.smallest_um)
    long: NDArray[np.bool_] = length > allowed
    wall = np.flatnonzero(segments.wall[owner] & ~long)
    if len(wall):
        middle = ends[wall].mean(axis=1)
        points = (
            segments.start[owner[wall]]
            + middle[:, None] * (segments.end - segments.start)[owner[wall]]
        )
        width = _channel_width(segments, points, owner[wall])
        long[wall] = length[wall] > np.maximum(rule.channel_share * width, rule.smallest_um)
    return long


def _allowed_near_sources(points: Floats, boxes: Floats, least: Floats, rule: PanelRule) -> Floats:
    best = np.full(len(points), np.inf)
    if len(boxes) == 0:
        return best
    far = rule.distance_share * rule.far_um
    x, y = points[:, :1], points[:, 1:]
    # blocks of points keep the (points x boxes) temporaries inside the cache
    bounds = [*range(0, len(points), max(1, 50_000 // len(boxes))), len(points)]
    for a, b in pairwise(bounds):
        dx = np.maximum(np.maximum(boxes[:, 0] - x[a:b], x[a:b] - boxes[:, 2]), 0.0)
        dy = np.maximum(np.maximum(boxes[:, 1] - y[a:b], y[a:b] - boxes[:, 3]), 0.0)
        distance = np.sqrt(dx * dx + dy * dy) * rule.distance_share
        # far away the shape of the well counts, not the source: grow half as fast there
        distance -= 0.5 * np.maximum(distance - far, 0.0)
        best[a:b] = np.maximum(distance, least).min(axis=1)
    return best


def _channel_width(segments: _Segments, points: Floats, owner: Ints) -> Floats:
    """Distance from a point of a wall to the nearest wall that faces it."""
    walls = np.flatnonzero(segments.wall)
    if len(walls) == 0 or len(points) == 0:
        return np.full(len(points), np.inf)
    along = (segments.end - segments.start)[walls] / segments.length[walls, None]
    mine = (segments.end - segments.start)[owner] / segments.length[owner, None]
    width = np.full(len(points), np.inf)
    bounds = [*range(0, len(points), max(1, 50_000 // len(walls))), len(points)]
    for a, b in pairwise(bounds):
        dx = segments.start[walls, 0] - points[a:b, :1]
        dy = segments.start[walls, 1] - points[a:b, 1:]
        t = -(dx * along[:, 0] + dy * along[:, 1])
        t = np.clip(t, 0.0, segments.length[walls])
        dx = dx + t * along[:, 0]
        dy = dy + t * along[:, 1]
        ahead = dy * mine[a:b, :1] - dx * mine[a:b, 1:]
        distance = np.sqrt(dx * dx + dy * dy)
        facing = mine[a:b] @ along.T < -0.3
        facing &= ahead > 0.3 * distance
        facing &= segments.domain[walls] == segments.domain[owner[a:b], None]
        width[a:b] = np.where(facing, distance, np.inf).min(axis=1)
    return width
