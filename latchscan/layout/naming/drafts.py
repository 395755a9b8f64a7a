"""Pins before they are put in order: from the block file, or from the layout's own names.

In: `Nets` and the block file, or the technology's patterns.  Out: `PinDraft` values.
"""

from __future__ import annotations

import difflib
import fnmatch
from collections.abc import Collection, Iterable, Iterator, Mapping, Sequence
from dataclasses import dataclass

import numpy as np

from latchscan.block.load import LoadedBlock
from latchscan.block.model import Block
from latchscan.caveats import Caveat
from latchscan.errors import BlockError
from latchscan.layout.connections import Nets
from latchscan.layout.naming.conflicts import MOST_NETS_OF_A_NAME, nets_of_names
from latchscan.technology.model import Technology

KIND_ORDER = ("supply", "ground", "signal", "not_bonded", "internal")
"""Which kind a net takes that carries names of several."""
USUAL_TEST_CURRENT_A = 0.1
"""Current forced into a signal pin [A]; usual level of JESD78, from memory."""
RAIL_TOLERANCE = 0.1
"""Range around the technology's supply that an undeclared supply is taken to have."""
MOST_LISTED = 8


@dataclass(frozen=True, slots=True, kw_only=True)
class PinDraft:
    """A pin: its nets, its labels' texts and what is known of it.

    Attributes
    ----------
    texts
        Texts of the labels that mean the pin; () for an unnamed bond pad.
    joined
        Names that the block file joins into the pin; () where it joins none.
    low_v, high_v, test_current_a
        NaN where not known.
    """

    name: str
    kind: str
    nets: tuple[int, ...]
    texts: tuple[str, ...]
    joined: tuple[str, ...] = ()
    low_v: float = np.nan
    high_v: float = np.nan
    test_current_a: float = np.nan

    @property
    def rank(self) -> tuple[int, str]:
        """Sorts the pins of one net: the first decides what the net is."""
        return KIND_ORDER.index(self.kind), self.name


def listed(names: Sequence[str]) -> str:
    """The first few names in back quotes, and how many more there are."""
    shown = ", ".join(f"`{name}`" for name in names[:MOST_LISTED])
    more = len(names) - MOST_LISTED
    return f"{shown} and {more} more" if more > 0 else shown


def drafts_of_block(nets: Nets, loaded: LoadedBlock) -> list[PinDraft]:
    """Pins of a block file.

    Raises
    ------
    BlockError
        The layout has no label of a name, or has its labels on no shape.
    """
    carriers = nets_of_names(nets)
    for name, place in _places(loaded.block):
        if name not in carriers:
            raise BlockError(f"{loaded.where(*place)}: {_missing(name, nets, carriers)}")
    return [_block_pin(loaded.block, group, carriers) for group in _groups(loaded.block)]


def require_texts(texts: Collection[str], loaded: LoadedBlock) -> None:
    """Refuse a block file with a name that is no text of the layout at all.

    Raises
    ------
    BlockError
        At the first such name.
    """
    for name, place in _places(loaded.block):
        if name not in texts:
            raise BlockError(f"{loaded.where(*place)}: {_unknown(name, texts)}")


def _places(block: Block) -> Iterator[tuple[str, tuple[str | int, ...]]]:
    """Every name of a block file with the key it stands under."""
    yield from ((name, ("pins", name)) for name in block.pins)
    yield from ((name, ("supplies", name)) for name in block.supplies)
    yield from ((name, ("grounds", index)) for index, name in enumerate(block.grounds))
    for row, group in enumerate(block.joined):
        yield from ((name, ("joined", row, index)) for index, name in enumerate(group))


def _missing(name: str, nets: Nets, carriers: Collection[str]) -> str:
    loose = [label for label in nets.labels if label.text == name]
    if loose:
        at = f"({loose[0].x_um:g}, {loose[0].y_um:g}) um"
        return f"every label of {name!r} lies on no shape; expected a conductor, got none at {at}"
    return _unknown(name, carriers)


def _unknown(name: str, carriers: Collection[str]) -> str:
    near = difflib.get_close_matches(name, sorted(carriers), n=3, cutoff=0.5)
    if near:
        expected = f"expected a name such as {' or '.join(repr(text) for text in near)}"
    elif carriers:
        expected = f"expected one of {len(carriers)}, such as {min(carriers)!r}"
    else:
        expected = "expected labels on conductors, the layout has none"
    return f"no label of the layout is {name!r}; {expected}, got {name!r}"


def _groups(block: Block) -> list[tuple[str, ...]]:
    """The block's names, joined ones together; overlapping groups are one."""
    groups: list[list[str]] = []
    for names in block.joined:
        apart = [group for group in groups if not set(group) & set(names)]
        met = [name for group in groups if set(group) & set(names) for name in group]
        groups = [*apart, list(dict.fromkeys([*met, *names]))]
    joined = {name for group in groups for name in group}
    alone = dict.fromkeys([*block.supplies, *block.grounds, *block.pins])
    return [tuple(group) for group in groups] + [(name,) for name in alone if name not in joined]


