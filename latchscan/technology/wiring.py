"""Names in the section ``conductors``: unknown ones, texts used twice, a stack with a hole.

Works on the plain data of a document, as `latchscan.technology.names` does.  Values of the
wrong form are passed over: the typed model tells of those.
"""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from difflib import get_close_matches
from typing import get_args

from pydantic import BaseModel

from latchscan.technology.conductors import (
    WELL_CONDUCTOR,
    Conductor,
    ConductorKind,
    Conductors,
    Connection,
)
from latchscan.technology.document import Data, Document, Found, Path, shown_text

Entry = tuple[Path, str]
"""Path and text of one name or pair in the file."""

SECTION = "conductors"
ANY_CONDUCTOR = "any"
"""What reports say for the conductor of a general text."""
STRAP = "strap"
"""What reports say for the kind of a piece of plain wiring that resists."""
_TAKEN = {
    ("layers", WELL_CONDUCTOR): "the role that resistors made of a well name",
    ("layers", ANY_CONDUCTOR): "what reports call all conductors",
    ("resistors", STRAP): "what reports call wiring that resists",
}


def problems_with_wiring(document: Document) -> Iterator[Found]:
    """Every problem with the names, texts and joints of a document's conductors."""
    data = document.data if isinstance(document.data, dict) else {}
    section = data.get(SECTION)
    if not isinstance(section, dict):
        return
    conductors = _mapping(section, "layers")
    yield from _names_taken(document, section)
    yield from _texts_used_twice(document, data, conductors)
    wrong = list(_wrong_references(document, section, conductors))
    yield from wrong
    if conductors and _all_readable(section):
        yield from _no_diffusion(document, conductors)
        # A misspelt name is one mistake, not also the hole that it leaves.
        if not wrong:
            yield from _holes(document, section, conductors)


def shapes(section: Mapping[str, Data]) -> Iterator[Entry]:
    """Expressions of the section: the shape of each of its members."""
    for kind in ("layers", "connections", "resistors"):
        for name, member in _mapping(section, kind).items():
            text = member.get("shape") if isinstance(member, dict) else None
            if isinstance(text, str):
                yield (SECTION, kind, name, "shape"), text
    text = _mapping(section, "pads").get("shape")
    if isinstance(text, str):
        yield (SECTION, "pads", "shape"), text


def _mapping(data: Mapping[str, Data], key: str) -> Mapping[str, Data]:
    value = data.get(key)
    return value if isinstance(value, dict) else {}


def _texts(member: Data, key: str) -> tuple[tuple[int, str], ...]:
    """Place in its list and text of every entry of a member's list."""
    value = member.get(key) if isinstance(member, dict) else ()
    entries = value if isinstance(value, tuple) else ()
    return tuple((i, entry) for i, entry in enumerate(entries) if isinstance(entry, str))


def _entries(member: Data, key: str) -> tuple[str, ...]:
    return tuple(text for _, text in _texts(member, key))


def _names_taken(document: Document, section: Mapping[str, Data]) -> Iterator[Found]:
    for (kind, name), meaning in _TAKEN.items():
        if name in _mapping(section, kind):
            path: Path = (SECTION, kind, name)
            message = f"{shown_text(name)} is {meaning}, expected another name"
            yield document.keys[path], path, message
    for name in _mapping(section, "connections"):
        if name in _mapping(section, "layers"):
            path = (SECTION, "connections", name)
            line = document.keys[SECTION, "layers", name].line
            message = f"already the name of a conductor in line {line}, expected another name"
            yield document.keys[path], path, message


def _texts_used_twice(
    document: Document, data: Mapping[str, Data], conductors: Mapping[str, Data]
) -> Iterator[Found]:
    general = {pair for _, pair in _texts(data.get("labels"), "layers")}
    first_use: dict[str, str] = {}
    for name, conductor in conductors.items():
        for index, pair in _texts(conductor, "texts"):
            used = "by `labels.layers`" if pair in general else None
            if pair in first_use:
                used = f"by conductor {shown_text(first_use[pair])}"
            if used is not None:
                path: Path = (SECTION, "layers", name, "texts", index)
                message = f"{pair} is already used {used}, expected a pair of its own"
                yield document.values[path], path, message
            first_use.setdefault(pair, name)


def _wrong_references(
    document: Document, section: Mapping[str, Data], conductors: Mapping[str, Data]
) -> Iterator[Found]:
    """Names of conductors that are none, stand twice or are the conductor's own."""
    known = tuple(conductors)
    for name, conductor in conductors.items():
        path: Path = (SECTION, "layers", name, "touches")
        entries = _texts(conductor, "touches")
        for index, other in entries:
            if other == name:
                message = "touches itself, expected another conductor"
                yield document.values[*path, index], (*path, index), message
        yield from _wrong_names(document, path, entries, known)
    for name, connection in _mapping(section, "connections").items():
        path = (SECTION, "connections", name, "joins")
        entries = _texts(connection, "joins")
        yield from _wrong_names(document, path, entries, known)
        if len(entries) == 1 and _length(connection, "joins") == 1:
            message = "a connection joins at least two conductors, got one"
            yield document.values[path], path, message
    for name, resistor in _mapping(section, "resistors").items():
        path = (SECTION, "resistors", name, "conductor")
        yield from _wrong_name(document, path, resistor, (*known, WELL_CONDUCTOR))
    yield from _wrong_name(document, (SECTION, "pads", "on"), section.get("pads"), known)


