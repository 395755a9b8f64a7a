"""Names that contradict each other: several on one net, or one on several nets.

In: `Nets` and `Pins`.  Out: `NameConflicts`.
"""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass

import numpy as np

from latchscan.layout.connections import Nets, Pins
from latchscan.layout.model import Floats, Ints, frozen

MOST_NETS_OF_A_NAME = 4
"""A name on more separate nets than this is taken for a local name of placed cells."""


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class NameConflicts:
    """Contradicting names (c): first the nets with several names, then names on several nets.

    Attributes
    ----------
    subject
        (c,) id of the net, or the name.
    names
        (c,) the names on the net, sorted; for a name on several nets that name alone.
    nets
        (c,) the nets concerned, in order.
    count
        (c,) names on the net, or separate nets of the name; joined names and nets count as one.
    x_um, y_um
        (c,) first label that carries one of the names on one of the nets.
    """

    subject: tuple[str, ...]
    names: tuple[tuple[str, ...], ...]
    nets: tuple[tuple[int, ...], ...]
    count: Ints
    x_um: Floats
    y_um: Floats


def nets_of_names(nets: Nets) -> dict[str, list[int]]:
    """Every name of the block with the nets that carry it, in order."""
    found: dict[str, list[int]] = {}
    for net, names in enumerate(nets.names):
        for name in names:
            found.setdefault(name, []).append(net)
    return found


def name_conflicts(nets: Nets, pins: Pins) -> NameConflicts:
    """Nets of several names and names of several nets, joined ones left out.

    Parameters
    ----------
    nets
        The block's nets.
    pins
        Its pins; their `joined_names` are no conflict among each other.

    Returns
    -------
    NameConflicts
        Nets by their order, then names in the alphabet's.

    Notes
    -----
    A name that is no pin's and lies on more than `MOST_NETS_OF_A_NAME` nets is a local name of
    placed cells and contradicts nothing.  Of several nets only a pin's name is a conflict: with
    a block file, all other names are inside the block and may come as often as its cells do.
    """
    carriers = nets_of_names(nets)
    joined = {name: group[0] for group in pins.joined_names for name in group}
    known = {*pins.names.tolist(), *joined}
    local = {
        name
        for name, found in carriers.items()
        if len(found) > MOST_NETS_OF_A_NAME and name not in known
    }
    rows: list[tuple[str, tuple[str, ...], tuple[int, ...], int]] = []
    for net, names in enumerate(nets.names):
        spoken = [name for name in names if name not in local]
        distinct = len({joined.get(name, name) for name in spoken})
        if distinct > 1:
            rows.append((str(nets.ids[net]), tuple(spoken), (net,), distinct))
    rows += [
        (name, (name,), tuple(carriers[name]), len(carriers[name]))
        for name in sorted((set(carriers) & known) - set(joined))
        if len(carriers[name]) > 1
    ]
    at = _first_labels(nets, rows)
    return NameConflicts(
        subject=tuple(row[0] for row in rows),
        names=tuple(row[1] for row in rows),
        nets=tuple(row[2] for row in rows),
        count=frozen(np.array([row[3] for row in rows], dtype=np.int64)),
        x_um=frozen(at[:, 0].copy()),
        y_um=frozen(at[:, 1].copy()),
    )


def _first_labels(
    nets: Nets, rows: Iterable[tuple[str, tuple[str, ...], tuple[int, ...], int]]
) -> Floats:
    """(c, 2) the first label of each row's names on its nets [um]."""
    first: dict[tuple[int, str], int] = {}
    for label, node in enumerate(nets.label_node.tolist()):
        if node >= 0:
            first.setdefault((int(nets.node_net[node]), nets.labels[label].text), label)
    at = []
    for _, names, found, _ in rows:
        labels = [first[key] for net in found for name in names if (key := (net, name)) in first]
        where = nets.labels[min(labels)] if labels else None
        at.append((np.nan, np.nan) if where is None else (where.x_um, where.y_um))
    return np.array(at, dtype=np.float64).reshape(-1, 2)
