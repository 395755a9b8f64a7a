"""Reading a block file: what is found beside a layout, and one clear error otherwise."""

from __future__ import annotations

import hashlib
import os
from pathlib import Path

import pytest

from latchscan.block.load import find_block, load_block, load_block_beside
from latchscan.errors import BlockError

HEAD = "format: latchscan-block\nformat_version: 1\n"


def test_a_good_file_knows_its_places_and_its_checksum(tmp_path: Path) -> None:
    path = tmp_path / "chip.yaml"
    path.write_text(f"{HEAD}grounds: [VSS, GND]\npins:\n  A: {{kind: signal}}\n")
    loaded = load_block(path)
    assert loaded.path == path
    assert loaded.sha256 == hashlib.sha256(path.read_bytes()).hexdigest()
    assert loaded.block.grounds == ("VSS", "GND")
    assert loaded.where("grounds", 1) == f"{path}:3:16"
    assert loaded.where("pins", "A") == f"{path}:5:3"
    assert loaded.where("pins", "A", "kind") == f"{path}:5:7"
    assert loaded.where("pins", "A", "supply") == f"{path}:5:3", "the nearest key above"
    assert loaded.where("supplies", "VDD") == f"{path}:1:1", "nothing of it is there"


@pytest.mark.parametrize(
    "layout", ["chip.gds", "chip.gds.gz", "chip.oas", "chip.oas.gz", "chip.GDS", "chip.GDS.GZ"]
)
def test_a_block_is_found_beside_its_layout(tmp_path: Path, layout: str) -> None:
    assert find_block(tmp_path / layout) is None
    (tmp_path / "chip.yaml").write_text(HEAD)
    assert find_block(tmp_path / layout) == tmp_path / "chip.yaml"
    found = load_block_beside(tmp_path / layout)
    assert found is not None
    assert found.path == tmp_path / "chip.yaml"


def test_only_the_last_ending_is_the_layouts_own(tmp_path: Path) -> None:
    (tmp_path / "chip.yaml").write_text(HEAD)
    assert find_block(tmp_path / "chip.v2.gds") is None
    (tmp_path / "chip.v2.yaml").write_text(HEAD)
    assert find_block(tmp_path / "chip.v2.gds") == tmp_path / "chip.v2.yaml"


@pytest.mark.parametrize("path", ["", ".", "/", "..", "a\0b.gds", "x" * 5000 + ".gds", ".gz"])
def test_odd_layout_paths_have_no_block(path: str) -> None:
    assert find_block(path) is None


@pytest.mark.parametrize(
    ("text", "got"),
    [
        ("format: latchscan-bolck\npins: {}\n", "got `latchscan-bolck`"),
        ("grounds: [VSS]\n", "got none"),
        ("format: 3\nsupplies: {}\n", "got none"),
    ],
)
def test_a_block_file_that_does_not_say_so_is_not_passed_over(
    tmp_path: Path, text: str, got: str
) -> None:
    (tmp_path / "chip.yaml").write_text(text)
    with pytest.raises(BlockError, match="stands beside the layout but is no block file") as told:
        load_block_beside(tmp_path / "chip.gds")
    assert got in told.value.message
    assert "--block" in told.value.hint


@pytest.mark.parametrize(
    "text", ["format: latchscan-technology\nformat_version: 1\n", "stages: [a, b]\n", "format: 3\n"]
)
def test_a_file_of_another_kind_is_passed_over(tmp_path: Path, text: str) -> None:
    (tmp_path / "chip.yaml").write_text(text)
    assert load_block_beside(tmp_path / "chip.gds") is None


def test_the_first_problem_is_told_with_its_place_and_the_count_of_the_others(
    tmp_path: Path,
) -> None:
    path = tmp_path / "chip.yaml"
    path.write_text(f"{HEAD}grounds: [VSS, VSS]\ntop: 3\nfoo: 1\n")
    with pytest.raises(BlockError) as told:
        load_block(path)
    assert told.value.message == (
        f"{path}:3:16: grounds[1]: `VSS` given twice, first in line 3 (and 2 more problems)"
    )
    assert told.value.hint == f"`latchscan block check {path}` lists every problem"
    assert told.value.exit_status == 2
    with pytest.raises(BlockError, match="VSS"):
        load_block_beside(tmp_path / "chip.gds")


def test_what_cannot_be_read_is_one_clear_error(tmp_path: Path) -> None:
    with pytest.raises(BlockError, match="no such block file"):
        load_block(tmp_path / "none.yaml")
    with pytest.raises(BlockError, match="is a directory"):
        load_block(tmp_path)
    with pytest.raises(BlockError, match=r"not a usable path|no such block file"):
        load_block("a\0b")
    with pytest.raises(BlockError, match=r"cannot be read|not a usable path|no such"):
        load_block("x" * 5000)
    os.mkfifo(tmp_path / "pipe.yaml")
    with pytest.raises(BlockError, match="not a regular file"):
        load_block(tmp_path / "pipe.yaml")


def test_a_link_that_leads_nowhere_is_told(tmp_path: Path) -> None:
    (tmp_path / "chip.yaml").symlink_to(tmp_path / "gone.yaml")
    with pytest.raises(BlockError, match="no such block file"):
        load_block_beside(tmp_path / "chip.gds")
