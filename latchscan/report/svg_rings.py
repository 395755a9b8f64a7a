"""Rings on the map: closed ones in a solid, open ones in a dashed line, openings crossed out."""

from __future__ import annotations

import math
from xml.etree.ElementTree import Element

import numpy as np
import shapely

from latchscan.layout.connections import RING_KINDS, Rings
from latchscan.layout.model import Box, Geometries, Ints
from latchscan.report.frame import Frame
from latchscan.report.palette import PAPER, RING_INK
from latchscan.report.plain import measure, plain_text
from latchscan.report.relations import gap_middles, ring_gaps, ring_members
from latchscan.report.svg_parts import add, add_title, number
from latchscan.report.svg_paths import nm_transform, nm_width, path_data
from latchscan.rules.model import Evidence

LARGEST_RING_COUNT = 120
LARGEST_GAP_COUNT = 12
"""Openings of one ring that are marked, widest first."""
GAP_RADIUS = 4.5
OPEN_DASH = (5.0, 3.0)
_GROWTH = 1.0
"""How far the outline stands off the strips [page units]: even the thinnest shows two edges."""
_SIMPLER = 0.2
"""How far an outline may stray from the shape [page units]."""
_TOLD_GAPS = 4


def marked_rings(rings: Rings) -> Ints:
    """Rows of the rings that are drawn: all, or open and unsuited ones before others."""
    bad = ~rings.closed | (rings.net_suits == 0)
    order = np.concatenate((np.flatnonzero(bad), np.flatnonzero(~bad)))
    return np.sort(order[:LARGEST_RING_COUNT])


def add_rings(parent: Element, evidence: Evidence, frame: Frame) -> None:
    """Draw the rings with their openings and tooltips."""
    rings = evidence.connections.rings
    group = add(parent, "g", id="rings")
    for ring in marked_rings(rings).tolist():
        closed = bool(rings.closed[ring])
        member = add(group, "g", class_=f"ring {'closed' if closed else 'open'}")
        member.set("id", str(rings.ids[ring]))
        add_title(member, ring_summary(evidence, ring))
        shape = outlined(rings.polygons[ring : ring + 1], frame)
        edge = {"d": path_data(shape, frame), "transform": nm_transform(frame)}
        add(member, "path", **edge, fill="none", stroke=PAPER, stroke_width=nm_width(frame, 2.6))
        line = add(
            member,
            "path",
            **edge,
            class_="strips",
            fill=RING_INK,
            fill_opacity=0.16,
            fill_rule="evenodd",
            stroke=RING_INK,
            stroke_width=nm_width(frame, 1.1),
        )
        if not closed:
            dash = " ".join(nm_width(frame, length) for length in OPEN_DASH)
            line.set("stroke-dasharray", dash)


def outlined(shapes: Geometries, frame: Frame) -> Geometries:
    """Shapes as they are outlined: grown by a page unit and no finer than can be seen."""
    grown = shapely.buffer(shapes, _GROWTH / frame.scale, join_style="mitre")
    return np.asarray(shapely.simplify(grown, _SIMPLER / frame.scale), dtype=np.object_)


def add_openings(parent: Element, evidence: Evidence, frame: Frame) -> None:
    """Mark the openings of the rings; above the outlines of findings, which lie around them."""
    rings = evidence.connections.rings
    group = add(parent, "g", id="openings", clip_path="url(#map-frame)")
    for ring in marked_rings(rings).tolist():
        if not rings.closed[ring]:
            _add_gaps(group, evidence, ring, frame)


def _add_gaps(parent: Element, evidence: Evidence, ring: int, frame: Frame) -> None:
    """A line across every opening and a crossed circle in its middle."""
    rings = evidence.connections.rings
    run = ring_gaps(rings, ring)
    ends = np.hstack((rings.gap_from_um[run], rings.gap_to_um[run]))[:LARGEST_GAP_COUNT]
    if len(ends) == 0:
        return
    lines = "".join(
        f"M{number(frame.x(x0))} {number(frame.y(y0))}L{number(frame.x(x1))} {number(frame.y(y1))}"
        for x0, y0, x1, y1 in ends.tolist()
    )
    marks = "".join(
        gap_mark(frame.x(x), frame.y(y))
        for x, y in gap_middles(rings, ring)[:LARGEST_GAP_COUNT].tolist()
    )
    member = add(parent, "g", class_="openings")
    member.set("id", f"{rings.ids[ring]}-openings")
    add_title(member, ring_summary(evidence, ring))
    add(member, "path", d=lines, class_="opening", stroke=RING_INK, stroke_width=2, fill="none")
    add(member, "path", d=marks, class_="gap", stroke=RING_INK, stroke_width=1.3, fill=PAPER)


