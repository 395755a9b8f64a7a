"""Rules on connections drawn at random, against their pages read literally, one row at a time.

There is no outside source: the loops here repeat the sentences of each page.
"""

from __future__ import annotations

import dataclasses
from typing import Any

import numpy as np
import synthetic_scan
from hypothesis import given, settings
from hypothesis import strategies as st
from synthetic_scan import changed

from latchscan.layout.connections import MAJORITY, NET_KINDS
from latchscan.layout.model import P_IN_NWELL
from latchscan.rules import (
    forward_bias,
    ring_contacts,
    ring_gap,
    ring_net,
    ring_width,
    tie_conflict,
    tie_net,
)
from latchscan.rules.model import Evidence
from latchscan.technology.limits import (
    ForwardBiasRule,
    RingContactsRule,
    RingGapRule,
    RingWidthRule,
)

BODIES, NETS, TAPS = 7, 7, 12
MEASURED = synthetic_scan.evidence(connected=True)
RAILS = ("supply", "ground")
volts = st.one_of(st.just(np.nan), st.sampled_from((0.0, 1.0, 1.5, 2.0, 3.0)))
some_net = st.integers(-1, NETS - 1)


@st.composite
def wirings(draw: st.DrawFn) -> Evidence:
    """Kinds, pins, voltages, taps, rails and body kinds at random; taps carry the contacts."""
    kind = np.array(draw(st.lists(st.sampled_from(NET_KINDS), min_size=NETS, max_size=NETS)))
    pin = np.array(draw(st.lists(st.integers(-1, 4), min_size=NETS, max_size=NETS)))
    # nets of one pin are of one kind
    for net in range(NETS):
        kind[net] = kind[int(np.argmax(pin == pin[net]))] if pin[net] >= 0 else kind[net]
    low = np.array(draw(st.lists(volts, min_size=NETS, max_size=NETS)))
    width = np.array(draw(st.lists(st.sampled_from((0.0, 1.0)), min_size=NETS, max_size=NETS)))
    taps = MEASURED.layout.taps
    tap_net = np.array(draw(st.lists(some_net, min_size=TAPS, max_size=TAPS)))
    tap_net[taps.contact_count == 0] = -1
    rail = np.array(draw(st.lists(some_net, min_size=BODIES, max_size=BODIES)))
    rail[~np.isin(np.append(kind, "")[rail], RAILS)] = -1
    runs = [np.unique(tap_net[(taps.body == b) & (tap_net >= 0)]) for b in range(BODIES)]
    bodies = tuple(
        dataclasses.replace(body, kind=draw(st.sampled_from(("nwell", "isolated_pwell"))))
        for body in MEASURED.layout.bodies[:-1]
    )
    measured = changed(MEASURED, "layout", bodies=(*bodies, MEASURED.layout.bodies[-1]))
    pins = {"net_kind": kind, "net_pin": pin, "net_low_v": low, "net_high_v": low + width}
    measured = changed(measured, "connections.pins", **pins)
    return changed(
        measured,
        "connections.ties",
        tap_net=tap_net,
        rail=rail,
        low_v=np.append(low, np.nan)[rail],
        high_v=np.append(low + width, np.nan)[rail],
        net_first=np.concatenate(((0,), np.cumsum([len(run) for run in runs]))),
        net=np.concatenate(runs).astype(np.int64),
        net_contacts=np.ones(sum(len(run) for run in runs), dtype=np.int64),
    )


def right_kind(measured: Evidence, body: int) -> str:
    return "supply" if measured.layout.bodies[body].kind == "nwell" else "ground"


@settings(max_examples=80, deadline=None)
@given(wirings())
def test_tie_net(measured: Evidence) -> None:
    ties, pins = measured.connections.ties, measured.connections.pins
    taps = measured.layout.taps
    expected = []
    for tap in range(TAPS):
        net, body = int(ties.tap_net[tap]), int(taps.body[tap])
        if net < 0:
            continue
        right, kind = right_kind(measured, body), str(pins.net_kind[net])
        own = [int(ties.tap_net[t]) for t in range(TAPS) if taps.body[t] == body]
        direct = any(pins.net_kind[n] == right for n in own if n >= 0)
        rail = int(ties.rail[body])
        behind = rail >= 0 and pins.net_kind[rail] == right and not direct
        bonded = pins.net_pin[net] >= 0 and bool(pins.has_pad[pins.net_pin[net]])
        if kind == right:
            continue
        if kind in RAILS or bonded or kind == "signal":
            expected.append(tap)
        elif behind or (kind == "unknown" and right not in pins.net_kind.tolist()):
            continue
        else:
            expected.append(tap)
    assert tie_net.check(measured).member.tolist() == expected


