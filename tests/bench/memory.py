"""Time and peak memory of a process and all its children, read from outside (Linux only)."""

from __future__ import annotations

import resource
import subprocess
import tempfile
import time
from dataclasses import dataclass
from pathlib import Path

INTERVAL_S = 0.1


@dataclass(frozen=True, slots=True)
class Ran:
    """What a command wrote and took: wall seconds, peak megabytes of one process and of all.

    Pages that several processes share count once in the sum (proportional set size).  Seconds
    of processors are those of all its processes: others on the machine disturb them little.
    """

    output: str
    seconds: float
    processor_s: float
    largest_mb: float
    summed_mb: float


def run_watched(command: list[str]) -> Ran:
    """Run a command to its end and watch its memory."""
    with tempfile.TemporaryFile(mode="w+") as output:
        start, before = time.perf_counter(), _processor_seconds()
        child = subprocess.Popen(command, stdout=output, stderr=subprocess.DEVNULL)
        largest = summed = 0.0
        while child.poll() is None:
            sizes = [_kilobytes(number) for number in _family(child.pid)]
            largest = max([largest, *(resident for resident, _ in sizes)])
            summed = max(summed, sum(shared for _, shared in sizes))
            time.sleep(INTERVAL_S)
        seconds = time.perf_counter() - start
        if child.returncode not in (0, 1):
            raise RuntimeError(f"{command}: exit status {child.returncode}")
        output.seek(0)
        spent = _processor_seconds() - before
        return Ran(output.read(), seconds, spent, largest / 1024, summed / 1024)


def _processor_seconds() -> float:
    usage = resource.getrusage(resource.RUSAGE_CHILDREN)
    return usage.ru_utime + usage.ru_stime


def _family(number: int) -> set[int]:
    """A process and all that it started, as far as they still run."""
    parents = {}
    for place in Path("/proc").glob("[0-9]*/stat"):
        try:
            # after the name in brackets, which may hold blanks: state, parent, ...
            parents[int(place.parent.name)] = int(place.read_text().rpartition(")")[2].split()[1])
        except OSError:
            continue
    found, grown = {number}, True
    while grown:
        more = {child for child, parent in parents.items() if parent in found} - found
        found, grown = found | more, bool(more)
    return found


def _kilobytes(number: int) -> tuple[float, float]:
    """Resident and proportional set size of a process, 0 when it has ended."""
    try:
        lines = Path(f"/proc/{number}/smaps_rollup").read_text().splitlines()[1:]
    except OSError:
        return 0.0, 0.0
    sizes = {line.split()[0]: float(line.split()[1]) for line in lines}
    return sizes.get("Rss:", 0.0), sizes.get("Pss:", 0.0)
