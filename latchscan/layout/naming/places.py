"""Where pins meet the wiring: the nodes under their bond pads and labels.

In: `Nets` and `Pins`.  Out: (pin, node) pairs.
"""

from __future__ import annotations

import numpy as np

from latchscan.layout.connections import Nets, Pins
from latchscan.layout.model import Ints


def pin_places(nets: Nets, pins: Pins) -> tuple[Ints, Ints]:
    """(pin, node) pairs of the nodes through which a pin's current enters, sorted.

    Only nodes of the pin's own nets count: those under the net's bond pads, and where it has
    none those under the pin's labels.  A pad is every pin's that is on its net.
    """
    owner = {
        name: pin
        for pin, group in enumerate(pins.joined_names)
        for name in group or (str(pins.names[pin]),)
    }
    pin = np.repeat(np.arange(len(pins.names)), np.diff(pins.net_first))
    on = set(zip(pin.tolist(), pins.net.tolist(), strict=True))
    of_net: dict[int, list[int]] = {}
    for row, net in zip(pin.tolist(), pins.net.tolist(), strict=True):
        of_net.setdefault(net, []).append(row)
    found = {
        (row, node)
        for node in nets.pad_node[nets.pad_node >= 0].tolist()
        for row in of_net.get(int(nets.node_net[node]), ())
    }
    padded = {int(nets.node_net[node]) for _, node in found}
    for label, node in zip(nets.labels, nets.label_node.tolist(), strict=True):
        row = owner.get(label.text, -1)
        net = int(nets.node_net[node]) if node >= 0 else -1
        if (row, net) in on and net not in padded:
            found.add((row, node))
    pairs = np.array(sorted(found), dtype=np.int64).reshape(-1, 2)
    return pairs[:, 0].copy(), pairs[:, 1].copy()
