"""The text of a first block file, made of a layout's own labels for the user to correct.

In: the nets of a layout and its technology.  Out: YAML with comments; as it stands it passes
the check of block files, whatever the labels hold.
"""

from __future__ import annotations

from collections.abc import Iterable, Iterator, Sequence

import numpy as np

from latchscan.block.model import FORMAT, name_fault
from latchscan.layout.connections import Nets
from latchscan.layout.naming.conflicts import MOST_NETS_OF_A_NAME, nets_of_names
from latchscan.layout.naming.drafts import PinDraft, drafts_of_names
from latchscan.technology.document import one_line, shown_text
from latchscan.technology.model import Technology

MOST_PINS = 5_000
MOST_RAILS = 500
"""More than these exceed what the check of a block file reads."""
LONGEST_QUOTED = 300
"""A longer name, as YAML quotes it, is a note and no name; a key may have 1024 characters."""
LARGEST_V = 1.0e3
MOST_LISTED = 20
_NO_CONDUCTORS = "# The technology names no conductors: labels cannot be traced, none is listed."
_ESCAPES = {'"': '\\"', "\\": "\\\\"}


def quoted(text: str) -> str:
    r"""Text as a double-quoted YAML scalar that every parser reads back as it was.

    Examples
    --------
    >>> print(quoted('a "b"'))
    "a \"b\""
    """
    return f'"{"".join(_escaped(character) for character in text)}"'


def _escaped(character: str) -> str:
    if character in _ESCAPES:
        return _ESCAPES[character]
    if character.isprintable():
        return character
    number = ord(character)
    if number < 0x100:
        return f"\\x{number:02x}"
    return f"\\u{number:04x}" if number < 0x10000 else f"\\U{number:08x}"


def draft_block(nets: Nets, technology: Technology, *, layout_name: str, top: str) -> str:
    """Text of a first block file.

    Parameters
    ----------
    nets
        The layout's nets with their names.
    technology
        Its patterns tell which names are supplies and grounds, its loop the supplies' voltage.
    layout_name, top
        The layout's file and top cell.

    Notes
    -----
    The pins are those that a scan takes without a block file
    (`latchscan.layout.naming.drafts.drafts_of_names`).
    """
    drafts = [draft for draft in drafts_of_names(nets, technology)[0] if _usable(draft.name)]
    supplies = [draft for draft in drafts if draft.kind == "supply"][:MOST_RAILS]
    grounds = [draft for draft in drafts if draft.kind == "ground"][:MOST_RAILS]
    signals = [draft for draft in drafts if draft.kind == "signal"][:MOST_PINS]
    facts = _Facts(nets)
    lines = [
        *_head(technology, layout_name, top),
        "",
        *_supplies(supplies, facts, technology),
        "",
        *_grounds(grounds, facts),
        "",
        *_pins(signals, supplies, facts),
        "",
        *_further(grounds),
        *_left_aside(nets, drafts, [*supplies, *grounds, *signals]),
    ]
    return "\n".join(lines).rstrip("\n") + "\n"


def _usable(name: str) -> bool:
    return not name_fault(name) and len(quoted(name)) <= LONGEST_QUOTED


def _head(technology: Technology, layout_name: str, top: str) -> list[str]:
    return [
        f"# A first block file for {one_line(layout_name)}, made of the layout's own labels",
        f"# with the technology {technology.name}.  What is called assumed is a guess: correct it,",
        "# then run `latchscan block check` on this file.  A scan finds it as BLOCK.yaml beside",
        "# BLOCK.gds, or by --block FILE.",
        f"format: {FORMAT}",
        "format_version: 1",
        *([f"top: {quoted(top)}"] if _readable(top) else []),
        f"# temperature_c: {technology.temperature_c:g}  # instead of the technology's",
        *([] if technology.conductors else [_NO_CONDUCTORS]),
    ]


def _readable(top: str) -> bool:
    """Whether the name of a cell can stand in a file as text."""
    return bool(top.strip()) and not any("\ud800" <= c <= "\udfff" for c in top)


def _supplies(supplies: Sequence[PinDraft], facts: _Facts, technology: Technology) -> Iterator[str]:
    yield "# Supplies, with their voltages in normal work [V]; the over-voltage test goes to"
    yield "# 1.5 x high_v unless test_v says otherwise."
    if not supplies:
        yield "# No label matches the technology's names of supplies."
        yield "supplies: {}"
        return
    typical = technology.loop.supply_v
    yield f"# Voltages assumed: the technology's {typical:g} V, 10 percent either way."
    yield "supplies:"
    low, high = 0.9 * typical, min(1.1 * typical, LARGEST_V)
    voltages = f"{{low_v: {low:.6g}, typical_v: {typical:.6g}, high_v: {high:.6g}}}"
    for draft in supplies:
        yield f"  {quoted(draft.name)}: {voltages}  # {facts.told(draft)}"


def _grounds(grounds: Sequence[PinDraft], facts: _Facts) -> Iterator[str]:
    if not grounds:
        yield "# Grounds; no label matches the technology's names of grounds."
        yield "grounds: []"
        return
    yield "# Grounds"
    yield "grounds:"
    for draft in grounds:
        yield f"  - {quoted(draft.name)}  # {facts.told(draft)}"


