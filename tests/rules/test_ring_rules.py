"""Rules about guard rings: ring-gap, ring-width, ring-contacts, ring-net, ring-missing,
double-ring.

The expected values are the ones planted in `synthetic_connections` or here by hand; the demands
themselves are common practice, no published source.
"""

from __future__ import annotations

from typing import Any

import numpy as np
import pytest
import synthetic_scan
from synthetic_connections import GAP_UM
from synthetic_scan import changed, findings_of

from latchscan.rules.model import Evidence

RINGS = "connections.rings"
INJECTORS = "connections.injectors"
CROSSINGS = "connections.crossings"
CLOSED, OPEN, COLLECTOR = range(3)


@pytest.fixture(name="measured")
def _measured() -> Evidence:
    return synthetic_scan.evidence(connected=True)


def column(measured: Evidence, name: str, row: int, value: Any) -> Evidence:
    """The same with one entry of a column of `Rings` replaced."""
    values = getattr(measured.connections.rings, name).copy()
    values[row] = value
    return changed(measured, RINGS, **{name: values})


class TestRingGap:
    def test_finds_the_widest_opening_in_its_middle(self, measured: Evidence) -> None:
        found = findings_of("ring-gap", measured)
        assert [(one.subject, one.measured, one.limit, one.unit) for one in found] == [
            ("ring-3", 9.0, 0.0, "um"),
            ("ring-2", GAP_UM, 0.0, "um"),
        ]
        assert (found[1].x_um, found[1].y_um) == (2.0, 24.4)
        assert found[1].box_um == (1.0, 24.4, 3.0, 24.4)
        assert "majority ring ring-2 of substrate taps around injector n-47 (sense)" in (
            found[1].message
        )
        assert "open by 2.000 um at (2.000, 24.400) um" in found[1].message

    def test_lets_the_limit_itself_and_closed_rings_pass(self, measured: Evidence) -> None:
        found = findings_of("ring-gap", measured, max_um=GAP_UM)
        assert [one.subject for one in found] == ["ring-3"]
        shut = changed(measured, RINGS, closed=np.ones(3, dtype=np.bool_))
        assert findings_of("ring-gap", shut) == ()

    def test_an_opening_that_is_not_known_never_passes(self, measured: Evidence) -> None:
        found = findings_of("ring-gap", column(measured, "closed", CLOSED, False), max_um=100.0)
        assert [one.subject for one in found] == ["ring-1"]
        assert np.isnan(found[0].measured)
        assert np.isfinite([found[0].x_um, found[0].y_um]).all()
        assert "could not be measured" in found[0].message

    def test_counts_the_other_openings(self, measured: Evidence) -> None:
        rings = measured.connections.rings
        more = changed(
            measured,
            RINGS,
            gap_first=np.array([0, 0, 1, 3]),
            gap_um=np.array([GAP_UM, 9.0, 3.0]),
            gap_from_um=np.vstack((rings.gap_from_um, (20.0, -0.8))),
            gap_to_um=np.vstack((rings.gap_to_um, (23.0, -0.8))),
        )
        found = findings_of("ring-gap", more)
        assert [one.measured for one in found] == [9.0, GAP_UM]
        assert "the widest of 2 openings" in found[0].message


class TestRingWidth:
    def test_takes_the_limit_of_each_kind(self, measured: Evidence) -> None:
        found = findings_of("ring-width", measured, majority_min_um=0.5, minority_min_um=0.4)
        assert [(one.subject, one.measured, one.limit) for one in found] == [("ring-2", 0.4, 0.5)]
        assert (found[0].x_um, found[0].y_um) == (0.4, 26.0)
        assert "only 0.400 um wide at (0.400, 26.000) um" in found[0].message
        found = findings_of("ring-width", measured, majority_min_um=0.4, minority_min_um=0.5)
        assert [one.subject for one in found] == ["ring-3"]
        assert findings_of("ring-width", measured, majority_min_um=0.4, minority_min_um=0.4) == ()

    def test_a_width_that_is_not_known_never_passes(self, measured: Evidence) -> None:
        unknown = column(measured, "width_um", CLOSED, np.nan)
        unknown = column(unknown, "width_at_um", CLOSED, np.nan)
        found = findings_of("ring-width", unknown, majority_min_um=0.0, minority_min_um=0.0)
        assert [one.subject for one in found] == ["ring-1"]
        assert np.isfinite([found[0].x_um, found[0].y_um]).all()
        assert "could not be measured" in found[0].message


class TestRingContacts:
    def test_finds_the_starved_ring(self, measured: Evidence) -> None:
        (found,) = findings_of("ring-contacts", measured, min_share=0.5)
        assert (found.subject, found.measured, found.limit, found.unit) == ("ring-2", 0.3, 0.5, "1")
        assert found.box_um == (0.2, 24.2, 6.0, 29.0)
        assert "only 0.3 of its area" in found.message
        assert findings_of("ring-contacts", measured, min_share=0.3) == ()

    def test_a_share_that_is_not_known_never_passes(self, measured: Evidence) -> None:
        unknown = column(measured, "contacted_share", CLOSED, np.nan)
        (found,) = findings_of("ring-contacts", unknown, min_share=1e-6)
        assert found.subject == "ring-1"
        assert "could not be measured" in found.message


class TestRingNet:
    def test_finds_the_ring_on_the_wrong_net(self, measured: Evidence) -> None:
        (found,) = findings_of("ring-net", measured)
        assert (found.subject, found.measured, found.limit) == ("ring-3", 0.0, 1.0)
        assert "is on VSS (net-2), which does not suit it" in found.message

    def test_invents_nothing_where_nets_are_not_known(self, measured: Evidence) -> None:
        assert findings_of("ring-net", column(measured, "net_suits", COLLECTOR, -1)) == ()
        assert findings_of("ring-net", column(measured, "net_suits", COLLECTOR, 1)) == ()
        unpowered = changed(measured, "connections.pins", supply_known=False)
        assert findings_of("ring-net", unpowered) == ()


