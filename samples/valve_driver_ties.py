"""The islands of ``valve_driver.py`` that are judged by what their bodies are tied to.

As in ``valve_driver_islands.py``, `x` and `y` are the lower left corner of an island.
"""

from __future__ import annotations

from collections.abc import Callable

from valve_driver_shapes import Drawing, Planted, frame, to_pad, to_vdd, to_vddio, to_vss

Tie = Callable[[Drawing, float, float, float], None]
"""`to_vdd`, `to_vddio` or `to_vss`."""


def tapped_well(drawing: Drawing, x: float, y: float) -> None:
    """A well with a row of transistors and one tap, 1 um wide, at its left; no wiring yet."""
    frame(drawing, x, y)
    drawing.rect("nwell", x + 10, y + 10, x + 42, y + 26)
    drawing.strap("n", x + 11, y + 12, x + 12, y + 24)
    drawing.transistors("p", x + 16, y + 14, gates=10, width=8)


def well_on_strap(drawing: Drawing, x: float, y: float, squares: float) -> None:
    """A well whose tap reaches VDD through a strap of poly, 1 um wide, between contacts."""
    tapped_well(drawing, x, y)
    drawing.rect("metal1", x + 11, y + 24, x + 12, y + 29)
    drawing.contacts(x + 11, y + 28, x + 12, y + 29)
    end = x + 11.72 + squares
    drawing.contacts(end, y + 28, end + 1, y + 29)
    drawing.rect("poly", x + 11, y + 28, end + 1, y + 29)
    to_vdd(drawing, y, end + 0.5, y + 28.5)


def well_tied_through_poly(drawing: Drawing, x: float, y: float) -> Planted:
    """Fault: 20 squares of poly (8 ohm each) and 2 x 4 contacts (9 ohm each) to VDD."""
    well_on_strap(drawing, x, y, 20.0)
    return Planted(
        name="well tied through 20 squares of poly",
        rule="tie-resistance",
        x_um=x + 11.5,
        y_um=y + 18,
        measured=20 * 8.0 + 2 * 9.0 / 4,
    )


def well_tied_through_short_poly(drawing: Drawing, x: float, y: float) -> Planted:
    """Near-miss: 4 squares of poly and 2 x 4 contacts to VDD."""
    well_on_strap(drawing, x, y, 4.0)
    return Planted(
        name="well tied through 4 squares of poly",
        rule="tie-resistance",
        x_um=x + 11.5,
        y_um=y + 18,
        measured=4 * 8.0 + 2 * 9.0 / 4,
    )


def well_on_pad(drawing: Drawing, x: float, y: float) -> Planted:
    """Fault: a well, with p+ in it, whose tap is on a signal pad."""
    frame(drawing, x, y)
    drawing.ring("p", x + 16, y + 9, x + 36, y + 27)
    to_vss(drawing, y, x + 20, y + 9.5)
    drawing.rect("nwell", x + 20, y + 13, x + 32, y + 23)
    drawing.strap("p", x + 22, y + 16, x + 25, y + 20)
    drawing.strap("n", x + 28, y + 14, x + 31, y + 22)
    to_pad(drawing, x + 29.5, y + 18)
    return Planted(name="well tied to the pad BIAS", rule="tie-net", x_um=x + 29.5, y_um=y + 18)


def twice_tapped_well(drawing: Drawing, x: float, y: float, first: Tie, second: Tie) -> None:
    """A well with a tap at either end, each on its own rail."""
    tapped_well(drawing, x, y)
    drawing.strap("n", x + 40, y + 12, x + 41, y + 24)
    first(drawing, y, x + 11.5, y + 23)
    second(drawing, y, x + 40.5, y + 23)


def well_on_two_supplies(drawing: Drawing, x: float, y: float) -> Planted:
    """Fault: one tap of the well is on VDD, the other on VDDIO."""
    twice_tapped_well(drawing, x, y, to_vdd, to_vddio)
    return Planted(
        name="well tied to VDD and VDDIO",
        rule="tie-conflict",
        x_um=x + 11.5,
        y_um=y + 18,
        measured=2.0,
    )


def well_on_one_supply(drawing: Drawing, x: float, y: float) -> Planted:
    """Near-miss: both taps of the well are on VDDIO."""
    twice_tapped_well(drawing, x, y, to_vddio, to_vddio)
    return Planted(name="well tied to VDDIO twice", rule="tie-conflict", x_um=x + 11.5, y_um=y + 18)


def p_sources_in_well(
    drawing: Drawing, x: float, y: float, well: Tie, first: Tie, second: Tie
) -> None:
    """A tapped well with two p+ diffusions; all three may be on different supplies."""
    frame(drawing, x, y)
    drawing.rect("nwell", x + 10, y + 10, x + 36, y + 26)
    drawing.strap("n", x + 11, y + 12, x + 12, y + 24)
    drawing.strap("p", x + 18, y + 16, x + 22, y + 20)
    drawing.strap("p", x + 26, y + 16, x + 30, y + 20)
    well(drawing, y, x + 11.5, y + 23)
    first(drawing, y, x + 20, y + 18)
    second(drawing, y, x + 28, y + 18)


def p_above_its_well(drawing: Drawing, x: float, y: float) -> Planted:
    """Fault: p+ on VDDIO, up to 3.63 V, in a well on VDD, down to 1.62 V."""
    p_sources_in_well(drawing, x, y, to_vdd, to_vdd, to_vddio)
    return Planted(
        name="p+ on VDDIO in a well on VDD",
        rule="forward-bias",
        x_um=x + 28,
        y_um=y + 18,
        measured=3.63 - 1.62,
    )


