"""Hand-made connections for the rows of cells of `synthetic_scan`.

Seven nets, six of them named or padded, in this order::

    drive  signal pin with a pad; every fourth n+ of row 0 and the first p+ of row 0, direct
    VSS    ground; the substrate taps and every other n+
    VDD    supply 1.8 V; the wells' p+ and the taps of rows 0 and 5 on, row 4 through poly
    sense  signal pin with a pad, joined to the next net by a resistor of 250 ohm
    -      the far end of that resistor: the first n+ of row 2
    VIO    supply 3.3 V; the tap and p+ of row 2, and the last p+ of row 0 (whose well is on VDD)
    -      the tap of row 3, joined to VDD by a resistor of 200 ohm

Every value is invented; none follows from another by a calculation of the package.
"""

from __future__ import annotations

from typing import Any

import numpy as np
import shapely

from latchscan.layout.connections import (
    ABOVE_SUPPLY,
    BELOW_GROUND,
    BY_PIN,
    MAJORITY,
    MINORITY,
    STRAP,
    Connections,
    Crossings,
    Injectors,
    Links,
    Nets,
    Pins,
    Resistors,
    Rings,
    Ties,
)
from latchscan.layout.model import N_OUTSIDE_NWELL, P_IN_NWELL, Geometries, Ints, Label, Layout

DRIVE, VSS, VDD, SENSE, SENSE_INNER, VIO, WELL_NET = range(7)
"""The nets; also their nodes, but that VDD has a second node, `STRAPPED_NODE`."""
STRAPPED_NODE = 7
NET_V = {VSS: (0.0, 0.0), VDD: (1.62, 1.98), VIO: (2.97, 3.63)}
STRAP_OHM, SENSE_OHM, WELL_OHM = 82.0, 250.0, 200.0
GAP_UM = 2.0
"""Width of the opening of the second ring."""
WIRING = (
    shapely.box(-2.5, -1.8, 30.0, -1.2),
    shapely.Polygon([(30.0, -1.8), (31.0, -1.8), (36.0, 3.2), (35.0, 3.2)]),
    shapely.box(16.0, 57.0, 31.0, 57.5),
    shapely.box(60.5, -2.0, 61.0, 20.6),
    shapely.box(1.0, 20.0, 60.0, 20.6),
    shapely.box(80.5, -2.0, 81.0, 25.0),
)
"""What is drawn of the nets: twice ``drive``, three times VDD (once in poly), ``sense``."""


def connections(layout: Layout) -> Connections:
    """Nets, pins, ties, injectors and rings of a layout of `synthetic_scan.evidence`.

    Needs at least six rows of eight cells.
    """
    emitter_net = _emitter_nets(layout)
    injectors = _injectors(layout, emitter_net)
    return Connections(
        nets=_nets(layout, emitter_net),
        links=Links(
            resistor=np.arange(3),
            node=np.array([(VDD, STRAPPED_NODE), (SENSE, SENSE_INNER), (VDD, WELL_NET)]),
            ohm=np.array([STRAP_OHM, SENSE_OHM, WELL_OHM]),
        ),
        pins=_pins(),
        ties=_ties(layout),
        injectors=injectors,
        rings=_rings(layout, injectors),
        crossings=_crossings(layout, injectors),
    )


def injector_names(layout: Layout) -> Any:
    """(n,) name of the pin that drives each emitter, "" where none does."""
    net = _emitter_nets(layout)
    names = np.full(len(net), "", dtype="U40")
    names[net == DRIVE] = "drive"
    names[net == SENSE_INNER] = "sense"
    return names


def _emitter_nets(layout: Layout) -> Ints:
    """(n,) net of every emitter."""
    emitters = layout.emitters
    p_kind = emitters.kind == P_IN_NWELL
    count = int(p_kind.sum())
    per_row = int(np.sum(emitters.body == 0))
    net = np.where(p_kind, VDD, VSS)
    net[2 * per_row : 3 * per_row] = VIO
    net[0] = DRIVE
    net[per_row - 1] = VIO
    net[count : count + per_row : 4] = DRIVE
    net[count + 2 * per_row] = SENSE_INNER
    return net.astype(np.int64)


