"""Guard rings: the strips that enclose injectors, what they are worth, and what they part.

In: the layout, its nets, pins and ties, and the injectors.  Out: `Rings` and `Crossings`.

A strip is a tap, an n-well without p+ in it, or a diffusion on a rail.  Strips of one kind
make a ring where they close around an injector, or close around it but for openings: the
shortest closed curve around the injector that crosses as little bare silicon as possible
crosses it at the openings.  The curve must run inside strips for at least the technology's
`least_coverage`, and strips must stand on three sides: parallel rails make no ring.  Strips
that touch in a corner are closed: carriers do not pass a corner.
"""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import numpy as np
import shapely

from latchscan.layout.connections import MAJORITY, Crossings, Injectors, Nets, Pins, Rings, Ties
from latchscan.layout.emitter_nets import emitter_nets
from latchscan.layout.enclose.contacts import contacts_and_nets, joined
from latchscan.layout.enclose.crossings import find_crossings
from latchscan.layout.enclose.search import Enclosure, enclosures
from latchscan.layout.enclose.strips import Wells, collectors, gather_wells, quests
from latchscan.layout.enclose.width import contacted_share, least_width
from latchscan.layout.model import Geometries, Ints, Layout, frozen
from latchscan.layout.source import LayoutSource
from latchscan.layout.unconnected import no_crossings, no_rings
from latchscan.technology.model import Technology


def find_rings(
    source: LayoutSource,
    layout: Layout,
    nets: Nets,
    pins: Pins,
    ties: Ties,
    injectors: Injectors,
    technology: Technology,
) -> tuple[Rings, Crossings]:
    """Guard rings around injectors, and strips between injectors and what they can fire.

    Parameters
    ----------
    source
        Where contacts on collector diffusions are drawn.
    layout
        Bodies, taps and emitters.
    nets, pins, ties
        Which net a strip is on and whether that is a supply or a ground.
    injectors
        What has to be enclosed.
    technology
        `rings` (reach, least coverage, reach of a contact) and the limits of ``double-ring``.

    Returns
    -------
    Rings
        At most three of one material around one injector, the innermost.  An injector is a
        member of a ring only if the ring's nearest strip is within reach, for minority rings
        around n-wells within reach of the well.  Around an n-well as a whole the same rings
        count as around an n+ diffusion; around an isolated p-well the same as around a p+ in
        the n-well that encloses it.
    Crossings
        For every emitter that a pin drives or a marker covers.
    """
    if not len(injectors.emitter):
        return no_rings(), no_crossings()
    wells = gather_wells(layout)
    net = emitter_nets(layout, nets)
    collecting = collectors(layout, pins, net, injectors)
    found = [
        ring
        for quest in quests(layout, wells, collecting, injectors)
        for ring in enclosures(quest, injectors.net[quest.injector], technology.rings)
    ]
    found = _in_order(found)
    limits = technology.rules.double_ring
    crossings = find_crossings(
        layout,
        wells,
        injectors,
        found,
        collecting[0],
        driver_within_um=limits.driver_within_um,
        core_within_um=limits.core_within_um,
    )
    if not found:
        return no_rings(), crossings
    boxes, ring_net = contacts_and_nets(source, layout, ties, net, found, technology)
    suits = _suits(found, ring_net, pins, ties)
    reach_um = technology.rings.contact_reach_um
    shares = [
        contacted_share(_strips(ring), box, reach_um)
        for ring, box in zip(found, boxes, strict=True)
    ]
    between = [_between(ring, layout, wells, net, injectors) for ring in found]
    return _columns(found, ring_net, suits, shares, between), crossings


def _strips(ring: Enclosure) -> Geometries:
    return np.asarray(ring.quest.strips[list(ring.outline.strips)])


def _in_order(found: list[Enclosure]) -> list[Enclosure]:
    """Rings sorted by (kind, y0, x0), then by (y1, x1) and material."""

    def place(ring: Enclosure) -> tuple[Any, ...]:
        x0, y0, x1, y1 = shapely.total_bounds(_strips(ring)).tolist()
        return (ring.quest.kind, y0, x0, y1, x1, ring.quest.material, *ring.outline.strips)

    return sorted(found, key=place)


def _body(ring: Enclosure) -> int:
    """The body of most of a ring's strips, the first of equals."""
    bodies, area = ring.quest.strip_body[list(ring.outline.strips)], shapely.area(_strips(ring))
    names, row = np.unique(bodies, return_inverse=True)
    return int(names[np.argmax(np.round(np.bincount(row, weights=area), 6))])


