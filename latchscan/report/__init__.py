"""Reports: a `Scan` in, files and text out.  Nothing here computes a measure.

Add a report: write a function from a `Scan` to bytes in its own file and name it in
`REPORTS`.
"""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path

from latchscan.report.record import scan_json
from latchscan.report.svg_map import heatmap_svg
from latchscan.report.table import emitters_csv
from latchscan.report.write import write_all
from latchscan.scan import Scan

REPORTS: tuple[tuple[str, Callable[[Scan], bytes]], ...] = (
    ("scan.json", scan_json),
    ("emitters.csv", lambda scan: emitters_csv(scan.evidence)),
    ("heatmap.svg", heatmap_svg),
)
"""File name -> what fills it."""


def write_reports(scan: Scan, out_dir: Path) -> tuple[Path, ...]:
    """Write every report into `out_dir`, all of them whole or none.

    Raises
    ------
    OutputError
        A file cannot be written; what was there before stays.
    """
    return write_all(out_dir, {name: make(scan) for name, make in REPORTS})
