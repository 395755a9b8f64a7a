"""What the command concludes: the same bytes for any number of workers, and honest gaps.

Source of the expectations: the project's own promises (README, exit status).
"""

from __future__ import annotations

import json
from pathlib import Path

import pytest
from layouts import rows_block

from latchscan.cli import run
from latchscan.errors import ConvergenceError
from latchscan.parasitics import substrate, well


def scanned(layout: Path, out: Path, *options: str) -> int:
    """Run the command on a block and return its exit status."""
    return run(["scan", str(layout), "--tech", "larch180", "--out", str(out), "--quiet", *options])


def test_the_same_bytes_for_any_number_of_workers(tmp_path: Path) -> None:
    layout = rows_block(3).write(tmp_path / "block.gds")
    statuses = {scanned(layout, tmp_path / jobs, "--jobs", jobs) for jobs in ("1", "2", "3")}
    assert len(statuses) == 1
    for name in ("scan.json", "emitters.csv", "heatmap.svg"):
        contents = {(tmp_path / jobs / name).read_bytes() for jobs in ("1", "2", "3")}
        assert len(contents) == 1, name


@pytest.mark.parametrize("part", ["wells", "substrate"])
def test_a_window_without_solution_never_passes(
    part: str, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    def fail(*_: object) -> None:
        raise ConvergenceError("no solution")

    if part == "wells":
        monkeypatch.setattr(well, "solve_window", fail)
    else:
        monkeypatch.setattr(substrate, "_solve", fail)
    layout = rows_block(3).write(tmp_path / "block.gds")
    assert scanned(layout, tmp_path / "out", "--jobs", "1") == 3
    record = json.loads((tmp_path / "out" / "scan.json").read_text())
    assert "unsolved" in {caveat["code"] for caveat in record["caveats"]}
    blind = [f for f in record["findings"] if f["rule"] == "loop-gain" and f["measured"] is None]
    assert blind
    assert record["sites"][0]["loop_gain"] is None


def test_material_numbers_change_with_temperature(tmp_path: Path) -> None:
    layout = rows_block(3).write(tmp_path / "block.gds")
    worst = []
    for temperature in ("25", "125"):
        scanned(layout, tmp_path / temperature, "--temperature", temperature, "--jobs", "1")
        record = json.loads((tmp_path / temperature / "scan.json").read_text())
        assert record["temperature_c"] == float(temperature)
        worst.append(record["sites"][0]["loop_gain"])
    assert worst[1] > worst[0]