def _suits(found: Sequence[Enclosure], net: Ints, pins: Pins, ties: Ties) -> Ints:
    """(r,) whether the net of every ring is the one it works on; -1 where that is not known.

    Electrons are kept off by p-taps on a ground and collectors on a supply, holes by well
    taps on the rail of their well and collectors on a ground.
    """
    suits = np.full(len(found), -1, dtype=np.int64)
    if not pins.supply_known:
        return suits
    for row, ring in enumerate(found):
        own = int(net[row])
        if own < 0:
            continue
        majority = ring.quest.kind == MAJORITY
        fits = pins.net_kind[own] == ("ground" if majority == ring.quest.electrons else "supply")
        if majority and not ring.quest.electrons:
            rail = int(ties.rail[_body(ring)])
            pin = pins.net_pin[own]
            fits = fits and (rail in (own, -1) or (pin >= 0 and pin == pins.net_pin[rail]))
        suits[row] = int(fits)
    return suits


def _between(
    ring: Enclosure, layout: Layout, wells: Wells, net: Ints, injectors: Injectors
) -> tuple[int, int]:
    """Emitters of other nets and foreign wells in a ring's room, outside what it encloses."""
    emitters, quest = layout.emitters, ring.quest
    members = quest.injector[ring.rows]
    room, strips = ring.outline.room, shapely.multipolygons(_strips(ring))
    enclosed = shapely.union_all(quest.place[ring.rows])
    shapely.prepare(room)
    # n-wells and p+ in them share their places: what lies in a place is no obstacle
    taken = np.concatenate([[-2], injectors.net[members[injectors.net[members] >= 0]]])
    box = room.bounds
    near = _meeting(emitters.box_um, box)
    points = shapely.point_on_surface(emitters.polygons[near])
    inside = near[
        shapely.intersects(room, points)
        & ~shapely.intersects(enclosed, points)
        & ~shapely.intersects(strips, points)
    ]
    inside = inside[~np.isin(inside, injectors.emitter[members]) & ~np.isin(net[inside], taken)]
    own_bodies = np.concatenate([injectors.body[members], quest.strip_body])
    if quest.material != "nwell":
        own_bodies = injectors.body[members]
    near = _meeting(shapely.bounds(wells.polygons).reshape(-1, 4), box)
    points = shapely.point_on_surface(wells.polygons[near])
    held = near[
        shapely.intersects(room, points)
        & ~shapely.intersects(strips, points)
        & ~np.isin(wells.body[near], own_bodies)
    ]
    return len(inside), len(held)


def _meeting(boxes: Any, box: Any) -> Ints:
    """Rows of the boxes (n, 4) that meet a box."""
    x0, y0, x1, y1 = box
    meets = (boxes[:, 0] <= x1) & (boxes[:, 1] <= y1) & (boxes[:, 2] >= x0) & (boxes[:, 3] >= y0)
    return np.flatnonzero(meets)


def _columns(
    found: Sequence[Enclosure],
    net: Ints,
    suits: Ints,
    shares: Sequence[float],
    between: Sequence[tuple[int, int]],
) -> Rings:
    polygons = np.empty(len(found), dtype=np.object_)
    widths, places, distances, members = [], [], [], []
    for row, ring in enumerate(found):
        strips = _strips(ring)
        polygons[row] = strips[0] if len(strips) == 1 else shapely.multipolygons(strips)
        own = ring.quest.own[ring.rows]
        width, at = least_width(strips, ring.quest.place[ring.rows[0]])
        widths.append(width)
        places.append(at)
        distances.append(np.asarray(shapely.distance(own, polygons[row]), dtype=np.float64))
        members.append(ring.quest.injector[ring.rows])
    gaps = [ring.outline.gap_um for ring in found]
    ends = np.concatenate([ring.outline.gap_ends_um for ring in found])
    gap_first, _ = joined([np.zeros(len(gap), dtype=np.int64) for gap in gaps])
    member_first, member = joined(members)
    emitters, held = np.array(between, dtype=np.int64).reshape(-1, 2).T
    return Rings(
        ids=frozen(np.array([f"ring-{row + 1}" for row in range(len(found))])),
        kind=frozen(np.array([ring.quest.kind for ring in found], dtype=np.int64)),
        material=frozen(np.array([ring.quest.material for ring in found])),
        polygons=frozen(polygons),
        body=frozen(np.array([_body(ring) for ring in found], dtype=np.int64)),
        net=frozen(net),
        net_suits=frozen(suits),
        closed=frozen(np.array([not len(gap) for gap in gaps], dtype=np.bool_)),
        gap_first=frozen(gap_first),
        gap_um=frozen(np.concatenate(gaps)),
        gap_from_um=frozen(ends[:, 0].copy()),
        gap_to_um=frozen(ends[:, 1].copy()),
        width_um=frozen(np.array(widths)),
        width_at_um=frozen(np.array(places).reshape(-1, 2)),
        contacted_share=frozen(np.array(shares)),
        member_first=frozen(member_first),
        member_injector=frozen(member),
        member_distance_um=frozen(np.concatenate(distances)),
        between_emitters=frozen(emitters.copy()),
        between_wells=frozen(held.copy()),
    )
