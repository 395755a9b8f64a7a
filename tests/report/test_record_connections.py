"""Nets, pins, injectors, rings, bodies and resistors in ``scan.json``.

Source of every expected number: the hand-made scan of `synthetic_connections`, whose
docstrings state it.
"""

from __future__ import annotations

import json
from importlib.resources import files
from typing import Any

import numpy as np
import pytest
import synthetic_scan
from jsonschema import Draft202012Validator
from synthetic_connections import GAP_UM, SENSE_INNER, SENSE_OHM, STRAP_OHM, VDD, WELL_OHM

from latchscan.layout.connections import BY_SUPPLY, STRAP
from latchscan.report.record import scan_record
from latchscan.rules.model import Evidence

LISTS = ("nets", "pins", "injectors", "rings", "bodies", "resistors")


@pytest.fixture(name="measured", scope="module")
def _measured() -> Evidence:
    return synthetic_scan.evidence(connected=True)


@pytest.fixture(name="record", scope="module")
def _record(measured: Evidence) -> dict[str, Any]:
    return scan_record(synthetic_scan.scan(measured))


@pytest.fixture(name="validator", scope="module")
def _validator() -> Draft202012Validator:
    text = files("latchscan.report").joinpath("scan.schema.json").read_text("utf-8")
    return Draft202012Validator(json.loads(text))


def record_of(measured: Evidence, part: str, **columns: Any) -> dict[str, Any]:
    """Record of `measured` with columns of one part of its connections replaced."""
    changed = synthetic_scan.changed(measured, f"connections.{part}", **columns)
    return scan_record(synthetic_scan.scan(changed))


def test_lists_are_counted_and_accepted(
    record: dict[str, Any], validator: Draft202012Validator
) -> None:
    validator.validate(record)
    assert {name: len(record[name]) for name in LISTS} == record["totals"]
    assert record["totals"] == {
        "nets": 5,
        "pins": 5,
        "injectors": 8,
        "rings": 3,
        "bodies": 7,
        "resistors": 3,
    }


