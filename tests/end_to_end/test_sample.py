"""The shipped sample: every planted fault found at its place and measure, nothing invented.

The measures in the tables of ``samples/valve_driver.py`` are worked out by hand from the
drawn coordinates.
"""

from __future__ import annotations

import json
import subprocess
import sys
from pathlib import Path
from typing import Any

import pytest
from valve_driver import Planted, draw_block, main

_, FAULTS, NEAR_MISSES = draw_block()
ISLAND_REACH_UM = 30.0
PLACE_UM = 0.01
MEASURE_UM = 0.005


@pytest.fixture(scope="module")
def result(repository: Path, tmp_path_factory: pytest.TempPathFactory) -> dict[str, Any]:
    """`scan.json` of the sample, made by the command of the README."""
    out = tmp_path_factory.mktemp("sample")
    options = ["--tech", "techfiles/larch180.yaml", "--out", str(out)]
    run = subprocess.run(
        [sys.executable, "-m", "latchscan", "scan", "samples/valve_driver.gds", *options],
        cwd=repository,
        capture_output=True,
        text=True,
        check=False,
    )
    assert run.returncode == 1, run.stderr
    assert run.stderr == ""
    loaded: dict[str, Any] = json.loads((out / "scan.json").read_text())
    return loaded


def of_rule(result: dict[str, Any], planted: Planted) -> list[dict[str, Any]]:
    """Findings of the planted rule whose place lies on the planted island."""
    return [
        finding
        for finding in result["findings"]
        if finding["rule"] == planted.rule
        and abs(finding["x_um"] - planted.x_um) < ISLAND_REACH_UM / 2
        and abs(finding["y_um"] - planted.y_um) < ISLAND_REACH_UM / 2
    ]


def test_shipped_layout_is_what_the_script_draws(repository: Path, tmp_path: Path) -> None:
    main(tmp_path / "drawn.gds")
    shipped = repository / "samples" / "valve_driver.gds"
    assert (tmp_path / "drawn.gds").read_bytes() == shipped.read_bytes()


@pytest.mark.parametrize("fault", FAULTS, ids=lambda fault: fault.name)
def test_planted_fault_is_found(result: dict[str, Any], fault: Planted) -> None:
    found = of_rule(result, fault)
    assert len(found) == 1
    if fault.measured is not None:
        assert found[0]["measured"] == pytest.approx(fault.measured, abs=MEASURE_UM)
        assert found[0]["x_um"] == pytest.approx(fault.x_um, abs=PLACE_UM)
        assert found[0]["y_um"] == pytest.approx(fault.y_um, abs=PLACE_UM)


@pytest.mark.parametrize("near", NEAR_MISSES, ids=lambda near: near.name)
def test_near_miss_is_not_reported(result: dict[str, Any], near: Planted) -> None:
    assert of_rule(result, near) == []


def test_nothing_else_fails(result: dict[str, Any]) -> None:
    fails = [finding for finding in result["findings"] if finding["severity"] == "fail"]
    explained = [finding for fault in FAULTS for finding in of_rule(result, fault)]
    assert [finding for finding in fails if finding not in explained] == []
