"""Run every benchmark and print the table of README.md beside this file.

``python tests/bench/measure.py [FOLDER [PART ...]]``; layouts are made in FOLDER (a temporary one
by default), parts are those of `PARTS` (all by default).  Times are wall seconds of whole
processes or of the named stage, peaks are the largest resident size of one process; for nets
the least of several runs, and the peak of all processes together as well.
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
from memory import Ran, run_watched

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


def stages_run(
    layout: Path, until: str, runs: int
) -> tuple[dict[str, tuple[float, int]], list[Ran]]:
    """Least seconds and the counts of every stage up to one of them; all runs."""
    command = [sys.executable, str(HERE / "stages.py"), str(layout), until, "2"]
    found = [run_watched(command) for _ in range(runs)]
    each = [json.loads(one.output) for one in found]
    least = {
        stage: (min(one[stage][0] for one in each), int(each[0][stage][1])) for stage in each[0]
    }
    return least, found


def processor_seconds(layout: Path) -> float:
    """Least seconds of one processor to open a layout and trace its nets, in one process."""
    command = [sys.executable, str(HERE / "stages.py"), str(layout), "nets", "1"]
    found = [json.loads(run_watched(command).output) for _ in range(RUNS)]
    return min(float(one["open"][2] + one["nets"][2]) for one in found)


def print_help(layouts: Layouts) -> None:
    """Time of a command that does nothing."""
    seconds, _ = median_process([sys.executable, "-m", "latchscan", "--help"], 5)
    print(f"--help: {seconds:.2f} s", flush=True)


def print_scans(layouts: Layouts) -> None:
    """Whole scans and their growth."""
    growth = {}
    for name in SCANNED:
        runs = 1 if name.endswith("cells_10000") else RUNS
        seconds, peak = median_process(scan_command(layouts(name), layouts.folder / name), runs)
        growth[name] = seconds
        print(f"scan {name}: {seconds:.1f} s, {peak:.0f} MB", flush=True)
    exponent = math.log(growth["cells_10000"] / growth["cells_1000"]) / math.log(10)
    print(f"growth from 1 000 to 10 000 cells: n^{exponent:.2f}", flush=True)


def print_regions(layouts: Layouts) -> None:
    """Regions and wells, against the plain ways."""
    for name in ("chip", "memory"):
        report_regions(name, layouts(name))
    mine = wells_seconds_each(layouts("chip"))
    each = float(str(peer("wells", str(layouts("chip")), "3")["seconds_each"]))
    print(f"wells: {mine * 1e3:.2f} ms each; sparse direct {each:.2f} s each, {each / mine:.0f}x")


def print_nets(layouts: Layouts) -> None:
    """Opening and nets of the wired layouts, their growth, and the plain way."""
    growth = {}
    for name in TRACED:
        stages, runs = stages_run(layouts(name), "nets", RUNS)
        (opened, _), (traced, count) = stages["open"], stages["nets"]
        spent = min(one.processor_s for one in runs)
        mine = growth[name] = processor_seconds(layouts(name))
        print(
            f"nets {name}: {opened:.2f} + {traced:.2f} s, {count} nets,"
            f" {spent:.2f} s of processors, {mine:.2f} s in one process without the start,"
            f" {max(one.largest_mb for one in runs):.0f} MB of one process,"
            f" {max(one.summed_mb for one in runs):.0f} MB of all",
            flush=True,
        )
        for way in PLAIN_WAYS.get(name, ()):
            plain = peer(way, str(layouts(name)))
            seconds = float(str(plain["seconds"]))
            print(
                f"  plain {way}: {seconds:.2f} s of a processor, {plain['nets']} nets,"
                f" ratio {seconds / mine:.2f}",
                flush=True,
            )
    exponent = math.log(growth["wired_cells_10000"] / growth["wired_cells_1000"]) / math.log(10)
    print(f"nets, growth from 1 000 to 10 000 cells: n^{exponent:.2f}", flush=True)


def print_connections(layouts: Layouts) -> None:
    """Stages from regions to rings."""
    for name in ("wired_chip", "wired_cells_10000"):
        stages, _ = stages_run(layouts(name), "rings", RUNS)
        told = [f"{stage} {took:.2f} s ({count})" for stage, (took, count) in stages.items()]
        print(f"stages {name}: {', '.join(told)}", flush=True)


class Layouts:
    """Paths of layouts by name, each made when it is first asked for."""

    def __init__(self, folder: Path) -> None:
        folder.mkdir(parents=True, exist_ok=True)
        self.folder = folder

    def __call__(self, name: str) -> Path:
        """Path of a layout of `MAKERS`."""
        path = self.folder / f"{name}.gds"
        if not path.exists():
            MAKERS[name](path)
        return path


PARTS = {
    "help": print_help,
    "scans": print_scans,
    "regions": print_regions,
    "nets": print_nets,
    "connections": print_connections,
}
SCANNED = (
    "chip",
    "memory",
    "cells_1000",
    "cells_3000",
    "cells_10000",
    "wired_chip",
    "wired_cells_10000",
)
TRACED = (
    "wired_chip",
    "wired_chip_flat",
    "wired_cells_100",
    "wired_cells_1000",
    "wired_cells_3000",
    "wired_cells_10000",
)
PLAIN_WAYS = {
    "wired_cells_100": ("pairs", "nets"),
    "wired_cells_1000": ("nets",),
    "wired_cells_10000": ("nets",),
}


def main(folder: Path, parts: list[str]) -> None:
    """Measure and print the parts asked for."""
    layouts = Layouts(folder)
    for part in parts or PARTS:
        PARTS[part](layouts)


if __name__ == "__main__":
    if len(sys.argv) > 1:
        main(Path(sys.argv[1]), sys.argv[2:])
    else:
        with tempfile.TemporaryDirectory() as made:
            main(Path(made), [])
