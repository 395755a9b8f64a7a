"""The text for a terminal."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
import synthetic_scan

from latchscan.caveats import SENTENCES, Caveat
from latchscan.layout.connections import BY_MARKER, BY_PIN, BY_SUPPLY
from latchscan.report.summary import summary
from latchscan.scan import Scan


@pytest.fixture(name="scan", scope="module")
def _scan() -> Scan:
    return synthetic_scan.scan(top="x" * 300)


def test_it_fits_eighty_columns_and_names_everything(scan: Scan) -> None:
    text = summary(scan, (Path("out/scan.json"), Path("out/heatmap.svg")))
    assert max(len(line) for line in text.splitlines()) <= 80
    for words in ("site-1", "tap-distance", "untied-body", "out/scan.json", "out/heatmap.svg"):
        assert words in text
    assert SENTENCES["estimate"] in " ".join(text.split())
    assert "\x1b" not in text


def test_severities_can_be_painted(scan: Scan) -> None:
    text = summary(scan, (), lambda words, severity: f"<{severity}>{words}</>")
    assert "<fail>fail" in text
    assert "<watch>watch" in text


def test_a_clean_block_says_so() -> None:
    scan = synthetic_scan.scan()
    clean = replace(scan, findings=(), caveats=())
    assert "Findings: none" in summary(clean, ())


def test_connections_are_counted(scan: Scan) -> None:
    words = " ".join(summary(scan, ()).split())
    # the counts that `synthetic_connections` states
    for told in (
        "pins 2 signal, 2 supply, 1 ground",
        "nets 7 with a name, a pad or a diffusion, 5 of them named",
        "injectors by pin: 7 below ground, 1 above supply, 1 of them through a resistor",
        "rings majority 1 closed, 1 open; minority 0 closed, 1 open",
        "bodies 4 of 7 tied directly, 2 through a resistance, 1 on no rail",
    ):
        assert told in words


def test_markers_and_internal_nodes_are_counted_apart() -> None:
    measured = synthetic_scan.evidence(connected=True)
    reason = np.array([BY_PIN] * 4 + [BY_MARKER] * 2 + [BY_SUPPLY] * 2)
    changed = synthetic_scan.changed(
        measured,
        "connections.injectors",
        reason=reason,
        pin=np.where(reason == BY_PIN, 3, -1),
        resistance_ohm=np.where(reason == BY_PIN, 0.0, np.nan),
    )
    words = " ".join(summary(synthetic_scan.scan(changed), ()).split())
    assert "injectors by pin: 4 below ground injectors by marker: 2 below ground" in words
    assert "injectors on internal nodes: 1 below ground, 1 above supply" in words
    assert "through a resistor" not in words


def test_what_is_not_known_is_not_counted() -> None:
    text = summary(synthetic_scan.scan(synthetic_scan.evidence()), ())
    assert "Connections" not in text
    assert "rings" not in text


def test_every_label_on_nothing_is_told_up_to_a_screenful(scan: Scan) -> None:
    labels = tuple(
        Caveat(code="label-on-nothing", detail=f"`PIN{row}` at ({row}, 7) um") for row in range(12)
    )
    numbers = tuple(Caveat(code="assumed-number", detail=f"wells.{row}") for row in range(12))
    lines = summary(replace(scan, caveats=labels + numbers), ()).splitlines()
    told = [line for line in lines if line.startswith("  - ")]
    assert told == [f"  - `PIN{row}` at ({row}, 7) um" for row in range(9)]
    assert "    and 3 more in scan.json" in lines
    assert "12 times; scan.json lists them" in " ".join(" ".join(lines).split())


def test_a_long_hostile_detail_stays_within_the_columns(scan: Scan) -> None:
    caveat = Caveat(code="label-on-nothing", detail="`\x1b[31m" + "w" * 900 + "` at (1, 2) um")
    text = summary(replace(scan, caveats=(caveat,)), ())
    assert "\x1b" not in text
    assert max(len(line) for line in text.splitlines()) <= 80
