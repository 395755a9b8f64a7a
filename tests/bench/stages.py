"""Seconds and counts of every stage from a file to rings, as JSON.

``python tests/bench/stages.py LAYOUT UNTIL JOBS`` stops after the stage `UNTIL`, one of
`STAGES`.  Run as a process of its own so that peaks of memory are those of these stages.
"""

from __future__ import annotations

import json
import resource
import sys
import time
from collections.abc import Iterator
from pathlib import Path

from latchscan.constants import kelvin
from latchscan.layout.bodies import assemble_layout
from latchscan.layout.injectors import find_injectors, mark_injectors
from latchscan.layout.nets import trace_nets
from latchscan.layout.pins import name_nets
from latchscan.layout.regions import derive_regions
from latchscan.layout.rings import find_rings
from latchscan.layout.source import open_layout
from latchscan.layout.ties import tie_bodies
from latchscan.parasitics.resistors import link_resistances
from latchscan.pnpn.sharing import share_currents
from latchscan.tasks import Silent, Workers, open_workers
from latchscan.technology.load import load_technology

STAGES = ("open", "nets", "regions", "links", "pins", "ties", "injectors", "sharing", "rings")


def stages(path: Path, workers: Workers) -> Iterator[tuple[str, int]]:
    """Yield the name of every stage when it is done, and how much it found."""
    technology = load_technology("open130").technology
    temperature_k = kelvin(technology.temperature_c)
    source = open_layout(path, technology=technology, top=None)
    yield "open", 0
    nets = trace_nets(source, technology, workers)
    yield "nets", len(nets.ids)
    layout = assemble_layout(derive_regions(source, technology, None, workers), technology)
    yield "regions", len(layout.emitters.ids)
    links = link_resistances(nets, technology)
    yield "links", len(links.ohm)
    pins, _ = name_nets(nets, technology, None)
    yield "pins", len(pins.names)
    ties = tie_bodies(layout, nets, links, pins, technology)
    yield "ties", len(ties.rail)
    found = find_injectors(layout, nets, links, pins, ties, internal=False)
    yield "injectors", len(found.pin)
    injectors = share_currents(found, pins, technology, temperature_k)
    layout = mark_injectors(layout, pins, injectors)
    yield "sharing", len(injectors.pin)
    rings, _ = find_rings(source, layout, nets, pins, ties, injectors, technology)
    yield "rings", len(rings.ids)


def processor_seconds() -> float:
    """Of this process and of those that it started and that have ended."""
    ended = resource.getrusage(resource.RUSAGE_CHILDREN)
    return time.process_time() + ended.ru_utime + ended.ru_stime


def measured(path: Path, until: str, jobs: int) -> dict[str, tuple[float, int, float]]:
    """Seconds, count and (all of them with one job only) processor seconds of every stage."""
    found = {}
    with open_workers(jobs, Silent()) as workers:
        start, before = time.perf_counter(), processor_seconds()
        for stage, count in stages(path, workers):
            now, spent = time.perf_counter(), processor_seconds()
            found[stage] = (now - start, count, spent - before)
            start, before = now, spent
            if stage == until:
                break
    return found


if __name__ == "__main__":
    print(json.dumps(measured(Path(sys.argv[1]), sys.argv[2], int(sys.argv[3]))))