def gap_mark(x: float, y: float) -> str:
    """Path of an opening's mark: a circle with a cross in it."""
    radius, reach = number(GAP_RADIUS), number(GAP_RADIUS * 0.7)
    across = number(GAP_RADIUS * 1.4)
    return (
        f"M{number(x - GAP_RADIUS)} {number(y)}"
        f"a{radius} {radius} 0 1 0 {number(2 * GAP_RADIUS)} 0"
        f"a{radius} {radius} 0 1 0 {number(-2 * GAP_RADIUS)} 0z"
        f"m{number(GAP_RADIUS * 0.3)} -{reach}l{across} {across}m-{across} 0l{across} -{across}"
    )


def gap_boxes(evidence: Evidence, frame: Frame) -> list[Box]:
    """Page boxes of the marks of all openings that are drawn."""
    rings = evidence.connections.rings
    middles = [
        (frame.x(x), frame.y(y))
        for ring in marked_rings(rings).tolist()
        if not rings.closed[ring]
        for x, y in gap_middles(rings, ring)[:LARGEST_GAP_COUNT].tolist()
    ]
    return [(x - GAP_RADIUS, y - GAP_RADIUS, x + GAP_RADIUS, y + GAP_RADIUS) for x, y in middles]


def ring_summary(evidence: Evidence, ring: int) -> str:
    """What is known of one ring, a line each."""
    rings = evidence.connections.rings
    members = ring_members(rings, ring)
    distances = rings.member_distance_um[members]
    nearest = float(np.min(distances)) if len(distances) else np.nan
    noun = "injector" if len(distances) == 1 else "injectors"
    share = float(rings.contacted_share[ring])
    contacts = f"{100 * share:.0f} % of its area near a contact" if math.isfinite(share) else ""
    return "\n".join(
        (
            f"{rings.ids[ring]}: {RING_KINDS[rings.kind[ring]]} ring of"
            f" {str(rings.material[ring]).replace('_', ' ')},"
            f" {'closed' if rings.closed[ring] else 'open'}",
            *_gap_lines(rings, ring),
            f"least width {measure(float(rings.width_um[ring]), 'um')}"
            + (f", {contacts}" if contacts else ""),
            _net_words(evidence, ring),
            f"{len(distances)} {noun} inside, the nearest {measure(nearest, 'um')} away",
            f"between them {int(rings.between_emitters[ring])} emitters of other nets and"
            f" {int(rings.between_wells[ring])} foreign wells",
        )
    )


def _gap_lines(rings: Rings, ring: int) -> list[str]:
    """The widest openings with their places; no line where there is none."""
    widths = rings.gap_um[ring_gaps(rings, ring)].tolist()
    if not widths:
        return []
    places = gap_middles(rings, ring).tolist()
    told = [
        f"{measure(width, 'um')} at ({x:.3f}, {y:.3f}) um"
        for width, (x, y) in zip(widths, places, strict=True)
    ]
    more = f" and {len(told) - _TOLD_GAPS} more" if len(told) > _TOLD_GAPS else ""
    return [f"openings: {'; '.join(told[:_TOLD_GAPS])}{more}"]


def _net_words(evidence: Evidence, ring: int) -> str:
    """The net of a ring and whether it suits the ring."""
    nets, pins = evidence.connections.nets, evidence.connections.pins
    net = int(evidence.connections.rings.net[ring])
    if net < 0:
        return "its net is not known"
    pin = int(pins.net_pin[net])
    name = plain_text(str(pins.names[pin]), 60) if pin >= 0 else "without a name"
    suits = {
        1: ", which suits it",
        0: ", which does not suit it",
    }.get(int(evidence.connections.rings.net_suits[ring]), "")
    return f"on {nets.ids[net]} ({name}){suits}"
