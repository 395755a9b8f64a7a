"""The rings of one material around its injectors.

In: a `Quest`.  Out: `Enclosure`s.  Injectors of one net that see each other over no strip
share a room and are enclosed together.  Strips that surround a room on their own are rings of
their own, from the innermost outwards; what is left may close around it together.
"""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass, field
from typing import Any

import numpy as np
import shapely
from scipy.spatial import Delaunay

from latchscan.layout.components import connected
from latchscan.layout.connections import Flags
from latchscan.layout.enclose.outline import Outline, shortest_outline, whole_ring
from latchscan.layout.enclose.promise import promising, stands_around
from latchscan.layout.enclose.strips import Quest, boxes_of
from latchscan.layout.model import Floats, Geometries, Ints
from latchscan.layout.runs import within_runs
from latchscan.technology.model import RingSearch

MOST_RINGS = 3
"""Rings of one material around one room, the innermost."""
ALONE = 0.8
"""Coverage of a strip that is a ring of its own, whatever stands beside it."""
_Key = tuple[int, ...]
"""The strips of a ring."""
NEAR_SHARE = 0.1
"""Least part of a ring that lies within reach of what it encloses: the tap ring around a whole
block comes near to some of its injectors but guards none of them."""
MOST_PAIRS = 2_000_000
"""Pairs of seats and strips above which only strips near the seat itself are looked at."""
FEW = 12
"""So many shapes and fewer are linked each with each."""


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Enclosure:
    """One ring.

    Attributes
    ----------
    quest
        Its material, strips and injectors.
    outline
        Which of the strips, and the openings.
    rows
        (i,) sorted places in `quest.injector` of what it encloses.
    """

    quest: Quest
    outline: Outline
    rows: Ints


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class _Seat:
    """Injectors that share a room, and the strips near them."""

    rows: Ints
    parts: Geometries
    links: Geometries
    whole: Any
    box: Floats
    near: Ints


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class _Strips:
    """Strips with their boxes and all their holes."""

    polygons: Geometries
    box: Floats
    holes: Geometries
    hole_owner: Ints
    hole_tree: shapely.STRtree


class _Rooms:
    """Innermost rooms that were found, with the rings around each."""

    def __init__(self) -> None:
        self._rooms: list[Any] = []
        self._rings: list[list[_Key]] = []
        self._boxes = np.zeros((0, 4))

    def add(self, room: Any, rings: list[_Key]) -> None:
        """Remember a room."""
        shapely.prepare(room)
        self._rooms.append(room)
        self._rings.append(rings)
        self._boxes = np.vstack([self._boxes, room.bounds])

    def smallest(self, seat: _Seat) -> tuple[Any, list[_Key]] | None:
        """The smallest room that holds a seat, and its rings."""
        low, high = self._boxes[:, :2] <= seat.box[:2], self._boxes[:, 2:] >= seat.box[2:]
        rows = np.flatnonzero((low & high).all(axis=1)).tolist()
        holding = [(self._rooms[row].area, row) for row in rows
                   if self._rooms[row].covers(seat.whole)]  # fmt: skip
        if not holding:
            return None
        row = min(holding)[1]
        return self._rooms[row], self._rings[row]


@dataclass(slots=True, kw_only=True, eq=False)
class _Found:
    """A ring while it gathers members."""

    outline: Outline
    rows: set[int] = field(default_factory=set)


def enclosures(quest: Quest, net: Ints, search: RingSearch) -> list[Enclosure]:
    """All rings of a quest.

    Parameters
    ----------
    quest
        Strips and injectors.
    net
        (i,) net of every injector of the quest, -1 where not known.
    search
        Reach and least coverage.

    Returns
    -------
    list
        Each ring once; rings around different injectors that are made of the same strips are
        one, with the openings of the injector that sees most of them.
    """
    if not len(quest.strips) or not len(quest.injector):
        return []
    found: dict[_Key, _Found] = {}
    rooms = _Rooms()
    strips = _strips(quest.strips)
    for seat in _seats(quest, net, strips.box, search.reach_um):
        shared = _shared(seat, rooms, strips)
        if shared is None:
            outlines = _rings_of(seat, strips, search.least_coverage)
            shared = [outline.strips for outline in outlines]
            for outline in outlines:
                _keep(found, outline)
            if outlines:
                rooms.add(outlines[0].room, shared)
        for key in shared:
            found[key].rows.update(seat.rows.tolist())
    return list(_within_reach(quest, found.values(), search.reach_um))