def test_a_list_that_was_cut_off_tells_its_length(
    measured: Evidence, record: dict[str, Any], monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr("latchscan.report.record_connections.LARGEST_ROW_COUNT", 2)
    cut = scan_record(synthetic_scan.scan(measured))
    assert cut["totals"] == record["totals"]
    for name in LISTS:
        assert cut[name] == record[name][:2]


def test_no_connections_leave_bodies_and_empty_lists(validator: Draft202012Validator) -> None:
    record = scan_record(synthetic_scan.scan(synthetic_scan.evidence()))
    validator.validate(record)
    assert [name for name in LISTS if record[name]] == ["bodies"]
    assert {body["rail"] for body in record["bodies"]} == {None}
    assert {body["tie_resistance_ohm"] for body in record["bodies"]} == {None}


def test_nets_are_those_with_a_name_a_pad_or_a_pin(
    measured: Evidence, record: dict[str, Any]
) -> None:
    assert [net["id"] for net in record["nets"]] == [f"net-{row}" for row in (1, 2, 3, 4, 6)]
    vdd = record["nets"][2]
    assert vdd["names"] == ["VDD"]
    assert (vdd["pin"], vdd["kind"], vdd["low_v"], vdd["high_v"]) == ("VDD", "supply", 1.62, 1.98)
    assert vdd["shape_counts"] == {"diffusion": 3, "poly": 1, "metal1": 7, "contact": 4}
    assert "poly" not in record["nets"][0]["shape_counts"]
    nets = measured.connections.nets
    assert vdd["diffusion_count"] == int(np.sum(nets.node_net[nets.piece_node] == VDD))
    assert vdd["bbox_um"] == nets.box_um[VDD].tolist()


def test_a_net_of_a_bare_pad_is_listed(measured: Evidence) -> None:
    pins = measured.connections.pins
    record = record_of(measured, "nets", names=((),) * 7)
    assert len(record["nets"]) == 5, "pins and pads list them still"
    bare = synthetic_scan.changed(measured, "connections.nets", names=((),) * 7)
    bare = synthetic_scan.changed(bare, "connections.pins", net_pin=np.full_like(pins.net_pin, -1))
    ids = [net["id"] for net in scan_record(synthetic_scan.scan(bare))["nets"]]
    assert ids == ["net-1", "net-2", "net-3", "net-4"], "VIO has no pad"


def test_pins_carry_voltages_current_and_injectors(record: dict[str, Any]) -> None:
    pins = {pin["name"]: pin for pin in record["pins"]}
    assert pins["drive"] == {
        "name": "drive",
        "kind": "signal",
        "nets": ["net-1"],
        "x_um": -2.0,
        "y_um": -1.5,
        "has_pad": True,
        "joined_names": [],
        "low_v": 0.0,
        "high_v": 1.98,
        "test_current_a": 0.1,
        "injector_counts": {"below_ground": 6, "above_supply": 1},
    }
    assert pins["VSS"]["test_current_a"] is None
    assert pins["sense"]["low_v"] is None
    assert pins["VIO"]["has_pad"] is False


def test_injectors_tell_the_way_to_them(measured: Evidence, record: dict[str, Any]) -> None:
    last = record["injectors"][-1]
    emitters = measured.layout.emitters
    row = emitters.ids.tolist().index(last["emitter"])
    x0, y0, x1, y1 = emitters.box_um[row].tolist()
    assert last == {
        "class": "pin",
        "pin": "sense",
        "polarity": "below_ground",
        "emitter": last["emitter"],
        "body": "substrate",
        "net": f"net-{SENSE_INNER + 1}",
        "resistance_ohm": SENSE_OHM,
        "area_um2": emitters.area_um2[row],
        "share": 1.0,
        "x_um": (x0 + x1) / 2,
        "y_um": (y0 + y1) / 2,
    }
    assert {one["resistance_ohm"] for one in record["injectors"][:-1]} == {0.0}
    assert record["injectors"][0]["share"] == pytest.approx(1 / 6, rel=1e-5)


def test_a_whole_well_an_internal_node_and_an_unknown_resistance(
    measured: Evidence, validator: Draft202012Validator
) -> None:
    injectors = measured.connections.injectors
    columns = {
        name: np.array(getattr(injectors, name))
        for name in ("reason", "pin", "emitter", "body", "resistance_ohm", "share")
    }
    columns["emitter"][0], columns["body"][0] = -1, 2
    columns["reason"][1], columns["pin"][1], columns["share"][1] = BY_SUPPLY, -1, np.nan
    columns["resistance_ohm"][2] = np.nan
    record = record_of(measured, "injectors", **columns)
    validator.validate(record)
    well, internal, unknown = record["injectors"][:3]
    assert (well["emitter"], well["body"]) == (None, "nwell-3")
    x0, y0, x1, y1 = measured.layout.bodies[2].polygons[0].bounds
    assert (well["x_um"], well["y_um"]) == ((x0 + x1) / 2, (y0 + y1) / 2)
    assert (internal["class"], internal["pin"], internal["share"]) == ("internal", None, None)
    assert unknown["resistance_ohm"] is None


def test_rings_tell_openings_net_and_members(record: dict[str, Any]) -> None:
    closed, opened, collector = record["rings"]
    assert closed["closed"]
    assert closed["gaps"] == []
    assert opened["gaps"] == [{"x_um": 1.0 + GAP_UM / 2, "y_um": 24.4, "width_um": GAP_UM}]
    assert (opened["kind"], opened["material"]) == ("majority", "substrate_tap")
    assert opened["bbox_um"] == [0.2, 24.2, 6.0, 29.0]
    assert (opened["width_um"], opened["width_at_um"]) == (0.4, [0.4, 26.0])
    assert opened["contacted_share"] == 0.3
    assert opened["injector_count"] == 1
    assert opened["injectors"] == [
        {"emitter": "n-47", "body": "substrate", "pin": "sense", "distance_um": 0.4}
    ]
    assert (closed["between_emitters"], closed["between_wells"]) == (17, 0)
    assert (collector["kind"], collector["net"]) == ("minority", "net-2")
    assert [ring["net_suits"] for ring in record["rings"]] == [True, True, False]


def test_a_ring_lists_so_many_injectors_and_no_more(
    measured: Evidence, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr("latchscan.report.record_connections.LARGEST_MEMBER_COUNT", 2)
    record = record_of(
        measured,
        "rings",
        member_first=np.array([0, 5, 6, 7]),
        member_injector=np.array([0, 1, 2, 3, 4, 7, 0]),
        member_distance_um=np.arange(7.0),
    )
    assert [ring["injector_count"] for ring in record["rings"]] == [5, 1, 1]
    assert [one["distance_um"] for one in record["rings"][0]["injectors"]] == [0.0, 1.0]


def test_what_is_not_known_of_a_ring_is_null(
    measured: Evidence, validator: Draft202012Validator
) -> None:
    unknown = np.full(3, -1)
    record = record_of(measured, "rings", net=unknown, net_suits=unknown)
    validator.validate(record)
    assert {(ring["net"], ring["net_suits"]) for ring in record["rings"]} == {(None, None)}


def test_bodies_tell_what_holds_them(record: dict[str, Any]) -> None:
    bodies = {body["id"]: body for body in record["bodies"]}
    assert list(bodies)[-1] == "substrate"
    fourth = bodies["nwell-4"]
    assert fourth["nets"] == [{"net": "net-7", "contact_count": 1}]
    assert (fourth["rail"], fourth["rail_pin"]) == ("net-3", "VDD")
    assert fourth["tie_resistance_ohm"] == WELL_OHM
    assert (fourth["low_v"], fourth["high_v"]) == (1.62, 1.98)
    untied = bodies["nwell-2"]
    assert untied["nets"] == []
    assert untied["tap_count"] == 0
    assert untied["emitter_count"] == 23
    for key in ("rail", "rail_pin", "tie_resistance_ohm", "low_v", "high_v", "enclosing"):
        assert untied[key] is None
    assert bodies["nwell-1"]["tie_resistance_ohm"] == 0.0
    assert bodies["substrate"]["bbox_um"] == record["layout"]["bbox_um"]


def test_resistors_join_nets(record: dict[str, Any]) -> None:
    assert [(row["kind"], row["nets"], row["ohm"]) for row in record["resistors"]] == [
        ("strap", ["net-3", "net-3"], STRAP_OHM),
        ("poly_resistor", ["net-4", "net-5"], SENSE_OHM),
        ("poly_resistor", ["net-3", "net-7"], WELL_OHM),
    ]
    assert record["resistors"][1]["bbox_um"] == [40.0, 25.0, 70.0, 26.0]


def test_straps_of_nets_without_a_name_are_left_out(measured: Evidence) -> None:
    node = np.array(measured.connections.links.node)
    node[1] = SENSE_INNER
    moved = synthetic_scan.changed(measured, "connections.links", node=node)
    kind = np.array([STRAP, STRAP, "poly_resistor"])
    record = record_of(moved, "nets.resistors", kind=kind)
    assert [row["ohm"] for row in record["resistors"]] == [STRAP_OHM, WELL_OHM]


def test_hostile_names_stay_text(measured: Evidence) -> None:
    name = 'a"\u0000\u202e</x>' + "y" * 300
    names = np.array(["VDD", "VIO", "VSS", name, "sense"])
    record = record_of(measured, "pins", names=names)
    shown = record["pins"][3]["name"]
    assert shown.startswith('a"\ufffd\ufffd</x>y')
    assert len(shown) == 200
    assert record["nets"][0]["pin"] == shown
