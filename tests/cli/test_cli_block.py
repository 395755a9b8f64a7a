"""Block files on the command line: what reaches the scan, and the commands on the files."""

from __future__ import annotations

import json
import subprocess
import sys
from pathlib import Path
from typing import Any

import pytest
import synthetic_scan
from click.testing import CliRunner
from layouts import block as drawn

import latchscan.layout.source
import latchscan.scan
from latchscan.block.check import check_block
from latchscan.cli import commands, run

HEAD = "format: latchscan-block\nformat_version: 1\n"


@pytest.fixture(name="asked")
def _asked(monkeypatch: pytest.MonkeyPatch) -> dict[str, Any]:
    """What the layout and the scan were asked for; the scan itself is hand-made."""
    asked: dict[str, Any] = {}

    def open_layout(path: Path, **options: Any) -> Path:
        asked["top"] = options["top"]
        return path

    def scan(_source: Any, _loaded: Any, options: Any, _workers: Any) -> latchscan.scan.Scan:
        asked["options"] = options
        return synthetic_scan.scan()

    monkeypatch.setattr(latchscan.layout.source, "open_layout", open_layout)
    monkeypatch.setattr(latchscan.scan, "scan", scan)
    return asked


def scan_of(folder: Path, *more: str) -> int:
    layout, out = str(folder / "chip.gds"), str(folder / "out")
    return run(["scan", layout, "--tech", "larch180", "--out", out, "--jobs", "1", *more])


def block_file(folder: Path, text: str = "", name: str = "chip.yaml") -> Path:
    path = folder / name
    path.write_text(HEAD + text)
    return path


def error_line(capsys: pytest.CaptureFixture[str]) -> str:
    (line,) = capsys.readouterr().err.splitlines()
    return line.removeprefix("latchscan: error: ")


def test_without_a_block_file_nothing_is_said(asked: dict[str, Any], tmp_path: Path) -> None:
    assert scan_of(tmp_path) == 1
    assert asked["top"] is None
    options = asked["options"]
    assert (options.block, options.internal_injectors, options.temperature_c) == (None, False, None)


def test_the_file_beside_the_layout_is_taken(asked: dict[str, Any], tmp_path: Path) -> None:
    text = "top: chip\ntemperature_c: 85\ninternal_injectors: true\ngrounds: [VSS]\n"
    path = block_file(tmp_path, text)
    assert scan_of(tmp_path) == 1
    options = asked["options"]
    assert options.block.path == path
    assert options.block.block.grounds == ("VSS",)
    assert (asked["top"], options.temperature_c, options.internal_injectors) == ("chip", 85, True)


def test_options_win_over_the_file(asked: dict[str, Any], tmp_path: Path) -> None:
    block_file(tmp_path, "top: chip\ntemperature_c: 85\n")
    assert scan_of(tmp_path, "--top", "ship", "--temperature", "27") == 1
    assert (asked["top"], asked["options"].temperature_c) == ("ship", 27)
    assert asked["options"].internal_injectors is False
    scan_of(tmp_path, "--internal-injectors")
    assert asked["options"].internal_injectors is True


def test_a_file_given_wins_over_the_one_beside(asked: dict[str, Any], tmp_path: Path) -> None:
    (tmp_path / "chip.yaml").write_text("nothing of use")
    other = block_file(tmp_path, "grounds: [GND]\n", "other.yaml")
    assert scan_of(tmp_path, "--block", str(other)) == 1
    assert asked["options"].block.path == other


@pytest.mark.parametrize(
    ("text", "words"),
    [
        (f"{HEAD}grounds: [VSS]\ntop: 3\n", "chip.yaml:4:6: top: got the number 3, expected text"),
        ("pins: {}\n", "stands beside the layout but is no block file"),
        ("", "chip.yaml:1:1: the file is empty, expected a block"),
    ],
)
def test_a_wrong_file_beside_the_layout_stops_the_scan(
    asked: dict[str, Any],
    tmp_path: Path,
    capsys: pytest.CaptureFixture[str],
    text: str,
    words: str,
) -> None:
    (tmp_path / "chip.yaml").write_text(text)
    assert scan_of(tmp_path) == 2
    assert words in error_line(capsys)
    assert "options" not in asked
    assert not (tmp_path / "out").exists()


@pytest.mark.parametrize(
    ("given", "words"),
    [("", "expected a path, got nothing"), ("none.yaml", "none.yaml: no such block file")],
)
def test_a_block_file_that_is_not_there(
    asked: dict[str, Any],
    tmp_path: Path,
    capsys: pytest.CaptureFixture[str],
    given: str,
    words: str,
) -> None:
    assert scan_of(tmp_path, "--block", given) == 2
    assert words in error_line(capsys)
    assert asked == {}


