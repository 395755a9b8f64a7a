"""Whatever happens to a block file's text, the check answers with problems or with a block."""

from __future__ import annotations

import json

from hypothesis import given, settings
from hypothesis import strategies as st

from latchscan.block.check import validate_block

TEXT = """\
format: latchscan-block
format_version: 1
top: valve_driver
temperature_c: 125.0
supplies:
  VDD: {low_v: 1.62, typical_v: 1.8, high_v: 1.98, test_v: 2.97}
  VDDIO:
    low_v: 2.97
    typical_v: 3.3
    high_v: 3.63
grounds: [VSS, "VSSIO"]
pins:
  OUT1: {kind: signal, supply: VDDIO, test_current_a: 0.2}
  VDD: {kind: supply}
  n_bias:
    kind: internal
joined: [[VSS, VSSIO]]
leave_out:
  - {box_um: [0, 0, 10, 10.5], reason: "seal ring"}
internal_injectors: false
"""
LINES = TEXT.splitlines(keepends=True)
SECTIONS = (
    "top",
    "temperature_c",
    "supplies",
    "grounds",
    "pins",
    "joined",
    "leave_out",
    "internal_injectors",
    "format",
)
SIGNS = (": ", "- ", "[", "]", "{", "}", "'", '"', "#", "&a ", "*a", "!!int ", "!", "?", "%", "@")
BREAKS = ("|\n", ">\n", "---\n", "\t", "\n", " ", "\x00", "\ud800", '"\\ud800"', "\u2028", "é")
WORDS = ("1e-3", "010", "on", "~", ".nan", "0x1F", "2001-01-01", "VDD", "VSS, ", "<<: ", "=")
DIGITS = ("9" * 400, "1" * 5000)
NEXT = st.one_of(st.sampled_from((*SIGNS, *BREAKS, *WORDS, *DIGITS)), st.text(max_size=6))


def checked(content: str | bytes) -> None:
    _, block, problems = validate_block(content, "own.yaml")
    assert (block is None) == bool(problems)
    assert problems == sorted(set(problems))
    for problem in problems:
        assert problem.line >= 1
        assert problem.column >= 1
        assert str(problem).isprintable()


@settings(max_examples=150, deadline=None)
@given(st.data())
def test_scraps_put_anywhere(data: st.DataObject) -> None:
    text = TEXT
    for _ in range(data.draw(st.integers(1, 3))):
        place = data.draw(st.integers(0, len(text)))
        cut = data.draw(st.integers(0, 12))
        text = text[:place] + data.draw(NEXT) + text[place + cut :]
    checked(text)


@settings(max_examples=60, deadline=None)
@given(
    st.integers(0, len(LINES) - 1),
    st.integers(0, len(LINES) - 1),
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


@settings(max_examples=60, deadline=None)
@given(st.integers(0, len(TEXT)), st.binary(max_size=8))
def test_damaged_bytes(place: int, damage: bytes) -> None:
    content = TEXT.encode()
    checked(content[:place] + damage + content[place + len(damage) :])


@settings(max_examples=60, deadline=None)
@given(st.text(max_size=80))
def test_any_text(text: str) -> None:
    checked(text)


NAMES = st.sampled_from(["VDD", "VSS", "A", "B", "kind", "supply", "box_um", ""])
VALUES = st.recursive(
    st.one_of(st.none(), st.booleans(), st.integers(), st.floats(), st.text(max_size=5), NAMES),
    lambda inner: st.one_of(
        st.lists(inner, max_size=5),
        st.dictionaries(st.one_of(NAMES, st.text(max_size=4)), inner, max_size=3),
    ),
    max_leaves=8,
)


@settings(max_examples=200, deadline=None)
@given(st.dictionaries(st.sampled_from(SECTIONS), VALUES, max_size=5))
def test_any_value_in_any_section(sections: dict[str, object]) -> None:
    """JSON is YAML, so that any value can be written after a key."""
    head = "format_version: 1\n"
    checked(head + "".join(f"{key}: {json.dumps(value)}\n" for key, value in sections.items()))