def _kind(block: Block, name: str) -> str:
    if name in block.supplies:
        return "supply"
    if name in block.grounds:
        return "ground"
    return block.pins[name].kind if name in block.pins else "internal"


def _block_pin(
    block: Block, group: tuple[str, ...], carriers: Mapping[str, Sequence[int]]
) -> PinDraft:
    kind = min((_kind(block, name) for name in group), key=KIND_ORDER.index)
    low_v, high_v, current_a = np.nan, np.nan, np.nan
    pins = [block.pins[name] for name in group if name in block.pins]
    if kind == "supply":
        supplies = [block.supplies[name] for name in group if name in block.supplies]
        low_v = min((supply.low_v for supply in supplies), default=np.nan)
        high_v = max((supply.high_v for supply in supplies), default=np.nan)
    elif kind == "ground":
        low_v = high_v = 0.0
    else:
        highs = [block.supplies[pin.supply].high_v for pin in pins if pin.supply in block.supplies]
        if highs:
            low_v, high_v = 0.0, max(highs)
    if kind == "signal":
        current_a = max(pin.test_current_a for pin in pins if pin.kind == "signal")
    return PinDraft(
        name=group[0],
        kind=kind,
        nets=tuple(sorted({net for name in group for net in carriers[name]})),
        texts=group,
        joined=tuple(sorted(group))
        if any(set(group) & set(names) for names in block.joined)
        else (),
        low_v=low_v,
        high_v=high_v,
        test_current_a=current_a,
    )


def drafts_of_names(nets: Nets, technology: Technology) -> tuple[list[PinDraft], list[Caveat]]:
    """Pins after the layout's own names, and what that assumes.

    Notes
    -----
    A net takes its rail's name, else the first of its names in the alphabet; a supply comes
    before a ground.  A name other than a rail's on more than `MOST_NETS_OF_A_NAME` nets is a
    local name of placed cells: it names a pin only where a bond pad lies on just one of its
    nets.
    """
    carriers = nets_of_names(nets)
    kinds = {name: _kind_by_name(name, technology) for name in carriers}
    padded = _padded_nets(nets)
    local = {
        name
        for name, found in carriers.items()
        if kinds[name] == "signal" and len(found) > MOST_NETS_OF_A_NAME
    }
    sole = {
        name: [net for net in carriers[name] if net in padded]
        for name in local
        if sum(net in padded for net in carriers[name]) == 1
    }
    owned: dict[str, list[int]] = {}
    for net, names in enumerate(nets.names):
        spoken = [name for name in names if name not in local]
        spoken = spoken or [name for name in names if net in sole.get(name, ())]
        if spoken:
            chief = min(spoken, key=lambda name: (KIND_ORDER.index(kinds[name]), name))
            owned.setdefault(chief, []).append(net)
    drafts = [
        _named_pin(name, kinds[name], found, technology) for name, found in sorted(owned.items())
    ]
    return drafts, _assumptions(drafts, local - set(owned), technology)


def _padded_nets(nets: Nets) -> set[int]:
    return set(nets.node_net[nets.pad_node[nets.pad_node >= 0]].tolist())


def _kind_by_name(name: str, technology: Technology) -> str:
    labels = technology.labels
    for kind, patterns in (("supply", labels.power_names), ("ground", labels.ground_names)):
        if any(fnmatch.fnmatchcase(name.lower(), pattern.lower()) for pattern in patterns):
            return kind
    return "signal"


def _assumed_range(technology: Technology) -> tuple[float, float]:
    supply = technology.loop.supply_v
    return (1.0 - RAIL_TOLERANCE) * supply, (1.0 + RAIL_TOLERANCE) * supply


def _named_pin(name: str, kind: str, nets: Sequence[int], technology: Technology) -> PinDraft:
    low_v, high_v = {"supply": _assumed_range(technology), "ground": (0.0, 0.0)}.get(
        kind, (np.nan, np.nan)
    )
    return PinDraft(
        name=name,
        kind=kind,
        nets=tuple(nets),
        texts=(name,),
        low_v=low_v,
        high_v=high_v,
        test_current_a=USUAL_TEST_CURRENT_A if kind == "signal" else np.nan,
    )


def _assumptions(
    drafts: Iterable[PinDraft], local: Iterable[str], technology: Technology
) -> list[Caveat]:
    by_kind: dict[str, list[str]] = {kind: [] for kind in KIND_ORDER}
    for draft in drafts:
        by_kind[draft.kind].append(draft.name)
    notes = []
    rails = []
    if by_kind["supply"]:
        low_v, high_v = _assumed_range(technology)
        rails.append(f"supplies {listed(by_kind['supply'])} at {low_v:g} to {high_v:g} V")
    if by_kind["ground"]:
        rails.append(f"grounds {listed(by_kind['ground'])} at 0 V")
    if rails:
        notes.append(Caveat(code="assumed-supply", detail=", ".join(rails)))
    if by_kind["signal"]:
        names = by_kind["signal"]
        notes.append(Caveat(code="assumed-pins", detail=f"{len(names)}: {listed(names)}"))
    if unused := sorted(local):
        notes.append(Caveat(code="local-names", detail=f"{len(unused)}: {listed(unused)}"))
    return notes
