"""Rules about what bodies are tied to: tie-net, tie-conflict, tie-resistance, forward-bias,
well-spacing, isolation-gap.

The expected values are the ones planted in `synthetic_connections` or here by hand; what counts
as a right rail is common practice, no published source.
"""

from __future__ import annotations

import dataclasses
from typing import Any

import numpy as np
import pytest
import shapely
import synthetic_scan
from synthetic_connections import (
    DRIVE,
    NET_V,
    SENSE,
    SENSE_INNER,
    SENSE_OHM,
    STRAP_OHM,
    VDD,
    VIO,
    VSS,
    WELL_NET,
    WELL_OHM,
)
from synthetic_scan import changed, findings_of

from latchscan.rules.model import Evidence

NWELL_1, NWELL_5, SUBSTRATE = 0, 4, 6
LAST_TAP = 11


@pytest.fixture(name="measured")
def _measured() -> Evidence:
    return synthetic_scan.evidence(connected=True)


def tapped(measured: Evidence, tap: int, net: int, **of_body: Any) -> Evidence:
    """The same with `tap` on `net`; `of_body` replaces columns of `Ties` for its body."""
    ties = measured.connections.ties
    body = int(measured.layout.taps.body[tap])
    tap_net = ties.tap_net.copy()
    tap_net[tap] = net
    of_body.setdefault("rail", net if net in NET_V else -1)
    columns: dict[str, Any] = {"tap_net": tap_net}
    for name, value in of_body.items():
        columns[name] = getattr(ties, name).copy()
        columns[name][body] = value
    on = [np.unique(tap_net[(measured.layout.taps.body == b) & (tap_net >= 0)]) for b in range(7)]
    return with_runs(changed(measured, "connections.ties", **columns), on)


def with_runs(measured: Evidence, on: list[Any]) -> Evidence:
    """The same with the given nets of every body."""
    nets = np.concatenate(on).astype(np.int64)
    return changed(
        measured,
        "connections.ties",
        net_first=np.concatenate(((0,), np.cumsum([len(run) for run in on]))),
        net=nets,
        net_contacts=np.ones(len(nets), dtype=np.int64),
    )


def with_nets_of(measured: Evidence, body: int, *nets: int) -> Evidence:
    """The same with other nets of one body."""
    ties = measured.connections.ties
    first = ties.net_first
    on = [ties.net[first[b] : first[b + 1]] for b in range(7)]
    on[body] = np.array(nets)
    return with_runs(measured, on)


def unpowered(measured: Evidence) -> Evidence:
    """The same where no supply and no ground is known."""
    return changed(measured, "connections.pins", supply_known=False)


def with_kind(measured: Evidence, net: int, kind: str) -> Evidence:
    """The same with another kind of one net."""
    kinds = measured.connections.pins.net_kind.copy()
    kinds[net] = kind
    return changed(measured, "connections.pins", net_kind=kinds)


