"""The picture (``heatmap.svg``): one self-contained still image of the block and its risk.

From the bottom to the top: wells, diffusions, taps, the field of loop gain, the line around
everything that can latch, rings, findings, openings of rings, injectors, worst sites, pins.
Nothing in it depends on the network, a script or an installed font.
"""

from __future__ import annotations

import base64
import math
from xml.etree.ElementTree import Element, tostring

import numpy as np

from latchscan import __version__
from latchscan.caveats import SENTENCES
from latchscan.layout.model import Geometries
from latchscan.report.field_image import OPACITY, Field, can_latch_outline, paint, png
from latchscan.report.frame import Frame, fit, round_length, ticks
from latchscan.report.palette import (
    FAINT_INK,
    INK,
    N_FILL,
    P_FILL,
    PAPER,
    TAP_FILL,
    WELL_EDGE,
    WELL_FILL,
)
from latchscan.report.placing import Places
from latchscan.report.plain import plain_text
from latchscan.report.svg_injectors import add_injectors
from latchscan.report.svg_marks import add_findings, add_sites, site_boxes
from latchscan.report.svg_panel import WIDTH as PANEL_WIDTH
from latchscan.report.svg_panel import add_panel
from latchscan.report.svg_parts import add, add_text, add_title, number, shortened
from latchscan.report.svg_paths import nm_transform, nm_width, path_data
from latchscan.report.svg_pins import add_pins, place_pins
from latchscan.report.svg_rings import add_openings, add_rings, gap_boxes
from latchscan.scan import Scan

PAGE_WIDTH = 1240.0
SMALLEST_PAGE_HEIGHT = 877.0
"""With the width this makes A4 landscape."""
MAP_AREA = (70.0, 92.0, 850.0, 812.0)
"""Where the map may lie: x0, y0, x1, y1 on the page."""
_TICK_ROOM = 12.0
"""Least distance of two numbers along the left edge."""
_PANEL_LEFT = PAGE_WIDTH - PANEL_WIDTH - 24


def heatmap_svg(scan: Scan) -> bytes:
    """The whole picture as UTF-8 SVG."""
    frame = fit(scan.evidence.layout.regions.bbox_um, MAP_AREA)
    field = paint(scan.evidence, frame)
    root = Element("svg", {"xmlns": "http://www.w3.org/2000/svg", "version": "1.1"})
    page = add(root, "rect", x=0, y=0, width=PAGE_WIDTH, height=0, fill=PAPER)
    _add_heading(root, scan)
    _add_map(root, scan, frame, field)
    panel_end = add_panel(root, scan, frame, field, left=_PANEL_LEFT, top=MAP_AREA[1] + 8)
    map_end = frame.top + frame.height + 62
    height = number(max(SMALLEST_PAGE_HEIGHT, panel_end + 10, map_end))
    page.set("height", height)
    root.set("viewBox", f"0 0 {PAGE_WIDTH:g} {height}")
    root.set("font-family", "sans-serif")
    root.set("role", "img")
    add_title(root, f"Loop gain of {plain_text(scan.origin.top)}")
    for child in root:
        child.tail = "\n"
    body: bytes = tostring(root, "utf-8")
    return b'<?xml version="1.0" encoding="UTF-8"?>\n' + body + b"\n"


def _add_heading(root: Element, scan: Scan) -> None:
    """Block, technology, temperature, and the caution that every result carries."""
    origin = scan.origin
    heading = add(root, "g", id="heading")
    title = f"Latch-up loop gain of {plain_text(origin.top)}"
    add_text(heading, 24, 36, shortened(title, PAGE_WIDTH - 60, 22), size=22, font_weight="bold")
    facts = (
        f"{plain_text(origin.layout_name, 60)}  ·  technology"
        f" {plain_text(origin.technology_name, 40)}  ·  {origin.temperature_c:g} °C  ·  latchscan"
        f" {__version__}"
    )
    add_text(heading, 24, 56, facts, size=13)
    add_text(heading, 24, 75, SENTENCES["estimate"] + ".", size=12, font_style="italic")