def test_check_lists_every_problem(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    good = block_file(tmp_path, "grounds: [VSS]\n")
    assert run(["block", "check", str(good)]) == 0
    assert capsys.readouterr().out == f"{good}: no problems\n"
    bad = block_file(tmp_path, "grounds: [VSS, VSS]\npin: {}\njoined: [[]]\n", "bad.yaml")
    assert run(["block", "check", str(bad)]) == 2
    shown = capsys.readouterr()
    assert shown.err == ""
    assert [line.removeprefix(f"{bad}:")[:4] for line in shown.out.splitlines()] == [
        "3:16",
        "4:1:",
        "5:10",
    ]
    assert run(["block", "check", str(tmp_path / "none.yaml")]) == 2
    assert error_line(capsys) == f"{tmp_path}/none.yaml: no such block file; expected a path"


@pytest.mark.parametrize(
    ("more", "words"),
    [(("--layout", "a.gds"), "--tech: expected"), (("--tech", "larch180"), "--layout: expected")],
)
def test_check_against_a_layout_needs_its_technology(
    tmp_path: Path, capsys: pytest.CaptureFixture[str], more: tuple[str, ...], words: str
) -> None:
    assert run(["block", "check", str(block_file(tmp_path)), *more]) == 2
    assert error_line(capsys).startswith(words)


@pytest.fixture(name="layout", scope="module")
def _layout(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """Two taps with a named wire on each, and a text on nothing."""
    chip = drawn("chip").nwell(0, 0, 20, 20).tap("n", 2, 2, 4, 4).emitter("p", 8, 2, 9, 3)
    chip.tap("p", 30, 2, 32, 4).emitter("n", 36, 2, 37, 3)
    chip.rect("metal1", 2, 2, 4, 4).rect("metal1", 30, 2, 32, 4)
    chip.label("VDD", 3, 3).label("VSS", 31, 3).label("LOST", 15, 15)
    return chip.write(tmp_path_factory.mktemp("layout") / "chip.gds")


def test_a_draft_passes_its_check_and_fits_its_layout(
    layout: Path, tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    assert run(["block", "draft", str(layout), "--tech", "larch180"]) == 0
    shown = capsys.readouterr()
    assert shown.err == ""
    assert check_block(shown.out, "draft.yaml") == []
    assert '  - "VSS"  # at (31, 3) um on metal1, no bond pad, 1 diffusion directly' in shown.out
    assert "#   `LOST` at (15, 15) um" in shown.out
    draft = tmp_path / "draft.yaml"
    draft.write_text(shown.out)
    fitting = ["block", "check", str(draft), "--layout", str(layout), "--tech", "larch180"]
    assert run(fitting) == 0
    assert capsys.readouterr().out == f"{draft}: no problems\n"


def test_check_against_a_layout_tells_what_the_layout_lacks(
    layout: Path, tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    path = block_file(
        tmp_path,
        "grounds: [VSS, GND]\npins: {LOST: {kind: signal}}\n"
        'leave_out: [{box_um: [90, 0, 99, 9], reason: "x"}]\n',
    )
    fitting = ["block", "check", str(path), "--layout", str(layout), "--tech", "larch180"]
    assert run(fitting) == 2
    assert [line.removeprefix(f"{path}:") for line in capsys.readouterr().out.splitlines()] == [
        "3:16: grounds[1]: no text of the layout is `GND`, expected one of `VDD`, `VSS`",
        "4:8: pins.LOST: the text `LOST` lies on no shape, first at (15, 15) um",
        "5:14: leave_out[0].box_um: lies outside the block, expected some of its box"
        " [0, 0, 37.1, 20] um",
    ]
    path.write_text(f"{HEAD}top: ship\n")
    assert run(fitting) == 2
    assert capsys.readouterr().out == (
        f"{path}:3:1: top: {layout}: there is no cell 'ship' (nearest names: chip)\n"
    )


def test_draft_takes_a_top_cell_and_refuses_a_wrong_one(
    layout: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    wrong = ["block", "draft", str(layout), "--tech", "larch180", "--top", "ship"]
    assert run(wrong) == 2
    assert "there is no cell 'ship'" in error_line(capsys)


def test_schema_is_json(capsys: pytest.CaptureFixture[str]) -> None:
    assert run(["block", "schema"]) == 0
    assert json.loads(capsys.readouterr().out)["title"] == "latchscan block"


@pytest.mark.parametrize("command", ["check", "draft", "schema"])
def test_help_fits_a_terminal(command: str) -> None:
    shown = CliRunner().invoke(commands, ["block", command, "--help"]).output
    assert "Usage: " in shown
    assert max(len(line) for line in shown.splitlines()) <= 80


def test_check_reads_no_layout_code() -> None:
    """A file's own check is quick: nothing that measures is loaded for it."""
    code = (
        "import sys; from latchscan.cli import run; run(['block', 'check', 'none.yaml']);"
        " print(sorted({'numpy', 'scipy', 'shapely', 'gdstk'} & set(sys.modules)))"
    )
    shown = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    assert shown.stdout.splitlines()[-1] == "[]"


def test_a_name_that_the_layout_lacks_stops_the_scan_before_anything_long(
    repository: Path, tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    block = block_file(tmp_path, "pins:\n  VALVE9: {kind: signal}\n", "b.yaml")
    sample = str(repository / "samples" / "valve_driver.gds")
    out = tmp_path / "out"
    arguments = ["scan", sample, "--tech", "larch180", "--block", str(block), "--out", str(out)]
    with pytest.MonkeyPatch.context() as patch:
        patch.setattr("latchscan.scan.derive_regions", None)
        assert run(arguments) == 2
    told = error_line(capsys)
    assert told.startswith(f"{block}:4:3: no label of the layout is 'VALVE9'; expected")
    assert "'VALVE3'" in told
    assert not out.exists()