def _nets(layout: Layout, emitter_net: Ints) -> Nets:
    x1, y1 = layout.regions.bbox_um[2:]
    taps = layout.taps
    tap_net = _tap_nets(layout)
    tap_node = np.where(taps.body == 4, STRAPPED_NODE, tap_net)
    contacted = tap_node >= 0
    pads = shapely.box(
        np.array([-3.0, 40.0, 60.0, 80.0]), -2.5, np.array([-1.0, 42.0, 62.0, 82.0]), -0.5
    )
    return Nets(
        ids=np.array([f"net-{row + 1}" for row in range(7)]),
        names=(("drive",), ("VSS",), ("VDD",), ("sense",), (), ("VIO",), ()),
        box_um=np.array(
            [
                (-3.0, -2.5, x1 - 6, 9.5),
                (0.0, -2.5, x1 - 4, y1 - 4),
                (1.0, -2.5, x1 - 4, y1 - 4),
                (80.0, -2.5, 82.0, 25.0),
                (1.0, 25.0, 40.0, 27.5),
                (1.0, 31.0, x1 - 4, 35.0),
                (15.0, 43.0, 30.0, 46.0),
            ]
        ),
        layers=("diffusion", "poly", "metal1", "contact"),
        shape_count=np.array([[row + 1, row == VDD, 2 * row + 3, row + 2] for row in range(7)]),
        node_net=np.array([*range(7), VDD]),
        piece_polygons=np.concatenate((layout.emitters.polygons, taps.polygons[contacted])),
        piece_node=np.concatenate((emitter_net, tap_node[contacted])),
        pad_polygons=pads,
        pad_node=np.array([DRIVE, VSS, VDD, SENSE]),
        shape_net=np.array([DRIVE, DRIVE, VDD, VDD, VDD, SENSE]),
        shape_layer=np.array([2, 2, 1, 2, 2, 2]),
        shape_box_um=np.array([shape.bounds for shape in WIRING]),
        shape_polygon=_column([None, WIRING[1], *[None] * 4]),
        shape_total=np.array([2, 0, 25, 1, 0, 0, 0]),
        labels=tuple(
            Label(text=text, layer=8, texttype=25, x_um=x, y_um=y)
            for text, x, y in (
                ("drive", -2.0, -1.5),
                ("VSS", 41.0, -1.5),
                ("VDD", 61.0, -1.5),
                ("sense", 81.0, -1.5),
                ("VIO", 16.0, 32.0),
            )
        ),
        label_node=np.array([DRIVE, VSS, VDD, SENSE, VIO]),
        label_conductor=("metal1",) * 5,
        resistors=_resistors(),
    )


def _resistors() -> Resistors:
    """A strap to the tap of row 4, then marked resistors at ``sense`` and at row 3's tap."""
    bodies = [(17.0, 57.0, 30.0, 57.5), (40.0, 25.0, 70.0, 26.0), (17.5, 44.0, 27.5, 45.0)]
    heads = [shapely.linestrings([(x, y0), (x, y1)]) for x0, y0, x1, y1 in bodies for x in (x0, x1)]
    return Resistors(
        kind=np.array([STRAP, "poly_resistor", "poly_resistor"]),
        conductor=np.array(["poly", "poly", "poly"]),
        polygons=_column([shapely.box(*box) for box in bodies]),
        terminal_first=np.array([0, 2, 4, 6]),
        terminal_node=np.array([STRAPPED_NODE, VDD, SENSE_INNER, SENSE, WELL_NET, VDD]),
        terminal_shape=_column(heads),
        terminal_contacts=np.ones(6, dtype=np.int64),
    )


