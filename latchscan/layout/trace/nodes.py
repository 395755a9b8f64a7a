"""Components as nodes and nets: poly folds into the one node it touches, or straps several.

In: the block's components.  Out: `Wiring`, which says for every component what node it stands
for and what net it is on.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from latchscan.layout.components import connected
from latchscan.layout.model import Ints
from latchscan.layout.runs import offsets
from latchscan.layout.trace.merging import Components


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Wiring:
    """What each component (k) is to the circuit.

    Attributes
    ----------
    home
        (k,) component whose node it is part of: poly that touches one node is part of that;
        of several nodes, that of most contacts; anything else its own.
    group
        (k,) number of its net: what hangs together through poly.
    strap
        (s,) components of poly that touch several nodes.
    link_first, link_node, link_contacts
        (k + 1,) offsets; for each component of poly the nodes that it touches, ascending, and
        the contacts between them.
    """

    home: Ints
    group: Ints
    strap: Ints
    link_first: Ints
    link_node: Ints
    link_contacts: Ints

    def contacts(self, component: int) -> int:
        """Contacts on a component of poly."""
        low, high = self.link_first[component : component + 2]
        return int(self.link_contacts[low:high].sum())


def wire(whole: Components) -> Wiring:
    """Nodes and nets of the block's components."""
    total = len(whole.box)
    pairs, contacts = np.unique(whole.crossing, axis=0, return_counts=True)
    poly, node = pairs.reshape(-1, 2).T
    first = offsets(np.bincount(poly, minlength=total))
    home = np.arange(total)
    # of several the one with most contacts, the first of equals
    order = np.lexsort((-node, contacts, poly))
    home[poly[order]] = node[order]
    return Wiring(
        home=home,
        group=connected(total, poly, node),
        strap=np.flatnonzero(np.diff(first) > 1),
        link_first=first,
        link_node=node,
        link_contacts=contacts,
    )
