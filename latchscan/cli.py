"""The command line: options in, exit status out; the only place that prints.

Exit status: 0 nothing failed, 1 a limit failed, 2 could not start, 3 could not conclude.
Everything heavy is imported inside the command that needs it, so that ``--help`` is instant.
"""

from __future__ import annotations

import contextlib
import math
import os
import signal
import traceback
from collections.abc import Iterator, Sequence
from pathlib import Path
from types import FrameType
from typing import TYPE_CHECKING

import click

from latchscan import __version__
from latchscan.cli_block import block
from latchscan.cli_terminal import (
    COULD_NOT_CONCLUDE,
    COULD_NOT_START,
    LIMIT_FAILED,
    NOTHING_FAILED,
    SIGNALLED,
    available_cores,
    given_path,
    optional_path,
    painter,
    print_out,
    progress,
)
from latchscan.errors import LatchscanError, OptionError, OutputError

if TYPE_CHECKING:
    from latchscan.layout.model import Box

__all__ = ["available_cores", "commands", "painter", "run"]

MOST_JOBS = 256
"""More processes than this fit no machine that the work is meant for."""

COLDEST_C, HOTTEST_C = -55.0, 200.0
"""Temperatures that the material models take; the same range as in the technology file."""

_EXAMPLE = """
\b
Example:
  latchscan scan samples/valve_driver.gds --tech larch180 --out out/
"""


def run(arguments: Sequence[str] | None = None) -> int:
    """Run the command line and return its exit status; no exception leaves this function."""
    status = _guarded(arguments)
    try:
        print_out("")
    except OutputError as error:
        return _complain(error.exit_status, error.message, error.hint)
    return status


class _Stopped(BaseException):
    """A signal asked the program to end; no handler of ordinary errors may swallow it."""

    def __init__(self, number: int) -> None:
        super().__init__(number)
        self.number = number


def _stop(number: int, _frame: FrameType | None) -> None:
    """Unwind, so that temporary files and worker processes go as well.

    Some callers send the same signal twice, to the process and to its group; only a second
    stroke on the keyboard ends the program without tidying up.
    """
    for name in _stopping_signals():
        signal.signal(name, signal.SIG_DFL if name == signal.SIGINT else signal.SIG_IGN)
    raise _Stopped(number)


def _stopping_signals() -> list[signal.Signals]:
    known = (getattr(signal, name, None) for name in ("SIGINT", "SIGTERM", "SIGHUP"))
    return [number for number in known if number is not None]


@contextlib.contextmanager
def _stoppable() -> Iterator[None]:
    """Turn the signals that end a program into `_Stopped`, unless they are ignored."""
    try:
        before = {
            number: signal.signal(number, _stop)
            for number in _stopping_signals()
            if signal.getsignal(number) is not signal.SIG_IGN
        }
    except ValueError:  # outside the main thread signals are somebody else's
        before = {}
    try:
        yield
    finally:
        for number, handler in before.items():
            signal.signal(number, handler)


def _guarded(arguments: Sequence[str] | None) -> int:
    """Run and turn every error into one line and a status."""
    try:
        with _stoppable():
            status = commands.main(args=arguments, prog_name="latchscan", standalone_mode=False)
    except click.exceptions.NoArgsIsHelpError as error:
        _say(error.format_message())
        return COULD_NOT_START
    except click.ClickException as error:
        return _complain(COULD_NOT_START, error.format_message(), _usage_hint(error))
    except LatchscanError as error:
        return _complain(error.exit_status, error.message, error.hint)
    except (_Stopped, click.Abort, KeyboardInterrupt) as stopped:
        number = stopped.number if isinstance(stopped, _Stopped) else signal.SIGINT
        return _complain(SIGNALLED + number, _stopped_words(number), "")
    except Exception as error:  # the door: a traceback would exit with 1, "a limit failed"
        return _complain(COULD_NOT_CONCLUDE, *_unforeseen(error))
    return status if isinstance(status, int) else NOTHING_FAILED


def _stopped_words(number: int) -> str:
    name = signal.Signals(number).name
    return "stopped from the keyboard" if name == "SIGINT" else f"stopped by {name}"


def _unforeseen(error: Exception) -> tuple[str, str]:
    """Message and hint for an error that nobody foresaw."""
    if os.environ.get("LATCHSCAN_DEBUG"):
        traceback.print_exception(error)
    if isinstance(error, MemoryError):
        return "not enough memory", "give a --window or fewer --jobs"
    if isinstance(error, OSError) and error.strerror:
        where = f"{error.filename}: " if error.filename else ""
        return f"{where}the system refused: {error.strerror.lower()}", ""
    return (
        f"internal: {type(error).__name__}: {error}",
        "set LATCHSCAN_DEBUG=1 for a traceback to report",
    )


def _usage_hint(error: click.ClickException) -> str:
    context = getattr(error, "ctx", None)
    return f"see {context.command_path} --help" if context is not None else ""


def _say(text: str) -> None:
    with contextlib.suppress(OSError):  # nowhere left to complain; the status still tells
        click.echo(text, err=True)


def _complain(status: int, message: str, hint: str) -> int:
    """Print an error and its hint as one line; return the status it means."""
    whole = f"{message.rstrip('.')} ({hint})" if hint else message
    _say("latchscan: error: " + " ".join(whole.split()))
    return status


@click.group(
    context_settings={"help_option_names": ["-h", "--help"], "max_content_width": 80},
    epilog=_EXAMPLE,
)
@click.version_option(__version__, prog_name="latchscan", message="%(prog)s %(version)s")
def commands() -> None:
    """Estimate where a CMOS block's parasitic thyristors can latch.

    Reads a layout and a technology file, and writes findings and a picture.
    """