def _pins() -> Pins:
    """VDD, VIO and VSS, then the signal pins ``drive`` and ``sense``."""
    net = np.array([VDD, VIO, VSS, DRIVE, SENSE])
    net_pin = np.full(7, -1)
    net_pin[net] = np.arange(5)
    kind = np.array(["supply", "supply", "ground", "signal", "signal"])
    net_kind = np.full(7, "unknown", dtype="U16")
    net_kind[net] = kind
    nan = (np.nan, np.nan)
    low, high = np.array([NET_V.get(row, nan) for row in range(7)]).T
    low[DRIVE], high[DRIVE] = 0.0, 1.98
    return Pins(
        names=np.array(["VDD", "VIO", "VSS", "drive", "sense"]),
        kind=kind,
        net_first=np.arange(6),
        net=net,
        x_um=np.array([61.0, 16.0, 41.0, -2.0, 81.0]),
        y_um=np.array([-1.5, 32.0, -1.5, -1.5, -1.5]),
        has_pad=np.array([True, False, True, True, True]),
        joined_names=((),) * 5,
        low_v=low[net],
        high_v=high[net],
        test_current_a=np.array([np.nan, np.nan, np.nan, 0.1, 0.1]),
        net_kind=net_kind,
        net_pin=net_pin,
        net_low_v=low,
        net_high_v=high,
        supply_known=True,
    )


def _tap_nets(layout: Layout) -> Ints:
    """(t,) net of every tap, -1 where it has no contact."""
    taps = layout.taps
    well = np.full(len(layout.bodies), VDD)
    well[2], well[3], well[-1] = VIO, WELL_NET, VSS
    return np.where(taps.contact_count > 0, well[taps.body], -1).astype(np.int64)


def _ties(layout: Layout) -> Ties:
    """Row 1's well is untied, rows 3 and 4 hang on their rail through a resistance."""
    bodies = len(layout.bodies)
    tap_net = _tap_nets(layout)
    runs = [np.unique(tap_net[(layout.taps.body == b) & (tap_net >= 0)]) for b in range(bodies)]
    rail = np.array([run[0] if len(run) else -1 for run in runs])
    rail[3] = VDD
    resistance = np.where(rail >= 0, 0.0, np.inf)
    resistance[3:5] = WELL_OHM, STRAP_OHM
    low, high = np.array([NET_V.get(row, (np.nan, np.nan)) for row in rail.tolist()]).T
    # wells of rows 2 and 3 are on different rails, 7 um apart; so is nothing else that is known
    spacing_first = np.zeros(bodies + 1, dtype=np.int64)
    spacing_first[3:] = 1
    return Ties(
        tap_net=tap_net,
        net_first=np.concatenate(((0,), np.cumsum([len(run) for run in runs]))),
        net=np.concatenate(runs),
        net_contacts=np.array([7 if net == VSS else 1 for net in np.concatenate(runs)]),
        rail=rail,
        resistance_ohm=resistance,
        low_v=low,
        high_v=high,
        spacing_first=spacing_first,
        neighbour=np.array([3]),
        spacing_um=np.array([7.0]),
        spacing_from_um=np.array([(0.0, 35.0)]),
        spacing_to_um=np.array([(0.0, 42.0)]),
        gap_body=np.array([5]),
        gap_um=np.array([0.4]),
        gap_from_um=np.array([(50.0, 66.2)]),
        gap_to_um=np.array([(50.4, 66.2)]),
    )


def _injectors(layout: Layout, emitter_net: Ints) -> Injectors:
    """Emitters of ``drive`` (n+ below ground, p+ above the supply) and of ``sense`` (n+)."""
    emitters = layout.emitters
    n_kind = emitters.kind == N_OUTSIDE_NWELL
    drive_n = np.flatnonzero((emitter_net == DRIVE) & n_kind)
    drive_p = np.flatnonzero((emitter_net == DRIVE) & ~n_kind)
    sense = np.flatnonzero(emitter_net == SENSE_INNER)
    emitter = np.concatenate((drive_n, drive_p, sense))
    sizes = [len(drive_n), len(drive_p), len(sense)]
    area = emitters.area_um2[emitter]
    return Injectors(
        reason=np.full(len(emitter), BY_PIN),
        pin=np.repeat([3, 3, 4], sizes),
        polarity=np.repeat([BELOW_GROUND, ABOVE_SUPPLY, BELOW_GROUND], sizes),
        emitter=emitter,
        body=emitters.body[emitter],
        net=np.repeat([DRIVE, DRIVE, SENSE_INNER], sizes),
        resistance_ohm=np.repeat([0.0, 0.0, SENSE_OHM], sizes),
        area_um2=area,
        share=np.concatenate((np.full(sizes[0], 1 / sizes[0]), np.ones(sizes[1] + sizes[2]))),
    )


