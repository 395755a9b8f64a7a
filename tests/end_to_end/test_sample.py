"""The shipped sample: every planted fault found at its place and measure, nothing invented.

The measures in the tables of ``samples/valve_driver*.py`` and the places of injectors below are
worked out by hand from the drawn coordinates.
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
PLACE_UM = {
    "untied-body": 0.01,
    "tap-distance": 0.01,
    "tap-reach": 0.01,
    "uncontacted-tap": 0.01,
    "injector-spacing": 0.01,
    "net-names": 0.01,
    "tie-net": 0.01,
    "tie-conflict": 15.0,  # either tap
    "tie-resistance": 0.01,
    "forward-bias": 0.01,
    "isolation-gap": 1.75,  # anywhere along the opening, which is 3.5 um long
    "well-spacing": 10.01,  # anywhere between edges that face each other for 20 um
    "ring-gap": 0.51,  # anywhere along the opening, which is 1 um long
    "ring-width": 2.5,  # anywhere along the thin strip
    "ring-contacts": 3.5,  # anywhere on the ring
    "ring-net": 0.51,  # anywhere across the left strip
    "ring-missing": 0.01,
    "double-ring": 3.01,  # anywhere between edges that face each other for 6 um
    "well-resistance": 4.0,  # inside the emitter's group
    "loop-gain": 8.0,  # along the pair
}
"""How far from the planted place a finding of each rule may lie [um]."""
MEASURE = 0.005
"""Largest error of a measure, in the rule's own unit, that is read from the drawing."""
SOLVED_SHARE = {"tie-resistance": 0.01}
"""Largest relative error of a measure whose hand calculation leaves out how current spreads."""


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
        and abs(finding["x_um"] - planted.x_um) <= ISLAND_REACH_UM / 2
        and abs(finding["y_um"] - planted.y_um) <= ISLAND_REACH_UM / 2
    ]


def test_shipped_layout_is_what_the_script_draws(repository: Path, tmp_path: Path) -> None:
    main(tmp_path / "drawn.gds")
    shipped = repository / "samples" / "valve_driver.gds"
    assert (tmp_path / "drawn.gds").read_bytes() == shipped.read_bytes()


@pytest.mark.parametrize("fault", FAULTS, ids=lambda fault: fault.name)
def test_planted_fault_is_found(result: dict[str, Any], fault: Planted) -> None:
    found = of_rule(result, fault)
    assert len(found) == 1
    assert found[0]["x_um"] == pytest.approx(fault.x_um, abs=PLACE_UM[fault.rule])
    assert found[0]["y_um"] == pytest.approx(fault.y_um, abs=PLACE_UM[fault.rule])
    if fault.measured is not None:
        share = SOLVED_SHARE.get(fault.rule, 0.0)
        assert found[0]["measured"] == pytest.approx(fault.measured, abs=MEASURE, rel=share)


@pytest.mark.parametrize("near", NEAR_MISSES, ids=lambda near: near.name)
def test_near_miss_is_not_reported(result: dict[str, Any], near: Planted) -> None:
    assert of_rule(result, near) == []


def test_nothing_else_fails(result: dict[str, Any]) -> None:
    fails = [finding for finding in result["findings"] if finding["severity"] == "fail"]
    explained = [finding for fault in FAULTS for finding in of_rule(result, fault)]
    assert [finding for finding in fails if finding not in explained] == []


def test_findings_stand_for_what_was_planted_alone(result: dict[str, Any]) -> None:
    """A finding may stand for several members; here each is one planted place."""
    grouped = {
        finding["rule"]: finding["count"]
        for finding in result["findings"]
        if finding["count"] != 1 and finding["rule"] not in {"well-resistance", "loop-gain"}
    }
    assert grouped == {}


# --- pins ------------------------------------------------------------------------------------


HEAD_OHM = 9.0 / 16
"""A head of a resistor: 4 x 4 contacts of 9 ohm on 2 x 2 um."""
RESISTOR_OHM = 10 * 300.0 + 2 * HEAD_OHM
"""Marked poly, 20 um long and 2 um wide."""


def drain(piece: int, driver: int, offset_um: float) -> float:
    """x of the middle of a piece of a driver: pieces stand 1 um apart and are 0.6 um wide."""
    return 16 + 118 * driver + offset_um + piece + 0.3


def driver_diffusions(driver: int) -> set[tuple[str, float, float, float]]:
    """Every second piece of the pull-down, and of both rows of the pull-up, is a drain."""
    down = {("below_ground", drain(piece, driver, 4.7), 92.0, 0.0) for piece in range(1, 20, 2)}
    up = {
        ("above_supply", drain(piece, driver, 59.7), y, 0.0)
        for piece in range(1, 36, 2)
        for y in (70 + 7.5 + 12.5 / 2, 70 + 24 + 12.5 / 2)
    }
    return down | up


REACHED: dict[str, set[tuple[str, float, float, float]]] = {
    **{f"VALVE{driver}": driver_diffusions(driver) for driver in range(4)},
    "CLOCK": {("below_ground", 514.0, 90.0, 0.0)},
    "DATA": {
        *(("below_ground", 39.0 + 60 * cage, 368.0, 0.0) for cage in range(8)),
        ("below_ground", 384.9, 420.0, 0.0),
    },
    "FLOW": {("below_ground", 31.0, 420.0, 0.0)},
    "LEVEL": {("below_ground", 84.9, 420.0, 0.0)},
    "ALARM": {("below_ground", 153.0, 420.0, 0.0)},
    "TEST": {("below_ground", 208.0, 420.0, RESISTOR_OHM)},
    "RESET": {("below_ground", 264.9, 420.0, RESISTOR_OHM)},
    "BIAS": {("below_ground", 339.0, 420.0, 0.0)},
}
"""Per pin every diffusion or well it reaches: polarity, middle (x, y) [um], resistance [ohm]."""


