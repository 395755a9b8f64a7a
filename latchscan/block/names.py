"""Names in a block file that do not agree: unknown ones, contradictions, wrong joins.

Works on the plain data of a document, so that it also finds its problems in a file whose
other parts are wrong.
"""

from __future__ import annotations

import math
from collections.abc import Iterable, Iterator, Mapping
from difflib import get_close_matches

from latchscan.block.model import TEST_SHARE_OF_HIGH_V
from latchscan.technology.document import Data, Document, Found, Path, shown_text

LEAST_JOINED = 1
"""Names of a group that says they are one net outside the layout; a name alone says so of
its own separate nets."""
MOST_NEAREST = 30
_RAILS = {"supply": "supplies", "ground": "grounds"}
"""Kinds of pins that another part of the file must list."""


class Nearest:
    """Looks up which known name an unknown one may mean, for the first unknown ones only.

    Comparing thousands of names with thousands takes minutes, and a file of that many wrong
    names is another block's.
    """

    def __init__(self, known: Iterable[str]) -> None:
        self._known = tuple(sorted(set(known)))
        self._left = MOST_NEAREST

    def to(self, name: str) -> str:
        """The nearest known name as a message shows it, "" where none is near."""
        self._left -= 1
        near = get_close_matches(name, self._known, n=1) if self._left >= 0 else []
        return shown_text(near[0]) if near else ""


def problems_with_names(document: Document) -> Iterator[Found]:
    """Every contradiction between the names of a document."""
    data = document.data if isinstance(document.data, dict) else {}
    supplies, pins = _mapping(data, "supplies"), _mapping(data, "pins")
    grounds = _names(data.get("grounds"))
    rails = {"supplies": frozenset(supplies), "grounds": frozenset(grounds.values())}
    yield from _ground_twice(document, grounds, supplies)
    nearest = Nearest(supplies)
    for name, pin in pins.items():
        if isinstance(pin, dict):
            yield from _unknown_supply(document, name, pin, supplies, nearest)
            yield from _wrong_kind(document, name, pin, rails)
    yield from _joins(document, data, supplies, grounds)


def _mapping(data: Mapping[str, Data], key: str) -> Mapping[str, Data]:
    value = data.get(key)
    return value if isinstance(value, dict) else {}


def _names(value: Data) -> dict[int, str]:
    """Texts of a list by their place in it."""
    items = value if isinstance(value, tuple) else ()
    return {index: item for index, item in enumerate(items) if isinstance(item, str)}


def _ground_twice(
    document: Document, grounds: Mapping[int, str], supplies: Mapping[str, Data]
) -> Iterator[Found]:
    first: dict[str, int] = {}
    for index, name in grounds.items():
        path: Path = ("grounds", index)
        if name in supplies:
            line = document.keys["supplies", name].line
            message = f"{shown_text(name)} is a supply in line {line}, expected it in one place"
            yield document.values[path], path, message
        if name in first:
            line = document.values["grounds", first[name]].line
            message = f"{shown_text(name)} given twice, first in line {line}"
            yield document.values[path], path, message
        first.setdefault(name, index)


def _unknown_supply(
    document: Document,
    name: str,
    pin: Mapping[str, Data],
    supplies: Mapping[str, Data],
    nearest: Nearest,
) -> Iterator[Found]:
    supply = pin.get("supply")
    if isinstance(supply, str) and supply not in supplies:
        path: Path = ("pins", name, "supply")
        expected = nearest.to(supply) or "a name from `supplies`"
        message = f"unknown supply {shown_text(supply)}, expected {expected}"
        yield document.values[path], path, message


def _wrong_kind(
    document: Document,
    name: str,
    pin: Mapping[str, Data],
    rails: Mapping[str, frozenset[str]],
) -> Iterator[Found]:
    kind = pin.get("kind")
    if not isinstance(kind, str) or kind not in {"signal", *_RAILS}:
        return
    path: Path = ("pins", name, "kind")
    asked = _RAILS.get(kind)
    listing = [section for section, names in rails.items() if name in names]
    # A name under both is told where it stands among the grounds.
    if len(listing) == 1 and listing[0] != asked:
        section = listing[0]
        listed = "a supply" if section == "supplies" else "a ground"
        message = f"{kind}, but {shown_text(name)} is {listed} under `{section}`, expected one kind"
        yield document.values[path], path, message
    elif asked is not None and not listing:
        unknown = "its voltages there" if asked == "supplies" else "it there"
        message = (
            f"unknown {kind} {shown_text(name)}: `{asked}` does not list it, expected {unknown}"
        )
        yield document.values[path], path, message


def _joins(
    document: Document,
    data: Mapping[str, Data],
    supplies: Mapping[str, Data],
    grounds: Mapping[int, str],
) -> Iterator[Found]:
    known = {*supplies, *grounds.values(), *_mapping(data, "pins")}
    nearest = Nearest(known)
    first: dict[str, Path] = {}
    groups = data.get("joined")
    for number, group in enumerate(groups if isinstance(groups, tuple) else ()):
        names = _names(group)
        if isinstance(group, tuple) and len(group) < LEAST_JOINED:
            path: Path = ("joined", number)
            message = "got no names, expected those that are one net outside"
            yield document.values[path], path, message
        for index, name in names.items():
            path = ("joined", number, index)
            if name not in known:
                expected = nearest.to(name) or "one from `supplies`, `grounds` or `pins`"
                message = f"unknown name {shown_text(name)}, expected {expected}"
                yield document.values[path], path, message
            if name in first:
                line = document.values[first[name]].line
                message = f"{shown_text(name)} is already joined in line {line}, expected it once"
                yield document.values[path], path, message
            first.setdefault(name, path)
        yield from _unlike_rails(document, number, names, supplies, frozenset(grounds.values()))


def _unlike_rails(
    document: Document,
    number: int,
    names: Mapping[int, str],
    supplies: Mapping[str, Data],
    grounds: frozenset[str],
) -> Iterator[Found]:
    """Names of a group that cannot be one net with the first rail of the group."""
    rails = [(index, name) for index, name in names.items() if name in supplies or name in grounds]
    if not rails:
        return
    first = rails[0][1]
    for index, name in rails[1:]:
        path: Path = ("joined", number, index)
        if (name in supplies) != (first in supplies):
            message = (
                f"joins {shown_text(name)} with {shown_text(first)}, a supply with a ground,"
                " expected names of one kind"
            )
            yield document.values[path], path, message
        elif name in supplies and not _alike(supplies[name], supplies[first]):
            message = (
                f"joins {shown_text(name)} with {shown_text(first)}, which have different"
                " voltages, expected the same"
            )
            yield document.values[path], path, message


def _alike(supply: Data, other: Data) -> bool:
    """Whether all voltages of two supplies are the same but for rounding, as far as known."""
    pairs = zip(_voltages(supply), _voltages(other), strict=True)
    return all(
        math.isclose(one, two)
        for one, two in pairs
        if isinstance(one, (int, float)) and isinstance(two, (int, float))
    )


def _voltages(supply: Data) -> tuple[Data, ...]:
    """Voltages of a supply as they stand in the file, with the test level that follows."""
    values = supply if isinstance(supply, dict) else {}
    high = values.get("high_v")
    follows = TEST_SHARE_OF_HIGH_V * high if isinstance(high, (int, float)) else None
    return (
        values.get("low_v"),
        values.get("typical_v"),
        high,
        values.get("test_v", follows),
    )
