"""The text for a terminal."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path

import pytest
import synthetic_scan

from latchscan.caveats import SENTENCES
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
