"""What every net is: its pin, its kind and its voltages.

In: `Nets`, the technology and, where there is one, the block file.  Out: `Pins`, and the
cautions about what had to be assumed.

`name_nets(nets, technology, block)` makes them; `name_conflicts(nets, pins)`, which the rule
net-names asks, returns `NameConflicts` with the columns subject (net id or name), names, nets,
count, x_um and y_um.  Names that the block file joins stand in `Pins.joined_names`.
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
import shapely

from latchscan.block.load import LoadedBlock
from latchscan.caveats import Caveat
from latchscan.layout.connections import Nets, Pins
from latchscan.layout.model import Floats, Ints, frozen
from latchscan.layout.naming.conflicts import (
    MOST_NETS_OF_A_NAME,
    NameConflicts,
    name_conflicts,
)
from latchscan.layout.naming.drafts import (
    MOST_LISTED,
    USUAL_TEST_CURRENT_A,
    PinDraft,
    drafts_of_block,
    drafts_of_names,
    require_texts,
)
from latchscan.layout.runs import offsets
from latchscan.layout.source import LayoutSource
from latchscan.layout.unconnected import no_pins
from latchscan.technology.model import Technology
from latchscan.technology.quantities import layer_numbers

__all__ = [
    "MOST_NETS_OF_A_NAME",
    "NameConflicts",
    "name_conflicts",
    "name_nets",
]


def require_names(source: LayoutSource, technology: Technology, block: LoadedBlock | None) -> None:
    """Refuse a block file whose names the layout lacks, before anything long is begun.

    Raises
    ------
    BlockError
        A name is no text of the layout.
    """
    if block is not None and technology.conductors is not None:
        labels = source.labels([layer_numbers(pair) for pair in technology.text_layers()])
        require_texts({label.text for label in labels}, block)


def name_nets(
    nets: Nets, technology: Technology, block: LoadedBlock | None
) -> tuple[Pins, tuple[Caveat, ...]]:
    """Pins of the block, after its block file or else after the layout's own names.

    Parameters
    ----------
    nets
        The block's nets with their labels and bond pads.
    technology
        Tells which names are rails where no block file does, and whether nets are known.
    block
        The block file, None where there is none.

    Returns
    -------
    Pins
        Pins by name, and the kind and voltages of every net [V].
    tuple of Caveat
        What was assumed, left aside or not found.

    Raises
    ------
    BlockError
        The block file names what no label on a shape of the layout carries.

    Notes
    -----
    With a block file a name is exactly what the file says of it; names it does not hold are
    internal.  Without one, every name is matched with the technology's patterns: see
    `layout.naming.drafts`.  A net of several pins takes the first of supply, ground, signal,
    not bonded, internal, then the first in the alphabet; a net that is supply and ground at
    once is a supply.
    """
    if technology.conductors is None:
        return no_pins(len(nets.ids)), (Caveat(code="no-conductors"),)
    if block is None:
        drafts, notes = drafts_of_names(nets, technology)
    else:
        drafts, notes = drafts_of_block(nets, block), []
    pads = _pads_by_place(nets)
    unnamed = _unnamed_pads(nets, pads, drafts)
    pins = _settle(nets, pads, sorted([*drafts, *unnamed], key=lambda draft: draft.name))
    notes += _pad_notes(nets, pins, unnamed)
    notes += _label_notes(nets)
    if not pins.supply_known:
        notes.append(Caveat(code="no-supplies"))
    return pins, tuple(notes)


def _pads_by_place(nets: Nets) -> Ints:
    """Bond pads by (y, x), those on a conductor only."""
    x0, y0, x1, y1 = shapely.bounds(nets.pad_polygons).reshape(-1, 4).T
    order = np.lexsort((x1, y1, x0, y0))
    return np.asarray(order[nets.pad_node[order] >= 0], dtype=np.int64)


def _unnamed_pads(nets: Nets, pads: Ints, drafts: Sequence[PinDraft]) -> list[PinDraft]:
    """A pin for every net that has bond pads but no other pin."""
    taken = {net for draft in drafts for net in draft.nets}
    names = {draft.name for draft in drafts}
    found = []
    number = 0
    for net in dict.fromkeys(nets.node_net[nets.pad_node[pads]].tolist()):
        if net in taken:
            continue
        number += 1
        while f"pad-{number}" in names:
            number += 1
        found.append(
            PinDraft(
                name=f"pad-{number}",
                kind="signal",
                nets=(net,),
                texts=(),
                test_current_a=USUAL_TEST_CURRENT_A,
            )
        )
    return found


def _settle(nets: Nets, pads: Ints, drafts: Sequence[PinDraft]) -> Pins:
    """Pins in columns, and what each net takes from them."""
    net_pin = np.full(len(nets.ids), -1, dtype=np.int64)
    for pin in sorted(range(len(drafts)), key=lambda row: drafts[row].rank, reverse=True):
        net_pin[list(drafts[pin].nets)] = pin
    named = np.array([bool(names) for names in nets.names], dtype=np.bool_)
    kinds = np.array([draft.kind for draft in drafts], dtype=np.str_)
    net_kind = np.where(named, "internal", "unknown").astype("<U10")
    net_kind[net_pin >= 0] = kinds[net_pin[net_pin >= 0]] if len(drafts) else "unknown"
    low_v = np.array([draft.low_v for draft in drafts], dtype=np.float64)
    high_v = np.array([draft.high_v for draft in drafts], dtype=np.float64)
    at, has_pad = _shown_at(nets, pads, drafts)
    return Pins(
        names=frozen(np.array([draft.name for draft in drafts], dtype=np.str_)),
        kind=frozen(kinds),
        net_first=frozen(offsets(np.array([len(d.nets) for d in drafts], dtype=np.int64))),
        net=frozen(np.array([net for d in drafts for net in d.nets], dtype=np.int64)),
        x_um=frozen(at[:, 0].copy()),
        y_um=frozen(at[:, 1].copy()),
        has_pad=frozen(has_pad),
        joined_names=tuple(draft.joined for draft in drafts),
        low_v=frozen(low_v),
        high_v=frozen(high_v),
        test_current_a=frozen(np.array([d.test_current_a for d in drafts], dtype=np.float64)),
        net_kind=frozen(net_kind),
        net_pin=frozen(net_pin),
        net_low_v=frozen(_of_pin(low_v, net_pin)),
        net_high_v=frozen(_of_pin(high_v, net_pin)),
        supply_known=bool(np.isin(net_kind, ("supply", "ground")).any()),
    )


def _of_pin(values: Floats, net_pin: Ints) -> Floats:
    """(k,) the value of every net's pin, NaN where it has none."""
    return np.asarray(np.append(values, np.nan)[net_pin], dtype=np.float64)