@settings(max_examples=80, deadline=None)
@given(wirings())
def test_tie_conflict(measured: Evidence) -> None:
    ties, pins = measured.connections.ties, measured.connections.pins
    expected = {}
    for body in range(BODIES):
        nets = ties.net[ties.net_first[body] : ties.net_first[body + 1]].tolist()
        rails = set()
        for net in nets:
            kind = str(pins.net_kind[net])
            if kind == "ground":
                rails.add("ground")
            elif kind == "supply":
                pin = int(pins.net_pin[net])
                rails.add(f"pin {pin}" if pin >= 0 else f"net {net}")
        if len(rails) > 1:
            expected[body] = float(len(rails))
    breaks = tie_conflict.check(measured)
    found = dict(zip(breaks.member.tolist(), breaks.measured.tolist(), strict=True))
    assert found == expected


@settings(max_examples=80, deadline=None)
@given(wirings(), st.sampled_from((0.0, 0.5, 1.0)))
def test_forward_bias(measured: Evidence, max_v: float) -> None:
    ties, pins = measured.connections.ties, measured.connections.pins
    emitters, nets = measured.layout.emitters, measured.connections.nets
    expected = 0
    for row in range(len(emitters.ids)):
        net, body = int(nets.node_net[nets.piece_node[row]]), int(emitters.body[row])
        rail = int(ties.rail[body])
        own = ties.net[ties.net_first[body] : ties.net_first[body + 1]].tolist()
        if rail < 0 or net == rail or net in own:
            continue
        if pins.net_pin[net] >= 0 and pins.net_pin[net] == pins.net_pin[rail]:
            continue
        low, high = pins.net_low_v[net], pins.net_high_v[net]
        same_high = high == pins.net_high_v[rail]
        if same_high and (pins.net_kind[net] not in RAILS or low == pins.net_low_v[rail]):
            continue
        p_kind = emitters.kind[row] == P_IN_NWELL
        forward = high - ties.low_v[body] if p_kind else ties.high_v[body] - low
        expected += bool(forward > max_v)
    assert len(forward_bias.check(measured, ForwardBiasRule(max_v=max_v))) == expected


ring_columns = st.lists(
    st.tuples(
        st.booleans(),
        st.lists(st.one_of(st.floats(0.01, 9.0), st.just(np.nan)), max_size=3),
        st.one_of(st.floats(0.0, 2.0), st.just(np.nan)),
        st.one_of(st.floats(0.0, 1.0), st.just(np.nan)),
        st.sampled_from((-1, 0, 1)),
    ),
    min_size=3,
    max_size=3,
)


@settings(max_examples=80, deadline=None)
@given(ring_columns, st.floats(0.0, 5.0), st.floats(0.1, 1.0))
def test_rings(rows: list[Any], limit_um: float, share: float) -> None:
    gaps = [sorted(row[1], key=lambda gap: (not np.isnan(gap), -gap)) for row in rows]
    count = sum(len(run) for run in gaps)
    kind = MEASURED.connections.rings.kind
    measured = changed(
        MEASURED,
        "connections.rings",
        closed=np.array([row[0] for row in rows]),
        gap_first=np.concatenate(((0,), np.cumsum([len(run) for run in gaps]))),
        gap_um=np.array([gap for run in gaps for gap in run]),
        gap_from_um=np.zeros((count, 2)),
        gap_to_um=np.ones((count, 2)),
        width_um=np.array([row[2] for row in rows]),
        contacted_share=np.array([row[3] for row in rows]),
        net_suits=np.array([row[4] for row in rows]),
    )
    opened = sum(
        not row[0] and (not run or not run[0] <= limit_um)
        for row, run in zip(rows, gaps, strict=True)
    )
    assert len(ring_gap.check(measured, RingGapRule(max_um=limit_um))) == opened
    narrow = sum(
        not row[2] >= (limit_um if kind[at] == MAJORITY else limit_um / 2)
        for at, row in enumerate(rows)
    )
    widths = RingWidthRule(majority_min_um=limit_um, minority_min_um=limit_um / 2)
    assert len(ring_width.check(measured, widths)) == narrow
    starved = sum(not row[3] >= share for row in rows)
    assert len(ring_contacts.check(measured, RingContactsRule(min_share=share))) == starved
    assert ring_net.check(measured).member.tolist() == [
        at for at, row in enumerate(rows) if row[4] == 0
    ]
