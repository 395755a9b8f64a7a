"""What holds every body: the nets of its taps, its rail, its neighbours, its openings.

In: the layout, nets, links and pins.  Out: `Ties`.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import shapely

from latchscan.layout.connections import Flags, Links, Nets, Pins, Ties
from latchscan.layout.model import Floats, Ints, Layout, frozen
from latchscan.layout.naming.footing import contacts_of_taps
from latchscan.layout.naming.openings import find_openings
from latchscan.layout.naming.paths import least_resistance
from latchscan.layout.naming.places import pin_places
from latchscan.layout.runs import offsets
from latchscan.technology.model import Technology

RAIL_KINDS = ("supply", "ground")


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class _Footing:
    """Contacts of bodies on nodes (c): the body, the node and its net, the contact, its area."""

    tap: Ints
    body: Ints
    node: Ints
    net: Ints
    contact: Ints
    area_um2: Floats


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class _Rails:
    """(b,) the rail of every body and the resistance to it [ohm]."""

    net: Ints
    resistance_ohm: Floats


def tie_bodies(
    layout: Layout, nets: Nets, links: Links, pins: Pins, technology: Technology
) -> Ties:
    """Nets, rail and resistance of every body, close wells and openings in isolating rings.

    Parameters
    ----------
    layout
        Bodies, taps and regions.
    nets, links, pins
        What the taps are connected to.
    technology
        Its limit for wells at different potentials [um].

    Returns
    -------
    Ties
        Aligned with the layout's taps and bodies.

    Notes
    -----
    Only taps with contacts tie.  A body with a tap on a rail's net is held by that rail (by the
    one with most of its contacts, where there are several), through the least resistance from
    any of its taps to a bond pad of the rail, or to a label where it has no pad, within the net.
    Any other body is held by the rail that the least resistance of straps and marked resistors
    leads to.
    """
    bodies = len(layout.bodies)
    footing = _footing(layout, nets)
    first, net, contacts = _body_nets(footing, bodies)
    rails = _rails(footing, first, net, nets, links, pins)
    spacing = _close_wells(layout, _holders(first, net, rails, pins), technology)
    openings = find_openings(layout)
    return Ties(
        tap_net=frozen(_chief_nets(footing, len(layout.taps.polygons))),
        net_first=frozen(first),
        net=frozen(net),
        net_contacts=frozen(contacts),
        rail=frozen(rails.net),
        resistance_ohm=frozen(rails.resistance_ohm),
        low_v=frozen(_of_net(pins.net_low_v, rails.net)),
        high_v=frozen(_of_net(pins.net_high_v, rails.net)),
        spacing_first=frozen(spacing.first),
        neighbour=frozen(spacing.neighbour),
        spacing_um=frozen(spacing.spacing_um),
        spacing_from_um=frozen(spacing.from_um),
        spacing_to_um=frozen(spacing.to_um),
        gap_body=frozen(openings.body),
        gap_um=frozen(openings.width_um),
        gap_from_um=frozen(openings.from_um),
        gap_to_um=frozen(openings.to_um),
    )


def _footing(layout: Layout, nets: Nets) -> _Footing:
    tap, contact, piece, area = contacts_of_taps(layout.taps, nets)
    node = nets.piece_node[piece]
    kept = node >= 0
    tap, contact, node, area = tap[kept], contact[kept], node[kept], area[kept]
    return _Footing(
        tap=tap,
        body=layout.taps.body[tap],
        node=node,
        net=nets.node_net[node],
        contact=contact,
        area_um2=area,
    )


def _chief_nets(footing: _Footing, taps: int) -> Ints:
    """(t,) net of most of every tap's contacted area, -1 where it is on none."""
    pairs, place = np.unique(np.stack([footing.tap, footing.net]), axis=1, return_inverse=True)
    # summed in whole square nanometres, so that equal areas tie however they were added up
    area = np.round(np.bincount(place.ravel(), footing.area_um2, pairs.shape[1]), 6)
    order = np.lexsort((pairs[1], -area, pairs[0]))
    tap, row = np.unique(pairs[0, order], return_index=True)
    found = np.full(taps, -1, dtype=np.int64)
    found[tap] = pairs[1, order[row]]
    return found


def _body_nets(footing: _Footing, bodies: int) -> tuple[Ints, Ints, Ints]:
    """Offsets, nets and contacts of every body, most contacts first."""
    rows = np.unique(np.stack([footing.body, footing.net, footing.contact]), axis=1)
    pairs, count = np.unique(rows[:2], axis=1, return_counts=True)
    order = np.lexsort((pairs[1], -count, pairs[0]))
    first = offsets(np.bincount(pairs[0], minlength=bodies))
    return first, pairs[1, order].astype(np.int64), count[order].astype(np.int64)


