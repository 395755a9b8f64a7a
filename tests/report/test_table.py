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
    "resistance_error"
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


@pytest.mark.parametrize("text", ["=1+1", "+1", "-1", "@x", "\t=1", "\r=1"])
def test_no_cell_starts_a_formula(text: str) -> None:
    assert safe_cell(text)[0] == "'"
    assert safe_cell("n-12") == "n-12"
