"""The islands and cages of ``valve_driver.py`` that are judged by pins and their rings.

An island is as in ``valve_driver_islands.py``.  A *cage* is a patch of 52 x 44 um with an n+
diode of the pin DATA in its middle: around the diode lies the ring of substrate taps that is
judged, around that an n-well ring with taps, which collects what escapes.  `x` and `y` are the
lower left corner of either.
"""

from __future__ import annotations

from valve_driver_islands import injector_beside_well
from valve_driver_shapes import Drawing, Planted, to_pad, to_vdd, to_vss

CAGE_UM = (52.0, 44.0)
CAGE_STEP_UM = 60.0
CAGE_VDD_UM = (0.5, 1.5)
CAGE_VSS_UM = (45.0, 46.2)
"""Bottom and top of the metal 2 rails of the row of cages, above the cages' lower edge."""
CENTRE_UM = (26.0, 22.0)
RING_UM = 3.4
"""Half of the outer side of the ring around the diode."""
DIODE_UM = 1.4
"""Half of the side of the diode."""


# --- cages -----------------------------------------------------------------------------------


def cage(drawing: Drawing, x: float, y: float) -> None:
    """The n-well ring and the diode, led up to metal 4."""
    across, along = CAGE_UM
    drawing.hollow("nwell", x, y, x + across, y + along, width=2.0)
    drawing.ring("n", x + 0.5, y + 0.5, x + across - 0.5, y + along - 0.5)
    mid_x, mid_y = x + CENTRE_UM[0], y + CENTRE_UM[1]
    half = DIODE_UM
    drawing.strap("n", mid_x - half, mid_y - half, mid_x + half, mid_y + half)
    drawing.stack(mid_x - 1, mid_y - 1, mid_x + 1, mid_y + 1, upper=4)


def on_vdd(drawing: Drawing, x: float, y: float) -> None:
    """Tie the n-well ring of a cage to the rail below it."""
    drawing.stack(x + 8, y + CAGE_VDD_UM[0], x + 12, y + CAGE_VDD_UM[1], upper=2)


def up_to_vss(drawing: Drawing, y: float, at_x: float, at_y: float) -> None:
    """Tie metal 1 at a point of the cage at `y` to the rail VSS above it."""
    drawing.stack(at_x - 0.3, at_y - 0.3, at_x + 0.3, at_y + 0.3, upper=2)
    drawing.rect("metal2", at_x - 0.3, at_y, at_x + 0.3, y + CAGE_VSS_UM[1])


def ring_corner(x: float, y: float) -> tuple[float, float, float, float]:
    """Outer edge of the ring around the diode."""
    mid_x, mid_y = x + CENTRE_UM[0], y + CENTRE_UM[1]
    return mid_x - RING_UM, mid_y - RING_UM, mid_x + RING_UM, mid_y + RING_UM


def ring_with_gap(drawing: Drawing, x: float, y: float, gap: float) -> None:
    """A ring on VSS whose upper strip has a gap in its middle."""
    cage(drawing, x, y)
    on_vdd(drawing, x, y)
    x0, y0, x1, y1 = ring_corner(x, y)
    left, right = x + CENTRE_UM[0] - gap / 2, x + CENTRE_UM[0] + gap / 2
    drawing.strap("p", x0, y0, x1, y0 + 1)
    drawing.strap("p", x0, y0 + 1, x0 + 1, y1 - 1)
    drawing.strap("p", x1 - 1, y0 + 1, x1, y1 - 1)
    drawing.strap("p", x0, y1 - 1, left, y1)
    drawing.strap("p", right, y1 - 1, x1, y1)
    up_to_vss(drawing, y, x1 - 0.5, y1 - 0.5)


def open_ring(drawing: Drawing, x: float, y: float) -> Planted:
    """Fault: a ring with a gap of 2 um in its upper strip."""
    ring_with_gap(drawing, x, y, 2.0)
    return Planted(
        name="ring with a gap of 2 um",
        rule="ring-gap",
        x_um=x + CENTRE_UM[0],
        y_um=y + CENTRE_UM[1] + RING_UM - 0.5,
        measured=2.0,
    )


def bridged_ring(drawing: Drawing, x: float, y: float) -> Planted:
    """Near-miss: the same ring, its gap bridged by a strip outside it."""
    ring_with_gap(drawing, x, y, 2.0)
    mid_x, top = x + CENTRE_UM[0], y + CENTRE_UM[1] + RING_UM
    drawing.strap("p", mid_x - 2, top, mid_x + 2, top + 1)
    return Planted(name="ring whose gap is bridged", rule="ring-gap", x_um=mid_x, y_um=top - 0.5)


