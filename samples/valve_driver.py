"""Draw ``valve_driver.gds``, the block that the README scans.

The block is invented: four outputs that switch irrigation valves, their pads, a strip of
control logic, an isolated p-well for the sense amplifier and a diffusion resistor, in the
invented process ``larch180``.  Sound parts come first; then the *islands* and *cages*: small
patches, each with one planted fault or one near-miss.  `draw_block` returns which rule must
find what, where, and with which measure; the tests read these tables.

The logic and the islands are on VDD and VSS, the drivers on VDDIO and VSSIO.  Metal 1 wires
cells, metal 2 is rails from left to right, metal 3 trunks from below to above, metal 4 pads and
pins; ``valve_driver.yaml`` says what the pins are.

Run ``python samples/valve_driver.py [OUT.gds]``; the bytes are the same every time.
"""

from __future__ import annotations

import datetime
import sys
from collections.abc import Callable
from pathlib import Path

import gdstk
import valve_driver_islands as islands
import valve_driver_rings as rings
import valve_driver_ties as ties
from valve_driver_shapes import (
    ISLAND_STEP_UM,
    LAYERS,
    PAD_ROWS_UM,
    PAD_UM,
    RAILS_UM,
    Drawing,
    Planted,
    frame,
    new_library,
    rails,
    to_vdd,
    to_vss,
)

__all__ = ["LAYERS", "Planted", "draw_block", "main"]

WIDTH_UM, HEIGHT_UM = 560.0, 506.0
TRUNKS_UM = {"VSS": 547.0, "VDD": 550.0, "VDDIO": 553.0}
"""Left edge of each metal 3 trunk along the right side; they are 1.5 um wide."""
RAIL_END_UM = 555.0
MAIN_VSS_UM = (127.5, 129.5)
MAIN_VDD_UM = (131.0, 133.0)
"""Bottom and top of the metal 2 rails between the drivers and the logic."""

# --- sound parts: logic ----------------------------------------------------------------------


ROW_UM = 8.0
GROUP_UM = 17.6
LOGIC_AT_UM = (20.0, 142.0)
LOGIC_ROWS, LOGIC_GROUPS = 12, 11


def logic_cell(library: gdstk.Library, name: str, gates: int) -> gdstk.Cell:
    """One logic cell: n below, p above, its part of the row's well.

    Sources are on the rails at either edge, each drain of n and p on one node of its own.
    """
    drawing = Drawing(library, name)
    drawing.transistors("n", 0.4, 1.0, gates=gates, width=1.6)
    drawing.transistors("p", 0.4, 4.8, gates=gates, width=2.2)
    for gate in range(gates):
        drawing.rect("poly", 1.0 + gate, 2.9, 1.4 + gate, 4.5)
    drawing.fingers(0.4, 0.0, 1.0, gates=gates, first=0)
    drawing.fingers(0.4, 7.0, ROW_UM, gates=gates, first=0)
    drawing.fingers(0.4, 2.6, 4.8, gates=gates, first=1)
    drawing.rect("nwell", -0.4, 4.0, gates + 1.8, ROW_UM + 0.4)
    return drawing.cell


def tap_cell(library: gdstk.Library) -> gdstk.Cell:
    """A cell with one well tap and one substrate tap."""
    drawing = Drawing(library, "row_tap")
    drawing.strap("p", 0.5, 0.8, 1.5, 2.8)
    drawing.strap("n", 0.5, 4.8, 1.5, 7.0)
    drawing.rect("metal1", 0.5, 0.0, 1.5, 0.8)
    drawing.rect("metal1", 0.5, 7.0, 1.5, ROW_UM)
    drawing.rect("nwell", -0.4, 4.0, 2.4, ROW_UM + 0.4)
    return drawing.cell