class TestRingMissing:
    def test_finds_the_injector_without_a_ring(self, measured: Evidence) -> None:
        (found,) = findings_of("ring-missing", measured)
        assert (found.subject, found.body, found.measured, found.limit) == (
            "p-1",
            "nwell-1",
            0.0,
            1.0,
        )
        assert (found.x_um, found.y_um) == (2.0, 8.25)
        assert "p-type injector p-1 (drive) of nwell-1 at (2.000, 8.250) um" in found.message
        assert "in no majority ring (0 of at least 1)" in found.message

    def test_asks_each_type_for_its_own_kinds(self, measured: Evidence) -> None:
        assert findings_of("ring-missing", measured, p_injector=[]) == ()
        found = findings_of("ring-missing", measured, n_injector=["minority"], p_injector=[])
        drive = [f"n-{number}" for number in (5, 9, 13, 17, 21)]
        assert {one.subject for one in found} == {*drive, "n-47"}, "n-1 has the collector"
        both = findings_of(
            "ring-missing", measured, n_injector=["majority", "minority"], p_injector=["minority"]
        )
        assert {one.subject for one in both} == {*drive, "n-47", "p-1"}

    def test_an_open_ring_counts_here(self, measured: Evidence) -> None:
        opened = changed(measured, RINGS, closed=np.zeros(3, dtype=np.bool_))
        assert [one.subject for one in findings_of("ring-missing", opened)] == ["p-1"]

    def test_one_shape_is_one_member_whoever_drives_it(self, measured: Evidence) -> None:
        again = driven_twice(measured)
        (found,) = findings_of("ring-missing", again)
        assert (found.subject, found.count) == ("p-1", 1)

    def test_takes_a_whole_well_for_an_n_injector(self, measured: Evidence) -> None:
        emitter = measured.connections.injectors.emitter.copy()
        emitter[measured.connections.injectors.body == 0] = -1
        well = changed(measured, INJECTORS, emitter=emitter)
        assert findings_of("ring-missing", well, n_injector=[]) == ()
        (found,) = findings_of("ring-missing", well, p_injector=[])
        assert (found.subject, found.body) == ("nwell-1", "nwell-1")
        assert found.box_um == (0.0, 6.0, 120.0, 11.0)
        assert "n-type injector nwell-1 (drive)" in found.message

    def test_without_injectors_nothing_is_missing(self) -> None:
        assert findings_of("ring-missing", synthetic_scan.evidence()) == ()


def driven_twice(measured: Evidence) -> Evidence:
    """The same with the last two injectors on one shape: p-1, by two pins."""
    injectors = measured.connections.injectors
    emitter, body = injectors.emitter.copy(), injectors.body.copy()
    emitter[-1], body[-1] = emitter[-2], body[-2]
    rings = measured.connections.rings
    kept = rings.member_injector[:-2]
    return changed(
        changed(measured, INJECTORS, emitter=emitter, body=body),
        RINGS,
        member_first=np.array([0, len(kept), len(kept), len(kept)]),
        member_injector=kept,
        member_distance_um=rings.member_distance_um[:-2],
    )


class TestDoubleRing:
    def test_finds_the_driver_with_one_kind_between(self, measured: Evidence) -> None:
        (found,) = findings_of("double-ring", measured)
        assert (found.subject, found.measured, found.limit) == ("n-1", 1.0, 2.0)
        assert (found.x_um, found.y_um) == (1.0, 5.25)
        assert "Between injector n-1 (drive) and driver p-1, 3.500 um away" in found.message
        assert found.message.endswith("add a contacted n strip on a supply there.")

    def test_finds_the_core_without_any_strip(self, measured: Evidence) -> None:
        bare = changed(measured, CROSSINGS, p_strips=np.array([0, 1]), n_strips=np.array([0, 1]))
        (found,) = findings_of("double-ring", bare)
        assert (found.subject, found.measured) == ("n-1", 0.0)
        assert "emitter p-2 of the core, 4.600 um away" in found.message
        assert "a contacted p strip on ground and an n strip on a supply" in found.message

    def test_many_strips_of_one_kind_are_one_kind(self, measured: Evidence) -> None:
        many = changed(measured, CROSSINGS, p_strips=np.array([5, 5]), n_strips=np.array([1, 0]))
        assert [one.measured for one in findings_of("double-ring", many)] == [1.0]

    @pytest.mark.parametrize(
        ("driver_um", "core_um", "subjects"),
        [(3.5, 4.6, 2), (3.4, 4.6, 1), (3.5, 4.5, 1), (3.4, 4.5, 0)],
    )
    def test_asks_only_within_the_distance_of_each(
        self, measured: Evidence, driver_um: float, core_um: float, subjects: int
    ) -> None:
        bare = changed(measured, CROSSINGS, p_strips=np.zeros(2, int), n_strips=np.zeros(2, int))
        limits = {"driver_within_um": driver_um, "core_within_um": core_um}
        assert len(findings_of("double-ring", bare, **limits)) == subjects

    def test_a_distance_that_is_not_known_never_passes(self, measured: Evidence) -> None:
        unknown = changed(measured, CROSSINGS, spacing_um=np.array([np.nan, np.nan]))
        (found,) = findings_of("double-ring", unknown, driver_within_um=1.0, core_within_um=1.0)
        assert "at an unknown distance" in found.message