class TestTieNet:
    @pytest.mark.parametrize(
        ("net", "words"),
        [
            (DRIVE, "the bonded pin drive (net-1)"),
            (VSS, "the wrong kind of rail, VSS (net-2)"),
            (WELL_NET, "a net that is no known rail, unnamed net-7"),
        ],
    )
    def test_finds_a_well_on_what_is_no_supply(
        self, measured: Evidence, net: int, words: str
    ) -> None:
        assert findings_of("tie-net", measured) == ()
        (found,) = findings_of("tie-net", tapped(measured, 0, net))
        assert (found.subject, found.body, found.count) == ("tap-1", "nwell-1", 1)
        assert (found.measured, found.limit, found.unit) == (0.0, 1.0, "1")
        assert (found.x_um, found.y_um) == (16.0, 8.5)
        assert found.box_um == (15.0, 7.0, 17.0, 10.0)
        assert f"is tied to {words}, to 0 of at least 1 supply; tie it to" in found.message

    @pytest.mark.parametrize("kind", ["signal", "internal", "not_bonded"])
    def test_finds_a_well_on_a_named_net_without_a_pad(self, measured: Evidence, kind: str) -> None:
        named = with_kind(measured, SENSE_INNER, kind)
        (found,) = findings_of("tie-net", tapped(named, 0, SENSE_INNER))
        word = "signal" if kind == "signal" else "internal or not bonded net"
        assert f"the {word} unnamed net-5" in found.message

    def test_finds_one_bad_tap_among_good_ones(self, measured: Evidence) -> None:
        (found,) = findings_of("tie-net", tapped(measured, LAST_TAP, SENSE, rail=VSS))
        assert (found.subject, found.body) == ("tap-12", "substrate")
        assert (found.x_um, found.y_um) == (16.0, 62.5)
        assert "0 of at least 1 ground" in found.message

    def test_finds_the_substrate_on_a_supply(self, measured: Evidence) -> None:
        (found,) = findings_of("tie-net", tapped(measured, LAST_TAP, VDD, rail=VSS))
        assert "the wrong kind of rail, VDD (net-3)" in found.message

    def test_leaves_a_well_behind_a_resistance_to_its_own_rule(self, measured: Evidence) -> None:
        reached = tapped(measured, 0, SENSE_INNER, rail=VDD, resistance_ohm=SENSE_OHM)
        assert findings_of("tie-net", reached) == ()
        assert "nwell-1" in [one.subject for one in findings_of("tie-resistance", reached)]

    def test_a_pad_is_wrong_even_if_a_resistor_holds_it(self, measured: Evidence) -> None:
        held = tapped(measured, 0, SENSE, rail=VDD, resistance_ohm=10.0)
        (found,) = findings_of("tie-net", held)
        assert "the bonded pin sense (net-4)" in found.message

    def test_a_resistance_to_the_wrong_rail_holds_nothing(self, measured: Evidence) -> None:
        (found,) = findings_of("tie-net", tapped(measured, 0, SENSE_INNER, rail=VSS))
        assert found.subject == "tap-1"

    def test_judges_an_isolated_well_as_p_type(self, measured: Evidence) -> None:
        bodies = list(measured.layout.bodies)
        bodies[NWELL_1] = dataclasses.replace(bodies[NWELL_1], kind="isolated_pwell")
        isolated = changed(measured, "layout", bodies=tuple(bodies))
        (found,) = findings_of("tie-net", isolated)
        assert (found.body, found.subject) == ("nwell-1", "tap-1")
        assert findings_of("tie-net", tapped(isolated, 0, VSS)) == ()

    def test_invents_nothing_where_rails_are_not_known(self, measured: Evidence) -> None:
        wrong = tapped(measured, 0, DRIVE)
        assert findings_of("tie-net", unpowered(wrong)) == ()
        assert findings_of("tie-net", tapped(measured, 0, -1)) == ()

    def test_unnamed_nets_are_judged_only_beside_named_rails(self, measured: Evidence) -> None:
        pins = measured.connections.pins
        unnamed = np.isin(np.arange(len(pins.net_pin)), (VDD, VIO))
        grounds_only = changed(
            tapped(measured, 0, WELL_NET),
            "connections.pins",
            net_pin=np.where(unnamed, -1, pins.net_pin),
            net_kind=np.where(unnamed, "unknown", pins.net_kind),
        )
        assert findings_of("tie-net", grounds_only) == ()
        (found,) = findings_of("tie-net", tapped(grounds_only, LAST_TAP, WELL_NET, rail=VSS))
        assert found.body == "substrate"

    def test_leaves_a_well_resistor_alone(self, measured: Evidence) -> None:
        wrong = tapped(measured, 0, DRIVE)
        resistors = measured.connections.nets.resistors
        beside = {"conductor": np.array(["nwell", "poly", "poly"])}
        assert len(findings_of("tie-net", changed(wrong, RESISTORS, **beside))) == 1
        polygons = resistors.polygons.copy()
        polygons[0] = shapely.box(20.0, 7.0, 40.0, 10.0)
        inside = changed(wrong, RESISTORS, polygons=polygons, **beside)
        assert findings_of("tie-net", inside) == ()


RESISTORS = "connections.nets.resistors"


