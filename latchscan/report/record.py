"""The machine-readable result (``scan.json``), described by ``scan.schema.json`` beside it.

Coordinates, lengths and areas of the drawing carry 9 significant digits, everything that was
solved carries 6.  A number that does not exist or is unbounded is null.  Rows keep the order
of the scan: wells by (y, x), sites and findings worst first.
"""

from __future__ import annotations

import json
from typing import Any

import numpy as np
import shapely

from latchscan import __version__
from latchscan.layout.model import Floats, Ints, Layout
from latchscan.layout.regions import region_statistics
from latchscan.report.digits import box, drawn, solved
from latchscan.report.plain import plain_text
from latchscan.report.record_connections import connection_records
from latchscan.rules.model import Evidence, Finding
from latchscan.scan import Origin, Scan

FORMAT = "latchscan-scan"
FORMAT_VERSION = 1
LARGEST_SITE_COUNT = 1000

Record = dict[str, Any]


def scan_json(scan: Scan) -> bytes:
    """The whole record as indented UTF-8 JSON with a line end."""
    text = json.dumps(scan_record(scan), indent=1, ensure_ascii=False, allow_nan=False)
    return (text + "\n").encode("utf-8")


def scan_record(scan: Scan) -> Record:
    """The whole record as plain lists, dicts, texts and numbers."""
    origin, evidence = scan.origin, scan.evidence
    return {
        "format": FORMAT,
        "format_version": FORMAT_VERSION,
        "tool_version": __version__,
        "layout": {
            "file_name": plain_text(origin.layout_name),
            "sha256": origin.layout_sha256,
            "top": plain_text(origin.top),
            "bbox_um": box(origin.bbox_um),
            "database_unit_um": drawn(origin.database_unit_um),
        },
        "technology": {
            "name": plain_text(origin.technology_name),
            "sha256": origin.technology_sha256,
        },
        "block": _block(origin),
        "temperature_c": drawn(origin.temperature_c),
        "loop": {
            "supply_v": drawn(origin.supply_v),
            "probe_current_a": drawn(origin.probe_current_a),
        },
        "regions": _regions(evidence.layout),
        "wells": _wells(evidence),
        **connection_records(evidence),
        "sites": _sites(evidence),
        "findings": [_finding(finding) for finding in scan.findings],
        "caveats": [
            {
                "code": caveat.code,
                "detail": plain_text(caveat.detail),
                "sentence": plain_text(caveat.sentence, longest=600),
            }
            for caveat in scan.caveats
        ],
    }


def _block(origin: Origin) -> Record | None:
    """The block file, None where there is none."""
    if not origin.block_name:
        return None
    return {"file_name": plain_text(origin.block_name), "sha256": origin.block_sha256}


def _regions(layout: Layout) -> Record:
    """Count and area of each region that reports list."""
    return {
        name: {"count": one.count, "area_um2": drawn(one.area_um2)}
        for name, one in region_statistics(layout.regions).items()
    }


def _wells(evidence: Evidence) -> list[Record]:
    """One record an n-well or isolated p-well body."""
    layout, distances = evidence.layout, evidence.distances
    emitters, taps = layout.emitters, layout.taps
    count = len(emitters.ids)
    contacted = taps.body[taps.contact_count > 0]
    tap_count = np.bincount(contacted, minlength=len(layout.bodies))
    members = _rows_by_body(layout)
    records = []
    for index, body in enumerate(layout.bodies):
        if body.kind == "substrate":
            continue
        rows = members[index]
        farthest = _largest(distances.tap_distance_um[rows])
        at = None if farthest is None else distances.farthest_um[rows[farthest]]
        resistances = evidence.resistances.mean_ohm[:count][rows]
        worst = _largest(resistances)
        records.append(
            {
                "id": body.id,
                "bbox_um": box(shapely.total_bounds(body.polygons)),
                "tap_count": int(tap_count[index]),
                "emitter_count": len(rows),
                "worst_tap_distance_um": None
                if farthest is None
                else drawn(distances.tap_distance_um[rows[farthest]]),
                "worst_tap_distance_at_um": None if at is None else [drawn(at[0]), drawn(at[1])],
                "worst_well_resistance_ohm": None if worst is None else solved(resistances[worst]),
            }
        )
    return records


def _rows_by_body(layout: Layout) -> list[Ints]:
    """Rows of the emitters of every body, in order."""
    order = np.argsort(layout.emitters.body, kind="stable")
    ends = np.searchsorted(layout.emitters.body[order], np.arange(1, len(layout.bodies)))
    return np.split(order, ends)


def _largest(values: Floats) -> int | None:
    """Row of the largest value, the first of equals; None where all are NaN or there is none."""
    return None if np.isnan(values).all() else int(np.nanargmax(values))


def _sites(evidence: Evidence) -> list[Record]:
    """The worst sites, worst first."""
    sites, pairs = evidence.sites, evidence.pairs
    emitter_ids = evidence.layout.emitters.ids.tolist()
    sources = emitter_ids + [body.id for body in evidence.layout.bodies]
    return [
        {
            "id": str(sites.ids[row]),
            "anode": sources[pairs.anode[sites.pair[row]]],
            "cathode": sources[pairs.cathode[sites.pair[row]]],
            "x_um": drawn(sites.x_um[row]),
            "y_um": drawn(sites.y_um[row]),
            "well_resistance_ohm": solved(sites.well_resistance_ohm[row]),
            "substrate_resistance_ohm": solved(sites.substrate_resistance_ohm[row]),
            "well_transfer_ohm": solved(sites.well_transfer_ohm[row]),
            "substrate_transfer_ohm": solved(sites.substrate_transfer_ohm[row]),
            "judged_as": "patch" if sites.patch[row] else "single",
            "beta_pnp": solved(sites.beta_pnp[row]),
            "beta_npn": solved(sites.beta_npn[row]),
            "loop_gain_ceiling": solved(sites.loop_gain_ceiling[row]),
            "loop_gain": solved(sites.loop_gain[row]),
            "trigger_current_a": solved(sites.trigger_current_a[row]),
            "trigger_well_a": solved(sites.trigger_well_a[row]),
            "trigger_substrate_a": solved(sites.trigger_substrate_a[row]),
        }
        for row in range(min(len(sites.ids), LARGEST_SITE_COUNT))
    ]


def _finding(finding: Finding) -> Record:
    return {
        "id": finding.id,
        "rule": finding.rule,
        "severity": finding.severity,
        "subject": finding.subject,
        "body": finding.body,
        "x_um": drawn(finding.x_um),
        "y_um": drawn(finding.y_um),
        "measured": solved(finding.measured),
        "limit": solved(finding.limit),
        "unit": finding.unit,
        "count": finding.count,
        "box_um": box(finding.box_um),
        "message": plain_text(finding.message, longest=1000),
    }