def logic_group(library: gdstk.Library) -> tuple[gdstk.Cell, gdstk.Cell]:
    """A tap cell and four logic cells, the unit that rows repeat; and the tap cell."""
    tap = tap_cell(library)
    drawing = Drawing(library, "row_group")
    drawing.place(tap, 0, 0)
    x = 2.0
    for name, gates in (("latch", 5), ("gate", 2), ("inverter", 1), ("gate_b", 2)):
        drawing.place(logic_cell(library, name, gates), x, 0)
        x += gates + 1.4
    return drawing.cell, tap


def logic(drawing: Drawing, library: gdstk.Library) -> None:
    """Twelve rows of control logic, every second one upside down, and their rails."""
    group, tap = logic_group(library)
    x, y = LOGIC_AT_UM
    end = x + LOGIC_GROUPS * GROUP_UM
    for row in range(LOGIC_ROWS):
        mirrored = row % 2 == 1
        base = y + (row + 1 if mirrored else row) * ROW_UM
        drawing.place(group, x, base, mirrored=mirrored, columns=LOGIC_GROUPS, step=GROUP_UM)
        drawing.place(tap, end, base, mirrored=mirrored)
    left, right = x - 5, end + 8
    for rail in range(LOGIC_ROWS + 1):
        lower, upper = y + rail * ROW_UM - 0.3, y + rail * ROW_UM + 0.3
        if rail % 2 == 0:
            drawing.rect("metal1", left, lower, end + 2, upper)
            drawing.stack(left, lower, left + 2, upper, upper=3)
        else:
            drawing.rect("metal1", x, lower, right, upper)
            drawing.stack(right - 2, lower, right, upper, upper=3)
    top = y + LOGIC_ROWS * ROW_UM
    drawing.rect("metal3", left, MAIN_VSS_UM[0], left + 2, top + 0.3)
    drawing.stack(left, MAIN_VSS_UM[0], left + 2, MAIN_VSS_UM[1], lower=2, upper=3)
    drawing.rect("metal3", right - 2, MAIN_VDD_UM[0], right, top)
    drawing.stack(right - 2, MAIN_VDD_UM[0], right, MAIN_VDD_UM[1], lower=2, upper=3)


# --- sound parts: drivers, pads and supplies -------------------------------------------------


DRIVER_AT_UM = (16.0, 70.0)
DRIVER_STEP_UM = 118.0
VSSIO_RAIL_UM = (70.2, 71.3)
DRIVER_VDDIO_UM = (74.2, 75.3)
"""Bottom and top of the metal 2 rails of the drivers, in the block."""
LOWER_PADS = (
    "VALVE0",
    "VSSIO",
    "VALVE1",
    "VDDIO",
    "VALVE2",
    "VSS",
    "VALVE3",
    "VDD",
    "CLOCK",
)
UPPER_PADS = ("FLOW", "LEVEL", "ALARM", "TEST", "RESET", "BIAS", "DATA", "VDD", "VSS")


def output_driver(library: gdstk.Library) -> gdstk.Cell:
    """A pull-down and a pull-up with closed tap rings, and their wires to the pad."""
    drawing = Drawing(library, "output_driver")
    pull_down(drawing)
    pull_up(drawing)
    drawing.rect("metal4", 12, -13, 18, 40.2)
    drawing.rect("metal4", 12, 37, 74, 40.2)
    drawing.stack(70, 37.1, 74, 37.9, lower=2, upper=4)
    return drawing.cell


def pull_down(drawing: Drawing) -> None:
    """Wire 20 n transistors: sources to their ring, drains to a bar above them."""
    drawing.ring("p", 0, 0, 30, 44, width=1.5)
    drawing.transistors("n", 4.7, 7, gates=20, width=30)
    drawing.fingers(4.7, 5.0, 7.0, gates=20, first=0)
    drawing.rect("metal1", 4.7, 4.0, 25.3, 5.0)
    drawing.rect("metal1", 13, 1.5, 17, 4.0)
    drawing.fingers(4.7, 37.0, 39.0, gates=20, first=1)
    drawing.rect("metal1", 4.7, 39.0, 25.3, 40.0)
    drawing.stack(12, 39.0, 18, 40.0, upper=4)


