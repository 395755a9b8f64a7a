"""``scan.json`` against its published schema and against the scan it was made of."""

from __future__ import annotations

import json
from importlib.resources import files
from typing import Any

import numpy as np
import pytest
import shapely
import synthetic_scan
from jsonschema import Draft202012Validator

from latchscan.layout.model import REGION_NAMES
from latchscan.report.record import scan_json, scan_record
from latchscan.rules import RULES
from latchscan.scan import Scan


@pytest.fixture(name="scan", scope="module")
def _scan() -> Scan:
    return synthetic_scan.scan()


@pytest.fixture(name="schema", scope="module")
def _schema() -> dict[str, Any]:
    text = files("latchscan.report").joinpath("scan.schema.json").read_text("utf-8")
    return json.loads(text)


def test_schema_is_itself_valid_and_accepts_the_record(scan: Scan, schema: dict[str, Any]) -> None:
    Draft202012Validator.check_schema(schema)
    Draft202012Validator(schema).validate(json.loads(scan_json(scan)))


def test_schema_names_every_rule(schema: dict[str, Any]) -> None:
    assert schema["$defs"]["finding"]["properties"]["rule"]["enum"] == list(RULES)


@pytest.mark.parametrize("key", ["format", "sites", "findings", "caveats", "temperature_c"])
def test_schema_rejects_a_record_without_a_part(
    scan: Scan, schema: dict[str, Any], key: str
) -> None:
    record = scan_record(scan)
    del record[key]
    assert not Draft202012Validator(schema).is_valid(record)
    assert not Draft202012Validator(schema).is_valid({**scan_record(scan), "more": 1})


def test_the_same_scan_gives_the_same_bytes(scan: Scan) -> None:
    assert scan_json(scan) == scan_json(synthetic_scan.scan())


def test_regions_wells_and_sites_are_those_of_the_scan(scan: Scan) -> None:
    record = scan_record(scan)
    layout, evidence = scan.evidence.layout, scan.evidence
    assert tuple(record["regions"]) == REGION_NAMES
    area = shapely.area(layout.regions.shapes["nwell"]).sum()
    assert record["regions"]["nwell"] == {"count": 6, "area_um2": pytest.approx(area, rel=1e-8)}
    first, second = record["wells"][:2]
    own = np.flatnonzero(layout.emitters.body == 0)
    assert first["emitter_count"] == len(own)
    assert first["worst_tap_distance_um"] == evidence.distances.tap_distance_um[own].max()
    assert first["worst_well_resistance_ohm"] == evidence.resistances.mean_ohm[own].max()
    assert first["tap_count"] == 1
    assert second["tap_count"] == 0
    assert second["worst_tap_distance_um"] is None
    assert second["worst_well_resistance_ohm"] is None
    gains = [site["loop_gain"] for site in record["sites"] if site["loop_gain"] is not None]
    assert gains == sorted(gains, reverse=True)
    assert record["sites"][0]["anode"] == "p-23"
    assert record["sites"][0]["cathode"] == "n-23"


def test_only_the_thousand_worst_sites_are_kept() -> None:
    many = synthetic_scan.scan(synthetic_scan.evidence(rows=30, cells=45))
    assert len(many.evidence.sites.ids) > 1000
    record = scan_record(many)
    assert len(record["sites"]) == 1000
    assert record["sites"][-1]["id"] == "site-1000"


def test_hostile_names_stay_text() -> None:
    name = 'a"\u0000\ud800\u202e</x>' + "y" * 5000
    record = json.loads(scan_json(synthetic_scan.scan(top=name)))
    assert record["layout"]["top"].startswith('a"\ufffd\ufffd\ufffd</x>y')
    assert len(record["layout"]["top"]) == 200
