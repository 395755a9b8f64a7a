"""Blocks drawn in memory: a stand-in for an opened layout, and random shapes for it."""

from __future__ import annotations

from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass

import numpy as np
import shapely

from latchscan.layout.model import Label
from latchscan.layout.source import PolygonColumns
from latchscan.technology.load import load_technology
from latchscan.technology.model import Technology

Points = Sequence[tuple[int, int]]
LAYERS = {
    "nwell": (3, 0),
    "deep": (4, 0),
    "active": (10, 0),
    "nplus": (12, 0),
    "pplus": (13, 0),
    "poly": (15, 0),
    "contact": (20, 0),
    "marker": (42, 0),
}


@dataclass(frozen=True, kw_only=True)
class DrawnBlock:
    """The part of `LayoutSource` that regions are derived from, over a list of polygons."""

    shapes: Mapping[str, Sequence[Points]]
    bbox_dbu: tuple[int, int, int, int]
    database_unit_um: float = 0.001
    pitch_dbu: tuple[int, int] | None = None
    texts: tuple[Label, ...] = ()
    name: str = "drawn.gds"
    top: str = "TOP"

    @property
    def bbox_um(self) -> tuple[float, ...]:
        return tuple(value * self.database_unit_um for value in self.bbox_dbu)

    def window(
        self, box_dbu: tuple[int, int, int, int], pairs: Iterable[tuple[int, int]]
    ) -> dict[tuple[int, int], PolygonColumns]:
        names = {pair: name for name, pair in LAYERS.items()}
        return {pair: self._columns(names.get(pair, ""), box_dbu) for pair in pairs}

    def near(
        self, boxes_dbu: np.ndarray, pairs: Iterable[tuple[int, int]]
    ) -> dict[tuple[int, int], PolygonColumns]:
        found = [self.window(tuple(box), pairs) for box in boxes_dbu.tolist()]
        return {
            pair: PolygonColumns(
                np.concatenate([columns[pair].points for columns in found]),
                np.cumsum([0, *(n for c in found for n in np.diff(c[pair].first).tolist())]),
            )
            for pair in pairs
        }

    def labels(self, pairs: Iterable[tuple[int, int]]) -> tuple[Label, ...]:
        return self.texts

    def total_polygons(self, pairs: Iterable[tuple[int, int]]) -> int:
        names = {pair: name for name, pair in LAYERS.items()}
        return sum(len(self.shapes.get(names.get(pair, ""), ())) for pair in pairs)

    def repeat_pitch_dbu(self) -> tuple[int, int] | None:
        return self.pitch_dbu

    def _columns(self, name: str, box: tuple[int, int, int, int]) -> PolygonColumns:
        chosen = []
        for shape in self.shapes.get(name, ()):
            points = np.array(shape, dtype=np.int64)
            low, high = points.min(axis=0), points.max(axis=0)
            if (low <= box[2:]).all() and (high >= box[:2]).all():
                chosen.append(points if _doubled_area(points) >= 0 else points[::-1])
        first = np.cumsum([0, *(len(points) for points in chosen)], dtype=np.int64)
        return PolygonColumns(np.concatenate([np.zeros((0, 2), dtype=np.int64), *chosen]), first)


def _doubled_area(points: np.ndarray) -> int:
    x, y = points.T
    return int(np.sum(x * np.roll(y, -1) - np.roll(x, -1) * y))


def rectangle(x0: int, y0: int, x1: int, y1: int) -> Points:
    return [(x0, y0), (x1, y0), (x1, y1), (x0, y1)]


def technology(*, derived: Mapping[str, str] | None = None, **roles: str | None) -> Technology:
    """A technology on `LAYERS` with these role expressions; the rest as in larch180."""
    base = load_technology("larch180").technology
    layer = next(iter(base.layers.values()))
    layers = {
        name: layer.model_copy(update={"gds": (f"{pair[0]}/{pair[1]}",), "required": False})
        for name, pair in LAYERS.items()
    }
    plain: dict[str, str | None] = {
        "nwell": "nwell",
        "pwell": "not nwell",
        "well_tap": "active and nplus and nwell",
        "substrate_tap": "active and pplus and not nwell",
        "p_diffusion_in_nwell": "active and pplus and nwell and not poly",
        "n_diffusion_outside_nwell": "active and nplus and not (nwell or poly)",
        "contact": "contact",
        "buried": "deep",
        "injector": "marker",
    }
    return base.model_copy(
        update={
            "layers": layers,
            "derived": dict(derived or {}),
            "conductors": None,
            "roles": base.roles.model_copy(update={**plain, **roles}),
        }
    )


def random_block(
    seed: int, *, side: int = 24_000, shapes: int = 40, slanted: bool = True
) -> DrawnBlock:
    """Overlapping rectangles and octagon-like polygons on a 5 unit grid on every layer."""
    random = np.random.default_rng(seed)
    drawn: dict[str, list[Points]] = {}
    for name in LAYERS:
        drawn[name] = []
        for number in range(shapes):
            x0, y0 = (int(v) * 5 for v in random.integers(-200, side // 5, size=2))
            width, height = (int(v) * 5 for v in random.integers(20, side // 20, size=2))
            cut = 5 * int(random.integers(1, min(width, height) // 10)) if slanted else 0
            shape = rectangle(x0, y0, x0 + width, y0 + height)
            if slanted and number % 3 == 0:
                shape = _cut_corners(x0, y0, width, height, cut)
            elif number % 5 == 1:
                half = width // 10 * 5
                shape = [
                    (x0, y0),
                    (x0 + width, y0),
                    (x0 + width, y0 + height),
                    (x0 + half, y0 + height),
                    (x0 + half, y0 + height // 10 * 5),
                    (x0, y0 + height // 10 * 5),
                ]
            drawn[name].append(shape if number % 2 else shape[::-1])
    return DrawnBlock(shapes=drawn, bbox_dbu=(0, 0, side, side))


def _cut_corners(x0: int, y0: int, width: int, height: int, cut: int) -> Points:
    x1, y1 = x0 + width, y0 + height
    return [
        (x0 + cut, y0),
        (x1 - cut, y0),
        (x1, y0 + cut),
        (x1, y1 - cut),
        (x1 - cut, y1),
        (x0 + cut, y1),
        (x0, y1 - cut),
        (x0, y0 + cut),
    ]


def union(block: DrawnBlock, name: str) -> shapely.Geometry:
    """A layer's union by shapely alone [database units], inside the block."""
    shapes = [shapely.make_valid(shapely.Polygon(s)) for s in block.shapes.get(name, ())]
    return shapely.intersection(shapely.union_all(shapes), shapely.box(*block.bbox_dbu))