def ring_contacted_left(drawing: Drawing, x: float, y: float) -> tuple[float, float, float, float]:
    """A ring on VSS with contacts on its left strip, which takes the whole height."""
    cage(drawing, x, y)
    on_vdd(drawing, x, y)
    x0, y0, x1, y1 = ring_corner(x, y)
    drawing.strap("p", x0, y0, x0 + 1, y1)
    drawing.diffusion("p", x0 + 1, y0, x1, y0 + 1)
    drawing.diffusion("p", x0 + 1, y1 - 1, x1, y1)
    drawing.diffusion("p", x1 - 1, y0 + 1, x1, y1 - 1)
    up_to_vss(drawing, y, x0 + 0.5, y1 - 0.5)
    return x0, y0, x1, y1


def starved_ring(drawing: Drawing, x: float, y: float) -> Planted:
    """Fault: a ring with contacts on its left strip only.

    Contacts reach 0.86 um into the upper and lower strip, and 2 um count as contacted beyond
    them: (6.8 + 2 x 1.86) x 1 of 23.2 um2, less the slivers that corners of contacts miss.
    """
    ring_contacted_left(drawing, x, y)
    return Planted(
        name="ring contacted on one side",
        rule="ring-contacts",
        x_um=x + CENTRE_UM[0],
        y_um=y + CENTRE_UM[1],
        measured=(6.8 + 2 * 1.86) / 23.2,
    )


def ring_contacted_on_both_sides(drawing: Drawing, x: float, y: float) -> Planted:
    """Near-miss: the same ring with contacts on its right strip too."""
    _, y0, x1, y1 = ring_contacted_left(drawing, x, y)
    drawing.contacts(x1 - 1, y0 + 1, x1, y1 - 1)
    up_to_vss(drawing, y, x1 - 0.5, y1 - 1.5)
    return Planted(
        name="ring contacted on both sides",
        rule="ring-contacts",
        x_um=x + CENTRE_UM[0],
        y_um=y + CENTRE_UM[1],
    )


def ring_of_width(drawing: Drawing, x: float, y: float, width: float) -> None:
    """A ring on VSS whose right strip has a width of its own."""
    cage(drawing, x, y)
    on_vdd(drawing, x, y)
    x0, y0, x1, y1 = ring_corner(x, y)
    drawing.strap("p", x0, y0, x1, y0 + 1)
    drawing.strap("p", x0, y1 - 1, x1, y1)
    drawing.strap("p", x0, y0 + 1, x0 + 1, y1 - 1)
    drawing.strap("p", x1 - width, y0 + 1, x1, y1 - 1)
    up_to_vss(drawing, y, x0 + 0.5, y1 - 0.5)


def thin_ring(drawing: Drawing, x: float, y: float) -> Planted:
    """Fault: a ring whose right strip is 0.4 um wide."""
    ring_of_width(drawing, x, y, 0.4)
    return Planted(
        name="ring 0.4 um wide at its right",
        rule="ring-width",
        x_um=x + CENTRE_UM[0] + RING_UM - 0.2,
        y_um=y + CENTRE_UM[1],
        measured=0.4,
    )


def wide_ring(drawing: Drawing, x: float, y: float) -> Planted:
    """Near-miss: a ring whose right strip is 0.6 um wide."""
    ring_of_width(drawing, x, y, 0.6)
    return Planted(
        name="ring 0.6 um wide at its right",
        rule="ring-width",
        x_um=x + CENTRE_UM[0] + RING_UM - 0.3,
        y_um=y + CENTRE_UM[1],
    )


def collector_on_ground(drawing: Drawing, x: float, y: float) -> Planted:
    """Fault: the n-well ring that should collect electrons is on VSS.

    As a body on the wrong rail the same ring breaks `tie-net` as well.
    """
    cage(drawing, x, y)
    x0, y0, x1, y1 = ring_corner(x, y)
    drawing.ring("p", x0, y0, x1, y1)
    up_to_vss(drawing, y, x0 + 0.5, y1 - 0.5)
    up_to_vss(drawing, y, x + 12, y + CAGE_UM[1] - 1)
    return Planted(
        name="n-well ring on VSS",
        rule="ring-net",
        x_um=x + 1,
        y_um=y + CENTRE_UM[1],
    )