@commands.command(epilog=_EXAMPLE)
@click.argument("layout", callback=given_path)
@click.option(
    "--tech",
    required=True,
    metavar="T",
    help="Technology: a YAML file, or the name of a shipped one (larch180, open130).",
)
@click.option(
    "--out",
    "out_dir",
    required=True,
    metavar="DIR",
    callback=given_path,
    help="Directory for scan.json, emitters.csv and heatmap.svg.",
)
@click.option(
    "--block",
    "block_file",
    metavar="FILE",
    callback=optional_path,
    help="Block file with supplies and pins, instead of LAYOUT's name with .yaml.",
)
@click.option("--top", metavar="CELL", help="Top cell, when the layout has several.")
@click.option(
    "--window",
    nargs=4,
    type=float,
    metavar="X0 Y0 X1 Y1",
    help="Scan only this part of the layout [um].",
)
@click.option(
    "--temperature",
    type=float,
    metavar="C",
    help="Temperature [degrees Celsius] instead of the block's or technology's.",
)
@click.option(
    "--internal-injectors",
    is_flag=True,
    help="Take diffusions on internal nodes and foreign supplies for injectors.",
)
@click.option(
    "--jobs",
    type=click.IntRange(min=1, max=MOST_JOBS),
    metavar="N",
    help="Processes to work in; all available cores unless given.",
)
@click.option("--quiet", is_flag=True, help="No progress and no summary.")
def scan(
    *,
    layout: Path,
    tech: str,
    out_dir: Path,
    block_file: Path | None,
    top: str | None,
    window: tuple[float, float, float, float] | None,
    temperature: float | None,
    internal_injectors: bool,
    jobs: int | None,
    quiet: bool,
) -> int:
    """Scan LAYOUT (GDSII or OASIS, gzipped or not) and write the results.

    A block file BLOCK.yaml beside BLOCK.gds says what the layout cannot: supplies, pins.
    Exit status: 0 nothing failed, 1 a limit failed, 2 could not start, 3 could not conclude.
    """
    window_um = None if window is None else checked_window(window)
    if temperature is not None:
        require_temperature(temperature)
    from latchscan.report import write_reports
    from latchscan.report.summary import summary
    from latchscan.report.write import require_directory

    require_directory(out_dir)
    from latchscan.block.load import load_block, load_block_beside
    from latchscan.block_fit import open_block_layout
    from latchscan.scan import ScanOptions
    from latchscan.scan import scan as run_scan
    from latchscan.tasks import open_workers
    from latchscan.technology.load import load_technology

    loaded = load_technology(tech)
    said = load_block_beside(layout) if block_file is None else load_block(block_file)
    source = open_block_layout(layout, technology=loaded.technology, top=top, loaded=said)
    if temperature is None and said is not None:
        temperature = said.block.temperature_c
    options = ScanOptions(
        window_um=window_um,
        temperature_c=temperature,
        block=said,
        internal_injectors=internal_injectors
        or (said is not None and said.block.internal_injectors),
    )
    with open_workers(jobs or available_cores(), progress(quiet=quiet)) as workers:
        result = run_scan(source, loaded, options, workers)
    files = write_reports(result, out_dir)
    if not quiet:
        print_out(summary(result, files, painter()))
    if result.unsolved_count:
        return COULD_NOT_CONCLUDE
    failed = any(finding.severity == "fail" for finding in result.findings)
    return LIMIT_FAILED if failed else NOTHING_FAILED


@commands.group(epilog="\b\nExample:\n  latchscan tech check my_process.yaml\n")
def tech() -> None:
    """Work on technology files."""


@tech.command(epilog="\b\nExample:\n  latchscan tech check techfiles/larch180.yaml\n")
@click.argument("file")
def check(file: str) -> int:
    """List every problem of the technology FILE.

    Prints one line a problem: file:line:column: key: what is wrong, what was expected.
    Exit status: 0 none, 2 some.
    """
    from latchscan.technology.check import check_technology
    from latchscan.technology.load import read_technology_file

    path, content = read_technology_file(file)
    problems = check_technology(content, str(path))
    lines = [str(problem) for problem in problems] or [f"{path}: no problems"]
    print_out("".join(line + "\n" for line in lines))
    return COULD_NOT_START if problems else NOTHING_FAILED


@tech.command()
def schema() -> int:
    """Print the JSON Schema of technology files, for editors."""
    import json

    from latchscan.technology.schema import technology_schema

    print_out(json.dumps(technology_schema(), indent=2) + "\n")
    return NOTHING_FAILED


commands.add_command(block)


def checked_window(window: tuple[float, float, float, float]) -> Box:
    """The window when it is finite and has a width and a height.

    Raises
    ------
    OptionError
        It is not finite, or a far corner is not above and right of the near one.
    """
    x0, y0, x1, y1 = window
    shown = f"{x0:g} {y0:g} {x1:g} {y1:g}"
    if not all(math.isfinite(value) for value in window):
        raise OptionError(f"--window: expected four finite numbers, got {shown}")
    if x1 <= x0 or y1 <= y0:
        raise OptionError(f"--window: expected X0 < X1 and Y0 < Y1, got {shown}")
    return window


def require_temperature(temperature_c: float) -> None:
    """Raise `OptionError` unless the temperature lies in the range of the models [C]."""
    if not COLDEST_C <= temperature_c <= HOTTEST_C:
        raise OptionError(
            f"--temperature: expected {COLDEST_C:g} to {HOTTEST_C:g} degrees Celsius, got"
            f" {temperature_c:g}"
        )
