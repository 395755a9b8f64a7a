"""The first block file: it passes its own check whatever the labels hold, and says what it knows.

Source of the expectations: the YAML the check reads (round trip), and counts of the hand-made
nets; how the labels are told in comments is common practice, no published source.
"""

from __future__ import annotations

import pytest
import yaml
from hypothesis import example, given, settings
from hypothesis import strategies as st
from named_nets import named_nets

from latchscan.block.check import validate_block
from latchscan.block.model import Block, name_fault
from latchscan.draft import MOST_PINS, draft_block, quoted
from latchscan.layout.connections import Nets
from latchscan.technology.load import load_technology

LARCH = load_technology("larch180").technology


def drafted(nets: Nets, *, top: str = "TOP") -> tuple[str, Block]:
    text = draft_block(nets, LARCH, layout_name="chip.gds", top=top)
    _, block, problems = validate_block(text, "draft.yaml")
    assert [str(problem) for problem in problems] == []
    assert block is not None
    return text, block


def test_a_plain_layout() -> None:
    names = [["VDD"], ["VSS"], ["OUT", "Y"], ["IN"], ["VSS"]]
    text, block = drafted(named_nets(names, loose=["LOST"], pads=[2, 0], pieces=[2, 2, 0]))
    assert block.top == "TOP"
    (vdd,) = block.supplies.values()
    assert (vdd.low_v, vdd.typical_v, vdd.high_v) == (1.62, 1.8, 1.98), "larch180: 1.8 V"
    assert block.grounds == ("VSS",)
    assert {name: (pin.kind, pin.supply) for name, pin in block.pins.items()} == {
        "IN": ("signal", "VDD"),
        "OUT": ("signal", "VDD"),
    }
    lines = text.splitlines()
    assert lines[0] == "# A first block file for chip.gds, made of the layout's own labels"
    assert (
        '  "OUT": {kind: signal, supply: "VDD"}  # at (0.5, 2.5) um on metal1, 1 bond pad,'
        " 2 diffusions directly on it, also labelled `Y`"
    ) in lines
    assert (
        '  "IN": {kind: signal, supply: "VDD"}  # at (0.5, 3.5) um on metal1, no bond pad,'
        " no diffusion directly on it"
    ) in lines
    assert any(line.startswith('  - "VSS"') and "on 2 separate nets" in line for line in lines)
    assert "#   `LOST` at (0.5, -0.5) um" in lines


def test_nothing_to_draft_is_a_valid_file() -> None:
    _, block = drafted(named_nets([]))
    assert (
        block
        == validate_block('format: latchscan-block\nformat_version: 1\ntop: "TOP"\n', "own.yaml")[1]
    )


def test_names_of_placed_cells_are_left_out_and_told() -> None:
    names = [["VDD"], *[["A", f"net{i}"] if i % 2 else ["A"] for i in range(5)]]
    text, block = drafted(named_nets(names))
    assert set(block.pins) == {"net1", "net3"}
    assert "# taken for local names of placed cells: `A`" in text.splitlines()


def test_several_supplies_leave_the_pins_supply_open() -> None:
    text, block = drafted(named_nets([["VDD"], ["VDDIO"], ["A"], ["VSS"], ["VSSIO"]]))
    assert block.pins["A"].supply is None
    assert '# Say which supply each pin works from: supply: "VDD"' in text
    assert '# joined: [["VSS", "VSSIO"]]' in text


def test_a_bond_pad_without_a_name_is_told() -> None:
    text, _ = drafted(named_nets([["A"], []], pads=[1, 0]))
    assert text.splitlines()[-2:] == [
        "# Bond pads that carry no label; label them in the layout to list them here:",
        "#   at (0.5, 1.5) um",
    ]


def test_more_pins_than_a_block_file_holds() -> None:
    names = [[f"pin_of_some_length_{i}"] for i in range(MOST_PINS + 7)]
    text, block = drafted(named_nets([["VDD"], *names]))
    assert len(block.pins) == MOST_PINS
    assert "7 more names" in text


def test_a_technology_without_conductors_has_no_names_to_draft() -> None:
    bare = LARCH.model_copy(update={"conductors": None})
    text = draft_block(named_nets([]), bare, layout_name="chip.gds", top="TOP")
    assert "names no conductors" in text
    assert validate_block(text, "draft.yaml")[2] == []


ODD = ("no", "1e3", "010", "~", "<<", "=", "a: b", "#x", "- a", "'", '"', "\\", "é", "\U0001f600")
SPACED = (" lead", "a b", "\t", "", "\x85", "\u2028", "\u3000")
UGLY = ("\x00", "\x7f", "\ufeff", "\ufffe", "{", "}", "*", "&a", "!!int 3", "x" * 400)


@settings(max_examples=150, deadline=None)
@given(
    st.lists(st.one_of(st.sampled_from((*ODD, *SPACED, *UGLY)), st.text(max_size=12)), unique=True),
    st.one_of(st.sampled_from((*ODD, *SPACED, *UGLY)), st.text(max_size=12)),
)
@example(list(ODD), "no")
@example([*SPACED, *UGLY], "1e3")
def test_any_label_text_survives(texts: list[str], top: str) -> None:
    """Every usable text is a pin or a rail of exactly this name; no other name is made up."""
    _, block = drafted(named_nets([[text] for text in texts], loose=texts), top=top)
    names = {*block.pins, *block.supplies, *block.grounds}
    usable = {text for text in texts if not name_fault(text) and len(text) < 100}
    assert names == usable
    assert block.top == (top if top.strip() else None)


@given(st.text())
def test_quoted_text_is_read_back_by_yaml(text: str) -> None:
    """Reference: the PyYAML library's reader."""
    assert yaml.safe_load(quoted(text)) == text


@pytest.mark.parametrize("seed", range(3))
def test_the_same_nets_give_the_same_bytes(seed: int) -> None:
    names = [[f"n{(i * 7 + seed) % 11}", f"m{i}"] for i in range(9)]
    first = draft_block(named_nets(names), LARCH, layout_name="a.gds", top="T")
    assert draft_block(named_nets(names), LARCH, layout_name="a.gds", top="T") == first
