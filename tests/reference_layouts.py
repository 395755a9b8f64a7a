"""Flat polygons by the reference library's own flattening, and ways to compare with them.

gdstk flattens, turns and repeats with code of its own, in floating point; nothing of the
project's window walk takes part.
"""

from __future__ import annotations

from functools import lru_cache
from pathlib import Path

import gdstk
import numpy as np

from latchscan.layout.source import LayoutSource, PolygonColumns
from latchscan.technology.load import load_technology
from latchscan.technology.model import Labels, Layer, Technology

Outline = tuple[tuple[int, int], ...]
EVERYWHERE = (-(2**50), -(2**50), 2**50, 2**50)


def technology_of(
    required: tuple[str, ...] = (), labels: tuple[str, ...] = (), **layers: str
) -> Technology:
    """The shipped technology with other layers."""
    named = {name: Layer(gds=(pair,), required=name in required) for name, pair in layers.items()}
    return _shipped().model_copy(update={"layers": named, "labels": Labels(layers=labels)})


@lru_cache(maxsize=1)
def _shipped() -> Technology:
    return load_technology("larch180").technology


def canonical(points: np.ndarray) -> Outline:
    """Counter-clockwise from the smallest vertex."""
    x, y = points[:, 0], points[:, 1]
    if np.sum(x * np.roll(y, -1) - np.roll(x, -1) * y) < 0:
        points = points[::-1]
    rows = [(int(px), int(py)) for px, py in points]
    start = rows.index(min(rows))
    return tuple(rows[start:] + rows[:start])


def outlines(columns: PolygonColumns) -> list[np.ndarray]:
    return np.split(columns.points, columns.first[1:-1]) if len(columns) else []


def found(source: LayoutSource, pair: tuple[int, int], box=EVERYWHERE) -> list[Outline]:
    """Sorted canonical outlines of a window."""
    return sorted(canonical(points) for points in outlines(source.window(box, [pair])[pair]))


def flattened(path: Path, top: str, pair: tuple[int, int]) -> list[np.ndarray]:
    """All polygons of a pair in database units, by the reference library, unrounded."""
    library = (gdstk.read_oas if path.suffix == ".oas" else gdstk.read_gds)(str(path))
    cell = next(cell for cell in library.cells if cell.name == top)
    flat = cell.get_polygons(layer=pair[0], datatype=pair[1])
    return [polygon.points * (library.unit / library.precision) for polygon in flat]


def expected(path: Path, top: str, pair: tuple[int, int]) -> list[Outline]:
    return sorted(canonical(np.floor(points + 0.5)) for points in flattened(path, top, pair))


def worst_mismatch(ours: list[Outline], theirs: list[np.ndarray]) -> float:
    """Largest vertex distance after pairing outlines by their centres [database units]."""
    assert len(ours) == len(theirs)
    centres = np.array([np.mean(points, axis=0) for points in theirs])
    free = np.ones(len(theirs), dtype=bool)
    worst = 0.0
    for outline in ours:
        points = np.array(outline, dtype=float)
        distance = np.abs(centres - points.mean(axis=0)).max(axis=1)
        nearest = int(np.argmin(np.where(free, distance, np.inf)))
        free[nearest] = False
        other = theirs[nearest]
        assert len(other) == len(points)
        gap = np.abs(points[:, None] - other[None]).max(axis=2)
        worst = max(worst, float(gap.min(axis=1).max()), float(gap.min(axis=0).max()))
    return worst