def test_every_pin_reaches_the_drawn_diffusions(result: dict[str, Any]) -> None:
    found: dict[str, set[tuple[str, float, float, float]]] = {}
    for row in result["injectors"]:
        if row["class"] == "pin":
            place = round(row["x_um"], 3), round(row["y_um"], 3)
            found.setdefault(row["pin"], set()).add(
                (row["polarity"], *place, round(row["resistance_ohm"], 1))
            )
    expected = {
        pin: {(way, round(x, 3), round(y, 3), round(ohm, 1)) for way, x, y, ohm in rows}
        for pin, rows in REACHED.items()
    }
    assert found == expected


def test_a_marker_makes_the_only_injector_without_a_pin(result: dict[str, Any]) -> None:
    rows = [row for row in result["injectors"] if row["class"] != "pin"]
    assert [(row["class"], row["x_um"], row["y_um"]) for row in rows] == [("marker", 454.0, 420.0)]


def test_a_pin_shares_its_current_by_area(result: dict[str, Any]) -> None:
    """DATA: eight diodes of 2.8 x 2.8 um and one of 6 x 6 um, none behind a resistance."""
    area = 8 * 2.8**2 + 6.0**2
    shares = {row["x_um"]: row["share"] for row in result["injectors"] if row["pin"] == "DATA"}
    assert shares.pop(384.9) == pytest.approx(6.0**2 / area, rel=1e-3)
    assert list(shares.values()) == pytest.approx([2.8**2 / area] * 8, rel=1e-3)


def test_findings_name_the_pin_of_an_injector(result: dict[str, Any]) -> None:
    """Neither metal 4 alone nor a resistor hides which pin drives a diode."""
    spoken = {
        finding["message"]
        for finding in result["findings"]
        if finding["rule"] == "injector-spacing"
    }
    for pin in ("FLOW", "ALARM", "TEST"):
        assert sum(f"({pin})" in message for message in spoken) == 1


def test_every_body_hangs_on_its_rail(result: dict[str, Any]) -> None:
    """Rails as wired in the drawing, but for the well that is planted on two of them."""
    torn = {finding["body"] for finding in result["findings"] if finding["rule"] == "tie-conflict"}
    rails = [body["rail_pin"] for body in result["bodies"] if body["id"] not in torn]
    # four drivers, the collector of CLOCK, the wall, two of two close wells, two other islands
    assert rails.count("VDDIO") == 4 + 1 + 1 + 2 + 2
    # substrate, isolated p-wells of two islands and of the sense amplifier, one n-well ring
    assert rails.count("VSS") == 1 + 2 + 1 + 1
    # the well and the isolated p-well without a tap, and the well on BIAS
    assert rails.count(None) == 2 + 1
    assert set(rails) == {"VSS", "VDD", "VDDIO", None}


# --- rings -----------------------------------------------------------------------------------


CAGE_RINGS = {
    # x of the diode: closed, widths of the openings, least width, contacted share
    39.0: (False, [2.0], 1.0, 1.0),
    99.0: (True, [], 1.0, 1.0),
    159.0: (True, [], 1.0, (6.8 + 2 * 1.86) / 23.2),
    219.0: (True, [], 1.0, None),
    279.0: (True, [], 0.4, 1.0),
    339.0: (True, [], 0.6, 1.0),
    399.0: (True, [], 1.0, 1.0),
}
"""Rings of substrate taps around the diodes of DATA in their cages; the eighth has none."""


def test_rings_of_the_cages_are_measured_as_drawn(result: dict[str, Any]) -> None:
    rings = [
        ring
        for ring in result["rings"]
        if ring["kind"] == "majority" and 346 < ring["bbox_um"][1] < 390
    ]
    assert [ring["bbox_um"][0] for ring in rings] == pytest.approx([x - 3.4 for x in CAGE_RINGS])
    for ring, (closed, openings, width, share) in zip(rings, CAGE_RINGS.values(), strict=True):
        assert ring["closed"] is closed
        assert [gap["width_um"] for gap in ring["gaps"]] == pytest.approx(openings, abs=MEASURE)
        assert ring["width_um"] == pytest.approx(width, abs=MEASURE)
        if share is not None:
            assert ring["contacted_share"] == pytest.approx(share, abs=MEASURE)
        assert ring["net_suits"] is True


def test_every_driver_stands_in_closed_rings_of_both_kinds(result: dict[str, Any]) -> None:
    """Pull-down: its substrate taps; pull-up: its well's taps, and substrate taps around it."""
    for driver in range(4):
        left = 16 + 118 * driver
        for kind, offsets in (
            ("majority", (left, 70, left + 30, 114)),
            ("majority", (left + 54, 74, left + 102, 110)),
            ("minority", (left + 50, 70, left + 106, 114)),
        ):
            found = [
                ring
                for ring in result["rings"]
                if ring["kind"] == kind and ring["bbox_um"] == pytest.approx(offsets)
            ]
            assert len(found) == 1
            assert found[0]["closed"]
            assert found[0]["net_suits"]
            assert found[0]["width_um"] == pytest.approx(1.5)
