"""Each rule on hand-made measures: what it must find, where, and what it must let pass.

The expected values are the ones planted here by hand; there is no outside source.
"""

from __future__ import annotations

import numpy as np
import pytest
import synthetic_scan
from synthetic_scan import ALL_OFF, findings_of

from latchscan.layout.model import P_IN_NWELL
from latchscan.rules import RULES, judge
from latchscan.rules.breaks import place
from latchscan.rules.model import Evidence

OF_SHAPES = (
    "untied-body",
    "loop-gain",
    "tap-distance",
    "injector-spacing",
    "tap-reach",
    "well-resistance",
    "uncontacted-tap",
)
"""Rules that need no nets; the synthetic block breaks all but ``tap-reach``."""
LOWER_IS_WORSE = ("injector-spacing", "well-spacing", "ring-width", "ring-contacts")


@pytest.fixture(name="measured")
def _measured() -> Evidence:
    return synthetic_scan.evidence()


def test_tap_distance_takes_the_limit_of_each_kind(measured: Evidence) -> None:
    quiet = np.full(len(measured.layout.emitters.ids), 5.0)
    p_row, n_row = 50, len(quiet) - 2
    quiet[[p_row, n_row]] = 12.5, 14.5
    measured = synthetic_scan.changed(measured, "distances", tap_distance_um=quiet)
    found = findings_of("tap-distance", measured, p_diffusion_max_um=12.5, n_diffusion_max_um=14.0)
    assert [(one.subject, one.measured, one.limit) for one in found] == [
        (measured.layout.emitters.ids[n_row], 14.5, 14.0)
    ]
    assert (found[0].x_um, found[0].y_um) == tuple(measured.distances.farthest_um[n_row])
    found = findings_of("tap-distance", measured, p_diffusion_max_um=12.0, n_diffusion_max_um=15.0)
    assert [(one.subject, one.measured) for one in found] == [("p-51", 12.5)]


def test_untied_body_finds_the_well_whose_tap_has_no_contact(measured: Evidence) -> None:
    (found,) = findings_of("untied-body", measured)
    assert (found.subject, found.measured, found.limit) == ("nwell-2", 0.0, 1.0)
    assert found.box_um == (0.0, 18.0, 120.0, 23.0)
    assert "23 emitters" in found.message


def test_untied_body_ignores_a_substrate_without_emitters(measured: Evidence) -> None:
    contacts = measured.layout.taps.contact_count.copy()
    contacts[measured.layout.taps.kind == 1] = 0
    untied = synthetic_scan.changed(measured, "layout.taps", contact_count=contacts)
    assert "substrate" in [one.subject for one in findings_of("untied-body", untied)]
    body = np.where(measured.layout.emitters.kind == P_IN_NWELL, measured.layout.emitters.body, 0)
    empty = synthetic_scan.changed(untied, "layout.emitters", body=body)
    assert "substrate" not in [one.subject for one in findings_of("untied-body", empty)]


def test_uncontacted_tap_finds_the_one_tap(measured: Evidence) -> None:
    (found,) = findings_of("uncontacted-tap", measured)
    assert (found.subject, found.body, found.count) == ("tap-2", "nwell-2", 1)
    x0, y0, x1, y1 = found.box_um
    assert x0 <= found.x_um <= x1
    assert y0 <= found.y_um <= y1


def test_tap_reach_compares_with_its_limit(measured: Evidence) -> None:
    reach = measured.distances.tap_reach_um.copy()
    reach[4] = 6.25
    measured = synthetic_scan.changed(measured, "distances", tap_reach_um=reach)
    (found,) = findings_of("tap-reach", measured, max_um=6.0)
    assert (found.subject, found.measured, found.body) == ("tap-5", 6.25, "nwell-5")
    assert findings_of("tap-reach", measured, max_um=6.25) == ()


def test_injector_spacing_takes_the_nearest_and_lets_the_limit_pass(measured: Evidence) -> None:
    spacing = measured.spacings.spacing_um.copy()
    spacing[2] = 2.0
    measured = synthetic_scan.changed(measured, "spacings", spacing_um=spacing)
    found = findings_of("injector-spacing", measured, min_um=3.0)
    assert [(one.subject, one.measured) for one in found] == [("n-9", 2.0)]
    assert "(drive)" in found[0].message
    alone = synthetic_scan.changed(
        measured,
        "spacings",
        spacing_um=np.full(len(spacing), np.nan),
        body=np.full(len(spacing), -1),
    )
    assert findings_of("injector-spacing", alone, min_um=3.0) == ()


def test_well_resistance_judges_the_patch_value_of_p_emitters_only(measured: Evidence) -> None:
    patch = np.full(len(measured.resistances.patch_ohm), 100.0)
    patch[7] = 101.0
    patch[len(measured.layout.emitters.ids) - 1] = 1e6
    measured = synthetic_scan.changed(measured, "resistances", patch_ohm=patch)
    (found,) = findings_of("well-resistance", measured, max_ohm=100.0)
    assert (found.subject, found.measured, found.unit) == ("p-8", 101.0, "ohm")