def collector_tie(x: float, y: float) -> Planted:
    """The same fault as `collector_on_ground`, as the rule on ties sees it: at the left strip."""
    return Planted(
        name="n-well ring tied to VSS",
        rule="tie-net",
        x_um=x + 1,
        y_um=y + CENTRE_UM[1],
    )


def missing_ring(drawing: Drawing, x: float, y: float) -> Planted:
    """Fault: a diode with a substrate tap beside it instead of a ring around it."""
    cage(drawing, x, y)
    on_vdd(drawing, x, y)
    mid_x, mid_y = x + CENTRE_UM[0], y + CENTRE_UM[1]
    drawing.strap("p", mid_x + 4, mid_y - 1, mid_x + 6, mid_y + 1)
    up_to_vss(drawing, y, mid_x + 5, mid_y)
    return Planted(
        name="diode without a ring of substrate taps",
        rule="ring-missing",
        x_um=mid_x,
        y_um=mid_y,
        measured=0.0,
    )


# --- islands ---------------------------------------------------------------------------------


def pad_through_metal4(drawing: Drawing, x: float, y: float) -> Planted:
    """Fault: a diode 7 um from a well; only metal 4 leads from it to its pad."""
    injector_beside_well(drawing, x, y, 7.0)
    to_pad(drawing, x + 20, y + 18)
    return Planted(
        name="diode of ALARM, reached through metal 4, 7 um from a well",
        rule="injector-spacing",
        x_um=x + 23,
        y_um=y + 15,
        measured=7.0,
    )


def diode_behind_resistor(drawing: Drawing, x: float, y: float, spacing: float) -> None:
    """A diode whose pad is reached through 10 squares of marked poly."""
    injector_beside_well(drawing, x, y, spacing)
    drawing.rect("poly", x + 13, y + 30, x + 37, y + 32)
    drawing.rect("resistor_marker", x + 15, y + 29.5, x + 35, y + 32.5)
    drawing.contacts(x + 13, y + 30, x + 15, y + 32)
    drawing.contacts(x + 35, y + 30, x + 37, y + 32)
    drawing.stack(x + 13.6, y + 17, x + 14.4, y + 19, upper=2)
    drawing.stack(x + 13.6, y + 30.2, x + 14.4, y + 31.8, upper=2)
    drawing.rect("metal2", x + 13.6, y + 17, x + 14.4, y + 31.8)
    to_pad(drawing, x + 36, y + 31)


def protected_diode_too_near(drawing: Drawing, x: float, y: float) -> Planted:
    """Fault: a diode behind a resistor, 12 um from a well."""
    diode_behind_resistor(drawing, x, y, 12.0)
    return Planted(
        name="diode of TEST, behind a resistor, 12 um from a well",
        rule="injector-spacing",
        x_um=x + 18,
        y_um=y + 15,
        measured=12.0,
    )


def protected_diode_far_enough(drawing: Drawing, x: float, y: float) -> Planted:
    """Near-miss: a diode behind a resistor, 15.1 um from a well."""
    diode_behind_resistor(drawing, x, y, 15.1)
    return Planted(
        name="diode of RESET, behind a resistor, 15.1 um from a well",
        rule="injector-spacing",
        x_um=x + 14.9,
        y_um=y + 15,
        measured=15.1,
    )


def missing_double_ring(drawing: Drawing, x: float, y: float) -> Planted:
    """Fault: between a diode of DATA and p+ lie substrate taps only; the place is halfway.

    No frame is drawn here: within one, both would belong to the same guarded circuit.
    """
    drawing.strap("n", x + 8.9, y + 15, x + 14.9, y + 21)
    drawing.ring("p", x + 6.9, y + 13, x + 16.9, y + 23)
    to_vss(drawing, y, x + 12, y + 13.5)
    drawing.rect("nwell", x + 30, y + 8, x + 48, y + 28)
    drawing.strap("n", x + 46, y + 9, x + 47, y + 27)
    to_vdd(drawing, y, x + 46.5, y + 26)
    drawing.strap("p", x + 32, y + 14, x + 38, y + 22)
    to_pad(drawing, x + 12, y + 18)
    return Planted(
        name="diode of DATA and p+ with substrate taps only between them",
        rule="double-ring",
        x_um=x + (14.9 + 32) / 2,
        y_um=y + 18,
        measured=1.0,
    )