def _strips(polygons: Geometries) -> _Strips:
    rings, owner = shapely.get_rings(polygons, return_index=True)
    inner = np.ones(len(rings), dtype=np.bool_)
    inner[np.searchsorted(owner, np.arange(len(polygons)))] = False
    holes = np.asarray(shapely.polygons(rings[inner]), dtype=np.object_).reshape(-1)
    return _Strips(
        polygons=polygons,
        box=boxes_of(polygons),
        holes=holes,
        hole_owner=owner[inner],
        hole_tree=shapely.STRtree(holes),
    )


def _keep(found: dict[_Key, _Found], outline: Outline) -> None:
    """Remember a ring, or its wider openings if it is known already."""
    known = found.get(outline.strips)
    if known is None:
        found[outline.strips] = _Found(outline=outline)
    elif outline.gap_um.sum() > known.outline.gap_um.sum() + 1e-6:
        known.outline = outline


def _within_reach(
    quest: Quest, found: Sequence[_Found] | Any, reach_um: float
) -> Iterator[Enclosure]:
    """The rings with those members that are near enough."""
    for ring in found:
        rows = np.array(sorted(ring.rows), dtype=np.int64)
        strips = shapely.multipolygons(quest.strips[list(ring.outline.strips)])
        rows = rows[np.asarray(shapely.dwithin(quest.place[rows], strips, reach_um))]
        if len(rows) and _near_share(quest.place[rows], strips, reach_um) >= NEAR_SHARE:
            yield Enclosure(quest=quest, outline=ring.outline, rows=rows)


def _near_share(places: Geometries, strips: Any, reach_um: float) -> float:
    """Part of the strips' area that lies within reach of any of the places."""
    around = boxes_of(places) + reach_um * np.array([-1.0, -1.0, 1.0, 1.0])
    near = shapely.union_all(shapely.box(*np.unique(around, axis=0).T))
    return float(shapely.area(shapely.intersection(strips, near)) / shapely.area(strips))


def _seats(quest: Quest, net: Ints, boxes: Floats, reach_um: float) -> Iterator[_Seat]:
    """Seats that may have a ring, by (y0, x0)."""
    tree = shapely.STRtree(quest.strips)
    links = _links(quest.place, net, reach_um)
    lines = np.asarray(
        shapely.shortest_line(*(quest.place[end] for end in links.T)), dtype=np.object_
    )
    seen = np.ones(len(lines), dtype=np.bool_)
    seen[tree.query(lines, predicate="intersects")[0]] = False
    seen &= ~_through_mouths(quest, links, lines, seen)
    same = _same_places(quest.place)
    seats, label = _components(len(quest.place), np.concatenate([links[seen], same]))
    seen &= shapely.length(lines) > 0
    one, lines = links[seen, 0], lines[seen]
    order = np.argsort(label, kind="stable")
    first = np.searchsorted(label[order], np.arange(seats + 1))
    own = boxes_of(quest.place[order])
    box = np.hstack([np.minimum.reduceat(own[:, :2], first[:-1]),
                     np.maximum.reduceat(own[:, 2:], first[:-1])])  # fmt: skip
    chained = np.concatenate([links, same])
    pairs = _near(quest.place, chained, label, tree, reach_um)
    hopeful = np.flatnonzero(promising(box, pairs[:, 0], boxes[pairs[:, 1]]))
    limits = np.searchsorted(pairs[:, 0], np.arange(seats + 1))
    for seat in hopeful[np.lexsort((hopeful, box[hopeful, 0], box[hopeful, 1]))].tolist():
        rows = np.sort(order[first[seat] : first[seat + 1]])
        # diffusions of one well have that in common
        places = {id(place): place for place in quest.place[rows]}
        parts = shapely.get_parts(list(places.values()))
        joined = parts[0] if len(parts) == 1 else shapely.union_all(parts)
        mine = lines[label[one] == seat] if len(rows) > 1 else lines[:0]
        near = pairs[limits[seat] : limits[seat + 1], 1]
        # a well that injects is no strip around itself
        near = near[~_overlaps(joined, quest.strips[near])]
        if len(near):
            yield _Seat(rows=rows, parts=parts, links=mine, whole=joined, box=box[seat], near=near)


