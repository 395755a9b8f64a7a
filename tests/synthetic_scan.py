"""Hand-made scans: rows of cells with invented but consistent measures, no layout file.

Reports and rules only read the values, so the values here need not follow from each other;
they follow simple formulas that a test can repeat.
"""

from __future__ import annotations

import dataclasses
from typing import Any

import numpy as np
import shapely
from synthetic_connections import connections, injector_names

from latchscan.caveats import Caveat
from latchscan.layout.model import (
    N_OUTSIDE_NWELL,
    P_IN_NWELL,
    SUBSTRATE_TAP,
    WELL_TAP,
    Body,
    Distances,
    Emitters,
    Geometries,
    Layout,
    Pairs,
    Regions,
    Spacings,
    Taps,
)
from latchscan.layout.unconnected import no_connections
from latchscan.parasitics.model import Resistances, Transfers
from latchscan.pnpn.model import Sites
from latchscan.rules import RULES, judge
from latchscan.rules.model import Evidence, Finding
from latchscan.scan import Origin, Scan
from latchscan.technology.model import Technology

PITCH_UM = 12.0
"""Height of a row of cells; its upper half is an n-well."""
CELL_UM = 5.0
OHM_PER_UM = 60.0
"""Invented slope of every resistance over the tap distance."""
ALL_OFF = {name.replace("-", "_"): {"severity": "off"} for name in RULES}
"""Rules for `technology` that leaves every rule out."""


def technology(**rules: dict[str, Any]) -> Technology:
    """A complete invented technology; `rules` replaces limits, ``_`` for ``-`` in the names."""
    limits: dict[str, Any] = {
        "tap-distance": {"p_diffusion_max_um": 20.0, "n_diffusion_max_um": 20.0},
        "untied-body": {},
        "uncontacted-tap": {},
        "tap-reach": {"max_um": 5.0},
        "injector-spacing": {"min_um": 8.0},
        "well-resistance": {"max_ohm": 1200.0},
        "loop-gain": {"max_gain": 0.8},
        "well-spacing": {"min_um": 8.0},
    }
    for name, values in rules.items():
        limits.setdefault(name.replace("_", "-"), {}).update(values)
    return Technology.model_validate(
        {
            "format": "latchscan-technology",
            "format_version": 1,
            "name": "invented",
            "layers": {"nwell": {"gds": ("1/0",)}},
            "roles": dict.fromkeys(
                (
                    "nwell",
                    "pwell",
                    "well_tap",
                    "substrate_tap",
                    "p_diffusion_in_nwell",
                    "n_diffusion_outside_nwell",
                    "contact",
                ),
                "nwell",
            ),
            "wells": {
                "nwell_sheet_resistance_ohm_sq": 900.0,
                "nwell_doping_cm3": 1e17,
                "well_tap_contact_resistance_ohm": 8.0,
            },
            "substrate": {
                "layers": ({"resistivity_ohm_cm": 10.0, "thickness_um": 300.0},),
                "back_side": "floating",
                "substrate_tap_contact_resistance_ohm": 8.0,
            },
            "transistors": {
                "vertical_pnp": {
                    "beta": 3.0,
                    "saturation_current_density_a_um2": 1e-18,
                    "knee_current_density_a_um2": 1e-4,
                    "beta_temperature_exponent": 1.5,
                },
                "lateral_npn": {
                    "electron_diffusion_length_um": 300.0,
                    "emitter_efficiency": 0.9,
                    "lateral_share": 0.5,
                    "calibration": 1.0,
                    "saturation_current_density_a_um2": 1e-18,
                    "knee_current_density_a_um2": 1e-4,
                    "beta_temperature_exponent": 1.5,
                },
            },
            "loop": {"supply_v": 1.8, "probe_current_a": 1e-3},
            "rules": limits,
        }
    )


def polygons(boxes: Any) -> Geometries:
    """Column of rectangles given as x0, y0, x1, y1."""
    boxes = np.asarray(boxes, dtype=float).reshape(-1, 4)
    column = np.empty(len(boxes), dtype=object)
    column[:] = [shapely.box(*box) for box in boxes]
    return column


