"""The table of emitters (``emitters.csv``): every emitter one row, RFC 4180 with LF ends.

Lengths have 4 decimals, areas 6, resistances 4, relative errors 6.  A measure that does not
exist is an empty field; an unbounded one is ``inf``.  ``injector`` is the pin or marker that can
bias the emitter, ``injector_resistance_ohm`` the least resistance between a pin and it.
"""

from __future__ import annotations

import csv
import io
import math
from collections.abc import Iterator

import numpy as np

from latchscan.layout.emitter_nets import emitter_nets
from latchscan.layout.model import EMITTER_KINDS, Floats
from latchscan.report.plain import REPLACEMENT, plain_text
from latchscan.rules.model import Evidence

COLUMNS = (
    "id",
    "kind",
    "body",
    "x0_um",
    "y0_um",
    "x1_um",
    "y1_um",
    "area_um2",
    "tap_distance_um",
    "tap_distance_x_um",
    "tap_distance_y_um",
    "self_resistance_ohm",
    "self_resistance_max_ohm",
    "patch_resistance_ohm",
    "resistance_error",
    "net",
    "injector",
    "injector_resistance_ohm",
)


def emitters_csv(evidence: Evidence) -> bytes:
    """The whole table, UTF-8."""
    stream = io.StringIO(newline="")
    writer = csv.writer(stream, lineterminator="\n")
    writer.writerow(COLUMNS)
    writer.writerows(zip(*_columns(evidence), strict=True))
    return stream.getvalue().encode("utf-8")


def _columns(evidence: Evidence) -> Iterator[list[str]]:
    """Formatted columns in the order of `COLUMNS`."""
    emitters = evidence.layout.emitters
    distances, resistances = evidence.distances, evidence.resistances
    count = len(emitters.ids)
    bodies = [safe_cell(body.id) for body in evidence.layout.bodies]
    yield [safe_cell(name) for name in emitters.ids.tolist()]
    yield [EMITTER_KINDS[kind] for kind in emitters.kind.tolist()]
    yield [bodies[body] for body in emitters.body.tolist()]
    for side in range(4):
        yield _fixed(emitters.box_um[:, side], 4)
    yield _fixed(emitters.area_um2, 6)
    yield _fixed(distances.tap_distance_um, 4)
    yield _fixed(distances.farthest_um[:, 0], 4)
    yield _fixed(distances.farthest_um[:, 1], 4)
    yield _fixed(resistances.mean_ohm[:count], 4)
    yield _fixed(resistances.max_ohm[:count], 4)
    yield _fixed(resistances.patch_ohm[:count], 4)
    yield _fixed(resistances.relative_error[:count], 6)
    nets = evidence.connections.nets
    owners = emitter_nets(evidence.layout, nets).tolist()
    yield [str(nets.ids[net]) if net >= 0 else "" for net in owners]
    yield [safe_cell(name) for name in emitters.injector.tolist()]
    yield _fixed(_injector_ohm(evidence), 4)


def _injector_ohm(evidence: Evidence) -> Floats:
    """(n,) least resistance between a pin and each emitter; NaN where none is known."""
    injectors = evidence.connections.injectors
    least = np.full(len(evidence.layout.emitters.ids), np.nan)
    rows = np.flatnonzero((injectors.emitter >= 0) & (injectors.pin >= 0))
    np.fmin.at(least, injectors.emitter[rows], injectors.resistance_ohm[rows])
    return least


def _fixed(values: Floats, decimals: int) -> list[str]:
    """Numbers with fixed decimals; NaN empty, minus zero without its sign."""
    form = f"%.{decimals}f"
    return [
        "" if math.isnan(value) else form % (round(value, decimals) + 0.0)
        for value in values.tolist()
    ]


def safe_cell(text: str) -> str:
    """`text` that no spreadsheet takes for a formula.

    Examples
    --------
    >>> safe_cell("=1+1"), safe_cell("p-12")
    ("'=1+1", 'p-12')
    """
    shown = plain_text(text)
    # a tab or line end also starts a formula; plain text has replaced it
    return "'" + shown if shown.startswith(("=", "+", "-", "@", REPLACEMENT)) else shown