def _through_mouths(quest: Quest, links: Ints, lines: Geometries, seen: Flags) -> Flags:
    """(m,) whether a line of sight leaves what one strip stands around through its opening.

    Else an open ring whose opening happens to face another diffusion of the same pin would be
    a ring around neither.
    """
    found = np.zeros(len(lines), dtype=np.bool_)
    rows = np.flatnonzero(seen)
    hulls = np.asarray(shapely.convex_hull(quest.strips), dtype=np.object_)
    line, hull = shapely.STRtree(hulls).query(lines[rows], predicate="intersects")
    one, two = (shapely.covers(hulls[hull], quest.place[links[rows[line], end]]) for end in (0, 1))
    found[rows[line[one != two]]] = True
    return found


def _overlaps(whole: Any, strips: Geometries) -> Any:
    return shapely.intersects(whole, strips) & ~shapely.touches(whole, strips)


def _links(places: Geometries, net: Ints, reach_um: float) -> Ints:
    """(m, 2) pairs of injectors of one net that are next to each other and within reach."""
    pairs = [np.zeros((0, 2), dtype=np.int64)]
    order = np.argsort(net, kind="stable")
    names, first = np.unique(net[order], return_index=True)
    for name, rows in zip(names.tolist(), np.split(order, first[1:]), strict=True):
        if name >= 0 and len(rows) > 1:
            pairs.append(rows[_neighbours(boxes_of(places[rows]))])
    links = np.concatenate(pairs)
    near = np.asarray(shapely.dwithin(*(places[end] for end in links.T), reach_um))
    return np.asarray(links[near])


def _same_places(places: Geometries) -> Ints:
    """(m, 2) pairs of injectors that are enclosed by one and the same polygon: their well."""
    key = np.array([id(place) for place in places], dtype=np.int64)
    order = np.argsort(key, kind="stable")
    again = key[order][1:] == key[order][:-1]
    return np.stack([order[:-1][again], order[1:][again]], axis=1)


def _components(count: int, links: Ints) -> tuple[int, Ints]:
    label = connected(count, links[:, 0], links[:, 1])
    return int(label.max(initial=-1)) + 1, label


def _near(
    places: Geometries, links: Ints, seat: Ints, tree: shapely.STRtree, reach_um: float
) -> Ints:
    """(m, 2) pairs of seats and strips near them or near what the seat is chained to, sorted.

    A driver of many fingers is one chain: the far side of its ring may be beyond the reach
    of some of them.
    """
    row, strip = tree.query(places, predicate="dwithin", distance=reach_um)
    chains, chain = _components(len(places), links)
    of_chain = np.unique(np.stack([chain[row], strip], axis=1), axis=0)
    first = np.searchsorted(of_chain[:, 0], np.arange(chains + 1))
    _, one_of_each = np.unique(seat, return_index=True)
    mine = chain[one_of_each]
    count = first[mine + 1] - first[mine]
    if count.sum() > MOST_PAIRS:
        return np.asarray(np.unique(np.stack([seat[row], strip], axis=1), axis=0))
    taken = np.repeat(first[mine], count) + within_runs(count)
    return np.stack([np.repeat(np.arange(len(mine)), count), of_chain[taken, 1]], axis=1)


def _neighbours(box: Floats) -> Ints:
    """(m, 2) pairs of boxes next to each other: all pairs of a few, else by triangulation."""
    count = len(box)
    if count <= FEW:
        one, two = np.triu_indices(count, 1)
        return np.stack([one, two], axis=1)
    corners = np.concatenate([box[:, [a, b]] for a in (0, 2) for b in (1, 3)])
    triangles = Delaunay(corners - corners.mean(axis=0)).simplices % count
    pairs = np.concatenate([triangles[:, [0, 1]], triangles[:, [1, 2]], triangles[:, [0, 2]]])
    pairs = np.unique(np.sort(pairs, axis=1), axis=0)
    return np.asarray(pairs[pairs[:, 0] != pairs[:, 1]], dtype=np.int64)


