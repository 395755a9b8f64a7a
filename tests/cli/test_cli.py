"""The command line: exit status, one clear line an error, nothing heavy before it is needed."""

from __future__ import annotations

import io
import json
import os
import resource
import signal
import subprocess
import sys
from collections.abc import Sequence
from dataclasses import replace
from pathlib import Path
from typing import Any

import pytest
import synthetic_scan

import latchscan.layout.source
import latchscan.scan
from latchscan import __version__
from latchscan.cli import available_cores, painter, run
from latchscan.errors import AnalysisError, LayoutError

LAYOUT = "block.gds"


def started(*arguments: str, **options: Any) -> subprocess.CompletedProcess[str]:
    """The program in a process of its own."""
    return subprocess.run(
        [sys.executable, "-m", "latchscan", *arguments],
        capture_output=True,
        text=True,
        check=False,
        timeout=60,
        **options,
    )


@pytest.fixture(name="pipeline")
def _pipeline(monkeypatch: pytest.MonkeyPatch) -> list[tuple[Any, ...]]:
    """A pipeline that returns a hand-made scan at once and notes what it was asked."""
    asked: list[tuple[Any, ...]] = []

    def scan(*arguments: Any) -> latchscan.scan.Scan:
        asked.append(arguments)
        return synthetic_scan.scan()

    monkeypatch.setattr(latchscan.layout.source, "open_layout", lambda path, **_: path)
    monkeypatch.setattr(latchscan.scan, "scan", scan)
    return asked


def scan_into(folder: Path, *more: str) -> int:
    return run(["scan", LAYOUT, "--tech", "larch180", "--out", str(folder), "--jobs", "1", *more])


def error_lines(capsys: pytest.CaptureFixture[str]) -> list[str]:
    """Lines on standard error; there must be one error and at most one hint."""
    shown = [line for line in capsys.readouterr().err.splitlines() if line]
    assert [line.startswith("latchscan: error: ") for line in shown].count(True) == 1
    assert len(shown) <= 2
    return shown


