"""The text summary for a terminal: worst sites, findings by rule, files, caution; 80 columns."""

from __future__ import annotations

import textwrap
from collections.abc import Callable, Iterator
from pathlib import Path

import numpy as np

from latchscan.caveats import SENTENCES, Caveat
from latchscan.report.plain import current, measure, plain_text
from latchscan.report.summary_connections import connection_lines
from latchscan.rules.model import Evidence, Finding
from latchscan.scan import Scan

COLUMNS = 80
WORST_COUNT = 5
TOLD_ONE_BY_ONE = {"label-on-nothing", "pad-on-nothing", "unnamed-pad", "left-out"}
"""Cautions whose every place is told: each asks for a look at the layout or the block file."""
TOLD_COUNT = 9
"""Places told; eight and one line for all others."""
Paint = Callable[[str, str], str]
"""Gives a text the look of a severity (``fail``, ``watch``, ``good``); may leave it as it is."""


def unpainted(text: str, _severity: str) -> str:
    """Leave the text as it is."""
    return text


def summary(scan: Scan, files: tuple[Path, ...], paint: Paint = unpainted) -> str:
    """The whole summary, ending with a line end."""
    return "\n".join(_lines(scan, files, paint)) + "\n"


def _lines(scan: Scan, files: tuple[Path, ...], paint: Paint) -> Iterator[str]:
    origin, layout = scan.origin, scan.evidence.layout
    yield from _wrapped(
        f"{plain_text(origin.top, 60)} in {plain_text(origin.technology_name, 40)}"
        f" at {origin.temperature_c:g} C"
    )
    wells = sum(body.kind == "nwell" for body in layout.bodies)
    yield (
        f"{len(layout.emitters.ids)} emitters, {wells} n-wells,"
        f" {int(np.sum(layout.taps.contact_count > 0))} contacted taps,"
        f" {len(scan.evidence.sites.ids)} sites"
    )
    known = list(connection_lines(scan.evidence))
    if known:
        yield ""
        yield "Connections"
        for heading, words in known:
            yield from textwrap.wrap(f"  {heading:<11}{words}", COLUMNS, subsequent_indent=" " * 13)
    yield ""
    yield from _site_lines(scan.evidence)
    yield ""
    yield from _finding_lines(scan.findings, paint)
    yield ""
    yield "Files written"
    yield from (f"  {plain_text(str(path), 1000)}" for path in files)
    yield ""
    yield from _note_lines(scan.caveats)
    yield from _wrapped(SENTENCES["estimate"] + ".")


def _note_lines(caveats: tuple[Caveat, ...]) -> Iterator[str]:
    """The cautions of this scan, each kind once."""
    kinds: dict[str, list[Caveat]] = {}
    for caveat in caveats:
        kinds.setdefault(caveat.code, []).append(caveat)
    kinds.pop("estimate", None)
    for code, members in kinds.items():
        if code in TOLD_ONE_BY_ONE and members[0].detail:
            yield from _told_lines(code, [member.detail for member in members])
            continue
        many = f"{SENTENCES[code]} ({len(members)} times; scan.json lists them)"
        sentence = members[0].sentence if len(members) == 1 else many
        yield from _wrapped(f"Note: {plain_text(sentence, 400)}.", "  ")


def _told_lines(code: str, details: list[str]) -> Iterator[str]:
    """A caution with a line for each place it concerns, as many as a screen bears."""
    yield from _wrapped(f"Note: {SENTENCES[code]}:", "  ")
    for detail in details[:TOLD_COUNT]:
        yield from textwrap.wrap(
            plain_text(detail, 300), COLUMNS, initial_indent="  - ", subsequent_indent="    "
        )
    if len(details) > TOLD_COUNT:
        yield f"    and {len(details) - TOLD_COUNT} more in scan.json"


def _wrapped(text: str, indent: str = "") -> list[str]:
    return textwrap.wrap(text, COLUMNS, subsequent_indent=indent)


def _site_lines(evidence: Evidence) -> Iterator[str]:
    """A table of the worst sites."""
    sites, pairs = evidence.sites, evidence.pairs
    if len(sites.ids) == 0:
        yield "Worst sites: none, no anode and cathode come near enough to form one"
        return
    sources = [
        *evidence.layout.emitters.ids.tolist(),
        *(body.id for body in evidence.layout.bodies),
    ]
    yield "Worst sites"
    yield f"  {'site':<10}{'loop gain':>10}{'trigger':>18}  {'anode':<10}{'cathode':<10}at [um]"
    for row in range(min(len(sites.ids), WORST_COUNT)):
        pair = sites.pair[row]
        yield (
            f"  {sites.ids[row]:<10}{measure(float(sites.loop_gain[row]), '1'):>10}"
            f"{current(float(sites.trigger_current_a[row])):>18}"
            f"  {sources[pairs.anode[pair]]:<10}{sources[pairs.cathode[pair]]:<10}"
            f"{sites.x_um[row]:.1f}, {sites.y_um[row]:.1f}"
        )


def _finding_lines(findings: tuple[Finding, ...], paint: Paint) -> Iterator[str]:
    """A table of the rules with findings, the worst of each."""
    if not findings:
        yield paint("Findings: none", "good")
        return
    yield "Findings"
    yield f"  {'rule':<18}{'severity':<10}{'count':>5}  {'worst':>12}{'limit':>12}  at [um]"
    seen: dict[str, list[Finding]] = {}
    for finding in findings:
        seen.setdefault(finding.rule, []).append(finding)
    for rule, members in seen.items():
        worst = members[0]
        yield (
            f"  {rule:<18}{paint(f'{worst.severity:<10}', worst.severity)}{len(members):>5}"
            f"  {measure(worst.measured, worst.unit):>12}{measure(worst.limit, worst.unit):>12}"
            f"  {worst.x_um:.1f}, {worst.y_um:.1f}"
        )
