"""What is connected to what: nets, pins, ties of bodies, injectors and rings.

In: nothing, these are the values.  They are made by `layout.nets`, `layout.pins`,
`layout.ties`, `layout.injectors` and `layout.rings`, in this order, and read by the rules and
reports.

Two words are told apart everywhere.  A *node* is all metal, diffusion and local interconnect
that hangs together with next to no resistance.  A *net* is one node, or several nodes joined
by poly, whose resistance counts (a *strap*).  A resistor that a marker declares joins nodes of
different nets.

Runs of unequal length are columns with offsets: the members of row i are
``column[first[i]:first[i + 1]]``.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from latchscan.layout.model import Floats, Geometries, Ints, Label

Texts = NDArray[np.str_]
Flags = NDArray[np.bool_]

STRAP = "strap"
"""Kind of a resistive piece that is plain wiring in a conductor of kind poly."""

NET_KINDS = ("signal", "supply", "ground", "internal", "not_bonded", "unknown")
"""What a net is; ``unknown`` is a net that nothing names."""

BELOW_GROUND = 0
ABOVE_SUPPLY = 1
POLARITIES = ("below_ground", "above_supply")

BY_PIN, BY_MARKER, BY_SUPPLY = 0, 1, 2
INJECTOR_CLASSES = ("pin", "marker", "internal")

MAJORITY = 0
MINORITY = 1
RING_KINDS = ("majority", "minority")


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Resistors:
    """Resistive pieces between nodes: marked resistors, and poly that straps nodes (r).

    Attributes
    ----------
    kind
        (r,) name of the resistor in the technology's ``conductors.resistors``, or `STRAP`.
    conductor
        (r,) name of the conductor the piece is drawn in (or ``nwell`` for a well resistor).
    polygons
        (r,) the resistive body; for a strap the merged poly [um].
    terminal_first
        (r + 1,) offsets of the terminals.
    terminal_node
        (t,) node of each terminal; the terminals of one piece are on distinct nodes.
    terminal_shape
        (t,) shapely geometry [um] where the node meets the body: a line along the body's edge
        for a marked resistor's heads, polygons of contacts for a strap or where contacts lie
        on the body itself.
    terminal_contacts
        (t,) connection shapes (contacts) through which the current enters at the terminal.
    """

    kind: Texts
    conductor: Texts
    polygons: Geometries
    terminal_first: Ints
    terminal_node: Ints
    terminal_shape: Geometries
    terminal_contacts: Ints


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Nets:
    """All nets of the block that carry a name, a pad or a diffusion (k), sorted by (y0, x0).

    Attributes
    ----------
    ids
        (k,) ``net-1``, ``net-2``, ... by (y0, x0) of `box_um`.
    names
        (k,) tuple of the distinct label texts on the net, sorted; () where there is none.
    box_um
        (k, 4) box around all shapes of the net.
    layers
        Names of the conductors, then of the connections, in the technology's order.
    shape_count
        (k, len(layers)) drawn shapes of the net on each.
    node_net
        (n,) net of every node.
    piece_polygons, piece_node
        (m,) pieces of the conductors of kind diffusion [um] and their nodes.
    pad_polygons, pad_node
        (q,) bond pads [um] and the node beneath each, -1 where none is.
    shape_net, shape_layer
        (s,) net and place among `layers` of what is drawn in conductors other than diffusion
        on nets with a name or a pad, sorted by (net, layer, y0, x0).  Rectangles, of which
        those of equal width that continue each other are one, and slanted shapes; of each
        net at most `trace.drawn.MOST_SHAPES`, the largest.
    shape_box_um
        (s, 4) box of each.
    shape_polygon
        (s,) polygon [um] of a slanted shape, None for a rectangle, which fills its box.
    shape_total
        (k,) such shapes of every net, kept or not; 0 where it has neither name nor pad.
    labels
        The texts that could name a net, sorted by (y, x, text).
    label_node
        (l,) node of each, -1 where it lies on no shape.
    label_conductor
        (l,) name of the conductor it lies on, or was expected on ("any" for a general text).
    resistors
        Marked resistors and straps.
    """

    ids: Texts
    names: tuple[tuple[str, ...], ...]
    box_um: Floats
    layers: tuple[str, ...]
    shape_count: Ints
    node_net: Ints
    piece_polygons: Geometries
    piece_node: Ints
    pad_polygons: Geometries
    pad_node: Ints
    shape_net: Ints
    shape_layer: Ints
    shape_box_um: Floats
    shape_polygon: Geometries
    shape_total: Ints
    labels: tuple[Label, ...]
    label_node: Ints
    label_conductor: tuple[str, ...]
    resistors: Resistors


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Pins:
    """The block's pins (p), sorted by name, and what each net is.

    Attributes
    ----------
    names
        (p,) name; an unnamed bond pad is ``pad-1``, ... by (y, x).
    kind
        (p,) one of `NET_KINDS` but ``unknown``.
    net_first, net
        (p + 1,) offsets and the nets of each pin (several where names are joined).
    x_um, y_um
        (p,) where the pin is shown: its bond pad, else its first label.
    has_pad
        (p,) whether a bond pad lies on it.
    joined_names
        (p,) tuple of the names that the block file joins into the pin, sorted; () where it
        joins none.
    low_v, high_v
        (p,) range of its voltage in normal work; NaN where not known.
    test_current_a
        (p,) current forced into it in the test, NaN for supplies, grounds and pins that are
        not tested.
    net_kind
        (k,) kind of every net; ``unknown`` where nothing names it.
    net_pin
        (k,) the pin of every net, -1 where it has none.
    net_low_v, net_high_v
        (k,) range of every net's voltage; NaN where not known.
    supply_known
        True where at least one net is a supply or a ground: only then ties can be judged.
    """

    names: Texts
    kind: Texts
    net_first: Ints
    net: Ints
    x_um: Floats
    y_um: Floats
    has_pad: Flags
    joined_names: tuple[tuple[str, ...], ...]
    low_v: Floats
    high_v: Floats
    test_current_a: Floats
    net_kind: Texts
    net_pin: Ints
    net_low_v: Floats
    net_high_v: Floats
    supply_known: bool


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Ties:
    """What every body (b) is tied to through its contacted taps.

    Attributes
    ----------
    tap_net
        (t,) net of every tap of the layout (that of most of its contacted area), -1 where it
        has no contact or lies on no net.
    net_first, net, net_contacts
        (b + 1,) offsets; the distinct nets that the body's contacted taps are on, most
        contacts first; their contacts.
    rail
        (b,) net of the supply or ground that holds the body: a rail among `net`, else the one
        reached through the least resistance; -1 where none is reached.
    resistance_ohm
        (b,) resistance of wiring (straps, resistors) between the body's taps and a place of
        the rail that is named or has most of its shapes; 0 where direct, inf where no rail
        is reached.
    low_v, high_v
        (b,) range of the rail's voltage; NaN where not known.
    spacing_first, neighbour, spacing_um, spacing_from_um, spacing_to_um
        (b + 1,) offsets; for every n-well body its neighbours of higher index at another rail
        (or both unknown and on different nets) within the technology's well-spacing limit:
        the other body, the distance and its two end points (x, y).
    gap_body, gap_um, gap_from_um, gap_to_um
        (g,) openings in n-well rings that would isolate a p-well: the n-well body, the width
        of the opening and its two ends (x, y).
    """

    tap_net: Ints
    net_first: Ints
    net: Ints
    net_contacts: Ints
    rail: Ints
    resistance_ohm: Floats
    low_v: Floats
    high_v: Floats
    spacing_first: Ints
    neighbour: Ints
    spacing_um: Floats
    spacing_from_um: Floats
    spacing_to_um: Floats
    gap_body: Ints
    gap_um: Floats
    gap_from_um: Floats
    gap_to_um: Floats


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Injectors:
    """Diffusions and wells that a forced current reaches (i).

    Rows are sorted by (reason, pin, polarity, emitter, body).

    Attributes
    ----------
    reason
        (i,) `BY_PIN`, `BY_MARKER` or `BY_SUPPLY`.
    pin
        (i,) index among the pins, -1 where no pin drives it.
    polarity
        (i,) `BELOW_GROUND` or `ABOVE_SUPPLY`.
    emitter
        (i,) index among the emitters, -1 where the injector is a whole well.
    body
        (i,) body the emitter lies in, or the well itself.
    net
        (i,) net of the diffusion, -1 where not known.
    resistance_ohm
        (i,) least resistance of wiring and resistors between pin and diffusion; 0 where direct,
        NaN where it could not be worked out.
    area_um2
        (i,) area of the junction.
    share
        (i,) share of the pin's current of this polarity; NaN where no pin drives it.
    """

    reason: Ints
    pin: Ints
    polarity: Ints
    emitter: Ints
    body: Ints
    net: Ints
    resistance_ohm: Floats
    area_um2: Floats
    share: Floats


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Rings:
    """Strips that enclose or partly enclose injectors (r), sorted by (kind, y0, x0).

    Attributes
    ----------
    ids
        (r,) ``ring-1``, ...
    kind
        (r,) `MAJORITY` or `MINORITY`.
    material
        (r,) ``substrate_tap``, ``well_tap``, ``nwell``, ``n_strip`` or ``p_strip``.
    polygons
        (r,) the strips, one (multi)polygon [um].
    body
        (r,) body the strips tie or are.
    net
        (r,) net of most of its contacts, -1 where none is known.
    net_suits
        (r,) 1 where the net suits the kind, 0 where it does not, -1 where not known.
    closed
        (r,) whether the strips close around the injectors.
    gap_first, gap_um, gap_from_um, gap_to_um
        (r + 1,) offsets; the width of every opening, widest first, and its ends (x, y).
    width_um, width_at_um
        (r,), (r, 2) least width of the strips and a point (x, y) there.
    contacted_share
        (r,) share of the strips' area within the technology's reach of a contact.
    member_first, member_injector, member_distance_um
        (r + 1,) offsets; the injectors inside and the distance of each from the ring.
    between_emitters, between_wells
        (r,) emitters of other nets and foreign wells between the injectors and the ring.
    """

    ids: Texts
    kind: Ints
    material: Texts
    polygons: Geometries
    body: Ints
    net: Ints
    net_suits: Ints
    closed: Flags
    gap_first: Ints
    gap_um: Floats
    gap_from_um: Floats
    gap_to_um: Floats
    width_um: Floats
    width_at_um: Floats
    contacted_share: Floats
    member_first: Ints
    member_injector: Ints
    member_distance_um: Floats
    between_emitters: Ints
    between_wells: Ints


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Crossings:
    """Strips between an injector and the opposite half of a thyristor (c).

    Attributes
    ----------
    injector
        (c,) row of the injector among `Injectors`.
    other
        (c,) emitter of the opposite kind nearest to it: of a pin (`driver`) or of none (core).
    driver
        (c,) whether that emitter is an injector itself.
    spacing_um, from_um, to_um
        (c,), (c, 2), (c, 2) distance between both and its end points (x, y).
    p_strips, n_strips
        (c,) distinct contacted substrate taps, and well taps or collector strips, that the
        straight line between the end points crosses.
    """

    injector: Ints
    other: Ints
    driver: Flags
    spacing_um: Floats
    from_um: Floats
    to_um: Floats
    p_strips: Ints
    n_strips: Ints


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Links:
    """Resistances between nodes (e), one row a pair of terminals of a resistive piece.

    Attributes
    ----------
    resistor
        (e,) row among `Resistors`.
    node
        (e, 2) the two nodes.
    ohm
        (e,) resistance between them, contacts included; NaN where it was not worked out.
    """

    resistor: Ints
    node: Ints
    ohm: Floats


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Connections:
    """Everything known of what is connected to what."""

    nets: Nets
    links: Links
    pins: Pins
    ties: Ties
    injectors: Injectors
    rings: Rings
    crossings: Crossings
