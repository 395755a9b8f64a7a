"""The islands of ``valve_driver.py`` that are judged by distances and resistances.

An island is a patch of 52 x 36 um with one planted fault or one near-miss; `x` and `y` are its
lower left corner.  Its frame is on VSS and its wells are on VDD, unless it says otherwise; what
no pin drives and no supply feeds is an internal node.
"""

from __future__ import annotations

from valve_driver_shapes import (
    RAILS_UM,
    Drawing,
    Planted,
    frame,
    to_pad,
    to_vdd,
    to_vss,
)


def isolated_pwell(drawing: Drawing, x: float, y: float) -> None:
    """A buried layer with a tapped n-well ring on it, around a p-well of 40 x 24 um."""
    frame(drawing, x, y)
    drawing.rect("deep_nwell", x + 3, y + 3, x + 49, y + 33)
    x0, y0, x1, y1 = x + 2.5, y + 2.5, x + 49.5, y + 33.5
    drawing.rect("nwell", x0, y0, x1, y + 6)
    drawing.rect("nwell", x0, y + 30, x1, y1)
    drawing.rect("nwell", x0, y + 6, x + 6, y + 30)
    drawing.rect("nwell", x + 46, y + 6, x1, y + 30)
    drawing.ring("n", x + 3.5, y + 3.5, x + 48.5, y + 32.5)
    to_vdd(drawing, y, x + 40, y + 32)


def one_ended_well(drawing: Drawing, x: float, y: float, reach: float) -> None:
    """A well with its only tap at the left; the last p+ ends `reach` um from it."""
    frame(drawing, x, y)
    drawing.rect("nwell", x + 4, y + 12, x + 48, y + 24)
    drawing.strap("n", x + 5, y + 13, x + 7, y + 23)
    to_vdd(drawing, y, x + 6, y + 22)
    drawing.strap("p", x + 9, y + 16, x + 13, y + 20)
    drawing.strap("p", x + 7 + reach - 6, y + 16, x + 7 + reach, y + 20)


def well_tapped_at_one_end(drawing: Drawing, x: float, y: float) -> Planted:
    """Fault: p+ 33 um from the only tap of its well."""
    one_ended_well(drawing, x, y, 33.0)
    return Planted(
        name="well tapped at one end only",
        rule="tap-distance",
        x_um=x + 40,
        y_um=y + 16,
        measured=33.0,
    )


def well_tapped_near_enough(drawing: Drawing, x: float, y: float) -> Planted:
    """Near-miss: p+ 19.9 um from the only tap of its well."""
    one_ended_well(drawing, x, y, 19.9)
    return Planted(
        name="p+ 19.9 um from its tap",
        rule="tap-distance",
        x_um=x + 26.9,
        y_um=y + 16,
        measured=19.9,
    )


def bar_in_well(drawing: Drawing, x: float, y: float, gap: float) -> None:
    """A p+ bar between two well taps `gap` um apart: its middle is farthest, no corner is."""
    frame(drawing, x, y)
    left, right = x + 26 - gap / 2, x + 26 + gap / 2
    drawing.rect("nwell", left - 1.6, y + 5, right + 1.6, y + 31)
    drawing.strap("n", left - 1, y + 6, left, y + 30)
    drawing.strap("n", right, y + 6, right + 1, y + 30)
    to_vdd(drawing, y, left - 0.5, y + 29)
    to_vdd(drawing, y, right + 0.5, y + 29)
    drawing.strap("p", left + 2, y + 16, right - 2, y + 20)


def bar_between_distant_taps(drawing: Drawing, x: float, y: float) -> Planted:
    """Fault: the middle of a long p+ bar is 22.25 um from either tap."""
    bar_in_well(drawing, x, y, 44.5)
    return Planted(
        name="long p+ bar between two taps",
        rule="tap-distance",
        x_um=x + 26,
        y_um=y + 16,
        measured=22.25,
    )


def bar_between_near_taps(drawing: Drawing, x: float, y: float) -> Planted:
    """Near-miss: the middle of a long p+ bar is 19.8 um from either tap."""
    bar_in_well(drawing, x, y, 39.6)
    return Planted(
        name="p+ bar with its middle 19.8 um from a tap",
        rule="tap-distance",
        x_um=x + 26,
        y_um=y + 16,
        measured=19.8,
    )