def _length(member: Data, key: str) -> int:
    value = member.get(key) if isinstance(member, dict) else None
    return len(value) if isinstance(value, tuple) else 0


def _wrong_names(
    document: Document,
    path: Path,
    entries: tuple[tuple[int, str], ...],
    known: tuple[str, ...],
) -> Iterator[Found]:
    first: set[str] = set()
    for index, name in entries:
        here = (*path, index)
        if name not in known:
            yield document.values[here], here, _unknown(name, known)
        elif name in first:
            message = f"{shown_text(name)} stands here twice, expected each conductor once"
            yield document.values[here], here, message
        first.add(name)


def _wrong_name(
    document: Document, path: Path, member: Data, known: tuple[str, ...]
) -> Iterator[Found]:
    name = member.get(str(path[-1])) if isinstance(member, dict) else None
    if isinstance(name, str) and name not in known:
        yield document.values[path], path, _unknown(name, known)


def _unknown(name: str, known: tuple[str, ...]) -> str:
    near = get_close_matches(name, known, n=1)
    choice = "one of " + ", ".join(map(shown_text, known[:12])) if known else "a conductor"
    expected = shown_text(near[0]) if near else choice
    return f"unknown conductor {shown_text(name)}, expected {expected}"


def _all_readable(section: Mapping[str, Data]) -> bool:
    """Whether every conductor and connection has the form that the joints are read from."""
    return (
        set(section) <= set(Conductors.model_fields)
        and isinstance(section.get("connections", {}), dict)
        and all(_readable(c, Conductor, "touches") for c in _mapping(section, "layers").values())
        and all(
            _readable(c, Connection, "joins") for c in _mapping(section, "connections").values()
        )
    )


def _readable(member: Data, model: type[BaseModel], key: str) -> bool:
    """Whether a member has only keys of its model, and under one of them a list of texts."""
    if not isinstance(member, dict) or not set(member) <= set(model.model_fields):
        return False
    if key not in member:
        return not model.model_fields[key].is_required()
    entries = member[key]
    if not isinstance(entries, tuple) or not all(isinstance(entry, str) for entry in entries):
        return False
    return bool(entries) or not model.model_fields[key].is_required()


def _no_diffusion(document: Document, conductors: Mapping[str, Data]) -> Iterator[Found]:
    """Nets are wanted for the silicon's sake; and it comes first from the silicon upwards."""
    path: Path = (SECTION, "layers")
    kinds = {
        name: conductor.get("kind", "metal") if isinstance(conductor, dict) else None
        for name, conductor in conductors.items()
    }
    if not all(kind in get_args(ConductorKind) for kind in kinds.values()):
        return
    if "diffusion" not in kinds.values():
        message = "no conductor of kind `diffusion`, expected the one that contacts land on"
        yield document.keys[path], path, message
    below = ""
    for name, kind in kinds.items():
        if kind == "diffusion" and below:
            here = (*path, name)
            message = (
                f"stands after {shown_text(below)}, expected conductors from the silicon upwards"
            )
            yield document.keys[here], here, message
        elif kind != "diffusion":
            below = below or name


def _holes(
    document: Document, section: Mapping[str, Data], conductors: Mapping[str, Data]
) -> Iterator[Found]:
    """Groups of conductors that no connection joins to the first one's group."""
    group = _groups(section, conductors)
    order = tuple(conductors)
    told = {group[order[0]]}
    for index, name in enumerate(order):
        if group[name] in told:
            continue
        told.add(group[name])
        above = next((other for other in order[index:] if group[other] != group[name]), None)
        near = [order[index - 1], *([] if above is None else [above])]
        path: Path = (SECTION, "layers", name)
        missing = " or ".join(map(shown_text, near))
        message = f"no connection joins it to {missing}, expected one in `connections`"
        yield document.keys[path], path, message


def _groups(section: Mapping[str, Data], conductors: Mapping[str, Data]) -> dict[str, int]:
    """Number of the group of every conductor; those that are joined share one."""
    joints = [
        *((name, *(e for _, e in _texts(c, "touches"))) for name, c in conductors.items()),
        *(
            tuple(e for _, e in _texts(c, "joins"))
            for c in _mapping(section, "connections").values()
        ),
    ]
    group = {name: number for number, name in enumerate(conductors)}
    for joint in joints:
        met = {group[name] for name in joint}
        for name, number in group.items():
            group[name] = min(met) if number in met else number
    return group
