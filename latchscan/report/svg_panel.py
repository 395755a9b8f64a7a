"""The column beside the map: legend, key, worst sites and findings in words and numbers."""

from __future__ import annotations

import math
from xml.etree.ElementTree import Element

import numpy as np

from latchscan.layout.connections import NET_KINDS
from latchscan.report.field_image import OPACITY, Field
from latchscan.report.frame import Frame
from latchscan.report.palette import (
    BANDS,
    FAINT_INK,
    INJECTOR_INK,
    INK,
    N_FILL,
    P_FILL,
    PAPER,
    PIN_INK,
    RING_INK,
    TAP_FILL,
    WATCH_INK,
    WELL_EDGE,
    WELL_FILL,
    band_colours,
    to_hex,
)
from latchscan.report.plain import current, measure
from latchscan.report.svg_injectors import THROUGH_DASH
from latchscan.report.svg_marks import (
    SITE_LETTERS,
    add_badge,
    badge_width,
    chosen_findings,
    diamond,
    marked_sites,
)
from latchscan.report.svg_parts import add, add_text, number, shortened
from latchscan.report.svg_pins import marked_pins, pin_mark
from latchscan.report.svg_rings import OPEN_DASH, gap_mark, marked_rings
from latchscan.rules.model import Evidence, Finding
from latchscan.scan import Scan

WIDTH = 330.0
_LINE = 16.0
LISTED_FINDINGS = 22


def add_panel(
    parent: Element, scan: Scan, frame: Frame, field: Field, *, left: float, top: float
) -> float:
    """Draw the column and return the page y of its lower end."""
    group = add(parent, "g", id="panel")
    y = _add_legend(group, field, scan.origin.probe_current_a, left, top)
    y = _add_key(group, left, y + 14)
    y = _add_connections(group, scan.evidence, left, y)
    y = _add_site_list(group, scan.evidence, frame, left, y + 14)
    return _add_finding_list(group, scan.findings, left, y + 14)


def _heading(parent: Element, x: float, y: float, words: str) -> float:
    """A heading with a rule under it; returns the baseline of the first line below."""
    add_text(parent, x, y, words, size=13, font_weight="bold")
    add(parent, "path", d=f"M{x} {y + 5:g}h{WIDTH}", stroke=WELL_EDGE, stroke_width=0.8)
    return y + 5 + _LINE


def _add_legend(parent: Element, field: Field, probe_a: float, x: float, top: float) -> float:
    """The bands of loop gain, strongest first."""
    group = add(parent, "g", id="legend")
    y = _heading(group, x, top, f"Loop gain at {current(probe_a)} in each transistor")
    for band, colour in reversed(list(zip(BANDS, band_colours(), strict=True))):
        add(group, "rect", x=x, y=y - 11, width=26, height=14, fill=to_hex(colour),
            stroke=INK, stroke_width=0.5, fill_opacity=OPACITY)  # fmt: skip
        add_text(group, x + 36, y, band.label)
        add_text(group, x + 122, y, band.words)
        y += _LINE
    notes = (
        "At 1 and above (inside the dark line) a current in the loop",
        "sustains itself. Each point shows the largest loop gain within",
        f"{field.radius_um:g} um; no colour: no thyristor there.",
    )
    for note in notes:
        add_text(group, x, y, note, fill=FAINT_INK)
        y += 14
    return y


def _add_key(parent: Element, x: float, top: float) -> float:
    """What the quiet shapes and the marks are."""
    group = add(parent, "g", id="key")
    y = _heading(group, x, top, "Drawing")
    fills = (
        ("n-well", WELL_FILL, WELL_EDGE),
        ("tap with or without contact", TAP_FILL, TAP_FILL),
        ("p+ diffusion in an n-well", P_FILL, FAINT_INK),
        ("n+ diffusion outside n-wells", N_FILL, FAINT_INK),
    )
    for row, (words, fill, edge) in enumerate(fills):
        at = y + row * _LINE
        add(group, "rect", x=x, y=at - 9, width=14, height=10, fill=fill, stroke=edge,
            stroke_width=0.8)  # fmt: skip
        add_text(group, x + 20, at, words)
    right = x + 192
    add_badge(group, right + 7, y - 4, "1", "fail")
    add_text(group, right + 22, y, "finding that fails")
    add_badge(group, right + 7, y - 4 + _LINE, "2", "watch")
    add_text(group, right + 22, y + _LINE, "finding to watch")
    at = y + 2 * _LINE
    add(group, "path", d=diamond(right + 7, at - 4), fill=PAPER, stroke=INK,
        stroke_width=1.2)  # fmt: skip
    add_text(group, right + 22, at, "worst sites, lettered")
    at += _LINE
    add(group, "rect", x=right, y=at - 9, width=14, height=10, fill="none", stroke=INJECTOR_INK,
        stroke_width=1.2)  # fmt: skip
    add_text(group, right + 22, at, "▲ injector and pin")
    return y + 4 * _LINE