def isolated_pwell_with(drawing: Drawing, x: float, y: float, reach: float) -> None:
    """An isolated p-well with its tap at the left; the last n+ ends `reach` um from it."""
    isolated_pwell(drawing, x, y)
    drawing.strap("p", x + 8, y + 10, x + 9, y + 26)
    to_vss(drawing, y, x + 8.5, y + 12)
    drawing.strap("n", x + 12, y + 16, x + 15, y + 20)
    drawing.strap("n", x + 9 + reach - 5, y + 16, x + 9 + reach, y + 20)


def isolated_pwell_tapped_at_one_end(drawing: Drawing, x: float, y: float) -> Planted:
    """Fault: n+ 27 um from the only tap of its isolated p-well."""
    isolated_pwell_with(drawing, x, y, 27.0)
    return Planted(
        name="isolated p-well tapped at one end only",
        rule="tap-distance",
        x_um=x + 36,
        y_um=y + 16,
        measured=27.0,
    )


def isolated_pwell_tapped_near_enough(drawing: Drawing, x: float, y: float) -> Planted:
    """Near-miss: n+ 19.5 um from the only tap of its isolated p-well."""
    isolated_pwell_with(drawing, x, y, 19.5)
    return Planted(
        name="n+ 19.5 um from the tap of its isolated p-well",
        rule="tap-distance",
        x_um=x + 28.5,
        y_um=y + 16,
        measured=19.5,
    )


def untied_isolated_pwell(drawing: Drawing, x: float, y: float) -> Planted:
    """Fault: an isolated p-well without any tap."""
    isolated_pwell(drawing, x, y)
    drawing.strap("n", x + 12, y + 16, x + 15, y + 20)
    return Planted(
        name="isolated p-well without a tap", rule="untied-body", x_um=x + 26, y_um=y + 18
    )


def untied_well(drawing: Drawing, x: float, y: float) -> Planted:
    """Fault: a well without any tap."""
    frame(drawing, x, y)
    drawing.rect("nwell", x + 10, y + 10, x + 30, y + 26)
    drawing.transistors("p", x + 13, y + 14, gates=6, width=6)
    return Planted(name="well without a tap", rule="untied-body", x_um=x + 20, y_um=y + 18)


def bare_tap(drawing: Drawing, x: float, y: float) -> Planted:
    """Fault: one of two well taps has no contact."""
    frame(drawing, x, y)
    drawing.rect("nwell", x + 8, y + 8, x + 40, y + 28)
    drawing.strap("n", x + 9, y + 9, x + 10, y + 27)
    to_vdd(drawing, y, x + 9.5, y + 26)
    drawing.diffusion("n", x + 30, y + 14, x + 31, y + 22)
    drawing.transistors("p", x + 13, y + 14, gates=8, width=6)
    return Planted(
        name="well tap without a contact", rule="uncontacted-tap", x_um=x + 30.5, y_um=y + 18
    )


def far_contacts(drawing: Drawing, x: float, y: float, length: float) -> None:
    """A substrate tap bar that runs on `length` um beyond its contacts' right edge."""
    frame(drawing, x, y)
    drawing.diffusion("p", x + 10, y + 17.64, x + 13.86 + length, y + 18.36)
    drawing.contacts(x + 10, y + 17.75, x + 14, y + 18.25)
    drawing.rect("metal1", x + 0.5, y + 17.75, x + 10, y + 18.25)


def tap_beyond_contacts(drawing: Drawing, x: float, y: float) -> Planted:
    """Fault: a substrate tap reaches 26 um beyond its last contact."""
    far_contacts(drawing, x, y, 26.0)
    return Planted(
        name="substrate tap 26 um beyond its last contact",
        rule="tap-reach",
        x_um=x + 39.86,
        y_um=y + 17.64,
        measured=(26.0**2 + 0.25**2) ** 0.5,
    )


def tap_just_beyond_contacts(drawing: Drawing, x: float, y: float) -> Planted:
    """Near-miss: a substrate tap reaches 5.9 um beyond its last contact."""
    far_contacts(drawing, x, y, 5.9)
    return Planted(
        name="substrate tap 5.9 um beyond its last contact",
        rule="tap-reach",
        x_um=x + 19.76,
        y_um=y + 17.64,
        measured=(5.9**2 + 0.25**2) ** 0.5,
    )


def injector_beside_well(drawing: Drawing, x: float, y: float, spacing: float) -> None:
    """An n+ diode in its own ring, `spacing` um to the left of a well with a ring of taps."""
    frame(drawing, x, y)
    left, right = x + 24 - spacing, x + 30 - spacing
    drawing.strap("n", left, y + 15, right, y + 21)
    drawing.ring("p", left - 2, y + 13, right + 2, y + 23)
    to_vss(drawing, y, left + 3, y + 13.5)
    drawing.rect("nwell", x + 30, y + 8, x + 48, y + 28)
    drawing.ring("n", x + 31, y + 9, x + 47, y + 27)
    to_vdd(drawing, y, x + 39, y + 26.5)
    drawing.strap("p", x + 36, y + 14, x + 42, y + 22)