def pull_up(drawing: Drawing) -> None:
    """Wire two rows of p transistors: sources to the tap between them, drains to two bars."""
    drawing.ring("p", 50, 0, 106, 44, width=1.5)
    drawing.rect("nwell", 53, 3, 103, 41)
    drawing.ring("n", 54, 4, 102, 40, width=1.5)
    drawing.strap("n", 58, 21.3, 98, 22.7)
    drawing.rect("metal1", 55, 21.3, 101, 22.7)
    for lower in (7.5, 24.0):
        drawing.transistors("p", 59.7, lower, gates=36, width=12.5)
    drawing.fingers(59.7, 20.0, 21.3, gates=36, first=0)
    drawing.fingers(59.7, 22.7, 24.0, gates=36, first=0)
    drawing.fingers(59.7, 6.9, 7.5, gates=36, first=1)
    drawing.fingers(59.7, 36.5, 37.1, gates=36, first=1)
    for lower, upper in ((6.1, 6.9), (37.1, 37.9)):
        drawing.rect("metal1", 59.7, lower, 96.3, upper)
        drawing.stack(70, lower, 74, upper, upper=2)
    drawing.rect("metal2", 70, 6.1, 74, 37.9)


def drivers(drawing: Drawing, library: gdstk.Library) -> None:
    """Four drivers, and the rails of their rings."""
    driver = output_driver(library)
    x, y = DRIVER_AT_UM
    for index in range(4):
        left = x + DRIVER_STEP_UM * index
        drawing.place(driver, left, y)
        drawing.stack(left + 2, VSSIO_RAIL_UM[0], left + 28, VSSIO_RAIL_UM[1], upper=2)
        drawing.stack(left + 52, VSSIO_RAIL_UM[0], left + 104, VSSIO_RAIL_UM[1], upper=2)
        drawing.stack(left + 56, DRIVER_VDDIO_UM[0], left + 100, DRIVER_VDDIO_UM[1], upper=2)
    end = x + 3 * DRIVER_STEP_UM + 106
    drawing.rect("metal2", x, VSSIO_RAIL_UM[0], end, VSSIO_RAIL_UM[1])
    drawing.rect("metal2", x + 54, DRIVER_VDDIO_UM[0], RAIL_END_UM, DRIVER_VDDIO_UM[1])


def wall(drawing: Drawing) -> None:
    """A tapped n-well on VDDIO along the whole block, between the drivers and the logic."""
    drawing.rect("nwell", 8, 123, 552, 126)
    drawing.strap("n", 9, 124, 551, 125)
    drawing.rect("metal1", 551, 124, RAIL_END_UM, 125)
    drawing.stack(TRUNKS_UM["VDDIO"], 124, RAIL_END_UM, 125, upper=3)


def pads(drawing: Drawing, names: tuple[str, ...], y: float, step: float) -> None:
    """A row of bond pads with their pin names."""
    for index, name in enumerate(names):
        x = 14 + step * index
        drawing.rect("metal4", x, y, x + PAD_UM, y + PAD_UM)
        drawing.rect("pad", x + 2, y + 2, x + PAD_UM - 2, y + PAD_UM - 2)
        drawing.label(name, x + PAD_UM / 2, y + PAD_UM / 2)


