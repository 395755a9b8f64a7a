"""Guard rings of random shape with a slot cut at a random place.

Expected widths and places follow from how the slot was cut; no published source is needed.
"""

from __future__ import annotations

from itertools import pairwise
from typing import Any

import numpy as np
import shapely
from hypothesis import assume, given, settings
from hypothesis import strategies as st
from layout.ring_sites import column, frame, site
from shapely import affinity

from latchscan.layout.enclose.width import contacted_share

NM = 0.001
fine = st.integers


@st.composite
def rings(draw: st.DrawFn) -> tuple[Any, float]:
    """A closed ring around the origin and its width."""
    half_x, half_y = draw(fine(4_000, 15_000)) * NM, draw(fine(4_000, 15_000)) * NM
    width = draw(fine(200, 1_500)) * NM
    if draw(st.booleans()):
        return frame(-half_x - width, -half_y - width, half_x + width, half_y + width, width), width
    cut = draw(fine(500, 3_000)) * NM
    inner = _octagon(half_x, half_y, cut)
    # equally wide on all eight sides
    return inner.buffer(width, join_style="mitre").difference(inner), width


def _octagon(x: float, y: float, cut: float) -> Any:
    corners = [(x, y - cut), (x - cut, y), (cut - x, y), (-x, y - cut)]
    return shapely.Polygon([*corners, *((-a, -b) for a, b in corners)])


@st.composite
def slotted(draw: st.DrawFn) -> tuple[Any, Any, float]:
    """A ring, the slot to be cut into it, and the slot's width.

    The slot stands upright on the ring's middle line at any place of it but near its bends.
    """
    ring, width = draw(rings())
    inner = shapely.Polygon(ring.interiors[0])
    corners = shapely.get_coordinates(inner)
    side = draw(fine(0, len(corners) - 2))
    one, two = corners[side], corners[side + 1]
    length = float(np.hypot(*(two - one)))
    slot = draw(fine(10, 2_000)) * NM
    # a slot that reaches a bend has another shape
    room = length - slot - 0.02
    assume(room > 0)
    place = 0.01 + slot / 2 + room * draw(fine(0, 1_000)) / 1_000
    along = (two - one) / length
    across = np.array([along[1], -along[0]])
    middle = one + place * along
    if inner.covers(shapely.Point(middle + 0.01 * across)):
        across = -across
    ends = [
        middle + sign * slot / 2 * along + depth * across
        for sign, depth in ((-1, -0.05), (1, -0.05), (1, width + 0.05), (-1, width + 0.05))
    ]
    return ring, shapely.Polygon(ends), slot


def found(strips: Any, injector: Any) -> Any:
    return site().n("pin", injector).ptap("vss", strips).find()[0]


@settings(deadline=None, max_examples=40)
@given(slotted(), fine(-1_000, 1_000), fine(-1_000, 1_000))
def test_a_slot_anywhere_is_found_at_its_place_and_width_and_closing_it_clears(
    cut: tuple[Any, Any, float], x: int, y: int
) -> None:
    ring, slot, width = cut
    injector = shapely.box(x * NM - 0.5, y * NM - 1, x * NM + 0.5, y * NM + 1)
    rings = found(ring.difference(slot), injector)
    assert rings.closed.tolist() == [False]
    assert np.allclose(rings.gap_um, [width], atol=1e-6)
    line = shapely.linestrings([rings.gap_from_um[0], rings.gap_to_um[0]])
    # the opening's ends lie on the slot's faces
    assert slot.buffer(1e-6).covers(line)
    closed = found(ring, injector)
    assert closed.closed.tolist() == [True]
    assert not len(closed.gap_um)


@settings(deadline=None, max_examples=25)
@given(rings(), st.lists(st.tuples(fine(0, 359), fine(50, 1_500)), min_size=2, max_size=5))
def test_several_slots_seen_obliquely_are_as_wide_as_the_pieces_lie_apart(
    drawn: tuple[Any, float], slots: list[tuple[int, int]]
) -> None:
    """Against shapely: the least distance of pieces that are next to each other."""
    ring, _ = drawn
    angles = sorted({angle for angle, _ in slots})
    assume(len(angles) == len(slots))
    wedges = [
        affinity.rotate(shapely.box(0, -size * NM / 2, 60, size * NM / 2), angle, origin=(0, 0))
        for angle, size in sorted(slots)
    ]
    pieces = list(shapely.get_parts(ring.difference(shapely.union_all(wedges))))
    apart = np.diff([*angles, angles[0] + 360])
    assume(len(pieces) == len(slots) and apart.min() > 25)
    rings = found(shapely.MultiPolygon(pieces), shapely.box(-0.5, -1, 0.5, 1))
    pieces.sort(key=lambda piece: _angle(piece, angles))
    expected = [one.distance(two) for one, two in pairwise(pieces)]
    expected.append(pieces[-1].distance(pieces[0]))
    if len(pieces) == 2:
        # both openings lie between the same two pieces: only the narrower is their distance
        assert len(rings.gap_um) == 2
        assert np.isclose(rings.gap_um[1], expected[0], atol=1e-6)
        return
    assert np.allclose(rings.gap_um, sorted(expected, reverse=True), atol=1e-6)


