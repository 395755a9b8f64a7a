"""Run every benchmark and print the table of README.md beside this file.

``python tests/bench/measure.py [FOLDER]``; layouts are made in FOLDER (a temporary one by
default).  Times are wall seconds of whole processes or of the named stage, peaks are the
largest resident size of one process.
"""

from __future__ import annotations

import json
import math
import os
import subprocess
import sys
import tempfile
import time
from pathlib import Path

from generators import MAKERS

from latchscan.layout.bodies import assemble_layout
from latchscan.layout.pairs import find_pairs
from latchscan.layout.regions import derive_regions
from latchscan.layout.source import open_layout
from latchscan.parasitics.well import solve_wells
from latchscan.tasks import Silent, open_workers
from latchscan.technology.load import load_technology

HERE = Path(__file__).parent
RUNS = 3


def process(command: list[str]) -> tuple[float, float]:
    """Wall seconds and peak resident megabytes of a command and its children."""
    start = time.perf_counter()
    child = subprocess.Popen(command, stdout=subprocess.DEVNULL, stderr=subprocess.DEVNULL)
    _, _, usage = os.wait4(child.pid, 0)
    return time.perf_counter() - start, usage.ru_maxrss / 1024


def median_process(command: list[str], runs: int = RUNS) -> tuple[float, float]:
    """Median seconds and largest peak of several runs."""
    measured = sorted(process(command) for _ in range(runs))
    return measured[len(measured) // 2][0], max(peak for _, peak in measured)


def scan_command(layout: Path, out: Path) -> list[str]:
    """The command a user would type."""
    options = ["--tech", "open130", "--out", str(out), "--jobs", "2"]
    return [sys.executable, "-m", "latchscan", "scan", str(layout), *options]


def regions_seconds(layout: Path) -> float:
    """Median seconds to derive the regions of an opened layout in two processes."""
    technology = load_technology("open130").technology
    source = open_layout(layout, technology=technology, top=None)
    with open_workers(2, Silent()) as workers:
        times = []
        for _ in range(RUNS):
            start = time.perf_counter()
            derive_regions(source, technology, None, workers)
            times.append(time.perf_counter() - start)
    return sorted(times)[RUNS // 2]


def wells_seconds_each(layout: Path) -> float:
    """Seconds per p+ emitter of the well solves, in one process."""
    technology = load_technology("open130").technology
    source = open_layout(layout, technology=technology, top=None)
    with open_workers(1, Silent()) as workers:
        block = assemble_layout(derive_regions(source, technology, None, workers), technology)
        pairs = find_pairs(block, technology.loop.pair_reach_um)
        start = time.perf_counter()
        solve_wells(block, pairs, technology, 300.15, workers)
        count = int((block.emitters.kind == 0).sum())
        return (time.perf_counter() - start) / count


def peer(*arguments: str) -> dict[str, object]:
    """Result of one of the plain scripts in peers.py."""
    command = [sys.executable, str(HERE / "peers.py"), *arguments]
    done = subprocess.run(command, capture_output=True, text=True, check=True)
    parsed: dict[str, object] = json.loads(done.stdout)
    return parsed


def report_regions(name: str, layout: Path) -> None:
    """Print the time of the regions and its ratio to one union per layer."""
    mine = regions_seconds(layout)
    union = sum(float(str(value)) for value in peer("union", str(layout)).values())
    print(
        f"regions {name}: {mine:.2f} s; union_all per device layer {union:.2f} s;"
        f" ratio {union / mine:.1f}",
        flush=True,
    )


def main(folder: Path) -> None:
    """Make the layouts, measure, print."""
    folder.mkdir(parents=True, exist_ok=True)
    layouts = {name: folder / f"{name}.gds" for name in MAKERS}
    for name, make in MAKERS.items():
        make(layouts[name])
    seconds, _ = median_process([sys.executable, "-m", "latchscan", "--help"], 5)
    print(f"--help: {seconds:.2f} s", flush=True)
    growth = {}
    for name, layout in layouts.items():
        runs = 1 if name == "cells_10000" else RUNS
        seconds, peak = median_process(scan_command(layout, folder / f"out_{name}"), runs)
        growth[name] = seconds
        print(f"scan {name}: {seconds:.1f} s, {peak:.0f} MB", flush=True)
    exponent = math.log(growth["cells_10000"] / growth["cells_1000"]) / math.log(10)
    print(f"growth from 1 000 to 10 000 cells: n^{exponent:.2f}", flush=True)
    for name in ("chip", "memory"):
        report_regions(name, layouts[name])
    mine = wells_seconds_each(layouts["chip"])
    each = float(str(peer("wells", str(layouts["chip"]), "3")["seconds_each"]))
    print(f"wells: {mine * 1e3:.2f} ms each; sparse direct {each:.2f} s each, {each / mine:.0f}x")


if __name__ == "__main__":
    if len(sys.argv) > 1:
        main(Path(sys.argv[1]))
    else:
        with tempfile.TemporaryDirectory() as made:
            main(Path(made))
