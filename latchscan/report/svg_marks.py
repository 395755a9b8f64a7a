"""What is pointed out on the map: the worst sites, the numbered findings."""

from __future__ import annotations

from xml.etree.ElementTree import Element

import numpy as np

from latchscan.layout.model import Box
from latchscan.report.frame import Frame, page_box
from latchscan.report.palette import FAIL_INK, INK, PAPER, WATCH_INK
from latchscan.report.placing import Places
from latchscan.report.plain import current, measure
from latchscan.report.svg_parts import (
    add,
    add_haloed,
    add_text,
    add_title,
    number,
    text_width,
)
from latchscan.rules.model import Evidence, Finding

LARGEST_FINDING_COUNT = 200
MARKED_SITE_COUNT = 10
SITE_LETTERS = "ABCDEFGHIJ"
_BADGE = 15.0
_SMALLEST_OUTLINE = 9.0
_DIAMOND = 5.0
_SITE_GAP = 16.0


def site_summary(evidence: Evidence, row: int) -> str:
    """Every number of one site with its unit, a line each."""
    sites, pairs, emitters = evidence.sites, evidence.pairs, evidence.layout.emitters
    pair = int(sites.pair[row])
    bodies = evidence.layout.bodies
    sources = [*emitters.ids.tolist(), *(body.id for body in bodies)]
    driven = "neighbouring emitters together" if sites.patch[row] else "this emitter alone"
    return "\n".join(
        (
            f"{sites.ids[row]} at ({sites.x_um[row]:.3f}, {sites.y_um[row]:.3f}) um",
            f"anode {sources[pairs.anode[pair]]} in {bodies[pairs.well[pair]].id},"
            f" cathode {sources[pairs.cathode[pair]]} in {bodies[pairs.base[pair]].id}",
            f"loop gain {measure(sites.loop_gain[row], '1')},"
            f" ceiling {measure(sites.loop_gain_ceiling[row], '1')}, {driven}",
            f"trigger current {current(sites.trigger_current_a[row])}"
            f" (well side {current(sites.trigger_well_a[row])},"
            f" substrate side {current(sites.trigger_substrate_a[row])})",
            f"well resistance {measure(sites.well_resistance_ohm[row], 'ohm')},"
            f" substrate resistance {measure(sites.substrate_resistance_ohm[row], 'ohm')}",
            f"gain of the PNP {measure(sites.beta_pnp[row], '1')},"
            f" of the NPN {measure(sites.beta_npn[row], '1')}",
            f"anode to cathode {measure(pairs.spacing_um[pair], 'um')},"
            f" base width {measure(pairs.base_width_um[pair], 'um')}",
        )
    )


def marked_sites(evidence: Evidence, frame: Frame) -> list[int]:
    """Rows of the worst sites that can be told apart on the page, worst first."""
    sites = evidence.sites
    x, y = sites.x_um * frame.scale, sites.y_um * frame.scale
    left = np.isfinite(sites.loop_gain)
    rows: list[int] = []
    while len(rows) < MARKED_SITE_COUNT and left.any():
        row = int(np.argmax(left))
        rows.append(row)
        left &= np.hypot(x - x[row], y - y[row]) > _SITE_GAP
    return rows


def add_sites(parent: Element, evidence: Evidence, frame: Frame, places: Places) -> None:
    """Mark the worst sites with lettered diamonds."""
    group = add(parent, "g", id="sites")
    for letter, row in zip(SITE_LETTERS, marked_sites(evidence, frame), strict=False):
        x = frame.x(float(evidence.sites.x_um[row]))
        y = frame.y(float(evidence.sites.y_um[row]))
        member = add(group, "g", class_="site", id=str(evidence.sites.ids[row]))
        add_title(member, site_summary(evidence, row))
        label = places.take((x - _DIAMOND, y - _DIAMOND, x + _DIAMOND, y + _DIAMOND), 11, 13)
        if label is not None:
            line = f"M{number(x)} {number(y)}L{number(label[0])} {number(label[1])}"
            add(member, "path", d=line, stroke=INK, stroke_width=0.7)
            add_haloed(member, label, letter, INK)
        add(member, "path", d=diamond(x, y), fill=PAPER, stroke=INK, stroke_width=1.2)


def site_boxes(evidence: Evidence, frame: Frame) -> list[Box]:
    """Page boxes of the marks of the worst sites."""
    sites = evidence.sites
    middles = (
        (frame.x(float(sites.x_um[row])), frame.y(float(sites.y_um[row])))
        for row in marked_sites(evidence, frame)
    )
    return [(x - _DIAMOND, y - _DIAMOND, x + _DIAMOND, y + _DIAMOND) for x, y in middles]