def supplies(drawing: Drawing, top_rails: dict[str, tuple[float, float]]) -> None:
    """Main rails, trunks, and the supply pads down to them.

    `top_rails` are the bottom and top of the uppermost metal 2 rails of VSS and VDD.
    """
    mains = {"VSS": MAIN_VSS_UM, "VDD": MAIN_VDD_UM, "VDDIO": DRIVER_VDDIO_UM}
    for name, (lower, upper) in mains.items():
        x = TRUNKS_UM[name]
        drawing.rect("metal3", x, lower, x + 1.5, 446)
        drawing.stack(x, lower, x + 1.5, upper, lower=2, upper=3)
    drawing.rect("metal2", 14, MAIN_VSS_UM[0], WIDTH_UM - 0.2, MAIN_VSS_UM[1])
    drawing.rect("metal2", 14, MAIN_VDD_UM[0], RAIL_END_UM, MAIN_VDD_UM[1])
    drawing.stack(WIDTH_UM - 1.8, MAIN_VSS_UM[0], WIDTH_UM - 0.2, MAIN_VSS_UM[1], upper=2)
    lower_edge = PAD_ROWS_UM[0] + PAD_UM - 1
    for x, (lower, upper), metal in (
        (96, VSSIO_RAIL_UM, 1),
        (214, DRIVER_VDDIO_UM, 2),
        (336, MAIN_VSS_UM, 2),
        (454, MAIN_VDD_UM, 2),
    ):
        drawing.rect("metal4", x, lower_edge, x + 6, upper)
        drawing.stack(x, lower, x + 6, upper, lower=metal, upper=4)
    for x, name in ((456, "VDD"), (516, "VSS")):
        lower, upper = top_rails[name]
        drawing.rect("metal4", x, lower, x + 6, PAD_ROWS_UM[1] + 1)
        drawing.stack(x, lower, x + 6, upper, lower=2, upper=4)


def to_trunk(drawing: Drawing, name: str, lower: float, upper: float) -> None:
    """Join a metal 2 rail that ends at the trunks to its own."""
    x = TRUNKS_UM[name]
    drawing.stack(x, lower, x + 1.5, upper, lower=2, upper=3)


def clock_input(drawing: Drawing, x: float, y: float) -> Planted:
    """The diode of CLOCK in a closed ring and a closed collector: a near-miss."""
    rings.cage(drawing, x, y)
    drawing.ring("p", *rings.ring_corner(x, y))
    _, _, ring_x, ring_y = rings.ring_corner(x, y)
    drawing.stack(ring_x - 0.8, ring_y - 0.8, ring_x - 0.2, ring_y - 0.2, upper=2)
    drawing.rect("metal2", ring_x - 0.8, ring_y - 0.8, ring_x - 0.2, MAIN_VSS_UM[1])
    drawing.stack(x + 0.5, DRIVER_VDDIO_UM[0], x + 1.5, DRIVER_VDDIO_UM[1], upper=2)
    mid_x, mid_y = x + rings.CENTRE_UM[0], y + rings.CENTRE_UM[1]
    drawing.rect("metal4", mid_x - 1, PAD_ROWS_UM[0] + PAD_UM - 1, mid_x + 1, mid_y)
    return Planted(
        name="diode of CLOCK in a closed ring", rule="ring-missing", x_um=mid_x, y_um=mid_y
    )


def sense_amplifier(drawing: Drawing, x: float, y: float) -> Planted:
    """An isolated p-well, ringed and tapped as it should be: a near-miss."""
    islands.isolated_pwell(drawing, x, y)
    drawing.ring("p", x + 8, y + 8, x + 44, y + 28)
    to_vss(drawing, y, x + 20, y + 8.5)
    drawing.transistors("n", x + 16, y + 14, gates=18, width=8)
    return Planted(
        name="isolated p-well whose ring is closed",
        rule="isolation-gap",
        x_um=x + 26,
        y_um=y + 18,
    )


def diffusion_resistor(drawing: Drawing, x: float, y: float) -> None:
    """A p+ resistor from VDD, along taps on both sides of its well."""
    frame(drawing, x, y)
    drawing.rect("nwell", x + 4, y + 8, x + 48, y + 28)
    drawing.strap("n", x + 5, y + 9, x + 47, y + 10)
    drawing.strap("n", x + 5, y + 26, x + 47, y + 27)
    drawing.diffusion("p", x + 8, y + 16, x + 44, y + 20)
    drawing.rect("resistor_marker", x + 10, y + 15.5, x + 42, y + 20.5)
    drawing.contacts(x + 8, y + 16, x + 10, y + 20)
    drawing.contacts(x + 42, y + 16, x + 44, y + 20)
    to_vdd(drawing, y, x + 6, y + 9.5)
    to_vdd(drawing, y, x + 46, y + 26.5)
    to_vdd(drawing, y, x + 9, y + 18)


