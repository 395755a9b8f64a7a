"""The rules, in the order in which reports list them, and the judgement they pass.

Add a rule: write its file (docstring = the user's page, ``NAME``, ``UNIT``, ``check``,
``describe``), give it a block in the technology model, add one entry to `_TABLE`.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import Literal

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


_TABLE: tuple[Rule, ...] = (
    Rule(
        name=untied_body.NAME,
        unit=untied_body.UNIT,
        page=untied_body.__doc__ or "",
        severity=lambda rules: rules.untied_body.severity,
        check=lambda evidence, _: untied_body.check(evidence),
        describe=untied_body.describe,
    ),
    Rule(
        name=tie_net.NAME,
        unit=tie_net.UNIT,
        page=tie_net.__doc__ or "",
        severity=lambda rules: rules.tie_net.severity,
        check=lambda evidence, _: tie_net.check(evidence),
        describe=tie_net.describe,
    ),
    Rule(
        name=tie_conflict.NAME,
        unit=tie_conflict.UNIT,
        page=tie_conflict.__doc__ or "",
        severity=lambda rules: rules.tie_conflict.severity,
        check=lambda evidence, _: tie_conflict.check(evidence),
        describe=tie_conflict.describe,
    ),
    Rule(
        name=tie_resistance.NAME,
        unit=tie_resistance.UNIT,
        page=tie_resistance.__doc__ or "",
        severity=lambda rules: rules.tie_resistance.severity,
        check=lambda evidence, rules: tie_resistance.check(evidence, rules.tie_resistance),
        describe=tie_resistance.describe,
    ),
    Rule(
        name=forward_bias.NAME,
        unit=forward_bias.UNIT,
        page=forward_bias.__doc__ or "",
        severity=lambda rules: rules.forward_bias.severity,
        check=lambda evidence, rules: forward_bias.check(evidence, rules.forward_bias),
        describe=forward_bias.describe,
    ),
    Rule(
        name=isolation_gap.NAME,
        unit=isolation_gap.UNIT,
        page=isolation_gap.__doc__ or "",
        severity=lambda rules: rules.isolation_gap.severity,
        check=lambda evidence, _: isolation_gap.check(evidence),
        describe=isolation_gap.describe,
    ),
    Rule(
        name=loop_gain.NAME,
        unit=loop_gain.UNIT,
        page=loop_gain.__doc__ or "",
        severity=lambda rules: rules.loop_gain.severity,
        check=lambda evidence, rules: loop_gain.check(
            evidence, rules.loop_gain, untied_reported=rules.untied_body.severity != "off"
        ),
        describe=loop_gain.describe,
    ),
    Rule(
        name=tap_distance.NAME,
        unit=tap_distance.UNIT,
        page=tap_distance.__doc__ or "",
        severity=lambda rules: rules.tap_distance.severity,
        check=lambda evidence, rules: tap_distance.check(evidence, rules.tap_distance),
        describe=tap_distance.describe,
    ),
    Rule(
        name=injector_spacing.NAME,
        unit=injector_spacing.UNIT,
        page=injector_spacing.__doc__ or "",
        severity=lambda rules: rules.injector_spacing.severity,
        check=lambda evidence, rules: injector_spacing.check(evidence, rules.injector_spacing),
        describe=injector_spacing.describe,
    ),
    Rule(
        name=ring_gap.NAME,
        unit=ring_gap.UNIT,
        page=ring_gap.__doc__ or "",
        severity=lambda rules: rules.ring_gap.severity,
        check=lambda evidence, rules: ring_gap.check(evidence, rules.ring_gap),
        describe=ring_gap.describe,
    ),
    Rule(
        name=ring_net.NAME,
        unit=ring_net.UNIT,
        page=ring_net.__doc__ or "",
        severity=lambda rules: rules.ring_net.severity,
        check=lambda evidence, _: ring_net.check(evidence),
        describe=ring_net.describe,
    ),
    Rule(
        name=ring_missing.NAME,
        unit=ring_missing.UNIT,
        page=ring_missing.__doc__ or "",
        severity=lambda rules: rules.ring_missing.severity,
        check=lambda evidence, rules: ring_missing.check(evidence, rules.ring_missing),
        describe=ring_missing.describe,
    ),
    Rule(
        name=tap_reach.NAME,
        unit=tap_reach.UNIT,
        page=tap_reach.__doc__ or "",
        severity=lambda rules: rules.tap_reach.severity,
        check=lambda evidence, rules: tap_reach.check(evidence, rules.tap_reach),
        describe=tap_reach.describe,
    ),
    Rule(
        name=well_resistance.NAME,
        unit=well_resistance.UNIT,
        page=well_resistance.__doc__ or "",
        severity=lambda rules: rules.well_resistance.severity,
        check=lambda evidence, rules: well_resistance.check(evidence, rules.well_resistance),
        describe=well_resistance.describe,
    ),
    Rule(
        name=ring_width.NAME,
        unit=ring_width.UNIT,
        page=ring_width.__doc__ or "",
        severity=lambda rules: rules.ring_width.severity,
        check=lambda evidence, rules: ring_width.check(evidence, rules.ring_width),
        describe=ring_width.describe,
    ),
    Rule(
        name=ring_contacts.NAME,
        unit=ring_contacts.UNIT,
        page=ring_contacts.__doc__ or "",
        severity=lambda rules: rules.ring_contacts.severity,
        check=lambda evidence, rules: ring_contacts.check(evidence, rules.ring_contacts),
        describe=ring_contacts.describe,
    ),
    Rule(
        name=double_ring.NAME,
        unit=double_ring.UNIT,
        page=double_ring.__doc__ or "",
        severity=lambda rules: rules.double_ring.severity,
        check=lambda evidence, rules: double_ring.check(evidence, rules.double_ring),
        describe=double_ring.describe,
    ),
    Rule(
        name=well_spacing.NAME,
        unit=well_spacing.UNIT,
        page=well_spacing.__doc__ or "",
        severity=lambda rules: rules.well_spacing.severity,
        check=lambda evidence, rules: well_spacing.check(evidence, rules.well_spacing),
        describe=well_spacing.describe,
    ),
    Rule(
        name=uncontacted_tap.NAME,
        unit=uncontacted_tap.UNIT,
        page=uncontacted_tap.__doc__ or "",
        severity=lambda rules: rules.uncontacted_tap.severity,
        check=lambda evidence, _: uncontacted_tap.check(evidence),
        describe=uncontacted_tap.describe,
    ),
    Rule(
        name=net_names.NAME,
        unit=net_names.UNIT,
        page=net_names.__doc__ or "",
        severity=lambda rules: rules.net_names.severity,
        check=lambda evidence, _: net_names.check(evidence),
        describe=net_names.describe,
    ),
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