def marked_injector_too_near(drawing: Drawing, x: float, y: float) -> Planted:
    """Fault: a marked injector 6 um from a well."""
    injector_beside_well(drawing, x, y, 6.0)
    drawing.rect("injector_marker", x + 18, y + 15, x + 24, y + 21)
    return Planted(
        name="marked injector 6 um from a well",
        rule="injector-spacing",
        x_um=x + 24,
        y_um=y + 15,
        measured=6.0,
    )


def labelled_injector_too_near(drawing: Drawing, x: float, y: float) -> Planted:
    """Fault: a diode that a pin label names, 9 um from a well."""
    injector_beside_well(drawing, x, y, 9.0)
    to_pad(drawing, x + 18, y + 18)
    drawing.label("FLOW", x + 18, y + 18)
    return Planted(
        name="pin diode 9 um from a well",
        rule="injector-spacing",
        x_um=x + 21,
        y_um=y + 15,
        measured=9.0,
    )


def labelled_injector_far_enough(drawing: Drawing, x: float, y: float) -> Planted:
    """Near-miss: a diode that a pin label names, 15.1 um from a well."""
    injector_beside_well(drawing, x, y, 15.1)
    to_pad(drawing, x + 12, y + 18)
    drawing.label("LEVEL", x + 12, y + 18)
    return Planted(
        name="pin diode 15.1 um from a well",
        rule="injector-spacing",
        x_um=x + 14.9,
        y_um=y + 15,
        measured=15.1,
    )


def supply_label_near(drawing: Drawing, x: float, y: float) -> Planted:
    """Near-miss: a diffusion beside a well whose label is a supply, so no injector."""
    injector_beside_well(drawing, x, y, 4.0)
    drawing.rect("metal1", x + 22, y + 13, x + 24, y + 15)
    drawing.label("VSS", x + 23, y + 18)
    return Planted(
        name="grounded diffusion 4 um from a well",
        rule="injector-spacing",
        x_um=x + 26,
        y_um=y + 15,
        measured=4.0,
    )


def narrow_neck(drawing: Drawing, x: float, y: float) -> Planted:
    """Fault: p+ at the end of a well arm 1.6 um narrow, within tap distance."""
    frame(drawing, x, y)
    drawing.rect("nwell", x + 6, y + 8, x + 14, y + 28)
    drawing.rect("nwell", x + 14, y + 17, x + 32, y + 18.6)
    drawing.ring("n", x + 7, y + 9, x + 13, y + 27)
    to_vdd(drawing, y, x + 10, y + 26.5)
    drawing.strap("p", x + 28, y + 17.4, x + 31, y + 18.2)
    return Planted(
        name="p+ at the end of a narrow well arm",
        rule="well-resistance",
        x_um=x + 29.5,
        y_um=y + 17.8,
    )


def weak_pair(drawing: Drawing, x: float, y: float) -> Planted:
    """Fault: p+ and n+ side by side, both near the limit of their tap distances."""
    frame(drawing, x, y)
    drawing.rect("nwell", x + 4, y + 18.5, x + 26, y + 20.7)
    drawing.strap("n", x + 5, y + 19, x + 6, y + 20.2)
    to_vdd(drawing, y, x + 5.5, y + 19.6)
    drawing.strap("p", x + 13, y + 19, x + 25, y + 20.2)
    drawing.strap("n", x + 13, y + 16.8, x + 25, y + 18)
    return Planted(
        name="p+ and n+ side by side, taps far from both",
        rule="loop-gain",
        x_um=x + 19,
        y_um=y + 18.5,
    )


def distant_substrate_tap(drawing: Drawing, x: float, y: float) -> Planted:
    """Fault: n+ in the substrate 28 um from the nearest substrate tap, under a rail VSS."""
    drawing.strap("p", x, y - 2, x + 1, y + 6)
    drawing.stack(x + 0.1, y + RAILS_UM["VSS"][0], x + 0.9, y + RAILS_UM["VSS"][1], upper=2)
    drawing.strap("n", x + 25, y, x + 29, y + 4)
    return Planted(
        name="n+ far from every substrate tap",
        rule="tap-distance",
        x_um=x + 29,
        y_um=y,
        measured=28.0,
    )
