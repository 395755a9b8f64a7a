"""A layout library under one top cell, cheap to hand to worker processes.

Pickling passes on the name of the folder that holds the tables; a process that receives it
maps the tables once and keeps what it builds on them, however many tasks arrive.  The folder
lives as long as the library that was opened on it.
"""

from __future__ import annotations

from collections.abc import Iterable
from functools import lru_cache
from pathlib import Path

from latchscan.layout.file.hierarchy import parents_first
from latchscan.layout.file.tables import Pair, Tables, TablesFolder, load_tables
from latchscan.layout.file.walk import Walker
from latchscan.layout.model import Ints


class Library:
    """Tables, the order of their cells, the top, and window walkers by layer pairs.

    `folder` holds the tables: the folder itself where this library keeps it, else its path.
    """

    def __init__(
        self, tables: Tables, *, order: Ints, top: int, folder: TablesFolder | Path
    ) -> None:
        self.tables = tables
        self.order = order
        self.top = top
        self._folder = folder
        self._walkers: dict[tuple[Pair, ...], Walker] = {}

    def walker(self, pairs: Iterable[Pair]) -> Walker:
        """The walker for these layer pairs, built on first use."""
        key = tuple(sorted(set(pairs)))
        if key not in self._walkers:
            self._walkers[key] = Walker(self.tables, top=self.top, order=self.order, pairs=key)
        return self._walkers[key]

    def __reduce__(self) -> tuple[object, ...]:
        """Travel as the name of the folder with the tables."""
        path = self._folder.path if isinstance(self._folder, TablesFolder) else self._folder
        return (_revived, (str(path), self.top))


@lru_cache(maxsize=2)
def _revived(path: str, top: int) -> Library:
    tables = load_tables(Path(path))
    return Library(tables, order=parents_first(tables, path), top=top, folder=Path(path))