class TestTieConflict:
    @pytest.mark.parametrize(
        ("body", "nets"),
        [(NWELL_1, (VDD, VIO)), (NWELL_1, (VDD, VSS)), (SUBSTRATE, (VSS, VDD))],
    )
    def test_finds_two_rails(self, measured: Evidence, body: int, nets: tuple[int, ...]) -> None:
        assert findings_of("tie-conflict", measured) == ()
        (found,) = findings_of("tie-conflict", with_nets_of(measured, body, *nets))
        assert found.subject == measured.layout.bodies[body].id
        assert (found.measured, found.limit) == (2.0, 1.0)
        assert "tied to 2 different rails" in found.message

    def test_points_at_a_tap_on_the_odd_rail(self, measured: Evidence) -> None:
        odd = tapped(measured, LAST_TAP, VDD, rail=VSS)
        (found,) = findings_of("tie-conflict", with_nets_of(odd, SUBSTRATE, VSS, VDD))
        assert (found.x_um, found.y_um) == (16.0, 62.5)
        assert "VSS (net-2) and VDD (net-3)" in found.message

    def test_three_rails_are_worse_than_two(self, measured: Evidence) -> None:
        both = with_nets_of(measured, SUBSTRATE, VSS, VDD)
        found = findings_of("tie-conflict", with_nets_of(both, NWELL_1, VDD, VIO, VSS))
        assert [(one.subject, one.measured) for one in found] == [
            ("nwell-1", 3.0),
            ("substrate", 2.0),
        ]

    def test_lets_joined_rails_several_grounds_and_signals_pass(self, measured: Evidence) -> None:
        two = with_nets_of(measured, NWELL_1, VDD, VIO)
        net_pin = measured.connections.pins.net_pin.copy()
        net_pin[VIO] = net_pin[VDD]
        assert findings_of("tie-conflict", changed(two, "connections.pins", net_pin=net_pin)) == ()
        ground = with_kind(with_nets_of(measured, SUBSTRATE, VSS, DRIVE), DRIVE, "ground")
        assert findings_of("tie-conflict", ground) == ()
        signal = with_nets_of(measured, NWELL_1, VDD, DRIVE)
        assert findings_of("tie-conflict", signal) == ()
        assert findings_of("tie-conflict", unpowered(two)) == ()


class TestTieResistance:
    def test_finds_poly_and_resistors_above_the_limit(self, measured: Evidence) -> None:
        found = findings_of("tie-resistance", measured, max_ohm=50.0)
        assert [(one.subject, one.measured, one.limit, one.unit) for one in found] == [
            ("nwell-4", WELL_OHM, 50.0, "ohm"),
            ("nwell-5", STRAP_OHM, 50.0, "ohm"),
        ]
        assert (found[0].x_um, found[0].y_um) == (16.0, 44.5)
        assert "its rail VDD (net-3)" in found[0].message
        assert "200 ohm" in found[0].message
        found = findings_of("tie-resistance", measured, max_ohm=STRAP_OHM)
        assert [one.subject for one in found] == ["nwell-4"], "the limit itself passes"

    def test_a_resistance_that_is_not_known_never_passes(self, measured: Evidence) -> None:
        ohm = measured.connections.ties.resistance_ohm.copy()
        ohm[NWELL_5] = np.nan
        unknown = changed(measured, "connections.ties", resistance_ohm=ohm)
        (found,) = findings_of("tie-resistance", unknown, max_ohm=1e4)
        assert found.subject == "nwell-5"
        assert np.isnan(found.measured)
        assert "could not be worked out" in found.message

    def test_leaves_untied_bodies_and_unknown_rails_alone(self, measured: Evidence) -> None:
        found = findings_of("tie-resistance", measured, max_ohm=1e-3)
        assert "nwell-2" not in [one.subject for one in found]
        assert findings_of("tie-resistance", unpowered(measured)) == ()
        grounded = tapped(measured, 0, VSS, rail=VSS, resistance_ohm=900.0)
        found = findings_of("tie-resistance", grounded)
        assert "nwell-1" not in [one.subject for one in found], "tie-net says so"


