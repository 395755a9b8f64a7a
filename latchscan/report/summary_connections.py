"""The part of the text summary that tells of pins, nets, injectors, rings and ties."""

from __future__ import annotations

from collections.abc import Iterator

import numpy as np

from latchscan.layout.connections import (
    BY_SUPPLY,
    INJECTOR_CLASSES,
    NET_KINDS,
    POLARITIES,
    RING_KINDS,
    Injectors,
    Rings,
    Ties,
)
from latchscan.rules.model import Evidence


def connection_lines(evidence: Evidence) -> Iterator[tuple[str, str]]:
    """Heading and words of every line; nothing where nothing is known of any connection."""
    connections = evidence.connections
    pins, nets = connections.pins, connections.nets
    if len(pins.names):
        yield "pins", _by_kind([(int(np.sum(pins.kind == kind)), kind) for kind in NET_KINDS])
    if len(nets.ids):
        named = sum(bool(names) for names in nets.names)
        yield "nets", f"{len(nets.ids)} with a name, a pad or a diffusion, {named} of them named"
    if len(connections.injectors.pin):
        yield from _injector_lines(connections.injectors)
    if len(connections.rings.ids):
        yield "rings", _rings(connections.rings)
    if pins.supply_known:
        yield "bodies", _ties(connections.ties)


def _by_kind(counts: list[tuple[int, str]]) -> str:
    return ", ".join(f"{count} {kind.replace('_', ' ')}" for count, kind in counts if count)


def _injector_lines(injectors: Injectors) -> Iterator[tuple[str, str]]:
    """One line a class: how many of each polarity, how many behind a resistor."""
    for reason, name in enumerate(INJECTOR_CLASSES):
        own = injectors.reason == reason
        if not own.any():
            continue
        words = _by_kind(
            [
                (int(np.sum(own & (injectors.polarity == polarity))), polarity_name)
                for polarity, polarity_name in enumerate(POLARITIES)
            ]
        )
        driven = own & (injectors.pin >= 0)
        resisted = int(np.sum(driven & (injectors.resistance_ohm != 0.0)))
        behind = f", {resisted} of them through a resistor" if resisted else ""
        cause = "on internal nodes" if reason == BY_SUPPLY else f"by {name}"
        yield "injectors", f"{cause}: {words}{behind}"


def _rings(rings: Rings) -> str:
    """Closed and open rings of each kind."""
    told = []
    for kind, name in enumerate(RING_KINDS):
        own = rings.kind == kind
        closed = int(np.sum(own & rings.closed))
        if own.any():
            told.append(f"{name} {closed} closed, {int(own.sum()) - closed} open")
    return "; ".join(told)


def _ties(ties: Ties) -> str:
    """How the bodies hang on their rails."""
    resistance = ties.resistance_ohm
    direct = int(np.sum((ties.rail >= 0) & (resistance == 0.0)))
    untied = int(np.sum(ties.rail < 0))
    words = [f"{direct} of {len(ties.rail)} tied directly"]
    if len(ties.rail) - direct - untied:
        words.append(f"{len(ties.rail) - direct - untied} through a resistance")
    if untied:
        words.append(f"{untied} on no rail")
    return ", ".join(words)
