"""The pipeline: a layout and a technology in, a `Scan` out.  Read this file first.

Every line of `scan` is one stage; every value between two stages is a frozen dataclass
documented where it is defined.  Nothing here reads options, prints or writes files.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from latchscan.block.load import LoadedBlock
from latchscan.caveats import Caveat
from latchscan.constants import kelvin
from latchscan.layout.bodies import assemble_layout
from latchscan.layout.connections import Connections
from latchscan.layout.distances import measure_distances, measure_spacings, own_collectors
from latchscan.layout.injectors import find_injectors, mark_injectors
from latchscan.layout.left_out import pairs_outside
from latchscan.layout.model import Box, Floats, Layout
from latchscan.layout.nets import can_trace, trace_nets
from latchscan.layout.pairs import find_pairs
from latchscan.layout.pins import name_nets, require_names
from latchscan.layout.regions import derive_regions
from latchscan.layout.rings import find_rings
from latchscan.layout.source import LayoutSource
from latchscan.layout.ties import tie_bodies
from latchscan.layout.unconnected import no_nets, no_pins
from latchscan.parasitics.join import join_families
from latchscan.parasitics.resistors import link_resistances
from latchscan.parasitics.substrate import solve_substrate
from latchscan.parasitics.well import solve_wells
from latchscan.pnpn.sharing import share_currents
from latchscan.pnpn.sites import evaluate_sites
from latchscan.rules import judge
from latchscan.rules.model import Evidence, Finding
from latchscan.tasks import Workers
from latchscan.technology.load import LoadedTechnology
from latchscan.technology.model import Technology

RESISTANCE_ERROR_LIMIT = 0.05
"""Relative error of a resistance above which the result carries a caveat."""


@dataclass(frozen=True, slots=True, kw_only=True)
class ScanOptions:
    """What the user may choose for one scan.

    Attributes
    ----------
    window_um
        Box of the layout to scan, None for all of it.
    temperature_c
        Temperature [C], None for the block file's or else the technology's own.
    block
        The block file, None where there is none: names are then matched by the technology's
        patterns.
    internal_injectors
        Whether diffusions that only a supply transient can forward-bias count as injectors.
    """

    window_um: Box | None = None
    temperature_c: float | None = None
    block: LoadedBlock | None = None
    internal_injectors: bool = False


@dataclass(frozen=True, slots=True, kw_only=True)
class Origin:
    """Where a result comes from: the files it was made of; no block file has an empty name."""

    layout_name: str
    layout_sha256: str
    top: str
    bbox_um: Box
    database_unit_um: float
    technology_name: str
    technology_sha256: str
    temperature_c: float
    supply_v: float
    probe_current_a: float
    block_name: str = ""
    block_sha256: str = ""


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Scan:
    """The whole result of a scan, ready for any report.

    Attributes
    ----------
    unsolved_count
        Emitters whose resistance has no trustworthy solution; no rule takes one for passed.
    """

    origin: Origin
    evidence: Evidence
    findings: tuple[Finding, ...]
    caveats: tuple[Caveat, ...]
    unsolved_count: int


def scan(
    source: LayoutSource, loaded: LoadedTechnology, options: ScanOptions, workers: Workers
) -> Scan:
    """Measure a layout, solve its resistances, evaluate its thyristors and judge them.

    Raises
    ------
    InputError
        The layout, the technology or an option is wrong.
    AnalysisError
        No trustworthy answer could be computed.
    """
    technology = loaded.technology
    origin = _origin(source, loaded, options)
    temperature_k = kelvin(origin.temperature_c)
    require_names(source, technology, options.block)
    regions = derive_regions(source, technology, options.window_um, workers)
    layout = assemble_layout(regions, technology)
    layout, connections, notes = _connect(
        source, technology, layout, options, temperature_k, workers
    )
    distances = measure_distances(layout, workers)
    collectors = own_collectors(layout, connections.injectors, connections.rings)
    spacings = measure_spacings(layout, collectors)
    left_out_um = _left_out(options)
    pairs = find_pairs(layout, technology.loop.pair_reach_um)
    pairs = pairs_outside(pairs, layout, left_out_um)
    wells = solve_wells(layout, pairs, technology, temperature_k, workers)
    substrate = solve_substrate(layout, pairs, technology, temperature_k, workers)
    resistances, transfers = join_families(wells, substrate)
    sites = evaluate_sites(layout, pairs, resistances, transfers, technology, temperature_k)
    evidence = Evidence(
        layout=layout,
        connections=connections,
        distances=distances,
        spacings=spacings,
        resistances=resistances,
        pairs=pairs,
        transfers=transfers,
        sites=sites,
    )
    findings = judge(evidence, technology, left_out_um)
    unsolved = int(np.sum(np.isnan(resistances.mean_ohm[: len(layout.emitters.ids)])))
    return Scan(
        origin=origin,
        evidence=evidence,
        findings=findings,
        caveats=_caveats(source, technology, options, notes, evidence, unsolved),
        unsolved_count=unsolved,
    )


def _connect(
    source: LayoutSource,
    technology: Technology,
    layout: Layout,
    options: ScanOptions,
    temperature_k: float,
    workers: Workers,
) -> tuple[Layout, Connections, tuple[Caveat, ...]]:
    """What is connected to what; the layout with its injectors named; what was assumed."""
    if options.window_um is None or can_trace(source, technology):
        nets = trace_nets(source, technology, workers)
        pins, notes = name_nets(nets, technology, options.block)
    else:
        nets, pins, notes = no_nets(), no_pins(), (Caveat(code="nets-too-many"),)
    links = link_resistances(nets, technology)
    ties = tie_bodies(layout, nets, links, pins, technology)
    found = find_injectors(layout, nets, links, pins, ties, internal=options.internal_injectors)
    injectors = share_currents(found, pins, technology, temperature_k)
    layout = mark_injectors(layout, pins, injectors)
    rings, crossings = find_rings(source, layout, nets, pins, ties, injectors, technology)
    connections = Connections(
        nets=nets,
        links=links,
        pins=pins,
        ties=ties,
        injectors=injectors,
        rings=rings,
        crossings=crossings,
    )
    return layout, connections, notes


def _left_out(options: ScanOptions) -> Floats:
    """(k, 4) boxes that the block file leaves out [um]."""
    if options.block is None:
        return np.zeros((0, 4))
    boxes = [part.box_um for part in options.block.block.leave_out]
    return np.array(boxes, dtype=np.float64).reshape(-1, 4)


def _origin(source: LayoutSource, loaded: LoadedTechnology, options: ScanOptions) -> Origin:
    technology = loaded.technology
    asked = options.temperature_c
    return Origin(
        layout_name=source.name,
        layout_sha256=source.sha256,
        top=source.top,
        bbox_um=source.bbox_um,
        database_unit_um=source.database_unit_um,
        technology_name=technology.name,
        technology_sha256=loaded.sha256,
        block_name="" if options.block is None else options.block.path.name,
        block_sha256="" if options.block is None else options.block.sha256,
        temperature_c=technology.temperature_c if asked is None else asked,
        supply_v=technology.loop.supply_v,
        probe_current_a=technology.loop.probe_current_a,
    )


def _caveats(
    source: LayoutSource,
    technology: Technology,
    options: ScanOptions,
    notes: tuple[Caveat, ...],
    evidence: Evidence,
    unsolved: int,
) -> tuple[Caveat, ...]:
    """Collect what the reader of the result must keep in mind."""
    layout = evidence.layout
    found = [Caveat(code="estimate"), Caveat(code="lateral-gain-closed-form"), *source.notes]
    found += notes
    if technology.substrate.pwell_sheet_resistance_ohm_sq is not None:
        found.append(Caveat(code="substrate-window"))
    found += [
        Caveat(code="assumed-number", detail=key)
        for key, value in technology.quantities()
        if value.assumption
    ]
    bare = layout.taps.contact_count == 0
    if bare.any():
        detail = f"{int(bare.sum())} taps"
        found.append(Caveat(code="uncontacted-taps", detail=detail))
    tied = set(layout.taps.body[~bare].tolist())
    untied = [body.id for index, body in enumerate(layout.bodies) if index not in tied]
    if untied:
        found.append(Caveat(code="untied-body", detail=_some(untied)))
    if unsolved:
        found.append(Caveat(code="unsolved", detail=f"{unsolved} emitters"))
    vague = int(np.sum(evidence.resistances.relative_error > RESISTANCE_ERROR_LIMIT))
    if vague:
        found.append(Caveat(code="resistance-error", detail=f"{vague} resistances"))
    if not len(evidence.connections.injectors.reason) and not np.any(
        layout.emitters.injector != ""
    ):
        found.append(Caveat(code="no-injectors"))
    if options.window_um is not None:
        found.append(Caveat(code="window"))
        if len(evidence.connections.nets.ids):
            found.append(Caveat(code="nets-whole-block"))
    if options.block is not None and options.block.block.leave_out:
        found.append(Caveat(code="left-out", detail=f"{len(options.block.block.leave_out)} boxes"))
    return tuple(dict.fromkeys(found))


def _some(names: list[str], most: int = 8) -> str:
    shown = ", ".join(names[:most])
    return shown if len(names) <= most else f"{shown} and {len(names) - most} more"
