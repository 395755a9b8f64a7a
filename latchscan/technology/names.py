"""Names in a technology file: expressions that use undefined ones, cycles, pairs used twice.

Works on the plain data of a document, so that it also finds its problems in a file whose
other parts are wrong.
"""

from __future__ import annotations

import re
from collections import deque
from collections.abc import Iterator, Mapping
from difflib import get_close_matches

from latchscan.technology.document import Data, Document, Found, Path, one_line, shown_text
from latchscan.technology.expressions import (
    RESERVED,
    ExpressionError,
    name_columns,
    names_in,
    parse_expression,
)
from latchscan.technology.model import Roles
from latchscan.technology.wiring import SECTION, problems_with_wiring, shapes

_PAIR = re.compile(r"[0-9]+/[0-9]+\Z")


def problems_with_names(document: Document) -> Iterator[Found]:
    """Every problem with the names and layer pairs of a document."""
    data = document.data if isinstance(document.data, dict) else {}
    layers = _mapping(data, "layers")
    derived = _mapping(data, "derived")
    yield from _defined_twice(document, layers, derived)
    known = (*layers, *derived)
    for path, text in _expressions(data):
        yield from _wrong_expression(document, path, text, known)
    yield from _cycles(document, derived)
    yield from _pairs_used_twice(document, layers)
    yield from problems_with_wiring(document)


def _mapping(data: Mapping[str, Data], key: str) -> Mapping[str, Data]:
    value = data.get(key)
    return value if isinstance(value, dict) else {}


def _defined_twice(
    document: Document, layers: Mapping[str, Data], derived: Mapping[str, Data]
) -> Iterator[Found]:
    for section, names in (("layers", layers), ("derived", derived)):
        for name in names:
            path = (section, name)
            if name in RESERVED:
                message = f"{shown_text(name)} is a word of expressions, expected another name"
                yield document.keys[path], path, message
            elif section == "derived" and name in layers:
                line = document.keys["layers", name].line
                message = f"already the name of a layer in line {line}, expected another name"
                yield document.keys[path], path, message


def _expressions(data: Mapping[str, Data]) -> Iterator[tuple[Path, str]]:
    for section in ("derived", "roles"):
        for name, text in _mapping(data, section).items():
            if isinstance(text, str) and (section == "derived" or name in Roles.model_fields):
                yield (section, name), text
    yield from shapes(_mapping(data, SECTION))


def _wrong_expression(
    document: Document, path: Path, text: str, known: tuple[str, ...]
) -> Iterator[Found]:
    try:
        parse_expression(text)
    except ExpressionError as error:
        yield document.place_in_scalar(path, error.column), path, error.message
        return
    told = set(known)
    for name, column in name_columns(text):
        if name not in told:
            told.add(name)
            near = get_close_matches(name, known, n=1)
            expected = shown_text(near[0]) if near else "a name from `layers` or `derived`"
            message = f"undefined name {shown_text(name)}, expected {expected}"
            yield document.place_in_scalar(path, column), path, message


def _cycles(document: Document, derived: Mapping[str, Data]) -> Iterator[Found]:
    uses = {}
    for name, text in derived.items():
        try:
            names = names_in(parse_expression(text)) if isinstance(text, str) else ()
        except ExpressionError:
            names = ()
        uses[name] = tuple(used for used in names if used in derived)
    told: set[str] = set()
    for name in uses:
        cycle = () if name in told else _way_back(name, uses)
        if cycle:
            told.update(cycle)
            path = ("derived", name)
            shown = one_line(" -> ".join((*cycle, name)), 200)
            yield document.values[path], path, f"derived from itself, expected no cycle: {shown}"


def _way_back(start: str, uses: Mapping[str, tuple[str, ...]]) -> tuple[str, ...]:
    """Shortest chain of names from `start` whose last uses `start`; empty without one."""
    came_from: dict[str, str] = {}
    waiting = deque([start])
    while waiting:
        name = waiting.popleft()
        for used in uses[name]:
            if used == start:
                chain = [name]
                while chain[-1] != start:
                    chain.append(came_from[chain[-1]])
                return tuple(reversed(chain))
            if used not in came_from:
                came_from[used] = name
                waiting.append(used)
    return ()


def _pairs_used_twice(document: Document, layers: Mapping[str, Data]) -> Iterator[Found]:
    first_use: dict[str, str] = {}
    for name, layer in layers.items():
        pairs = layer.get("gds") if isinstance(layer, dict) else ()
        for index, pair in enumerate(pairs if isinstance(pairs, tuple) else ()):
            if not isinstance(pair, str) or not _PAIR.match(pair):
                continue
            path: Path = ("layers", name, "gds", index)
            if pair in first_use:
                other = shown_text(first_use[pair])
                message = f"{pair} is already used by layer {other}, expected a pair of its own"
                yield document.values[path], path, message
            first_use.setdefault(pair, name)
