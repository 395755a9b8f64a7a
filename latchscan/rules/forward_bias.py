"""forward-bias: a junction that the supplies themselves turn on.

What it measures
    For every p+ emitter whose voltage and whose n-well's voltage are known, the highest
    voltage of the p+ minus the lowest of the well [V]; for every n+ emitter in a p-type body,
    the highest voltage of the body minus the lowest of the n+.  A diffusion on the rail of its
    own body passes.  So do a signal with the highest voltage of that rail, for it follows it,
    and another supply of the same range, whose spread is that of one and the same source.
Why it matters
    The junction conducts in normal work, without any pulse at a pin: it injects into its body
    at all times and the thyristor beside it needs little more.
How to mend
    Put the diffusion into a well on its own supply, or tie the well to the higher one.  Where
    the supplies never differ so far, state their true ranges in the block file.
Source
    It follows from the junction law; common practice, no published source.
Default limit
    0 V.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from latchscan.layout.emitter_nets import emitter_nets
from latchscan.layout.model import P_IN_NWELL, Floats, Ints
from latchscan.rules.breaks import Breaks, and_others, place
from latchscan.rules.model import Evidence
from latchscan.rules.rails import RAIL_KINDS, net_title
from latchscan.technology.model import ForwardBiasRule

NAME = "forward-bias"
UNIT = "V"

DIGITS = 9
"""Decimals of a difference of voltages; what lies beyond is rounding of the numbers given."""


def check(evidence: Evidence, limits: ForwardBiasRule) -> Breaks:
    """Emitters whose junction is forward-biased by more than allowed within the supplies."""
    emitters = evidence.layout.emitters
    net = _judged_nets(evidence)
    forward = _forward_v(evidence, net)
    rows = np.flatnonzero(forward > limits.max_v)
    box = emitters.box_um[rows]
    return Breaks(
        member=rows,
        subject=emitters.ids[rows],
        body=emitters.body[rows],
        reason=emitters.kind[rows],
        x_um=(box[:, 0] + box[:, 2]) / 2,
        y_um=(box[:, 1] + box[:, 3]) / 2,
        measured=forward[rows],
        limit=np.full(len(rows), limits.max_v),
        excess=forward[rows] - limits.max_v,
        box_um=box,
        detail=tuple(net_title(evidence.connections, int(one)) for one in net[rows].tolist()),
    )


def _judged_nets(evidence: Evidence) -> Ints:
    """(n,) net of every emitter; -1 where it is not known or is the emitter's own rail."""
    connections, body = evidence.connections, evidence.layout.emitters.body
    pins, ties = connections.pins, connections.ties
    count = len(body)
    if not pins.supply_known:
        return np.full(count, -1, dtype=np.int64)
    net = emitter_nets(evidence.layout, connections.nets)
    rail = ties.rail[body]
    judged = (net >= 0) & (rail >= 0) & (net != rail)
    pin = np.append(pins.net_pin, -1)
    judged &= ~((pin[net] >= 0) & (pin[net] == pin[rail]))
    judged &= ~_on_own_taps(evidence, net)
    low, high = np.append(pins.net_low_v, np.nan), np.append(pins.net_high_v, np.nan)
    signal = ~np.isin(np.append(pins.net_kind, "unknown")[net], RAIL_KINDS)
    judged &= ~((high[net] == high[rail]) & (signal | (low[net] == low[rail])))
    return np.where(judged, net, -1)


def _on_own_taps(evidence: Evidence, net: Ints) -> NDArray[np.bool_]:
    """(n,) whether the emitter's net is one that taps of its body are on: no voltage between."""
    ties, body = evidence.connections.ties, evidence.layout.emitters.body
    span = len(evidence.connections.nets.ids) + 1
    owner = np.repeat(np.arange(len(ties.rail)), np.diff(ties.net_first))
    return np.isin(body * span + net, owner * span + ties.net)


def _forward_v(evidence: Evidence, net: Ints) -> Floats:
    """(n,) forward voltage of every emitter's junction [V], NaN where it is not judged."""
    layout, ties = evidence.layout, evidence.connections.ties
    pins = evidence.connections.pins
    low, high = np.append(pins.net_low_v, np.nan)[net], np.append(pins.net_high_v, np.nan)[net]
    body = layout.emitters.body
    forward = np.where(
        layout.emitters.kind == P_IN_NWELL, high - ties.low_v[body], ties.high_v[body] - low
    )
    return np.asarray(np.round(forward, DIGITS), dtype=np.float64)


def describe(evidence: Evidence, breaks: Breaks, row: int, count: int) -> str:
    """One sentence about the emitter in `row`, the worst of `count`."""
    emitter = int(breaks.member[row])
    body = int(breaks.body[row])
    rail = net_title(evidence.connections, int(evidence.connections.ties.rail[body]))
    p_kind = evidence.layout.emitters.kind[emitter] == P_IN_NWELL
    own, side = ("p+", "above") if p_kind else ("n+", "below")
    return (
        f"The {own} emitter {breaks.subject[row]} on {breaks.detail[row]} at"
        f" {place(breaks.x_um[row], breaks.y_um[row])} can be {breaks.measured[row]:.3g} V {side}"
        f" {evidence.layout.bodies[body].id} on {rail}{and_others(count, 'emitter')} in normal"
        f" work, more than the limit of {breaks.limit[row]:g} V; move it to a body on its own rail"
        " or correct the voltages in the block file."
    )
