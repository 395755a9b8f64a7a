"""Least resistance from some nodes to all others, over the links between them."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import scipy.sparse
from scipy.sparse.csgraph import dijkstra

from latchscan.layout.components import connected
from latchscan.layout.model import Floats, Ints
from latchscan.layout.runs import offsets, within_runs


def least_resistance(count: int, node: Ints, ohm: Floats, sources: Ints) -> tuple[Floats, Ints]:
    """Least resistance of every node to the nearest source, and which source that is.

    Parameters
    ----------
    count
        Number of nodes (n).
    node
        (e, 2) nodes that a resistance joins.
    ohm
        (e,) the resistances [ohm]; NaN where one was not worked out.
    sources
        Nodes to start from.

    Returns
    -------
    resistance_ohm
        (n,) 0 at a source, inf where none is reached, NaN where it is reached through
        resistances alone that are not all known [ohm].
    source
        (n,) the source reached, -1 where there is none.

    Notes
    -----
    Shortest paths after Dijkstra (1959).  Resistances that are known come first, however
    large: only what they do not reach is sought through the others.
    """
    resistance = np.full(count, np.inf)
    origin = np.full(count, -1, dtype=np.int64)
    sources = np.unique(sources)
    resistance[sources], origin[sources] = 0.0, sources
    if not len(sources) or not len(node):
        return resistance, origin
    known = ~np.isnan(ohm)
    for through, unknown in ((known, False), (np.ones_like(known), True)):
        if unknown and known.all():
            break
        found, start = _nearest(count, node[through], np.nan_to_num(ohm[through]), sources)
        fresh = np.isinf(resistance) & np.isfinite(found)
        resistance[fresh] = np.nan if unknown else found[fresh]
        origin[fresh] = start[fresh]
    return resistance, origin


def _nearest(count: int, node: Ints, ohm: Floats, sources: Ints) -> tuple[Floats, Ints]:
    found, _, start = dijkstra(
        _graph(count, node, ohm),
        directed=False,
        indices=sources,
        min_only=True,
        return_predecessors=True,
    )
    return np.asarray(found, dtype=np.float64), np.asarray(start, dtype=np.int64)


def _graph(count: int, node: Ints, ohm: Floats) -> scipy.sparse.csr_array:
    """Sparse graph; of resistances between the same two nodes the least."""
    low, high = node.min(axis=1), node.max(axis=1)
    order = np.lexsort((ohm, high, low))
    low, high, ohm = low[order], high[order], ohm[order]
    fresh = np.ones(len(low), dtype=np.bool_)
    fresh[1:] = (low[1:] != low[:-1]) | (high[1:] != high[:-1])
    fresh &= low != high
    return scipy.sparse.csr_array((ohm[fresh], (low[fresh], high[fresh])), shape=(count, count))


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Wires:
    """Links grouped by the cluster of nodes they join, so that a search sees no others.

    Attributes
    ----------
    cluster
        (n,) cluster of every node.
    node, ohm
        (e, 2), (e,) links sorted by cluster, and their resistances [ohm].
    first
        (clusters + 1,) offsets of the clusters' links.
    """

    cluster: Ints
    node: Ints
    ohm: Floats
    first: Ints


def gather_wires(count: int, node: Ints, ohm: Floats) -> Wires:
    """Group links (e, 2) between `count` nodes by cluster."""
    cluster = connected(count, node[:, 0], node[:, 1])
    order = np.argsort(cluster[node[:, 0]], kind="stable")
    per_cluster = np.bincount(cluster[node[:, 0]], minlength=int(cluster.max(initial=-1)) + 1)
    return Wires(cluster=cluster, node=node[order], ohm=ohm[order], first=offsets(per_cluster))


def reached_from(starts: Ints, wires: Wires) -> tuple[Ints, Floats]:
    """Nodes that can be reached from some, and the least resistance to each.

    Returns
    -------
    node
        (r,) the nodes reached, the starts among them, in order.
    resistance_ohm
        (r,) as in `least_resistance` [ohm].
    """
    starts = np.unique(starts)
    around = np.unique(wires.cluster[starts])
    length = wires.first[around + 1] - wires.first[around]
    rows = np.repeat(wires.first[around], length) + within_runs(length)
    members = np.unique(np.concatenate([starts, wires.node[rows].ravel()]))
    found, _ = least_resistance(
        len(members),
        np.searchsorted(members, wires.node[rows]),
        wires.ohm[rows],
        np.searchsorted(members, starts),
    )
    return members, found
