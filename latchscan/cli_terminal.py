"""What every command shares: exit statuses, printing, colours, progress bars, paths given."""

from __future__ import annotations

import os
import sys
from pathlib import Path
from typing import TYPE_CHECKING

import click

from latchscan.errors import OutputError

if TYPE_CHECKING:
    from latchscan.report.summary import Paint
    from latchscan.tasks import Progress

NOTHING_FAILED = 0
LIMIT_FAILED = 1
COULD_NOT_START = 2
COULD_NOT_CONCLUDE = 3
SIGNALLED = 128
"""What shells expect of a program that a signal ended: this plus the signal's number."""


def print_out(text: str) -> None:
    """Print on standard output; a reader that has gone is no reason to complain.

    Raises
    ------
    OutputError
        It takes nothing, for a reason other than that nobody reads.
    """
    try:
        click.echo(text, nl=False, color=True)
        sys.stdout.flush()
    except OSError as error:
        # give the interpreter's own last flush somewhere to go
        os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())
        if not isinstance(error, BrokenPipeError):
            reason = (error.strerror or str(error)).lower()
            raise OutputError(f"standard output: cannot be written: {reason}") from error


def given_path(ctx: click.Context, param: click.Parameter, value: str) -> Path:
    """The path as written; empty text, which would mean the current directory, fails.

    What else may be wrong with a path is for its reader to say.
    """
    if not value:
        raise click.BadParameter("expected a path, got nothing", ctx, param)
    return Path(value)


def available_cores() -> int:
    """Cores that this process may use."""
    if hasattr(os, "sched_getaffinity"):
        return len(os.sched_getaffinity(0))
    return os.cpu_count() or 1


def optional_path(ctx: click.Context, param: click.Parameter, value: str | None) -> Path | None:
    """The path as written, None where the option is not given."""
    return None if value is None else given_path(ctx, param, value)


def painter() -> Paint:
    """Colours for the summary when it goes to a terminal that wants them, else none."""
    from latchscan.report.summary import unpainted

    if not sys.stdout.isatty() or os.environ.get("NO_COLOR") or os.environ.get("TERM") == "dumb":
        return unpainted
    colours = {"fail": "red", "watch": "yellow", "good": "green"}

    def paint(text: str, severity: str) -> str:
        return click.style(text, fg=colours[severity], bold=True)

    return paint


def progress(*, quiet: bool = False) -> Progress:
    """Bars when somebody watches standard error and did not ask for quiet, else nothing."""
    from latchscan.tasks import Silent

    return Bars() if sys.stderr.isatty() and not quiet else Silent()


class Bars:
    """Progress on standard error, one bar a stage."""

    def __init__(self) -> None:
        from tqdm import tqdm

        self._tqdm = tqdm
        self._bar = tqdm(total=0, disable=True)

    def begin(self, stage: str, total: int) -> None:
        """Start the bar of a stage."""
        self._bar.close()
        self._bar = self._tqdm(
            total=total, desc=stage, file=sys.stderr, leave=False, dynamic_ncols=True,
            colour=None,
        )  # fmt: skip

    def step(self, count: int = 1) -> None:
        """Advance the bar."""
        self._bar.update(count)