class TestForwardBias:
    def test_finds_a_p_emitter_above_its_well(self, measured: Evidence) -> None:
        (found,) = findings_of("forward-bias", measured)
        assert (found.subject, found.body, found.unit) == ("p-23", "nwell-1", "V")
        assert found.measured == pytest.approx(NET_V[VIO][1] - NET_V[VDD][0], abs=1e-9)
        assert (found.x_um, found.y_um) == (117.0, 8.25)
        assert "on VIO (net-6)" in found.message
        assert "2.01 V above nwell-1 on VDD (net-3)" in found.message

    def test_lets_the_limit_itself_pass(self, measured: Evidence) -> None:
        assert findings_of("forward-bias", measured, max_v=2.01) == ()
        assert len(findings_of("forward-bias", measured, max_v=2.0)) == 1

    def test_an_unknown_voltage_is_no_break(self, measured: Evidence) -> None:
        high = measured.connections.pins.net_high_v.copy()
        high[VIO] = np.nan
        unknown = changed(measured, "connections.pins", net_high_v=high)
        assert findings_of("forward-bias", unknown) == ()
        assert findings_of("forward-bias", unpowered(measured)) == ()

    def test_a_signal_of_the_wells_own_supply_passes_and_a_higher_one_does_not(
        self, measured: Evidence
    ) -> None:
        high = measured.connections.pins.net_high_v.copy()
        assert high[DRIVE] == NET_V[VDD][1], "p-1 is on drive, which follows VDD"
        high[DRIVE] = 2.5
        higher = changed(measured, "connections.pins", net_high_v=high)
        found = findings_of("forward-bias", higher)
        assert [(one.subject, round(one.measured, 6)) for one in found] == [
            ("p-23", 2.01),
            ("p-1", 0.88),
        ]

    def test_a_supply_of_the_same_range_passes_and_a_lower_start_does_not(
        self, measured: Evidence
    ) -> None:
        low = measured.connections.pins.net_low_v.copy()
        high = measured.connections.pins.net_high_v.copy()
        low[VIO], high[VIO] = NET_V[VDD]
        alike = changed(measured, "connections.pins", net_low_v=low, net_high_v=high)
        assert findings_of("forward-bias", alike) == ()
        low = low.copy()
        low[VIO] = 0.0
        wider = changed(measured, "connections.pins", net_low_v=low, net_high_v=high)
        (found,) = findings_of("forward-bias", wider)
        assert found.subject == "p-23"
        assert found.measured == pytest.approx(NET_V[VDD][1] - NET_V[VDD][0])

    def test_finds_an_n_emitter_below_its_body(self, measured: Evidence) -> None:
        low = measured.connections.pins.net_low_v.copy()
        low[SENSE_INNER] = -0.7
        below = changed(measured, "connections.pins", net_low_v=low)
        found = findings_of("forward-bias", below)
        assert [(one.subject, one.body, one.measured) for one in found] == [
            ("p-23", "nwell-1", pytest.approx(2.01)),
            ("n-47", "substrate", pytest.approx(0.7)),
        ]
        assert "0.7 V below substrate on VSS (net-2)" in found[1].message

    def test_a_diffusion_on_its_own_bodys_rail_passes(self, measured: Evidence) -> None:
        shared = with_nets_of(measured, NWELL_1, VDD, VIO)
        assert findings_of("forward-bias", shared) == (), "a tap holds the well at the p+'s net"
        net_pin = measured.connections.pins.net_pin.copy()
        net_pin[VIO] = net_pin[VDD]
        joined = changed(measured, "connections.pins", net_pin=net_pin)
        assert findings_of("forward-bias", joined) == ()


class TestWellSpacing:
    def test_finds_wells_at_different_voltages(self, measured: Evidence) -> None:
        (found,) = findings_of("well-spacing", measured, min_um=8.0)
        assert (found.subject, found.measured, found.limit) == ("nwell-3", 7.0, 8.0)
        assert (found.x_um, found.y_um) == (0.0, 38.5)
        assert found.box_um == (0.0, 35.0, 0.0, 42.0)
        assert "nwell-4 on VDD (net-3)" in found.message
        assert findings_of("well-spacing", measured, min_um=7.0) == ()

    @pytest.mark.parametrize("range_v", [NET_V[VIO], (np.nan, np.nan), (1.62, np.nan)])
    def test_equal_and_unknown_voltages_are_no_break(
        self, measured: Evidence, range_v: tuple[float, float]
    ) -> None:
        low, high = measured.connections.ties.low_v.copy(), measured.connections.ties.high_v.copy()
        low[3], high[3] = range_v
        other = changed(measured, "connections.ties", low_v=low, high_v=high)
        assert findings_of("well-spacing", other) == ()
        assert findings_of("well-spacing", unpowered(measured)) == ()

    def test_a_spacing_that_is_not_known_never_passes(self, measured: Evidence) -> None:
        unknown = changed(measured, "connections.ties", spacing_um=np.array([np.nan]))
        (found,) = findings_of("well-spacing", unknown, min_um=1e-3)
        assert "could not be measured" in found.message


class TestIsolationGap:
    def test_finds_the_opening_at_its_place(self, measured: Evidence) -> None:
        (found,) = findings_of("isolation-gap", measured)
        assert (found.subject, found.measured, found.limit) == ("nwell-6", 0.4, 0.0)
        assert (found.x_um, found.y_um) == (50.2, 66.2)
        assert found.box_um == (50.0, 66.2, 50.4, 66.2)
        assert "open by 0.400 um at (50.200, 66.200) um" in found.message

    def test_needs_no_supplies(self, measured: Evidence) -> None:
        assert len(findings_of("isolation-gap", unpowered(measured))) == 1

    def test_a_closed_ring_has_none(self, measured: Evidence) -> None:
        nothing = np.empty((0, 2))
        closed = changed(
            measured,
            "connections.ties",
            gap_body=np.empty(0, dtype=np.int64),
            gap_um=np.empty(0),
            gap_from_um=nothing,
            gap_to_um=nothing,
        )
        assert findings_of("isolation-gap", closed) == ()