def evidence(
    *, rows: int = 6, cells: int = 24, tap_cell: int = 3, connected: bool = False
) -> Evidence:
    """Rows of cells with a tap column at `tap_cell`; p+ above n+ in every other cell.

    Row 0's n+ emitters are injectors of pin ``drive``; row 1's well has no contact on its
    tap; everything else is tied.  `connected` adds what `synthetic_connections` describes;
    without it nothing is known of nets, as under a technology that names no conductors.
    """
    columns = [cell for cell in range(cells) if cell != tap_cell]
    left = np.array([cell * CELL_UM for cell in columns])
    tap_x = tap_cell * CELL_UM
    wells = [(0.0, row * PITCH_UM + 6, cells * CELL_UM, row * PITCH_UM + 11) for row in range(rows)]
    p_box = _cells(left, rows, 7.0)
    n_box = _cells(left, rows, 1.0)
    layout = _layout(rows, cells, tap_x, wells, p_box, n_box)
    if connected:
        named = dataclasses.replace(layout.emitters, injector=injector_names(layout))
        layout = dataclasses.replace(layout, emitters=named)
    box = layout.emitters.box_um
    far_x = np.where(box[:, 0] > tap_x, box[:, 2], box[:, 0])
    near_x = np.where(box[:, 0] > tap_x, tap_x + 2.0, tap_x)
    floating = layout.emitters.body == 1
    distance = np.where(floating, np.nan, np.abs(far_x - near_x))
    at = np.column_stack((far_x, box[:, 1]))
    resistance = np.where(floating, np.inf, 20.0 + OHM_PER_UM * np.abs(far_x - near_x))
    padding = np.full(len(layout.bodies), np.nan)
    full = np.concatenate((resistance, padding))
    pairs = _pairs(layout)
    injectors = np.flatnonzero(layout.emitters.injector != "")
    return Evidence(
        layout=layout,
        distances=Distances(
            tap_distance_um=distance,
            farthest_um=np.where(floating[:, None], np.nan, at),
            nearest_tap_um=np.where(floating[:, None], np.nan, np.column_stack((near_x, at[:, 1]))),
            tap_reach_um=np.where(layout.taps.contact_count > 0, 1.5, np.nan),
            tap_reach_at_um=shapely.bounds(layout.taps.polygons)[:, :2],
        ),
        spacings=Spacings(
            emitter=injectors,
            body=np.where(layout.emitters.kind[injectors] == P_IN_NWELL, rows, 0),
            spacing_um=np.full(len(injectors), 3.0),
            from_um=box[injectors][:, (0, 3)],
            to_um=box[injectors][:, (0, 3)] + (0.0, 3.0),
        ),
        resistances=Resistances(
            mean_ohm=full,
            max_ohm=1.1 * full,
            patch_ohm=0.6 * full,
            relative_error=np.where(np.isfinite(full), 0.004, np.nan),
        ),
        pairs=pairs,
        transfers=Transfers(
            well_ohm=0.8 * full[pairs.anode], substrate_ohm=0.8 * full[pairs.cathode]
        ),
        sites=_sites(layout, pairs, full),
        connections=connections(layout)
        if connected
        else no_connections(len(layout.bodies), len(layout.taps.kind)),
    )


def _cells(left: Any, rows: int, up: float) -> Any:
    """Boxes of one kind of emitter in every cell of every row."""
    return np.array(
        [
            (x + 1.0, row * PITCH_UM + up, x + 3.0, row * PITCH_UM + up + 2.5)
            for row in range(rows)
            for x in left
        ]
    )


def _layout(rows: int, cells: int, tap_x: float, wells: Any, p_box: Any, n_box: Any) -> Layout:
    bounds = (-4.0, -3.0, cells * CELL_UM + 4.0, rows * PITCH_UM + 3.0)
    n_taps = [
        (tap_x, row * PITCH_UM + 7.0, tap_x + 2.0, row * PITCH_UM + 10) for row in range(rows)
    ]
    p_taps = [(tap_x, row * PITCH_UM + 1.0, tap_x + 2.0, row * PITCH_UM + 4) for row in range(rows)]
    substrate = shapely.box(*bounds).difference(shapely.union_all(polygons(wells)))
    outside = np.empty(1, dtype=object)
    outside[0] = substrate
    bodies = [
        Body(
            id=f"nwell-{row + 1}",
            kind="nwell",
            polygons=polygons([well]),
            sheets=(("nwell", shapely.box(*well)),),
        )
        for row, well in enumerate(wells)
    ]
    bodies.append(
        Body(id="substrate", kind="substrate", polygons=outside, sheets=(("pwell", substrate),))
    )
    count = np.ones(2 * rows, dtype=np.int64)
    count[1] = 0
    contacts = np.array(
        [(x0 + 0.9, y0 + 1.4, x0 + 1.1, y0 + 1.6) for x0, y0, _, _ in n_taps + p_taps]
    )
    per_row = len(p_box) // rows
    everything = np.vstack((p_box, n_box))
    kind = np.repeat((P_IN_NWELL, N_OUTSIDE_NWELL), (len(p_box), len(n_box)))
    injector = np.full(len(kind), "", dtype="U40")
    injector[len(p_box) : len(p_box) + per_row : 4] = "drive"
    return Layout(
        regions=Regions(
            bbox_um=bounds,
            shapes={
                "nwell": polygons(wells),
                "pwell": outside,
                "well_tap": polygons(n_taps),
                "substrate_tap": polygons(p_taps),
                "p_diffusion_in_nwell": polygons(p_box),
                "n_diffusion_outside_nwell": polygons(n_box),
                "buried": polygons([]),
                "injector": polygons([]),
            },
            contact_box_um=contacts[count > 0],
            labels=(),
        ),
        bodies=tuple(bodies),
        taps=Taps(
            polygons=polygons(n_taps + p_taps),
            kind=np.repeat((WELL_TAP, SUBSTRATE_TAP), rows),
            body=np.concatenate((np.arange(rows), np.full(rows, rows))),
            contact_count=count,
            contact_first=np.concatenate(((0,), np.cumsum(count))),
            contact_box_um=contacts[count > 0],
        ),
        emitters=Emitters(
            ids=np.array(
                [f"p-{i + 1}" for i in range(len(p_box))]
                + [f"n-{i + 1}" for i in range(len(n_box))]
            ),
            polygons=polygons(everything),
            kind=kind,
            body=np.concatenate((np.repeat(np.arange(rows), per_row), np.full(len(n_box), rows))),
            box_um=everything,
            area_um2=shapely.area(polygons(everything)),
            over_buried=np.zeros(len(kind), dtype=bool),
            injector=injector,
        ),
    )


