"""The rules, in the order in which reports list them, and the judgement they pass.

Add a rule: write its file (docstring = the user's page, ``NAME``, ``UNIT``, ``check``,
``describe``), give it a block in the technology model, add one entry to `_TABLE`.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import Literal, Protocol

import numpy as np

from latchscan.layout.model import Box, Floats, Ints
from latchscan.rules import (
    double_ring,
    forward_bias,
    injector_spacing,
    isolation_gap,
    loop_gain,
    net_names,
    ring_contacts,
    ring_gap,
    ring_missing,
    ring_net,
    ring_width,
    tap_distance,
    tap_reach,
    tie_conflict,
    tie_net,
    tie_resistance,
    uncontacted_tap,
    untied_body,
    well_resistance,
    well_spacing,
)
from latchscan.rules.breaks import Breaks, outside
from latchscan.rules.grouping import group
from latchscan.rules.model import Evidence, Finding
from latchscan.technology.model import Rules, Severity, Technology

NOWHERE: Floats = np.zeros((0, 4))
NOWHERE.setflags(write=False)
SEVERITIES: tuple[Literal["fail", "watch"], ...] = ("fail", "watch")
"""Severities in the order in which findings are listed."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Rule:
    """One rule as the table knows it.

    Attributes
    ----------
    name
        The rule's name and the key of its block in the technology file.
    unit
        Unit of its measure and limit.
    page
        The user's page: what it measures, why it matters, how to mend.
    severity
        Reads the rule's severity from the technology's rules.
    check
        Evidence and the technology's rules -> every member that breaks a limit.
    describe
        Evidence, the breaks, the row of one of them and the count of its group -> a sentence.
    """

    name: str
    unit: str
    page: str
    severity: Callable[[Rules], Severity]
    check: Callable[[Evidence, Rules], Breaks]
    describe: Callable[[Evidence, Breaks, int, int], str]


class _Page(Protocol):
    """What the file of a rule holds."""

    __doc__: str | None
    NAME: str
    UNIT: str

    def describe(self, evidence: Evidence, breaks: Breaks, row: int, count: int, /) -> str: ...


def _listed(page: _Page, check: Callable[[Evidence, Rules], Breaks]) -> Rule:
    """A rule by its file; the block of its limits has the rule's name."""
    block = page.NAME.replace("-", "_")

    def severity(rules: Rules) -> Severity:
        found: Severity = getattr(rules, block).severity
        return found

    return Rule(
        name=page.NAME,
        unit=page.UNIT,
        page=page.__doc__ or "",
        severity=severity,
        check=check,
        describe=page.describe,
    )


_TABLE: tuple[Rule, ...] = (
    _listed(untied_body, lambda evidence, _: untied_body.check(evidence)),
    _listed(tie_net, lambda evidence, _: tie_net.check(evidence)),
    _listed(tie_conflict, lambda evidence, _: tie_conflict.check(evidence)),
    _listed(
        tie_resistance, lambda evidence, rules: tie_resistance.check(evidence, rules.tie_resistance)
    ),
    _listed(forward_bias, lambda evidence, rules: forward_bias.check(evidence, rules.forward_bias)),
    _listed(isolation_gap, lambda evidence, _: isolation_gap.check(evidence)),
    _listed(
        loop_gain,
        lambda evidence, rules: loop_gain.check(
            evidence, rules.loop_gain, untied_reported=rules.untied_body.severity != "off"
        ),
    ),
    _listed(tap_distance, lambda evidence, rules: tap_distance.check(evidence, rules.tap_distance)),
    _listed(
        injector_spacing,
        lambda evidence, rules: injector_spacing.check(evidence, rules.injector_spacing),
    ),
    _listed(ring_gap, lambda evidence, rules: ring_gap.check(evidence, rules.ring_gap)),
    _listed(ring_net, lambda evidence, _: ring_net.check(evidence)),
    _listed(ring_missing, lambda evidence, rules: ring_missing.check(evidence, rules.ring_missing)),
    _listed(tap_reach, lambda evidence, rules: tap_reach.check(evidence, rules.tap_reach)),
    _listed(
        well_resistance,
        lambda evidence, rules: well_resistance.check(evidence, rules.well_resistance),
    ),
    _listed(ring_width, lambda evidence, rules: ring_width.check(evidence, rules.ring_width)),
    _listed(
        ring_contacts, lambda evidence, rules: ring_contacts.check(evidence, rules.ring_contacts)
    ),
    _listed(double_ring, lambda evidence, rules: double_ring.check(evidence, rules.double_ring)),
    _listed(well_spacing, lambda evidence, rules: well_spacing.check(evidence, rules.well_spacing)),
    _listed(uncontacted_tap, lambda evidence, _: uncontacted_tap.check(evidence)),
    _listed(net_names, lambda evidence, _: net_names.check(evidence)),
)
"""Untied bodies come first: no other rule can be evaluated for them."""

RULES: dict[str, Rule] = {rule.name: rule for rule in _TABLE}
"""Every rule by its name, in the order of reports."""


def judge(
    evidence: Evidence, technology: Technology, left_out_um: Floats = NOWHERE
) -> tuple[Finding, ...]:
    """Judge the evidence by every rule that is not switched off.

    Parameters
    ----------
    evidence
        Every measure of the scan.
    technology
        Its ``rules`` hold the limits and severities.
    left_out_um
        (k, 4) boxes in which no place is judged [um].

    Returns
    -------
    tuple of Finding
        ``fail`` before ``watch``, then in the order of `RULES`, then worst first.
    """
    findings: list[Finding] = []
    for severity in SEVERITIES:
        for rule in RULES.values():
            if rule.severity(technology.rules) == severity:
                breaks = outside(rule.check(evidence, technology.rules), left_out_um)
                findings.extend(
                    _finding(rule, severity, number, evidence=evidence, breaks=breaks, rows=rows)
                    for number, rows in enumerate(group(breaks), start=1)
                )
    return tuple(findings)


def _finding(
    rule: Rule,
    severity: Literal["fail", "watch"],
    number: int,
    *,
    evidence: Evidence,
    breaks: Breaks,
    rows: Ints,
) -> Finding:
    """Make the finding of one group of rows, the worst of which comes first."""
    worst = int(rows[0])
    return Finding(
        id=f"{rule.name}-{number}",
        rule=rule.name,
        severity=severity,
        subject=str(breaks.subject[worst]),
        body=_body_id(evidence, int(breaks.body[worst])),
        x_um=float(breaks.x_um[worst]),
        y_um=float(breaks.y_um[worst]),
        measured=float(breaks.measured[worst]),
        limit=float(breaks.limit[worst]),
        unit=rule.unit,
        message=rule.describe(evidence, breaks, worst, len(rows)),
        count=len(rows),
        box_um=_box(breaks, rows),
    )


def _body_id(evidence: Evidence, body: int) -> str:
    """Id of a body, "" for a finding that concerns none."""
    return evidence.layout.bodies[body].id if body >= 0 else ""


def _box(breaks: Breaks, rows: Ints) -> Box:
    """Box around the members in `rows` and the places where they break the limit [um]."""
    boxes = breaks.box_um[rows]
    at = np.column_stack((breaks.x_um[rows], breaks.y_um[rows]))
    low = np.minimum(boxes[:, :2], at).min(axis=0)
    high = np.maximum(boxes[:, 2:], at).max(axis=0)
    return (float(low[0]), float(low[1]), float(high[0]), float(high[1]))