def _rings(layout: Layout, injectors: Injectors) -> Rings:
    """A closed substrate ring around ``drive``, an open one around ``sense``, a collector."""
    x1 = layout.regions.bbox_um[2] - 3.0
    drive = np.flatnonzero(injectors.net == DRIVE)
    drive = drive[injectors.polarity[drive] == BELOW_GROUND]
    sense = len(injectors.emitter) - 1
    frame = shapely.box(-1.0, -0.4, x1, 5.4).difference(shapely.box(-0.4, 0.2, x1 - 0.6, 4.8))
    small = shapely.box(0.2, 24.2, 6.0, 29.0).difference(shapely.box(0.6, 24.6, 5.6, 28.6))
    opened = small.difference(shapely.box(1.0, 24.0, 1.0 + GAP_UM, 24.7))
    collector = shapely.box(-1.8, -1.2, x1 + 0.8, -0.8)
    return Rings(
        ids=np.array(["ring-1", "ring-2", "ring-3"]),
        kind=np.array([MAJORITY, MAJORITY, MINORITY]),
        material=np.array(["substrate_tap", "substrate_tap", "n_strip"]),
        polygons=_column([frame, opened, collector]),
        body=np.array([len(layout.bodies) - 1] * 3),
        net=np.array([VSS, VSS, VSS]),
        net_suits=np.array([1, 1, 0]),
        closed=np.array([True, False, False]),
        gap_first=np.array([0, 0, 1, 2]),
        gap_um=np.array([GAP_UM, 9.0]),
        gap_from_um=np.array([(1.0, 24.4), (-1.8, -0.8)]),
        gap_to_um=np.array([(1.0 + GAP_UM, 24.4), (-1.8, 8.2)]),
        width_um=np.array([0.6, 0.4, 0.4]),
        width_at_um=np.array([(-0.7, 2.0), (0.4, 26.0), (5.0, -1.0)]),
        contacted_share=np.array([0.95, 0.3, 0.8]),
        member_first=np.array([0, len(drive), len(drive) + 1, len(drive) + 2]),
        member_injector=np.array([*drive, sense, drive[0]]),
        member_distance_um=np.array([*np.full(len(drive), 0.8), 0.4, 1.8]),
        between_emitters=np.array([17, 0, 0]),
        between_wells=np.array([0, 0, 0]),
    )


def _crossings(layout: Layout, injectors: Injectors) -> Crossings:
    """The first injector of ``drive`` against the core, and against a driver 4 um away."""
    box = layout.emitters.box_um
    n_first = injectors.emitter[0]
    core, driver = 1, injectors.emitter[np.flatnonzero(injectors.polarity == ABOVE_SUPPLY)[0]]
    return Crossings(
        injector=np.array([0, 0]),
        other=np.array([core, driver]),
        driver=np.array([False, True]),
        spacing_um=np.array([4.6, 3.5]),
        from_um=np.array([(box[n_first, 2], box[n_first, 3]), (box[n_first, 0], box[n_first, 3])]),
        to_um=np.array([(box[core, 0], box[core, 1]), (box[driver, 0], box[driver, 1])]),
        p_strips=np.array([1, 1]),
        n_strips=np.array([1, 0]),
    )


def _column(shapes: list[Any]) -> Geometries:
    column = np.empty(len(shapes), dtype=np.object_)
    column[:] = shapes
    return column
