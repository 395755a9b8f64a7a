"""Whatever happens to a file's text, the check answers with problems or with a technology."""

from __future__ import annotations

import copy
import json
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import yaml
from hypothesis import given, settings
from hypothesis import strategies as st

from latchscan.technology.check import validate

ROOT = Path(__file__).parent.parent.parent
LARCH = (ROOT / "techfiles" / "larch180.yaml").read_text()
LINES = LARCH.splitlines(keepends=True)
FIRST = LINES.index("layers:\n")

SIGNS = (": ", "- ", "[", "]", "{", "}", "'", '"', "#", "&a ", "*a", "!!int ", "!", "?", "%", "@")
BREAKS = ("|\n", ">\n", "---\n", "\t", "\n", " ", "\x00", "\ud800", "\\U99999999", "\u2028", "é")
WORDS = ("1e-3", "010", "on", "~", ".nan", "0x1F", "2001-01-01", "and", "not (", "grow(", "<<: ")
DIGITS = ("9" * 400, "1" * 5000)
SCRAPS = st.sampled_from((*SIGNS, *BREAKS, *WORDS, *DIGITS))
NEXT = st.one_of(SCRAPS, st.text(max_size=6))


def checked(content: str | bytes) -> None:
    technology, problems = validate(content, "own.yaml")
    assert (technology is None) == bool(problems)
    assert problems == sorted(set(problems))
    for problem in problems:
        assert problem.line >= 1
        assert problem.column >= 1
        assert str(problem).isprintable()


@settings(max_examples=40, deadline=None)
@given(st.data())
def test_scraps_put_anywhere(data: st.DataObject) -> None:
    text = LARCH
    for _ in range(data.draw(st.integers(1, 3))):
        place = data.draw(st.integers(0, len(text)))
        cut = data.draw(st.integers(0, 12))
        text = text[:place] + data.draw(NEXT) + text[place + cut :]
    checked(text)


@settings(max_examples=40, deadline=None)
@given(
    st.integers(FIRST, len(LINES) - 1),
    st.integers(FIRST, len(LINES) - 1),
    st.sampled_from(["swap", "double", "drop"]),
)
def test_lines_moved_doubled_and_dropped(first: int, second: int, how: str) -> None:
    lines = list(LINES)
    if how == "swap":
        lines[first], lines[second] = lines[second], lines[first]
    elif how == "double":
        lines.insert(second, lines[first])
    else:
        del lines[min(first, second) : max(first, second)]
    checked("".join(lines))


@settings(max_examples=40, deadline=None)
@given(st.integers(0, len(LARCH)), st.binary(max_size=8))
def test_damaged_bytes(place: int, damage: bytes) -> None:
    content = LARCH.encode()
    checked(content[:place] + damage + content[place + len(damage) :])


@settings(max_examples=40, deadline=None)
@given(st.text(max_size=80))
def test_any_text(text: str) -> None:
    checked(text)


VALUES = st.recursive(
    st.one_of(st.none(), st.booleans(), st.integers(), st.floats(), st.text(max_size=5)),
    lambda inner: st.one_of(
        st.lists(inner, max_size=3), st.dictionaries(st.text(max_size=4), inner, max_size=3)
    ),
    max_leaves=6,
)
SCALAR_LINES = [i for i in range(FIRST, len(LINES)) if ": " in LINES[i].split("#")[0]]


@settings(max_examples=50, deadline=None)
@given(st.sampled_from(SCALAR_LINES), VALUES)
def test_any_value_in_any_place(index: int, value: object) -> None:
    """JSON is YAML, so that any value can be written after a key."""
    lines = list(LINES)
    key = lines[index].split(":")[0]
    lines[index] = f"{key}: {json.dumps(value)}\n"
    checked("".join(lines))


START, END = LARCH.index("\nconductors:\n"), LARCH.index("\nwells:\n")
WIRING = yaml.safe_load(LARCH[START:END].replace("on:", '"on":'))


def places(part: Any, where: tuple[Any, ...] = ()) -> Iterator[tuple[Any, ...]]:
    """Keys and list places from the top to every value inside."""
    inside = part.items() if isinstance(part, dict) else enumerate(part)
    for key, value in inside:
        yield (*where, key)
        if isinstance(value, (dict, list)):
            yield from places(value, (*where, key))


@settings(max_examples=60, deadline=None)
@given(st.sampled_from(list(places(WIRING))), st.sampled_from(["change", "drop", "rename"]), VALUES)
def test_any_value_in_the_wiring(where: tuple[Any, ...], how: str, value: object) -> None:
    """Inside every mapping and list of the conductors and of the search for rings."""
    data = copy.deepcopy(WIRING)
    *above, last = where
    holder = data
    for key in above:
        holder = holder[key]
    if how == "rename" and isinstance(holder, dict):
        holder[str(value)] = holder.pop(last)
    elif how == "change":
        holder[last] = value
    else:
        del holder[last]
    parts = "".join(f"\n{key}: {json.dumps(part)}" for key, part in data.items())
    checked(LARCH[:START] + parts + "\n" + LARCH[END:])