def test_loop_gain_counts_every_anode_once(measured: Evidence) -> None:
    sites, pairs = measured.sites, measured.pairs
    pair = sites.pair.copy()
    anode = pairs.anode.copy()
    anode[pair[1]] = anode[pair[0]]
    measured = synthetic_scan.changed(measured, "pairs", anode=anode)
    limit = float(np.sort(sites.loop_gain[np.isfinite(sites.loop_gain)])[-4])
    found = findings_of("loop-gain", measured, max_gain=limit)
    assert sum(one.count for one in found) == 2
    assert found[0].subject == "site-1"


def test_loop_gain_takes_an_isolated_well_as_anode(measured: Evidence) -> None:
    anode = measured.pairs.anode.copy()
    best = measured.sites.pair[0]
    anode[best] = len(measured.layout.emitters.ids) + 3
    measured = synthetic_scan.changed(measured, "pairs", anode=anode)
    limit = float(measured.sites.loop_gain[1])
    (found,) = findings_of("loop-gain", measured, max_gain=limit)
    assert "nwell-4" in found.message


def test_loop_gain_leaves_untied_bodies_to_their_own_rule(measured: Evidence) -> None:
    sites = measured.sites
    floating = measured.pairs.well[sites.pair] == 1
    gain = np.where(floating, 2.5, 0.1)
    measured = synthetic_scan.changed(measured, "sites", loop_gain=gain)
    assert findings_of("loop-gain", measured, max_gain=1.0) == ()
    rules = {**ALL_OFF, "loop_gain": {"severity": "fail", "max_gain": 1.0}}
    found = judge(measured, synthetic_scan.technology(**rules))
    assert sum(one.count for one in found) == floating.sum(), "nobody else would say it"


@pytest.mark.parametrize(
    ("rule", "part", "column", "row", "limits"),
    [
        (
            "tap-distance",
            "distances",
            "tap_distance_um",
            0,
            {"p_diffusion_max_um": 1e3, "n_diffusion_max_um": 1e3},
        ),
        ("tap-reach", "distances", "tap_reach_um", 0, {"max_um": 1e3}),
        ("injector-spacing", "spacings", "spacing_um", 0, {"min_um": 1e-3}),
        ("well-resistance", "resistances", "patch_ohm", 0, {"max_ohm": 1e9}),
        ("loop-gain", "sites", "loop_gain", 0, {"max_gain": 1e3}),
    ],
)
def test_a_measure_that_is_not_known_never_passes(
    measured: Evidence, rule: str, part: str, column: str, row: int, limits: dict[str, float]
) -> None:
    assert findings_of(rule, measured, **limits) == ()
    values = getattr(getattr(measured, part), column).copy()
    values[row] = np.nan
    measured = synthetic_scan.changed(measured, part, **{column: values})
    (found,) = findings_of(rule, measured, **limits)
    assert np.isnan(found.measured)
    assert np.isfinite([found.x_um, found.y_um]).all()
    assert "could not be" in found.message


@pytest.mark.parametrize("connected", [False, True])
def test_findings_are_sorted_numbered_and_can_be_switched_off(connected: bool) -> None:
    measured = synthetic_scan.evidence(connected=connected)
    found = judge(measured, synthetic_scan.technology())
    severities = [one.severity for one in found]
    assert severities == sorted(severities, key=("fail", "watch").index)
    order = list(RULES)
    for severity in ("fail", "watch"):
        ranks = [order.index(one.rule) for one in found if one.severity == severity]
        assert ranks == sorted(ranks)
    for rule in RULES:
        own = [one for one in found if one.rule == rule]
        assert [one.id for one in own] == [f"{rule}-{i + 1}" for i in range(len(own))]
        badness = [one.measured - one.limit for one in own]
        assert badness == sorted(badness, reverse=rule not in LOWER_IS_WORSE)
    assert judge(measured, synthetic_scan.technology(**ALL_OFF)) == ()


def test_a_block_without_nets_has_no_finding_about_them() -> None:
    found = judge(synthetic_scan.evidence(), synthetic_scan.technology())
    assert {one.rule for one in found} == {*OF_SHAPES} - {"tap-reach"}


@pytest.mark.parametrize("connected", [False, True])
def test_every_message_is_one_sentence_with_place_measure_and_limit(connected: bool) -> None:
    measured = synthetic_scan.evidence(connected=connected)
    for one in judge(measured, synthetic_scan.technology()):
        assert "\n" not in one.message
        assert one.message.endswith(".")
        assert f"{one.limit:g}" in one.message
        assert one.subject in one.message
        assert place(one.x_um, one.y_um) in one.message
        assert any(f"{one.measured:{form}}" in one.message for form in ("g", ".3f", ".3g", ".4g"))
