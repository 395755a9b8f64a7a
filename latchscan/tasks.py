"""Run one function over many independent items, in this process or in several.

Items go in, results come out in the items' order whatever the number of workers, so that
no result can depend on scheduling.
"""

from __future__ import annotations

import multiprocessing
import sys
from collections.abc import Callable, Iterator, Sequence
from concurrent.futures import Executor, ProcessPoolExecutor
from contextlib import contextmanager
from dataclasses import dataclass, field
from typing import Protocol, TypeVar

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
        """
        self.progress.begin(stage, len(items))
        results: list[Result] = []
        source: Iterator[Result] = (
            map(function, items)
            if self.executor is None or len(items) < 2
            else self.executor.map(function, items)
        )
        for result in source:
            results.append(result)
            self.progress.step()
        return results


@contextmanager
def open_workers(jobs: int, progress: Progress) -> Iterator[Workers]:
    """Workers in `jobs` processes; one job stays in this process."""
    if jobs <= 1:
        yield Workers(progress=progress)
        return
    # fork shares the imported modules; elsewhere the platform's default is the safe one
    context = multiprocessing.get_context("fork" if sys.platform == "linux" else None)
    with ProcessPoolExecutor(max_workers=jobs, mp_context=context) as executor:
        yield Workers(executor=executor, progress=progress)