def _shared(seat: _Seat, rooms: _Rooms, strips: _Strips) -> list[_Key] | None:
    """The rings of the smallest known room that holds the seat, if it can have no others."""
    known = rooms.smallest(seat)
    if known is None:
        return None
    room, rings = known
    inner = np.setdiff1d(seat.near, [strip for ring in rings for strip in ring])
    inner = inner[np.asarray(shapely.intersects(room, strips.polygons[inner]))]
    return None if _hopeful(seat, strips, inner) else rings


def _hopeful(seat: _Seat, strips: _Strips, chosen: Ints) -> bool:
    return bool(promising(seat.box[None], np.zeros_like(chosen), strips.box[chosen])[0])


def _rings_of(seat: _Seat, strips: _Strips, least_coverage: float) -> list[Outline]:
    """Rings around a seat, from the innermost outwards."""
    rest = set(seat.near.tolist())
    found: list[Outline] = []
    for hole in np.sort(strips.hole_tree.query(seat.whole, predicate="covered_by")).tolist():
        strip = int(strips.hole_owner[hole])
        if strip in rest:
            found.append(whole_ring(strips.holes[hole], strip))
            rest.discard(strip)
    found += _open_alone(seat, strips, rest, least_coverage)
    for _ in range(MOST_RINGS):
        rooms = [outline.room for outline in found if not len(outline.gap_um)]
        room = min(rooms, key=lambda room: float(room.area), default=None)
        joined = _joined(seat, strips, rest, least_coverage, room)
        if joined is None:
            break
        found.append(joined)
        rest.difference_update(joined.strips)
    found.sort(key=lambda outline: (round(outline.room.area, 6), outline.strips))
    return found[:MOST_RINGS]


def _joined(
    seat: _Seat, strips: _Strips, rest: set[int], least_coverage: float, room: Any | None
) -> Outline | None:
    """A ring of several strips: a closed one, or an open one inside the room that is closed.

    With strips from outside a closed ring every open one could be pieced together, and a strip
    that closes around something else is that one's ring.
    """
    left = sorted(rest)
    foreign = set(strips.hole_owner.tolist())
    own = [strip for strip in left if strip not in foreign]
    for chosen in (left, own):
        joined = _standing(seat, strips, chosen, least_coverage)
        if joined is None:
            break
        if not len(joined.gap_um):
            return joined
        if room is not None:
            break
        if not foreign.intersection(joined.strips):
            return joined
    if room is None:
        return None
    inside = [strip for strip in own if room.covers(strips.polygons[strip])]
    return _standing(seat, strips, inside, least_coverage)


def _standing(
    seat: _Seat, strips: _Strips, chosen: list[int], least_coverage: float
) -> Outline | None:
    """The shortest outline through some strips, if they stand around the seat."""
    if not _hopeful(seat, strips, np.array(chosen, dtype=np.int64)):
        return None
    found = _outline(seat, strips, chosen, least_coverage)
    if found is None:
        return None
    stands = stands_around(found, strips.polygons[list(found.strips)], seat.box)
    return found if stands else None


def _open_alone(
    seat: _Seat, strips: _Strips, rest: set[int], least_coverage: float
) -> list[Outline]:
    """Open rings of one strip each, with what stands in their mouths; taken from the rest."""
    box = strips.box[seat.near]
    around = ((box[:, :2] < seat.box[:2]) & (box[:, 2:] > seat.box[2:])).all(axis=1)
    alone: list[tuple[float, int, Outline]] = []
    for strip in seat.near[around].tolist():
        if strip in rest:
            outline = _outline(seat, strips, [strip], max(ALONE, least_coverage))
            if outline is not None:
                alone.append((outline.room.area, strip, outline))
    rest.difference_update(strip for _, strip, _ in alone)
    found = []
    for _, strip, outline in sorted(alone, key=lambda item: item[:2]):
        joined = _outline(seat, strips, [strip, *rest], least_coverage) if rest else None
        if joined is None or strip not in joined.strips:
            joined = outline
        found.append(joined)
        rest.difference_update(joined.strips)
    return found


def _outline(
    seat: _Seat, strips: _Strips, chosen: list[int], least_coverage: float
) -> Outline | None:
    index = np.array(sorted(chosen), dtype=np.int64)
    return shortest_outline(strips.polygons[index], index, seat.parts, seat.links, least_coverage)