def _add_connections(parent: Element, evidence: Evidence, x: float, top: float) -> float:
    """Key of pins and rings, how many there are, and how to see a net; nothing without any."""
    pins, rings = evidence.connections.pins, evidence.connections.rings
    if len(pins.names) == 0 and len(rings.ids) == 0:
        return top
    group = add(parent, "g", id="connection-key")
    right, below = x + 192, top + _LINE
    _add_ring_key(group, x, top, open_=False)
    add_text(group, x + 20, top, "ring, closed")
    _add_ring_key(group, x, below, open_=True)
    add_text(group, x + 20, below, "ring, open; its opening")
    add(group, "rect", x=right, y=top - 9, width=14, height=10, fill="none", stroke=INJECTOR_INK,
        stroke_width=1.2, stroke_dasharray=THROUGH_DASH)  # fmt: skip
    add_text(group, right + 22, top, "through a resistor")
    add(group, "path", d=pin_mark(((right + 2, below - 9, right + 12, below + 1),)), fill=PAPER,
        stroke=PIN_INK, stroke_width=1.5)  # fmt: skip
    add_text(group, right + 22, below, "pin or bond pad")
    y = below + _LINE + 4
    for words in _connection_words(evidence):
        add_text(group, x, y, shortened(words, WIDTH, 11), fill=FAINT_INK)
        y += 14
    return y


def _add_ring_key(parent: Element, x: float, y: float, *, open_: bool) -> None:
    """A short piece of a ring's line, with an opening in it where it is open."""
    line = add(parent, "path", d=f"M{number(x)} {number(y - 4)}h14", stroke=RING_INK,
               stroke_width=1.6)  # fmt: skip
    if open_:
        line.set("stroke-dasharray", " ".join(number(length) for length in OPEN_DASH))
        add(parent, "path", d=gap_mark(x + 7, y - 4), stroke=RING_INK, stroke_width=1.2,
            fill=PAPER)  # fmt: skip


def _connection_words(evidence: Evidence) -> list[str]:
    """How many pins and rings there are, and what of them is not marked."""
    pins, rings = evidence.connections.pins, evidence.connections.rings
    counts = [(int(np.sum(pins.kind == kind)), kind.replace("_", " ")) for kind in NET_KINDS]
    told = ", ".join(f"{count} {kind}" for count, kind in counts if count)
    closed = int(np.sum(rings.closed))
    lines = [f"Pins: {told or 'none'}", f"Rings: {closed} closed, {len(rings.ids) - closed} open"]
    pins_left = len(pins.names) - len(marked_pins(evidence))
    rings_left = len(rings.ids) - len(marked_rings(rings))
    if pins_left or rings_left:
        lines.append(f"Not marked: {pins_left} pins, {rings_left} rings (see scan.json)")
    if pins_left < len(pins.names):
        lines += [
            "Point at a pin to see its nets: wiring pale,",
            "diffusions strong; click it to keep them in sight.",
        ]
    return lines


def _add_site_list(
    parent: Element, evidence: Evidence, frame: Frame, x: float, top: float
) -> float:
    """The lettered sites, one line each."""
    group = add(parent, "g", id="site-list")
    y = _heading(group, x, top, "Worst sites, one a place")
    sites = evidence.sites
    if len(sites.ids) == 0:
        add_text(group, x, y, "No anode and cathode come near enough to form one.")
        return y + _LINE
    for letter, row in zip(SITE_LETTERS, marked_sites(evidence, frame), strict=False):
        add_text(group, x, y, letter, font_weight="bold")
        add_text(group, x + 18, y, f"gain {measure(float(sites.loop_gain[row]), '1')}")
        add_text(group, x + 106, y, _fired(float(sites.trigger_current_a[row])))
        add_text(
            group, x + WIDTH, y, f"at {sites.x_um[row]:.2f}, {sites.y_um[row]:.2f} um",
            text_anchor="end", fill=FAINT_INK,
        )  # fmt: skip
        y += 15
    return y


def _add_finding_list(
    parent: Element, findings: tuple[Finding, ...], x: float, top: float
) -> float:
    """The numbered findings, one line each, as many as fit the page."""
    group = add(parent, "g", id="finding-list")
    failing = sum(finding.severity == "fail" for finding in findings)
    y = _heading(group, x, top, f"Findings: {failing} fail, {len(findings) - failing} to watch")
    if not findings:
        add_text(group, x, y, "No limit of the technology file is broken.")
        return y + _LINE
    for index in chosen_findings(findings, LISTED_FINDINGS):
        finding = findings[index]
        words = str(index + 1)
        add_badge(group, x + badge_width(words) / 2, y - 4, words, finding.severity)
        members = "" if finding.count == 1 else f" ×{finding.count}"
        words = f"{finding.id}: {_measured(finding)}{members}"
        add_text(group, x + 34, y, shortened(words, 200, 11))
        add_text(
            group, x + WIDTH, y, f"at {finding.x_um:.2f}, {finding.y_um:.2f} um",
            text_anchor="end", fill=FAINT_INK,
        )  # fmt: skip
        y += 17
    if len(findings) > LISTED_FINDINGS:
        more = f"and {len(findings) - LISTED_FINDINGS} more in scan.json"
        add_text(group, x + 34, y, more, fill=WATCH_INK)
        y += 17
    return y


def _measured(finding: Finding) -> str:
    """The measure of a finding; a count of nothing shows what was needed."""
    words = measure(finding.measured, finding.unit)
    return words if finding.measured else f"{words} of {finding.limit:g}"


def _fired(trigger_current_a: float) -> str:
    """What it takes to fire a site."""
    if not math.isfinite(trigger_current_a):
        return "nothing fires it"
    return f"fired by {current(trigger_current_a)}"
