"""A layout library under one top cell, cheap to hand to worker processes.

Pickling writes the tables once to a temporary file and passes its name on; a process that
receives it loads the file once and keeps what it builds on it, however many tasks arrive.
The file lives as long as the library that wrote it.
"""

from __future__ import annotations

import os
import shutil
import tempfile
import weakref
from collections.abc import Iterable
from functools import lru_cache
from pathlib import Path

from latchscan.layout.file.hierarchy import parents_first
from latchscan.layout.file.tables import Pair, Tables, load_tables, save_tables
from latchscan.layout.file.walk import Walker
from latchscan.layout.model import Ints


class Library:
    """Tables, the order of their cells, the top, and window walkers by layer pairs."""

    def __init__(self, tables: Tables, *, order: Ints, top: int) -> None:
        self.tables = tables
        self.order = order
        self.top = top
        self._walkers: dict[tuple[Pair, ...], Walker] = {}
        self._spilled: Path | None = None

    def walker(self, pairs: Iterable[Pair]) -> Walker:
        """The walker for these layer pairs, built on first use."""
        key = tuple(sorted(set(pairs)))
        if key not in self._walkers:
            self._walkers[key] = Walker(self.tables, top=self.top, order=self.order, pairs=key)
        return self._walkers[key]

    def __reduce__(self) -> tuple[object, ...]:
        """Travel as the name of a file with the tables."""
        if self._spilled is None:
            folder = tempfile.mkdtemp(prefix="latchscan-")
            # a forked worker inherits this object but must not remove the file
            weakref.finalize(self, _remove, folder, os.getpid())
            path = Path(folder) / "tables.npz"
            save_tables(self.tables, path)
            self._spilled = path
        return (_revived, (str(self._spilled), self.top))


def _remove(folder: str, owner: int) -> None:
    if os.getpid() == owner:
        shutil.rmtree(folder, ignore_errors=True)


@lru_cache(maxsize=2)
def _revived(path: str, top: int) -> Library:
    tables = load_tables(Path(path))
    return Library(tables, order=parents_first(tables, path), top=top)