def _pins(
    signals: Sequence[PinDraft], supplies: Sequence[PinDraft], facts: _Facts
) -> Iterator[str]:
    yield "# Pins: all assumed to be signals.  The kind may also be internal (no way outside) or"
    yield "# not_bonded; test_current_a is 0.1 A unless given."
    if len(supplies) == 1:
        yield "# The supply of every pin is assumed: there is one only."
    elif supplies:
        yield f"# Say which supply each pin works from: supply: {quoted(supplies[0].name)}"
    if not signals:
        yield "pins: {}"
        return
    supply = f", supply: {quoted(supplies[0].name)}" if len(supplies) == 1 else ""
    yield "pins:"
    for draft in signals:
        yield f"  {quoted(draft.name)}: {{kind: signal{supply}}}  # {facts.told(draft)}"


def _further(grounds: Sequence[PinDraft]) -> Iterator[str]:
    if len(grounds) > 1:
        names = ", ".join(quoted(draft.name) for draft in grounds[:MOST_LISTED])
        yield "# Names that are one net outside this layout, where that is so:"
        yield f"# joined: [[{names}]]"
    yield "# Parts of the layout that are not to be judged:"
    yield '# leave_out: [{box_um: [0, 0, 10, 10], reason: "seal ring"}]'


class _Facts:
    """What the comment of a pin tells: where it lies and what is on its nets."""

    def __init__(self, nets: Nets) -> None:
        self.nets = nets
        self.first: dict[tuple[int, str], int] = {}
        for row, node in enumerate(nets.label_node.tolist()):
            if node >= 0:
                key = (int(nets.node_net[node]), nets.labels[row].text)
                self.first.setdefault(key, row)
        count = len(nets.ids)
        of_piece = nets.node_net[nets.piece_node[nets.piece_node >= 0]]
        self.pieces = np.bincount(of_piece[of_piece >= 0], minlength=count)
        of_pad = nets.node_net[nets.pad_node[nets.pad_node >= 0]]
        self.pads = np.bincount(of_pad[of_pad >= 0], minlength=count)

    def told(self, draft: PinDraft) -> str:
        """One line on the pin's place, bond pads, diffusions, nets and other names."""
        nets = list(draft.nets)
        parts = [self._place(draft)]
        pads, pieces = int(self.pads[nets].sum()), int(self.pieces[nets].sum())
        parts.append(_count(pads, "bond pad") if pads else "no bond pad")
        parts.append(f"{_count(pieces, 'diffusion') if pieces else 'no diffusion'} directly on it")
        if len(nets) > 1:
            parts.append(f"on {len(nets)} separate nets")
        others = sorted({name for net in nets for name in self.nets.names[net]} - {draft.name})
        if others:
            parts.append(f"also labelled {_listed(others, 5)}")
        return ", ".join(part for part in parts if part)

    def _place(self, draft: PinDraft) -> str:
        rows = [row for net in draft.nets if (row := self.first.get((net, draft.name))) is not None]
        if not rows:
            return ""
        label, conductor = self.nets.labels[min(rows)], self.nets.label_conductor[min(rows)]
        return f"at ({label.x_um:g}, {label.y_um:g}) um on {one_line(conductor)}"


def _count(number: int, noun: str) -> str:
    return f"{number} {noun}{'' if number == 1 else 's'}"


def _listed(names: Sequence[str], most: int = MOST_LISTED) -> str:
    shown = ", ".join(shown_text(name) for name in names[:most])
    return f"{shown} and {len(names) - most} more" if len(names) > most else shown


def _left_aside(nets: Nets, drafts: Iterable[PinDraft], written: Iterable[PinDraft]) -> list[str]:
    """Comments on labels and bond pads that the file says nothing of, and why."""
    carriers = nets_of_names(nets)
    taken = {draft.name for draft in drafts}
    local = [
        name
        for name in sorted(carriers)
        if name not in taken and len(carriers[name]) > MOST_NETS_OF_A_NAME
    ]
    odd = [name for name in sorted(carriers) if not _usable(name)]
    over = len(taken) - len({draft.name for draft in written})
    lines = []
    if local:
        lines.append(
            f"# Left out, on more than {MOST_NETS_OF_A_NAME} separate nets each and therefore"
        )
        lines.append(f"# taken for local names of placed cells: {_listed(local)}")
    if odd:
        lines.append(f"# Left out, not usable as a name: {_listed(odd)}")
    if over:
        lines.append(f"# Left out, more than such a file is meant for: {_count(over, 'more name')}")
    loose = [
        label for label, node in zip(nets.labels, nets.label_node.tolist(), strict=True) if node < 0
    ]
    if loose:
        lines.append("# Labels that lie on no shape and name nothing:")
        lines += [
            f"#   {shown_text(label.text)} at ({label.x_um:g}, {label.y_um:g}) um"
            for label in loose[:MOST_LISTED]
        ]
    if len(loose) > MOST_LISTED:
        lines.append(f"#   and {len(loose) - MOST_LISTED} more")
    return lines + _nameless_pads(nets)


def _nameless_pads(nets: Nets) -> list[str]:
    rows = [
        row
        for row, node in enumerate(nets.pad_node.tolist())
        if node >= 0 and not nets.names[nets.node_net[node]]
    ]
    if not rows:
        return []
    boxes = [nets.pad_polygons[row].bounds for row in rows]
    middles = sorted(((y0 + y1) / 2, (x0 + x1) / 2) for x0, y0, x1, y1 in boxes)
    lines = ["# Bond pads that carry no label; label them in the layout to list them here:"]
    lines += [f"#   at ({x:g}, {y:g}) um" for y, x in middles[:MOST_LISTED]]
    if len(middles) > MOST_LISTED:
        lines.append(f"#   and {len(middles) - MOST_LISTED} more")
    return lines