def _pairs(layout: Layout) -> Pairs:
    """Every p+ emitter with the n+ emitter below it."""
    count = int(np.sum(layout.emitters.kind == P_IN_NWELL))
    anode = np.arange(count)
    box = layout.emitters.box_um
    return Pairs(
        anode=anode,
        cathode=anode + count,
        well=layout.emitters.body[:count],
        base=layout.emitters.body[count:],
        spacing_um=np.full(count, 3.5),
        base_width_um=np.full(count, 2.5),
        edge_um=box[:count, :2] - (0.0, 1.0),
        arrival_um=(box[:count, :2] + box[:count, 2:]) / 2,
    )


def _sites(layout: Layout, pairs: Pairs, resistance: Any) -> Sites:
    """Sites whose loop gain grows with the resistances and falls from row to row."""
    box = layout.emitters.box_um
    both = resistance[pairs.anode] * resistance[pairs.cathode]
    share = np.full(len(both), np.nan)
    np.divide(both, both + 1e6, out=share, where=np.isfinite(both))
    gain = 3.0 * share / (1.0 + 1.2 * pairs.well)
    order = np.lexsort((np.arange(len(gain)), -np.nan_to_num(gain, nan=-1.0)))
    pairs_box = (box[pairs.anode[order]], box[pairs.cathode[order]])
    sorted_gain = gain[order]
    nan = np.full(len(gain), np.nan)
    trigger = np.where(sorted_gain > 0.5, 0.7 / resistance[pairs.anode[order]], nan)
    return Sites(
        ids=np.array([f"site-{index + 1}" for index in range(len(gain))]),
        pair=order,
        x_um=(pairs_box[0][:, 0] + pairs_box[0][:, 2]) / 2,
        y_um=(pairs_box[0][:, 1] + pairs_box[1][:, 3]) / 2,
        well_resistance_ohm=resistance[pairs.anode[order]],
        substrate_resistance_ohm=resistance[pairs.cathode[order]],
        well_transfer_ohm=0.8 * resistance[pairs.anode[order]],
        substrate_transfer_ohm=0.8 * resistance[pairs.cathode[order]],
        beta_pnp=np.full(len(gain), 3.0),
        beta_npn=np.full(len(gain), 1.5),
        loop_gain_ceiling=np.full(len(gain), 2.88),
        loop_gain=sorted_gain,
        trigger_current_a=trigger,
        trigger_well_a=trigger,
        trigger_substrate_a=2 * trigger,
        patch=np.arange(len(gain)) % 2 == 0,
    )


def scan(of: Evidence | None = None, **names: str) -> Scan:
    """A scan of `of` with its findings; `names` replaces texts of the origin.

    Without `of` it is the connected block of `evidence`; ``scan(evidence())`` is the same
    block of which no net is known.
    """
    measured = evidence(connected=True) if of is None else of
    texts = {
        "layout_name": "valve_driver.gds",
        "layout_sha256": "0" * 64,
        "top": "valve_driver",
        "technology_name": "invented",
        "technology_sha256": "f" * 64,
    } | names
    return Scan(
        origin=Origin(
            **texts,
            bbox_um=measured.layout.regions.bbox_um,
            database_unit_um=0.001,
            temperature_c=125.0,
            supply_v=1.8,
            probe_current_a=5.0e-5,
        ),
        evidence=measured,
        findings=judge(measured, technology()),
        caveats=(Caveat(code="estimate"), Caveat(code="untied-body", detail="nwell-2")),
        unsolved_count=0,
    )


def changed(measured: Evidence, part: str, **columns: Any) -> Evidence:
    """`measured` with columns of one part (``distances``, ``layout.taps``) replaced."""
    first, _, rest = part.partition(".")
    inner = getattr(measured, first)
    new = changed(inner, rest, **columns) if rest else dataclasses.replace(inner, **columns)
    return dataclasses.replace(measured, **{first: new})


def findings_of(rule: str, measured: Evidence, **limits: Any) -> tuple[Finding, ...]:
    """Findings of one rule, with its limits replaced; untied bodies are reported as well."""
    rules: dict[str, dict[str, Any]] = {**ALL_OFF, "untied_body": {"severity": "watch"}}
    rules[rule.replace("-", "_")] = {"severity": "fail", **limits}
    found = judge(measured, technology(**rules))
    return tuple(one for one in found if one.rule == rule)