# --- the floor plan of faults and near-misses -----------------------------------------------


Draw = Callable[[Drawing, float, float], Planted]
FAULT_ISLANDS: tuple[Draw, ...] = (
    islands.well_tapped_at_one_end,
    islands.bar_between_distant_taps,
    islands.isolated_pwell_tapped_at_one_end,
    islands.untied_isolated_pwell,
    islands.untied_well,
    islands.bare_tap,
    islands.tap_beyond_contacts,
    islands.narrow_neck,
    islands.weak_pair,
    ties.well_tied_through_poly,
    ties.well_on_two_supplies,
    ties.p_above_its_well,
    ties.wells_too_near,
    ties.leaking_pwell,
)
NEAR_MISS_ISLANDS: tuple[Draw, ...] = (
    islands.well_tapped_near_enough,
    islands.bar_between_near_taps,
    islands.isolated_pwell_tapped_near_enough,
    islands.tap_just_beyond_contacts,
    islands.supply_label_near,
    ties.well_tied_through_short_poly,
    ties.well_on_one_supply,
    ties.p_below_its_well,
    ties.wells_at_limit,
)
PIN_ISLANDS: tuple[tuple[Draw, bool], ...] = (
    (islands.labelled_injector_too_near, True),
    (islands.labelled_injector_far_enough, False),
    (rings.pad_through_metal4, True),
    (rings.protected_diode_too_near, True),
    (rings.protected_diode_far_enough, False),
    (ties.well_on_pad, True),
    (rings.missing_double_ring, True),
    (islands.marked_injector_too_near, True),
)
"""The islands under the upper pads, in their order, and whether each is a fault."""
CAGES: tuple[tuple[Draw, bool], ...] = (
    (rings.open_ring, True),
    (rings.bridged_ring, False),
    (rings.starved_ring, True),
    (rings.ring_contacted_on_both_sides, False),
    (rings.thin_ring, True),
    (rings.wide_ring, False),
    (rings.collector_on_ground, True),
    (rings.missing_ring, True),
)
ISLANDS_AT_UM = (260.0, 142.0)
"""Lower left corner; frames stand more than a ring's reach of 30 um from the drivers' wells."""
LEFT_AT_UM = 20.0
LEFT_ROWS = (3, 4)
"""Rows of islands that go on to the left of the others, above the logic."""
CAGES_AT_UM = (13.0, 346.0)
PIN_ISLANDS_AT_UM = (13.0, 402.0)


class Plan:
    """Faults and near-misses as they are drawn."""

    def __init__(self) -> None:
        self.faults: list[Planted] = []
        self.near_misses: list[Planted] = []

    def add(self, planted: Planted, *, fault: bool) -> None:
        """Enter one of either."""
        (self.faults if fault else self.near_misses).append(planted)