def diamond(x: float, y: float) -> str:
    """Path of a site's mark with its middle at (x, y)."""
    reach = number(_DIAMOND)
    return (
        f"M{number(x)} {number(y - _DIAMOND)}l{reach} {reach}l-{reach} {reach}l-{reach} -{reach}z"
    )


def finding_summary(finding: Finding) -> str:
    """Measures of one finding with units, a line each."""
    x0, y0, x1, y1 = finding.box_um
    return "\n".join(
        (
            f"{finding.id} ({finding.severity})",
            f"measured {measure(finding.measured, finding.unit)},"
            f" limit {measure(finding.limit, finding.unit)}",
            f"worst {finding.subject} in {finding.body}"
            f" at ({finding.x_um:.3f}, {finding.y_um:.3f}) um, members {finding.count}",
            f"region ({x0:.3f}, {y0:.3f}) to ({x1:.3f}, {y1:.3f}) um",
            finding.message,
        )
    )


def chosen_findings(findings: tuple[Finding, ...], count: int) -> list[int]:
    """Indices of at most `count` findings, the worst of every rule before second worsts."""
    seen: dict[str, int] = {}
    ranks = []
    for finding in findings:
        seen[finding.rule] = seen.get(finding.rule, 0) + 1
        ranks.append(seen[finding.rule])
    order = sorted(range(len(findings)), key=lambda index: (ranks[index], index))
    return sorted(order[:count])


def add_findings(
    parent: Element, findings: tuple[Finding, ...], frame: Frame, places: Places
) -> None:
    """Outline the findings and number as many as have room, numbers above all outlines."""
    outlines = add(parent, "g", id="findings")
    numbers = add(parent, "g", id="finding-numbers")
    for index in chosen_findings(findings, LARGEST_FINDING_COUNT):
        finding = findings[index]
        box = page_box(frame, finding.box_um, _SMALLEST_OUTLINE)
        _add_outline(outlines, finding, box)
        words = str(index + 1)
        label = places.take(box, badge_width(words), _BADGE)
        if label is not None:
            member = add(numbers, "g", class_="finding-number")
            add_title(member, finding_summary(finding))
            near_x = min(max(label[0], box[0]), box[2])
            near_y = min(max(label[1], box[1]), box[3])
            line = f"M{number(near_x)} {number(near_y)}L{number(label[0])} {number(label[1])}"
            add(member, "path", d=line, stroke=_ink(finding.severity), stroke_width=1)
            add_badge(member, label[0], label[1], words, finding.severity)


def _ink(severity: str) -> str:
    return FAIL_INK if severity == "fail" else WATCH_INK


def _add_outline(parent: Element, finding: Finding, box: Box) -> None:
    """One outline with its tooltip; solid lines fail, dashed lines are to be watched."""
    member = add(parent, "g", class_=f"finding {finding.severity}", id=finding.id)
    add_title(member, finding_summary(finding))
    x0, y0, x1, y1 = box
    edge = {"x": x0, "y": y0, "width": x1 - x0, "height": y1 - y0, "rx": 1.5}
    # a white line under the dark one keeps it visible on the darkest bands
    add(member, "rect", **edge, fill="none", stroke=PAPER, stroke_width=3.2)
    outline = add(
        member,
        "rect",
        **edge,
        fill="none",
        stroke=_ink(finding.severity),
        stroke_width=1.5,
        pointer_events="stroke",
    )
    if finding.severity == "watch":
        outline.set("stroke-dasharray", "4 2.5")


def badge_width(words: str) -> float:
    """Width of the badge that holds `words`."""
    return max(_BADGE, text_width(words, 10) + 5)


def add_badge(parent: Element, x: float, y: float, words: str, severity: str) -> None:
    """A finding's number: white on dark where it fails, dark on white where it is watched."""
    fails = severity == "fail"
    width = badge_width(words)
    add(
        parent,
        "rect",
        x=x - width / 2,
        y=y - _BADGE / 2,
        width=width,
        height=_BADGE,
        rx=_BADGE / 2,
        fill=FAIL_INK if fails else PAPER,
        stroke=PAPER if fails else WATCH_INK,
        stroke_width=1,
    )
    ink = PAPER if fails else WATCH_INK
    add_text(parent, x, y + 3.6, words, size=10, fill=ink, text_anchor="middle", font_weight="bold")