def _shown_at(
    nets: Nets, pads: Ints, drafts: Sequence[PinDraft]
) -> tuple[Floats, np.ndarray[tuple[int, ...], np.dtype[np.bool_]]]:
    """(p, 2) the place of every pin [um], and (p,) whether a bond pad lies on it."""
    at = np.full((len(drafts), 2), np.nan)
    has_pad = np.zeros(len(drafts), dtype=np.bool_)
    first_pad: dict[int, int] = {}
    for row, net in enumerate(nets.node_net[nets.pad_node[pads]].tolist()):
        first_pad.setdefault(net, row)
    first_label: dict[tuple[int, str], int] = {}
    for row, node in enumerate(nets.label_node.tolist()):
        if node >= 0:
            first_label.setdefault((int(nets.node_net[node]), nets.labels[row].text), row)
    for pin, draft in enumerate(drafts):
        on_pads = [first_pad[net] for net in draft.nets if net in first_pad]
        spoken = [(net, text) for net in draft.nets for text in draft.texts]
        labels = [first_label[key] for key in spoken if key in first_label]
        if on_pads:
            has_pad[pin] = True
            at[pin] = _middle(nets.pad_polygons[pads[min(on_pads)]])
        elif labels:
            label = nets.labels[min(labels)]
            at[pin] = (label.x_um, label.y_um)
    return at, has_pad


def _middle(pad: object) -> tuple[float, float]:
    """The centroid of a pad, or a point on it where that lies outside [um]."""
    point = shapely.centroid(pad)
    if not shapely.intersects(pad, point):
        point = shapely.point_on_surface(pad)
    return float(shapely.get_x(point)), float(shapely.get_y(point))


def _pad_notes(nets: Nets, pins: Pins, unnamed: Sequence[PinDraft]) -> list[Caveat]:
    notes = []
    if unnamed:
        row = {name: index for index, name in enumerate(pins.names.tolist())}
        shown = ", ".join(
            f"`{draft.name}` at ({pins.x_um[row[draft.name]]:g}, {pins.y_um[row[draft.name]]:g}) um"
            for draft in unnamed[:MOST_LISTED]
        )
        more = len(unnamed) - MOST_LISTED
        notes.append(
            Caveat(code="unnamed-pad", detail=shown + (f" and {more} more" if more > 0 else ""))
        )
    loose = nets.pad_polygons[nets.pad_node < 0]
    if len(loose):
        x, y = min((_middle(pad) for pad in loose), key=lambda at: (at[1], at[0]))
        notes.append(
            Caveat(code="pad-on-nothing", detail=f"{len(loose)}, the first at ({x:g}, {y:g}) um")
        )
    return notes


def _label_notes(nets: Nets) -> list[Caveat]:
    """One caution a label on nothing, and one for all beyond the first few."""
    loose = np.flatnonzero(nets.label_node < 0).tolist()
    notes = []
    for row in loose[:MOST_LISTED]:
        label, conductor = nets.labels[row], nets.label_conductor[row]
        expected = "any conductor" if conductor == "any" else conductor
        detail = (
            f"`{label.text}` ({label.layer}/{label.texttype}) at"
            f" ({label.x_um:g}, {label.y_um:g}) um, expected {expected}"
        )
        notes.append(Caveat(code="label-on-nothing", detail=detail))
    if len(loose) > MOST_LISTED:
        notes.append(Caveat(code="label-on-nothing", detail=f"{len(loose) - MOST_LISTED} more"))
    return notes