def core_islands(drawing: Drawing, plan: Plan) -> None:
    """Five columns and rows of islands beside the logic, and what lies above the logic."""
    x, y = ISLANDS_AT_UM
    step_x, step_y = ISLAND_STEP_UM
    for index, draw in enumerate(FAULT_ISLANDS + NEAR_MISS_ISLANDS):
        placed = draw(drawing, x + step_x * (index % 5), y + step_y * (index // 5))
        plan.add(placed, fault=index < len(FAULT_ISLANDS))
    for row in range(5):
        base = y + step_y * row
        rails(drawing, LEFT_AT_UM if row in LEFT_ROWS else x, RAIL_END_UM, base)
        join_rails(drawing, base)
    lower, upper = (y + step_y * row for row in LEFT_ROWS)
    plan.add(sense_amplifier(drawing, LEFT_AT_UM, lower), fault=False)
    diffusion_resistor(drawing, LEFT_AT_UM + step_x, lower)
    plan.add(ties.net_with_two_names(drawing, LEFT_AT_UM, upper), fault=True)
    plan.add(ties.name_on_two_nets(drawing, LEFT_AT_UM + step_x, upper), fault=True)
    plan.add(ties.joined_name(drawing, LEFT_AT_UM + 3 * step_x, upper), fault=False)
    plan.add(islands.distant_substrate_tap(drawing, 150.0, upper), fault=True)


def join_rails(drawing: Drawing, y: float) -> None:
    """Join the rails of a row of islands to the trunks."""
    for name, (lower, upper) in RAILS_UM.items():
        to_trunk(drawing, name, y + lower, y + upper)


def cages(drawing: Drawing, plan: Plan) -> None:
    """A row of cages on the pin DATA, which metal 4 joins."""
    x, y = CAGES_AT_UM
    for index, (draw, fault) in enumerate(CAGES):
        left = x + rings.CAGE_STEP_UM * index
        plan.add(draw(drawing, left, y), fault=fault)
        if draw is rings.collector_on_ground:
            plan.add(rings.collector_tie(left, y), fault=True)
    for name, (lower, upper) in (("VDD", rings.CAGE_VDD_UM), ("VSS", rings.CAGE_VSS_UM)):
        drawing.rect("metal2", x, y + lower, RAIL_END_UM, y + upper)
        to_trunk(drawing, name, y + lower, y + upper)
    mid_x, mid_y = x + rings.CENTRE_UM[0], y + rings.CENTRE_UM[1]
    last = mid_x + rings.CAGE_STEP_UM * (len(CAGES) - 1)
    drawing.rect("metal4", mid_x, mid_y - 1, last, mid_y + 1)
    data = PIN_ISLANDS_AT_UM[0] + rings.CAGE_STEP_UM * UPPER_PADS.index("DATA") + 12
    drawing.rect("metal4", data - 1, mid_y, data + 1, PAD_ROWS_UM[1] + 1)


def pin_islands(drawing: Drawing, plan: Plan) -> None:
    """The islands under the upper pads."""
    x, y = PIN_ISLANDS_AT_UM
    for index, (draw, fault) in enumerate(PIN_ISLANDS):
        plan.add(draw(drawing, x + rings.CAGE_STEP_UM * index, y), fault=fault)
    rails(drawing, x, RAIL_END_UM, y)
    join_rails(drawing, y)


def draw_block() -> tuple[gdstk.Library, tuple[Planted, ...], tuple[Planted, ...]]:
    """Draw the whole block; return its library, the faults and the near-misses."""
    library = new_library()
    drawing = Drawing(library, "valve_driver")
    plan = Plan()
    drawing.ring("p", 0, 0, WIDTH_UM, HEIGHT_UM, width=2.0)
    pads(drawing, LOWER_PADS, PAD_ROWS_UM[0], 59.0)
    pads(drawing, UPPER_PADS, PAD_ROWS_UM[1], 60.0)
    drivers(drawing, library)
    wall(drawing)
    plan.add(clock_input(drawing, 488.0, 68.0), fault=False)
    logic(drawing, library)
    core_islands(drawing, plan)
    cages(drawing, plan)
    pin_islands(drawing, plan)
    top = PIN_ISLANDS_AT_UM[1]
    supplies(
        drawing,
        {name: (top + lower, top + upper) for name, (lower, upper) in RAILS_UM.items()},
    )
    return library, tuple(plan.faults), tuple(plan.near_misses)


def main(path: Path) -> None:
    """Write the block as GDSII; a fixed time stamp keeps the bytes the same."""
    library, _, _ = draw_block()
    library.write_gds(path, timestamp=datetime.datetime(2000, 1, 1))


if __name__ == "__main__":
    main(Path(sys.argv[1] if len(sys.argv) > 1 else Path(__file__).with_name("valve_driver.gds")))
