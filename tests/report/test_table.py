"""``emitters.csv`` read back by Python's own csv reader (RFC 4180)."""

from __future__ import annotations

import csv
import io

import numpy as np
import pytest
import synthetic_scan

from latchscan.report.table import emitters_csv, safe_cell
from latchscan.rules.model import Evidence

HEADER = (
    "id,kind,body,x0_um,y0_um,x1_um,y1_um,area_um2,tap_distance_um,tap_distance_x_um,"
    "tap_distance_y_um,self_resistance_ohm,self_resistance_max_ohm,patch_resistance_ohm,"
    "resistance_error,net,injector,injector_resistance_ohm"
)


@pytest.fixture(name="measured", scope="module")
def _measured() -> Evidence:
    return synthetic_scan.evidence()


def test_header_and_one_row_an_emitter(measured: Evidence) -> None:
    text = emitters_csv(measured).decode("utf-8")
    assert text.splitlines()[0] == HEADER
    rows = list(csv.DictReader(io.StringIO(text)))
    assert [row["id"] for row in rows] == measured.layout.emitters.ids.tolist()
    assert {row["kind"] for row in rows} == {"p_in_nwell", "n_outside_nwell"}
    assert text.endswith("\n")
    assert "\r" not in text


def test_numbers_come_back(measured: Evidence) -> None:
    rows = list(csv.DictReader(io.StringIO(emitters_csv(measured).decode("utf-8"))))
    count = len(rows)
    for column, values in {
        "x1_um": measured.layout.emitters.box_um[:, 2],
        "area_um2": measured.layout.emitters.area_um2,
        "tap_distance_um": measured.distances.tap_distance_um,
        "tap_distance_y_um": measured.distances.farthest_um[:, 1],
        "self_resistance_ohm": measured.resistances.mean_ohm[:count],
        "self_resistance_max_ohm": measured.resistances.max_ohm[:count],
        "patch_resistance_ohm": measured.resistances.patch_ohm[:count],
        "resistance_error": measured.resistances.relative_error[:count],
    }.items():
        read = [float(row[column] or "nan") for row in rows]
        np.testing.assert_allclose(read, values, atol=6e-5, err_msg=column)


def test_a_missing_measure_is_empty_and_an_unbounded_one_says_so(measured: Evidence) -> None:
    rows = list(csv.DictReader(io.StringIO(emitters_csv(measured).decode("utf-8"))))
    untied = next(row for row in rows if row["body"] == "nwell-2")
    assert untied["tap_distance_um"] == ""
    assert untied["self_resistance_ohm"] == "inf"


def test_nets_and_injectors_of_the_emitters() -> None:
    connected = synthetic_scan.evidence(connected=True)
    text = emitters_csv(connected).decode("utf-8")
    rows = {row["id"]: row for row in csv.DictReader(io.StringIO(text))}
    columns = ("net", "injector", "injector_resistance_ohm")
    # as `synthetic_connections` says
    assert tuple(rows["n-1"][column] for column in columns) == ("net-1", "drive", "0.0000")
    assert tuple(rows["n-47"][column] for column in columns) == ("net-5", "sense", "250.0000")
    assert tuple(rows["n-2"][column] for column in columns) == ("net-2", "", "")
    assert rows["p-2"]["net"] == "net-3"


def test_of_two_ways_to_an_emitter_the_shorter_counts() -> None:
    connected = synthetic_scan.evidence(connected=True)
    injectors = connected.connections.injectors
    emitter = np.full_like(injectors.emitter, injectors.emitter[0])
    ohm = np.array([np.nan, 30.0, 20.0, 40.0, np.nan, 50.0, 60.0, 70.0])
    changed = synthetic_scan.changed(
        connected, "connections.injectors", emitter=emitter, resistance_ohm=ohm
    )
    rows = csv.DictReader(io.StringIO(emitters_csv(changed).decode("utf-8")))
    found = {row["id"]: row["injector_resistance_ohm"] for row in rows}
    assert {name: ohm for name, ohm in found.items() if ohm} == {"n-1": "20.0000"}


def test_without_nets_the_columns_are_empty(measured: Evidence) -> None:
    rows = list(csv.DictReader(io.StringIO(emitters_csv(measured).decode("utf-8"))))
    assert {row["net"] for row in rows} == {""}
    assert {row["injector"] for row in rows} == {"", "drive"}


@pytest.mark.parametrize("text", ["=1+1", "+1", "-1", "@x", "\t=1", "\r=1"])
def test_no_cell_starts_a_formula(text: str) -> None:
    assert safe_cell(text)[0] == "'"
    assert safe_cell("n-12") == "n-12"