def test_a_failing_limit_is_status_1_and_everything_is_written(
    pipeline: list[Any], tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    assert scan_into(tmp_path / "out") == 1
    names = sorted(path.name for path in (tmp_path / "out").iterdir())
    assert names == ["emitters.csv", "heatmap.svg", "scan.json"]
    shown = capsys.readouterr()
    assert "Worst sites" in shown.out
    assert "\x1b" not in shown.out
    assert shown.err == "", "no progress where standard error is no terminal"


def test_watched_limits_alone_are_status_0(
    pipeline: list[Any], tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    scan = synthetic_scan.scan()
    watched = tuple(one for one in scan.findings if one.severity == "watch")
    assert watched
    quiet = replace(scan, findings=watched, caveats=())
    monkeypatch.setattr(latchscan.scan, "scan", lambda *_: quiet)
    assert scan_into(tmp_path) == 0


def test_quiet_says_nothing(
    pipeline: list[Any], tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    assert scan_into(tmp_path, "--quiet") == 1
    assert capsys.readouterr() == ("", "")


def test_options_reach_the_scan(pipeline: list[Any], tmp_path: Path) -> None:
    scan_into(tmp_path, "--window", "-10", "-5.5", "20", "30", "--temperature", "-40")
    ((source, loaded, options, _),) = pipeline
    assert source == Path(LAYOUT)
    assert loaded.technology.name == "larch180"
    assert options.window_um == (-10.0, -5.5, 20.0, 30.0)
    assert options.temperature_c == -40.0


@pytest.mark.parametrize(
    ("more", "words"),
    [
        (("--window", "5", "0", "5", "9"), "X0 < X1"),
        (("--window", "0", "9", "5", "0"), "Y0 < Y1"),
        (("--window", "nan", "0", "5", "9"), "finite"),
        (("--window", "0", "0", "inf", "9"), "finite"),
        (("--window", "0", "0", "5"), "--window"),
        (("--temperature", "nan"), "-55 to 200"),
        (("--temperature", "1000"), "-55 to 200"),
        (("--temperature", "hot"), "--temperature"),
        (("--jobs", "0"), "--jobs"),
        (("--jobs", "100000"), "--jobs"),
        (("--out", ""), "expected a path, got nothing"),
        (("--tech", ""), "expected a path or a shipped name, got nothing"),
        (("--colour",), "--colour"),
        (("--tech", "no_such_technology"), "no_such_technology"),
    ],
)
def test_a_wrong_option_is_status_2_and_nothing_is_made(
    pipeline: list[Any],
    tmp_path: Path,
    capsys: pytest.CaptureFixture[str],
    more: Sequence[str],
    words: str,
) -> None:
    assert scan_into(tmp_path / "out", *more) == 2
    assert words in error_lines(capsys)[0]
    assert pipeline == []
    assert list(tmp_path.iterdir()) == []


def test_an_occupied_place_for_results_is_found_before_the_work(
    pipeline: list[Any], tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    place = tmp_path / "out"
    place.write_text("mine")
    assert scan_into(place) == 2
    assert "not a directory" in error_lines(capsys)[0]
    assert pipeline == []
    assert place.read_text() == "mine"


@pytest.mark.parametrize(
    ("error", "status", "words"),
    [
        (LayoutError("a.gds: no cell\nhere", hint="look"), 2, "a.gds: no cell here"),
        (AnalysisError("well: no answer"), 3, "well: no answer"),
        (ZeroDivisionError("by zero"), 3, "internal: ZeroDivisionError: by zero"),
        (MemoryError(), 3, "memory"),
        (KeyboardInterrupt(), 130, "stopped"),
    ],
)
def test_every_error_is_one_line_and_its_status(
    pipeline: list[Any],
    tmp_path: Path,
    monkeypatch: pytest.MonkeyPatch,
    capsys: pytest.CaptureFixture[str],
    error: BaseException,
    status: int,
    words: str,
) -> None:
    def fail(*_: Any) -> None:
        raise error

    monkeypatch.delenv("LATCHSCAN_DEBUG", raising=False)
    monkeypatch.setattr(latchscan.scan, "scan", fail)
    assert scan_into(tmp_path / "out") == status
    assert words in error_lines(capsys)[0]
    assert list(tmp_path.iterdir()) == []


def test_an_internal_error_shows_its_traceback_on_request(
    pipeline: list[Any],
    tmp_path: Path,
    monkeypatch: pytest.MonkeyPatch,
    capsys: pytest.CaptureFixture[str],
) -> None:
    monkeypatch.setenv("LATCHSCAN_DEBUG", "1")
    monkeypatch.setattr(latchscan.scan, "scan", lambda *_: 1 / 0)
    assert scan_into(tmp_path) == 3
    assert "Traceback" in capsys.readouterr().err


def test_colour_only_on_a_terminal_that_wants_it(monkeypatch: pytest.MonkeyPatch) -> None:
    class Terminal(io.StringIO):
        def isatty(self) -> bool:
            return True

    monkeypatch.delenv("NO_COLOR", raising=False)
    monkeypatch.setenv("TERM", "xterm")
    assert painter()("fail", "fail") == "fail"
    monkeypatch.setattr(sys, "stdout", Terminal())
    assert painter()("fail", "fail").startswith("\x1b[31m")
    monkeypatch.setenv("NO_COLOR", "1")
    assert painter()("fail", "fail") == "fail"


def test_version_and_help() -> None:
    assert started("--version").stdout == f"latchscan {__version__}\n"
    for arguments in ((), ("scan",), ("tech",), ("tech", "check"), ("block",)):
        shown = started(*arguments, "--help")
        assert shown.returncode == 0
        assert "latchscan" in shown.stdout
        assert max(len(line) for line in shown.stdout.splitlines()) <= 80
    assert "Example:" in started("scan", "--help").stdout


def test_no_command_is_status_2_with_the_help() -> None:
    shown = started()
    assert shown.returncode == 2
    assert "Usage: latchscan" in shown.stderr
    assert shown.stdout == ""


def test_help_is_instant() -> None:
    def spent_s() -> float:
        used = resource.getrusage(resource.RUSAGE_CHILDREN)
        return used.ru_utime + used.ru_stime

    times = []
    for _ in range(3):
        before = spent_s()
        assert started("--help").returncode == 0
        times.append(spent_s() - before)
    assert min(times) < 0.3


def test_help_imports_nothing_heavy() -> None:
    code = (
        "import sys; from latchscan.cli import run; run(['--help']); "
        "print(sorted({'numpy', 'scipy', 'shapely', 'gdstk', 'pydantic', 'yaml', 'tqdm'}"
        " & set(sys.modules)))"
    )
    shown = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    assert shown.stdout.splitlines()[-1] == "[]"


def test_a_reader_that_leaves_early_is_no_error() -> None:
    reading, writing = os.pipe()
    os.close(reading)
    with os.fdopen(writing, "w") as pipe:
        shown = subprocess.run(
            [sys.executable, "-m", "latchscan", "tech", "schema"],
            stdout=pipe,
            stderr=subprocess.PIPE,
            text=True,
            check=False,
            timeout=60,
        )
    assert (shown.returncode, shown.stderr) == (0, "")


def test_a_full_standard_output_is_one_clear_error() -> None:
    with Path("/dev/full").open("w") as full:
        shown = subprocess.run(
            [sys.executable, "-m", "latchscan", "tech", "schema"],
            stdout=full,
            stderr=subprocess.PIPE,
            text=True,
            check=False,
            timeout=60,
        )
    line = "latchscan: error: standard output: cannot be written: no space left on device\n"
    assert (shown.returncode, shown.stderr) == (2, line)


@pytest.mark.parametrize("closed", ["<&-", ">&-", "2>&-", "<&- >&- 2>&-"])
def test_closed_standard_streams_are_no_error(closed: str) -> None:
    command = f'"{sys.executable}" -m latchscan tech check larch180 {closed}'
    shown = subprocess.run(
        ["/bin/sh", "-c", command], capture_output=True, text=True, check=False, timeout=60
    )
    assert (shown.returncode, shown.stderr) == (0, "")


@pytest.mark.parametrize("to_all", [False, True], ids=["process", "group"])
@pytest.mark.parametrize(
    ("number", "words"),
    [(signal.SIGINT, "stopped from the keyboard"), (signal.SIGTERM, "stopped by SIGTERM")],
)
def test_a_stopped_scan_says_so_once_and_leaves_the_old_files(
    tmp_path: Path, number: signal.Signals, words: str, to_all: bool
) -> None:
    (tmp_path / "scan.json").write_text("old", encoding="utf-8")
    code = (
        "import signal, sys, time, latchscan.scan, latchscan.layout.source\n"
        "from latchscan.cli import run\n"
        # a shell that runs the tests in the background has them ignore the keyboard
        "signal.signal(signal.SIGINT, signal.default_int_handler)\n"
        "def scan(source, loaded, options, workers):\n"
        "    workers.map('start', time.sleep, [0.01] * 4)\n"
        "    print('ready', flush=True)\n"
        "    workers.map('wait', time.sleep, [0.1] * 600)\n"
        "latchscan.layout.source.open_layout = lambda path, **_: path\n"
        "latchscan.scan.scan = scan\n"
        "sys.exit(run(['scan', 'a.gds', '--tech', 'larch180', '--jobs', '2', '--out',"
        " sys.argv[1]]))\n"
    )
    with subprocess.Popen(
        [sys.executable, "-c", code, str(tmp_path)],
        stdout=subprocess.PIPE,
        stderr=subprocess.PIPE,
        text=True,
        start_new_session=True,
    ) as program:
        assert program.stdout is not None
        assert program.stdout.readline() == "ready\n"
        (os.killpg if to_all else os.kill)(program.pid, number)
        _, said = program.communicate(timeout=20)
    assert (program.returncode, said) == (128 + number, f"latchscan: error: {words}\n")
    with pytest.raises(ProcessLookupError):
        os.killpg(program.pid, 0)
    assert [path.name for path in tmp_path.iterdir()] == ["scan.json"]
    assert (tmp_path / "scan.json").read_text(encoding="utf-8") == "old"


def test_tech_check_lists_problems_and_tech_schema_is_json(
    repository: Path, tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    assert run(["tech", "check", str(repository / "techfiles" / "larch180.yaml")]) == 0
    assert "no problems" in capsys.readouterr().out
    broken = tmp_path / "broken.yaml"
    broken.write_text("format: latchscan-technology\nnmae: x\nformat_version: 1e-3\n")
    assert run(["tech", "check", str(broken)]) == 2
    lines = capsys.readouterr().out.splitlines()
    assert len(lines) > 2
    assert any(line.startswith(f"{broken}:2:1: nmae: ") for line in lines)
    assert run(["tech", "schema"]) == 0
    assert "properties" in json.loads(capsys.readouterr().out)


def test_cores() -> None:
    assert 1 <= available_cores() <= (os.cpu_count() or 1)