def p_below_its_well(drawing: Drawing, x: float, y: float) -> Planted:
    """Near-miss: p+ on VDD, and p+ on VDDIO, in a well on VDDIO."""
    p_sources_in_well(drawing, x, y, to_vddio, to_vddio, to_vdd)
    return Planted(
        name="p+ on VDD in a well on VDDIO",
        rule="forward-bias",
        x_um=x + 28,
        y_um=y + 18,
        measured=1.98 - 2.97,
    )


def neighbours(drawing: Drawing, x: float, y: float, spacing: float) -> None:
    """A well on VDD and, `spacing` um to its right, a well on VDDIO."""
    frame(drawing, x, y)
    left, right = x + 25, x + 25 + spacing
    drawing.rect("nwell", left - 17, y + 8, left, y + 28)
    drawing.rect("nwell", right, y + 8, right + 17, y + 28)
    drawing.strap("n", left - 16, y + 10, left - 15, y + 26)
    drawing.strap("n", right + 15, y + 10, right + 16, y + 26)
    drawing.strap("p", left - 10, y + 16, left - 6, y + 20)
    drawing.strap("p", right + 6, y + 16, right + 10, y + 20)
    to_vdd(drawing, y, left - 15.5, y + 25)
    to_vddio(drawing, y, right + 15.5, y + 25)


def wells_too_near(drawing: Drawing, x: float, y: float) -> Planted:
    """Fault: wells on VDD and VDDIO are 2 um apart."""
    neighbours(drawing, x, y, 2.0)
    return Planted(
        name="wells on VDD and VDDIO 2 um apart",
        rule="well-spacing",
        x_um=x + 26,
        y_um=y + 18,
        measured=2.0,
    )


def wells_at_limit(drawing: Drawing, x: float, y: float) -> Planted:
    """Near-miss: wells on VDD and VDDIO are 3 um apart, as the rule asks."""
    neighbours(drawing, x, y, 3.0)
    return Planted(
        name="wells on VDD and VDDIO 3 um apart",
        rule="well-spacing",
        x_um=x + 26.5,
        y_um=y + 18,
        measured=3.0,
    )


def leaking_pwell(drawing: Drawing, x: float, y: float) -> Planted:
    """Fault: the n-well ring that would isolate a p-well is open for 1.2 um at its right."""
    frame(drawing, x, y)
    drawing.rect("deep_nwell", x + 3, y + 3, x + 49, y + 33)
    drawing.rect("nwell", x + 2.5, y + 2.5, x + 49.5, y + 6)
    drawing.rect("nwell", x + 2.5, y + 30, x + 49.5, y + 33.5)
    drawing.rect("nwell", x + 2.5, y + 6, x + 6, y + 30)
    drawing.rect("nwell", x + 46, y + 6, x + 49.5, y + 17.4)
    drawing.rect("nwell", x + 46, y + 18.6, x + 49.5, y + 30)
    drawing.strap("n", x + 3.5, y + 3.5, x + 48.5, y + 4.5)
    drawing.strap("n", x + 3.5, y + 31.5, x + 48.5, y + 32.5)
    drawing.strap("n", x + 3.5, y + 4.5, x + 4.5, y + 31.5)
    to_vdd(drawing, y, x + 40, y + 32)
    drawing.strap("p", x + 10, y + 10, x + 11, y + 26)
    to_vss(drawing, y, x + 10.5, y + 12)
    drawing.strap("n", x + 16, y + 16, x + 19, y + 20)
    return Planted(
        name="isolated p-well with an opening",
        rule="isolation-gap",
        x_um=x + 47.75,
        y_um=y + 18,
        measured=1.2,
    )


def net_with_two_names(drawing: Drawing, x: float, y: float) -> Planted:
    """Fault: one wire with two names."""
    drawing.rect("metal2", x + 10, y + 18, x + 40, y + 19)
    drawing.label("START", x + 12, y + 18.5)
    drawing.label("BEGIN", x + 38, y + 18.5)
    return Planted(
        name="wire named BEGIN and START",
        rule="net-names",
        x_um=x + 12,
        y_um=y + 18.5,
        measured=2.0,
    )


def name_on_two_nets(drawing: Drawing, x: float, y: float) -> Planted:
    """Fault: two wires of one name, which nothing joins."""
    drawing.rect("metal2", x + 10, y + 14, x + 40, y + 15)
    drawing.rect("metal2", x + 10, y + 22, x + 40, y + 23)
    drawing.label("SPARE", x + 25, y + 14.5)
    drawing.label("SPARE", x + 25, y + 22.5)
    return Planted(
        name="two wires named SPARE",
        rule="net-names",
        x_um=x + 25,
        y_um=y + 14.5,
        measured=2.0,
    )


def joined_name(drawing: Drawing, x: float, y: float) -> Planted:
    """Near-miss: one wire that bears its name twice."""
    drawing.rect("metal2", x + 10, y + 18, x + 40, y + 19)
    drawing.label("ONCE", x + 12, y + 18.5)
    drawing.label("ONCE", x + 38, y + 18.5)
    return Planted(name="one wire named ONCE twice", rule="net-names", x_um=x + 25, y_um=y + 18.5)