def _add_map(root: Element, scan: Scan, frame: Frame, field: Field) -> None:
    """The map with its axes, from the quiet drawing up to the findings."""
    clip = add(add(root, "defs"), "clipPath", id="map-frame")
    edge = {"x": frame.left, "y": frame.top, "width": frame.width, "height": frame.height}
    add(clip, "rect", **edge)
    _add_axes(root, frame)
    inside = add(root, "g", id="map", clip_path="url(#map-frame)")
    _add_shapes(inside, scan, frame)
    _add_field(inside, frame, field)
    add_rings(inside, scan.evidence, frame)
    add(root, "rect", **edge, fill="none", stroke=FAINT_INK, stroke_width=0.8)
    _add_scale_bar(root, frame)
    area = (frame.left, frame.top, frame.left + frame.width, frame.top + frame.height)
    places = Places(
        area=(area[0] - 8, area[1] - 8, area[2] + 8, area[3] + 8),
        # no number may hide the mark of a site or of a ring's opening
        taken=site_boxes(scan.evidence, frame) + gap_boxes(scan.evidence, frame),
    )
    pins = place_pins(scan.evidence, frame, places)
    add_findings(root, scan.findings, frame, places)
    add_openings(root, scan.evidence, frame)
    add_injectors(root, scan.evidence, frame, places)
    add_sites(root, scan.evidence, frame, places)
    add_pins(root, scan.evidence, frame, pins)


def _add_shapes(parent: Element, scan: Scan, frame: Frame) -> None:
    """Wells, diffusions and taps, one path each, in nm from the lower left corner."""
    group = add(parent, "g", id="shapes", transform=nm_transform(frame), fill_rule="evenodd")
    shapes = scan.evidence.layout.regions.shapes
    taps: Geometries = np.concatenate((shapes["well_tap"], shapes["substrate_tap"]))
    for name, columns, fill, edge in (
        ("nwell", shapes["nwell"], WELL_FILL, WELL_EDGE),
        ("p-diffusion", shapes["p_diffusion_in_nwell"], P_FILL, ""),
        ("n-diffusion", shapes["n_diffusion_outside_nwell"], N_FILL, ""),
        ("taps", taps, TAP_FILL, ""),
    ):
        path = add(group, "path", id=name, d=path_data(columns, frame), fill=fill)
        if edge:
            path.set("stroke", edge)
            path.set("stroke-width", nm_width(frame, 0.5))


def _add_field(parent: Element, frame: Frame, field: Field) -> None:
    """The field as an image, and the line around every place that can latch."""
    rows, columns = field.band.shape
    pixel = field.pixel_um * frame.scale
    bottom = frame.top + frame.height
    add(
        parent,
        "image",
        id="field",
        x=frame.left,
        y=bottom - rows * pixel,
        width=columns * pixel,
        height=rows * pixel,
        preserveAspectRatio="none",
        opacity=OPACITY,
        style="image-rendering:pixelated",
        href="data:image/png;base64," + base64.b64encode(png(field)).decode("ascii"),
    )
    outline = "".join(
        f"M{number(frame.left + x0 * pixel)} {number(bottom - y0 * pixel)}"
        f"L{number(frame.left + x1 * pixel)} {number(bottom - y1 * pixel)}"
        for x0, y0, x1, y1 in can_latch_outline(field)
    )
    add(parent, "path", id="can-latch", d=outline, fill="none", stroke=INK, stroke_width=1.1,
        stroke_linecap="square")  # fmt: skip


def _add_axes(root: Element, frame: Frame) -> None:
    """Ticks and numbers in um along the lower and the left edge."""
    group = add(root, "g", id="axes", fill=FAINT_INK, stroke="none")
    x0, y0, x1, y1 = frame.box_um
    bottom = frame.top + frame.height
    for value in ticks(x0, x1, max(2, int(frame.width / 90))):
        x = frame.x(value)
        add(group, "path", d=f"M{number(x)} {number(bottom)}v5", stroke=FAINT_INK)
        add_text(group, x, bottom + 17, f"{value:g}", fill=FAINT_INK, text_anchor="middle")
    last = math.inf
    for value in ticks(y0, y1, max(2, int(frame.height / 90))):
        y = frame.y(value)
        if last - y < _TICK_ROOM:
            continue
        last = y
        add(group, "path", d=f"M{number(frame.left)} {number(y)}h-5", stroke=FAINT_INK)
        add_text(group, frame.left - 8, y + 4, f"{value:g}", fill=FAINT_INK, text_anchor="end")
    add_text(group, frame.left, bottom + 34, "x and y in um", fill=FAINT_INK)


def _add_scale_bar(root: Element, frame: Frame) -> None:
    """A bar of round length under the map's right end."""
    group = add(root, "g", id="scale-bar")
    length_um = round_length((frame.box_um[2] - frame.box_um[0]) / 4)
    right, y = frame.left + frame.width, frame.top + frame.height + 30
    left = right - length_um * frame.scale
    add(group, "path", stroke=INK, stroke_width=2, fill="none",
        d=f"M{number(left)} {number(y - 4)}v8M{number(left)} {number(y)}"
          f"H{number(right)}M{number(right)} {number(y - 4)}v8")  # fmt: skip
    add_text(group, left - 6, y + 4, f"{length_um:g} um", text_anchor="end")