def _rails(
    footing: _Footing, first: Ints, net: Ints, nets: Nets, links: Links, pins: Pins
) -> _Rails:
    """The rail of every body: a direct one first, else the nearest by resistance."""
    bodies = len(first) - 1
    is_rail: Flags = np.isin(pins.net_kind, RAIL_KINDS)
    rail = np.full(bodies, -1, dtype=np.int64)
    resistance = np.full(bodies, np.inf)
    inside = _to_named_place(is_rail, nets, links, pins)
    body = np.repeat(np.arange(bodies), np.diff(first))
    direct, row = np.unique(body[is_rail[net]], return_index=True)
    rail[direct] = net[is_rail[net]][row]
    on_rail = footing.net == rail[footing.body]
    held, ohm, _ = _least(footing.body[on_rail], inside[footing.node[on_rail]])
    resistance[held] = ohm
    rail_nodes = np.flatnonzero(is_rail[nets.node_net])
    beyond, source = least_resistance(len(nets.node_net), links.node, links.ohm, rail_nodes)
    far = (rail[footing.body] < 0) & (source[footing.node] >= 0)
    node = footing.node[far]
    held, ohm, best = _least(footing.body[far], beyond[node] + inside[source[node]])
    rail[held] = nets.node_net[source[node[best]]]
    resistance[held] = ohm
    return _Rails(net=rail, resistance_ohm=resistance)


def _to_named_place(is_rail: Flags, nets: Nets, links: Links, pins: Pins) -> Floats:
    """(n,) resistance of a rail's node to its pad, else its label, within its net [ohm].

    NaN where a rail's nodes hang together through a resistance that is not known.
    """
    _, anchors = pin_places(nets, pins)
    anchors = anchors[is_rail[nets.node_net[anchors]]]
    within = nets.node_net[links.node[:, 0]] == nets.node_net[links.node[:, 1]]
    found, _ = least_resistance(len(nets.node_net), links.node[within], links.ohm[within], anchors)
    return np.where(np.isinf(found), np.nan, found)


def _least(body: Ints, ohm: Floats) -> tuple[Ints, Floats, Ints]:
    """Bodies, the least resistance of each (one that is known, if any is) and its row."""
    order = np.lexsort((ohm, body))
    found, row = np.unique(body[order], return_index=True)
    return found, ohm[order[row]], order[row]


def _of_net(values: Floats, net: Ints) -> Floats:
    return np.asarray(np.append(values, np.nan)[net], dtype=np.float64)


def _holders(first: Ints, net: Ints, rails: _Rails, pins: Pins) -> Ints:
    """(b,) what a body hangs on: its rail, else its chief net; joined nets are one; else -1."""
    chief = np.full(len(first) - 1, -1, dtype=np.int64)
    tied = np.diff(first) > 0
    chief[tied] = net[first[:-1][tied]]
    holder = np.where(rails.net >= 0, rails.net, chief)
    pin = np.append(pins.net_pin, -1)[holder]
    # pins after all nets, so that no number means both
    return np.asarray(np.where(pin >= 0, len(pins.net_pin) + pin, holder), dtype=np.int64)


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class _CloseWells:
    """Columns of `Ties` about wells at different potentials."""

    first: Ints
    neighbour: Ints
    spacing_um: Floats
    from_um: Floats
    to_um: Floats


def _close_wells(layout: Layout, holder: Ints, technology: Technology) -> _CloseWells:
    """N-wells on different rails or nets, nearer than the technology's limit."""
    rows = [row for row, body in enumerate(layout.bodies) if body.kind == "nwell"]
    counts = np.array([len(layout.bodies[row].polygons) for row in rows], dtype=np.int64)
    body = np.repeat(np.array(rows, dtype=np.int64), counts)
    polygons = np.empty(len(body), dtype=np.object_)
    polygons[:] = [shape for row in rows for shape in layout.bodies[row].polygons]
    one, other = shapely.STRtree(polygons).query(
        polygons, predicate="dwithin", distance=technology.rules.well_spacing.min_um
    )
    apart = (body[one] < body[other]) & (holder[body[one]] != holder[body[other]])
    apart &= (holder[body[one]] >= 0) & (holder[body[other]] >= 0)
    one, other = one[apart], other[apart]
    distance = shapely.distance(polygons[one], polygons[other])
    # equal distances are told apart by place, whatever the order of the polygons
    x0, y0, _, _ = shapely.bounds(polygons).reshape(-1, 4).T
    order = np.lexsort((x0[other], y0[other], x0[one], y0[one], distance, body[other], body[one]))
    pairs, row = np.unique(np.stack([body[one], body[other]])[:, order], axis=1, return_index=True)
    one, other = one[order[row]], other[order[row]]
    lines = shapely.shortest_line(polygons[one], polygons[other])
    ends = shapely.get_coordinates(lines).reshape(-1, 2, 2)
    return _CloseWells(
        first=offsets(np.bincount(pairs[0], minlength=len(layout.bodies))),
        neighbour=pairs[1].astype(np.int64),
        spacing_um=np.asarray(distance[order[row]], dtype=np.float64),
        from_um=ends[:, 0].copy(),
        to_um=ends[:, 1].copy(),
    )