def _angle(piece: Any, angles: list[int]) -> int:
    """Which of the sectors between cuts a piece lies in."""
    point = piece.representative_point()
    angle = np.degrees(np.arctan2(point.y, point.x)) % 360
    return int(np.searchsorted(angles, angle)) % len(angles)


@settings(deadline=None, max_examples=20)
@given(slotted(), fine(0, 3), st.booleans(), fine(-50_000, 50_000))
def test_moving_turning_and_mirroring_change_nothing(
    cut: tuple[Any, Any, float], quarter: int, mirrored: bool, shift: int
) -> None:
    ring, slot, _ = cut
    injector = shapely.box(-0.7, -1, 0.5, 1.2)

    def placed(shape: Any) -> Any:
        if mirrored:
            shape = affinity.scale(shape, xfact=-1, origin=(0, 0))
        shape = affinity.rotate(shape, 90 * quarter, origin=(0, 0))
        return affinity.translate(shape, shift * NM, -2 * shift * NM)

    strips = ring.difference(slot)
    one, two = found(strips, injector), found(placed(strips), placed(injector))
    assert np.allclose(one.gap_um, two.gap_um, atol=1e-6)
    assert np.allclose(one.width_um, two.width_um, atol=0.0011)
    assert np.allclose(one.member_distance_um, two.member_distance_um)
    ends = [placed(shapely.Point(end)) for end in (one.gap_from_um[0], one.gap_to_um[0])]
    there = shapely.MultiPoint([two.gap_from_um[0], two.gap_to_um[0]])
    assert shapely.MultiPoint(ends).hausdorff_distance(there) < 1e-5


@settings(deadline=None, max_examples=25)
@given(rings(), fine(100, 900), st.booleans())
def test_a_closed_ring_is_as_wide_as_its_narrowest_place(
    drawn: tuple[Any, float], part: int, outside: bool
) -> None:
    """A notch of known depth cut into a closed ring leaves the rest of its width."""
    ring, width = drawn
    inner = shapely.Polygon(ring.interiors[0])
    top = inner.bounds[3]
    depth = round(width * part / 1_000, 3)
    low, high = (top + width - depth, top + width + 1) if outside else (top - 1, top + depth)
    rings = found(ring.difference(shapely.box(-0.6, low, 0.9, high)), shapely.box(-1, -1, 1, 1))
    assert rings.closed.tolist() == [True]
    assert np.isclose(rings.width_um[0], width - depth, atol=0.0011)
    x, y = rings.width_at_um[0]
    assert -0.6 - width <= x <= 0.9 + width
    assert top <= y <= top + width


@settings(deadline=None, max_examples=60)
@given(
    st.lists(st.tuples(fine(-12, 12), fine(-12, 12), fine(1, 3), fine(1, 3)), max_size=30),
    fine(0, 2_500),
)
def test_contacted_share_is_the_union_of_the_grown_contacts(
    drawn: list[tuple[int, int, int, int]], reach: int
) -> None:
    """Against shapely's union of all boxes at once, on contacts in rows, columns and astray."""
    ring = frame(-12, -12, 12, 12, 3)
    boxes = np.array([(x, y, x + dx, y + dy) for x, y, dx, dy in drawn], dtype=float).reshape(-1, 4)
    grown = boxes + np.array([-1, -1, 1, 1]) * reach * NM
    whole = shapely.union_all(shapely.box(*grown.T)).intersection(ring).area
    share = contacted_share(column([ring]), boxes, reach * NM)
    assert np.isclose(share, whole / ring.area, atol=1e-8)


def closing_width(strips: Any, injector: Any) -> float:
    """Width of the widest opening: twice the growth that encloses an injector, by bisection.

    An independent way to the same number wherever openings do not depend on one another.
    """
    low, high = 0.0, 2.0
    while high - low > 1e-5:
        middle = (low + high) / 2
        grown = shapely.get_parts(strips.buffer(middle, quad_segs=64))
        holes = shapely.polygons(np.concatenate([shapely.get_rings(part)[1:] for part in grown]))
        low, high = (low, middle) if shapely.covers(holes, injector).any() else (middle, high)
    return low + high


@settings(deadline=None, max_examples=30)
@given(rings(), fine(0, 3_599), fine(0, 3_599), fine(0, 2_500), fine(20, 1_500))
def test_an_oblique_cut_is_as_wide_as_the_growth_that_closes_it(
    drawn: tuple[Any, float], bearing: int, heading: int, off: int, size: int
) -> None:
    """A straight cut that starts somewhere in the ring and leaves it at any angle, anywhere."""
    ring, _ = drawn
    injector = shapely.box(-0.3, -0.3, 0.3, 0.3)
    angle = np.radians(bearing / 10)
    start = (off * NM * np.cos(angle), off * NM * np.sin(angle))
    cut = shapely.box(start[0], start[1] - size * NM / 2, start[0] + 60, start[1] + size * NM / 2)
    strips = ring.difference(affinity.rotate(cut, heading / 10, origin=start))
    rings_ = found(strips, injector)
    assert np.isclose(rings_.gap_um[0], closing_width(strips, injector), atol=1e-3)
    assert len(rings_.gap_um) == 1
