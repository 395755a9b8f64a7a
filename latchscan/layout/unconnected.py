"""The values of `connections` where nothing is known: no conductors, no names, no rings."""

from __future__ import annotations

import numpy as np

from latchscan.layout.connections import (
    Connections,
    Crossings,
    Injectors,
    Links,
    Nets,
    Pins,
    Resistors,
    Rings,
    Texts,
    Ties,
)
from latchscan.layout.model import Geometries, Ints


def no_nets() -> Nets:
    """Nets of a technology that names no conductors."""
    return Nets(
        ids=_texts(),
        names=(),
        box_um=np.zeros((0, 4)),
        layers=(),
        shape_count=np.zeros((0, 0), dtype=np.int64),
        node_net=_ints(),
        piece_polygons=_shapes(),
        piece_node=_ints(),
        pad_polygons=_shapes(),
        pad_node=_ints(),
        shape_net=_ints(),
        shape_layer=_ints(),
        shape_box_um=np.zeros((0, 4)),
        shape_polygon=_shapes(),
        shape_total=_ints(),
        labels=(),
        label_node=_ints(),
        label_conductor=(),
        resistors=Resistors(
            kind=_texts(),
            conductor=_texts(),
            polygons=_shapes(),
            terminal_first=_offsets(0),
            terminal_node=_ints(),
            terminal_shape=_shapes(),
            terminal_contacts=_ints(),
        ),
    )


def no_links() -> Links:
    """No resistance between any nodes."""
    return Links(resistor=_ints(), node=np.zeros((0, 2), dtype=np.int64), ohm=np.zeros(0))


def no_pins(net_count: int = 0) -> Pins:
    """Pins of a block of which no name is known."""
    unknown = np.full(net_count, np.nan)
    return Pins(
        names=_texts(),
        kind=_texts(),
        net_first=_offsets(0),
        net=_ints(),
        x_um=np.zeros(0),
        y_um=np.zeros(0),
        has_pad=np.zeros(0, dtype=np.bool_),
        joined_names=(),
        low_v=np.zeros(0),
        high_v=np.zeros(0),
        test_current_a=np.zeros(0),
        net_kind=np.full(net_count, "unknown"),
        net_pin=np.full(net_count, -1),
        net_low_v=unknown,
        net_high_v=unknown,
        supply_known=False,
    )


def no_ties(body_count: int, tap_count: int) -> Ties:
    """Ties of bodies whose nets are not known."""
    return Ties(
        tap_net=np.full(tap_count, -1),
        net_first=_offsets(body_count),
        net=_ints(),
        net_contacts=_ints(),
        rail=np.full(body_count, -1),
        resistance_ohm=np.full(body_count, np.inf),
        low_v=np.full(body_count, np.nan),
        high_v=np.full(body_count, np.nan),
        spacing_first=_offsets(body_count),
        neighbour=_ints(),
        spacing_um=np.zeros(0),
        spacing_from_um=np.zeros((0, 2)),
        spacing_to_um=np.zeros((0, 2)),
        gap_body=_ints(),
        gap_um=np.zeros(0),
        gap_from_um=np.zeros((0, 2)),
        gap_to_um=np.zeros((0, 2)),
    )


def no_injectors() -> Injectors:
    """No injectors."""
    return Injectors(
        reason=_ints(),
        pin=_ints(),
        polarity=_ints(),
        emitter=_ints(),
        body=_ints(),
        net=_ints(),
        resistance_ohm=np.zeros(0),
        area_um2=np.zeros(0),
        share=np.zeros(0),
    )


def no_rings() -> Rings:
    """No rings."""
    return Rings(
        ids=_texts(),
        kind=_ints(),
        material=_texts(),
        polygons=_shapes(),
        body=_ints(),
        net=_ints(),
        net_suits=_ints(),
        closed=np.zeros(0, dtype=np.bool_),
        gap_first=_offsets(0),
        gap_um=np.zeros(0),
        gap_from_um=np.zeros((0, 2)),
        gap_to_um=np.zeros((0, 2)),
        width_um=np.zeros(0),
        width_at_um=np.zeros((0, 2)),
        contacted_share=np.zeros(0),
        member_first=_offsets(0),
        member_injector=_ints(),
        member_distance_um=np.zeros(0),
        between_emitters=_ints(),
        between_wells=_ints(),
    )


def no_crossings() -> Crossings:
    """No crossings."""
    return Crossings(
        injector=_ints(),
        other=_ints(),
        driver=np.zeros(0, dtype=np.bool_),
        spacing_um=np.zeros(0),
        from_um=np.zeros((0, 2)),
        to_um=np.zeros((0, 2)),
        p_strips=_ints(),
        n_strips=_ints(),
    )


def no_connections(body_count: int, tap_count: int) -> Connections:
    """Connections of a layout of which nothing but its bodies and taps is known."""
    return Connections(
        nets=no_nets(),
        links=no_links(),
        pins=no_pins(),
        ties=no_ties(body_count, tap_count),
        injectors=no_injectors(),
        rings=no_rings(),
        crossings=no_crossings(),
    )


def _ints() -> Ints:
    return np.zeros(0, dtype=np.int64)


def _offsets(count: int) -> Ints:
    return np.zeros(count + 1, dtype=np.int64)


def _texts() -> Texts:
    return np.zeros(0, dtype=np.str_)


def _shapes() -> Geometries:
    return np.zeros(0, dtype=np.object_)
