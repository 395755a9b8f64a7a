"""A block file against its layout: names that the layout lacks, boxes outside, the top cell.

Source of the expectations: hand-made nets; the wording is common practice, no published
source.
"""

from __future__ import annotations

from pathlib import Path

import pytest
from layouts import block as drawn
from named_nets import named_nets

from latchscan.block.load import LoadedBlock, load_block
from latchscan.block_fit import open_block_layout, problems_with_layout
from latchscan.errors import BlockError, LayoutError
from latchscan.layout.connections import Nets
from latchscan.layout.model import Label
from latchscan.technology.load import load_technology

BOX = (0.0, 0.0, 100.0, 50.0)
NETS = named_nets([["VDD"], ["VSS"], ["OUT1"], ["OUT2"]], loose=["LOST", "OUT1"])


def loaded(folder: Path, text: str) -> LoadedBlock:
    path = folder / "own.yaml"
    path.write_text(f"format: latchscan-block\nformat_version: 1\n{text}")
    return load_block(path)


def told(folder: Path, text: str, nets: Nets | None = NETS, labels: tuple[Label, ...] = ()) -> str:
    found = problems_with_layout(loaded(folder, text), nets=nets, labels=labels, box_um=BOX)
    return "\n".join(str(problem) for problem in found).replace(f"{folder}/", "")


def test_names_that_lie_on_shapes_are_no_problem(tmp_path: Path) -> None:
    text = "supplies: {VDD: {low_v: 1, typical_v: 2, high_v: 3}}\ngrounds: [VSS]\n"
    assert told(tmp_path, f"{text}pins: {{OUT1: {{kind: signal}}}}\n") == ""


def test_every_name_is_told_once_with_the_nearest_text(tmp_path: Path) -> None:
    text = (
        "supplies: {VDDX: {low_v: 1, typical_v: 2, high_v: 3}}\n"
        "grounds: [VSS, gnd]\n"
        "pins:\n  VDDX: {kind: supply}\n  OUT3: {kind: signal}\n  LOST: {kind: signal}\n"
        "joined: [[VSS, gnd]]\n"
    )
    assert told(tmp_path, text).splitlines() == [
        "own.yaml:3:12: supplies.VDDX: no text of the layout is `VDDX`, expected `VDD`",
        "own.yaml:4:16: grounds[1]: no text of the layout is `gnd`, expected one of `OUT1`,"
        " `OUT2`, `VDD`, `VSS`",
        "own.yaml:7:3: pins.OUT3: no text of the layout is `OUT3`, expected `OUT2`",
        "own.yaml:8:3: pins.LOST: the text `LOST` lies on no shape, first at (0.5, -0.5) um",
    ]


def test_a_layout_without_texts(tmp_path: Path) -> None:
    assert told(tmp_path, "grounds: [VSS]\n", nets=named_nets([])) == (
        "own.yaml:3:11: grounds[0]: no text of the layout is `VSS`, expected texts on conductors;"
        " the layout has none"
    )


def test_without_conductors_a_text_is_enough(tmp_path: Path) -> None:
    labels = (Label(text="VSS", layer=60, texttype=0, x_um=0.0, y_um=0.0),)
    assert told(tmp_path, "grounds: [VSS]\n", nets=None, labels=labels) == ""
    assert "no text of the layout" in told(tmp_path, "grounds: [GND]\n", nets=None, labels=labels)


@pytest.mark.parametrize(
    ("box", "outside"),
    [
        ("[0, 0, 10, 10]", False),
        ("[-5, -5, 200, 200]", False),
        ("[90, 40, 110, 60]", False),
        ("[100, 0, 110, 10]", True),
        ("[0, 60, 10, 70]", True),
        ("[-10, 0, 0, 10]", True),
    ],
)
def test_boxes_left_out_meet_the_block(tmp_path: Path, box: str, outside: bool) -> None:
    text = f'leave_out: [{{box_um: {box}, reason: "seal ring"}}]\n'
    line = (
        "own.yaml:3:14: leave_out[0].box_um: lies outside the block, expected some of its box"
        " [0, 0, 100, 50] um"
    )
    assert told(tmp_path, text) == (line if outside else "")


def test_the_top_cell_is_the_options_else_the_files(tmp_path: Path) -> None:
    layout = drawn("chip").nwell(0, 0, 9, 9).tap("n", 1, 1, 2, 2).emitter("p", 4, 4, 6, 6)
    path = layout.tap("p", 20, 0, 21, 1).write(tmp_path / "chip.gds")
    larch = load_technology("larch180").technology
    right = loaded(tmp_path, "top: chip\n")
    assert open_block_layout(path, technology=larch, top=None, loaded=right).top == "chip"
    wrong = loaded(tmp_path, "grounds: [VSS]\ntop: ship\n")
    with pytest.raises(BlockError) as error:
        open_block_layout(path, technology=larch, top=None, loaded=wrong)
    assert error.value.message == (f"{tmp_path}/own.yaml:4:1: top: {path}: there is no cell 'ship'")
    assert error.value.hint == "nearest names: chip"
    assert open_block_layout(path, technology=larch, top="chip", loaded=wrong).top == "chip"
    with pytest.raises(LayoutError, match="no cell 'other'"):
        open_block_layout(path, technology=larch, top="other", loaded=right)
    with pytest.raises(LayoutError, match="no such"):
        open_block_layout(tmp_path / "none.gds", technology=larch, top=None, loaded=right)
