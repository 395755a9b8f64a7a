"""Run one function over many independent items, in this process or in several.

Items go in, results come out in the items' order whatever the number of workers, so that
no result can depend on scheduling.
"""

from __future__ import annotations

import multiprocessing
import os
import signal
import sys
import threading
from collections.abc import Callable, Iterator, Sequence
from concurrent.futures import Executor, ProcessPoolExecutor
from concurrent.futures import wait as futures_wait
from concurrent.futures.process import BrokenProcessPool
from contextlib import contextmanager
from dataclasses import dataclass, field
from functools import partial
from multiprocessing.connection import wait
from types import FrameType
from typing import Any, Protocol, TypeVar

from latchscan.errors import AnalysisError

LONGEST_HOLD_S = 0.1
"""A signal takes effect after at most this long while results are awaited [s]."""

Item = TypeVar("Item")
Result = TypeVar("Result")


class Progress(Protocol):
    """What a stage tells while it works."""

    def begin(self, stage: str, total: int) -> None:
        """Start a stage of `total` steps."""

    def step(self, count: int = 1) -> None:
        """Report `count` finished steps."""


class Silent:
    """A progress listener that says nothing."""

    def begin(self, stage: str, total: int) -> None:
        """Ignore the stage."""

    def step(self, count: int = 1) -> None:
        """Ignore the steps."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Workers:
    """Where tasks run and who hears of their progress."""

    executor: Executor | None = None
    progress: Progress = field(default_factory=Silent)

    def map(
        self, stage: str, function: Callable[[Item], Result], items: Sequence[Item]
    ) -> list[Result]:
        """Apply `function` to every item and return the results in order.

        `function` must be importable by name (a worker may be another process).

        Raises
        ------
        AnalysisError
            A worker process was lost.
        """
        self.progress.begin(stage, len(items))
        results: list[Result] = []
        source: Iterator[Result] = (
            map(function, items)
            if self.executor is None or len(items) < 2
            else _results(self.executor, function, items)
        )
        try:
            for result in source:
                results.append(result)
                self.progress.step()
        except BrokenProcessPool:
            # the pool asks the others to end by a signal that they leave to the parent
            for process in multiprocessing.active_children():
                process.kill()
            raise AnalysisError(
                f"{stage}: a worker process was lost",
                hint="often for want of memory: give a --window or fewer --jobs",
            ) from None
        return results

    def attempt(
        self, stage: str, function: Callable[[Item], Result], items: Sequence[Item]
    ) -> list[Result | None]:
        """Like `map`, but None for an item of which `function` makes an `AnalysisError`.

        One item without a trustworthy answer is no reason to give up the others; the caller
        leaves its rows open, which no rule takes for passed.
        """
        return self.map(stage, partial(_result_or_none, function), items)


def _results(
    executor: Executor, function: Callable[[Item], Result], items: Sequence[Item]
) -> Iterator[Result]:
    """Results in order, as they come.

    A handler that raises in the middle of the pool's own code would leave one of its locks
    taken for ever, so signals wait until the pool is not being touched.
    """
    with _signals_held() as caught:
        futures = [executor.submit(function, item) for item in items]
        for future in futures:
            while not caught and not future.done():
                futures_wait([future], timeout=LONGEST_HOLD_S)
            if caught:
                return
            yield future.result()


@contextmanager
def _signals_held() -> Iterator[list[int]]:
    """Collect the signals that would raise here, and let them act on leaving."""
    caught: list[int] = []
    held: dict[int, Callable[[int, FrameType | None], Any]] = {}
    if threading.current_thread() is threading.main_thread():
        for number in _ending_signals():
            handler = signal.getsignal(number)
            if callable(handler):
                held[number] = handler
                signal.signal(number, lambda number, _frame: caught.append(number))
    try:
        yield caught
    finally:
        for taken, handler in held.items():
            signal.signal(taken, handler)
        for first in caught[:1]:
            held[first](first, None)


def _ending_signals() -> list[signal.Signals]:
    known = (getattr(signal, name, None) for name in ("SIGINT", "SIGTERM", "SIGHUP"))
    return [number for number in known if number is not None]


def _result_or_none(function: Callable[[Item], Result], item: Item) -> Result | None:
    try:
        return function(item)
    except AnalysisError:
        return None


@contextmanager
def open_workers(jobs: int, progress: Progress) -> Iterator[Workers]:
    """Workers in `jobs` processes; one job stays in this process."""
    if jobs <= 1:
        yield Workers(progress=progress)
        return
    # fork shares the imported modules; elsewhere the platform's default is the safe one
    context = multiprocessing.get_context("fork" if sys.platform == "linux" else None)
    with ProcessPoolExecutor(
        max_workers=jobs, mp_context=context, initializer=_begin_worker
    ) as executor:
        try:
            yield Workers(executor=executor, progress=progress)
        except BaseException:
            # nobody wants the results any more: leaving waits only for what is being worked on
            executor.shutdown(wait=True, cancel_futures=True)
            raise


def _begin_worker() -> None:
    """Leave signals to the parent, which ends its workers, and end with it if it is killed."""
    for number in _ending_signals():
        signal.signal(number, signal.SIG_IGN)
    threading.Thread(target=_leave_with_parent, daemon=True).start()


def _leave_with_parent() -> None:
    parent = multiprocessing.parent_process()
    if parent is not None:
        wait([parent.sentinel])
        os._exit(1)
