"""Tiles: polygons fetched once, sorted into small windows, derived, joined again.

In: a `TileTask`, small enough to send to another process.  Out: the regions of each tile as
rings, joined across its windows, and the contacts that may lie on a tap, both in grid steps.

Rectangles, nearly all of a layout, are sorted into the windows and clipped as columns of
numbers; only what a window draws becomes objects, and a window that has been seen before
(equal content relative to its corner) is not drawn at all.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from itertools import pairwise

import numpy as np

from latchscan.layout.derive.contacts import NO_BOXES, distinct_boxes, meets_any, merged_boxes
from latchscan.layout.derive.derivation import Program
from latchscan.layout.derive.evaluation import WindowResult, evaluate
from latchscan.layout.derive.geometry import SUBGRID, bounding_boxes, draw_rings, merged, to_rings
from latchscan.layout.derive.stitching import (
    Rings,
    join_rings,
    no_rings,
    pick_rings,
    select_rings,
    stitch,
)
from latchscan.layout.derive.windows import (
    BoxDbu,
    Grid,
    SortedShapes,
    cut_window,
    sort_layers,
    window_key,
)
from latchscan.layout.model import Ints
from latchscan.layout.runs import within_runs
from latchscan.layout.source import LayoutSource, PolygonColumns

Pair = tuple[int, int]

SHAPES_A_WINDOW = 250
"""Shapes that a window should hold: booleans cost more than proportionally beyond."""
SMALLEST_WINDOW_UM = 10.0
LARGEST_WINDOW_UM = 100.0
MOST_WINDOWS_A_SIDE = 50
MISSES_BEFORE_GIVING_UP = 300
"""Windows in a row without a repeat after which the tile stops looking for repeats."""


@dataclass(frozen=True, slots=True, kw_only=True)
class TileTask:
    """What a process needs to derive a few tiles.

    Attributes
    ----------
    source, program
        The layout and the steps.
    layers
        Layer name -> its layer/datatype pairs.
    tiles_dbu
        The tiles [database units].
    block_dbu
        The analysed box [database units].
    window_dbu
        Size (x, y) of a window, or None to choose it by the number of shapes.
    pitch_dbu
        Pitch (x, y) of the layout's largest array, or None.
    """

    source: LayoutSource
    program: Program
    layers: Mapping[str, tuple[Pair, ...]]
    tiles_dbu: tuple[BoxDbu, ...]
    block_dbu: BoxDbu
    window_dbu: tuple[int, int] | None
    pitch_dbu: tuple[int, int] | None


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class TileResult:
    """Regions of a tile [grid steps], canonical rings, and its tap contacts.

    Attributes
    ----------
    shape_count
        Shapes that the tile's layers hold, in the tile and its margin.
    regions
        Region name -> rings; an absent name is an empty region.
    sure_contacts, unsure_contacts
        (n, 4) boxes on rectangles of taps, merged; (m, 4) boxes that overlap the bounding
        box of another tap.
    """

    shape_count: int
    regions: Mapping[str, Rings]
    sure_contacts: Ints
    unsure_contacts: Ints


@dataclass(slots=True)
class _Memory:
    """Results of windows by content, until repeats fail to appear."""

    results: dict[tuple[object, ...], WindowResult] = field(default_factory=dict)
    misses: int = 0

    @property
    def hopeful(self) -> bool:
        """Whether it is still worth looking for repeats."""
        return self.misses < MISSES_BEFORE_GIVING_UP


def derive_tiles(task: TileTask) -> list[TileResult]:
    """Regions and tap contacts of every tile of a task."""
    memory = _Memory()
    return [_derive_tile(task, tile, memory) for tile in task.tiles_dbu]


def _derive_tile(task: TileTask, tile: BoxDbu, memory: _Memory) -> TileResult:
    shapes = _fetch(task, tile)
    count = sum(len(boxes) + rings.count for boxes, rings in shapes.values())
    shape_count = count or _contact_count(task, tile)
    if not shape_count:
        return _blank(task, tile)
    grid = _choose_grid(task, tile, max(count, 1))
    columns = sort_layers(task.program, shapes, grid)
    results = _derive_windows(task, grid, columns, memory)
    names = [name for name, _ in task.program.regions]
    regions = {name: stitch(_gather(results, name)) for name in names}
    sure, unsure = _tap_contacts(task, results)
    return TileResult(
        shape_count=shape_count,
        regions={name: rings for name, rings in regions.items() if rings.count},
        sure_contacts=sure,
        unsure_contacts=unsure,
    )


def _contact_count(task: TileTask, tile: BoxDbu) -> int:
    """Contacts of a tile that holds nothing else."""
    contacts = task.source.window(_widened(task, tile), _contact_pairs(task))
    return sum(len(columns) for columns in contacts.values())


def _contact_pairs(task: TileTask) -> list[Pair]:
    return sorted({pair for name in task.program.contact_layers for pair in task.layers[name]})


def _tap_contacts(task: TileTask, results: list[tuple[WindowResult, Ints]]) -> tuple[Ints, Ints]:
    """Contacts on rectangles of taps, merged, and those that another tap may hold."""
    taps = _moved([(result.tap_boxes, corner) for result, corner in results])
    slanted = _moved([(result.slanted_tap_boxes, corner) for result, corner in results])
    contacts = _moved([(result.contacts, corner) for result, corner in results])
    sure = np.concatenate([contacts[meets_any(contacts, taps)], _drawn_contacts(task, taps)])
    unsure = np.concatenate(
        [contacts[meets_any(contacts, slanted)], _drawn_contacts(task, slanted)]
    )
    return merged_boxes(distinct_boxes(sure)), distinct_boxes(unsure)


def _drawn_contacts(task: TileTask, taps: Ints) -> Ints:
    """Boxes of the drawn contacts that overlap any of the tap boxes with area."""
    pairs = _contact_pairs(task)
    if not pairs or not len(taps):
        return NO_BOXES
    # the first and last whole database units inside a box: what meets them overlaps it
    inside = np.hstack([taps[:, :2] // SUBGRID + 1, -(-taps[:, 2:] // SUBGRID) - 1])
    found = task.source.near(inside, pairs)
    parts = [_separate(found[pair], {}) for pair in pairs]
    others = bounding_boxes(join_rings([rings for _, rings in parts]))
    # a shape may be cleaned into lobes, of which not all need be on the tap
    return np.concatenate([*(boxes for boxes, _ in parts), others[meets_any(others, taps)]])


def _moved(parts: list[tuple[Ints, Ints]]) -> Ints:
    """Boxes of windows, relative to the corner (x, y) of each, in their real places."""
    return np.concatenate(
        [NO_BOXES, *(boxes + np.tile(corner, 2) for boxes, corner in parts if len(boxes))]
    )


def _blank(task: TileTask, tile: BoxDbu) -> TileResult:
    """A tile without any shape: complements cover it, all else is empty."""
    x0, y0, x1, y1 = (value * SUBGRID for value in tile)
    square = np.array([[x0, y0], [x1, y0], [x1, y1], [x0, y1]], dtype=np.int64)
    whole = Rings(points=square, first=np.array([0, 4], dtype=np.int64))
    covered = [n for n, i in task.program.regions if task.program.steps[i].complemented]
    return TileResult(
        shape_count=0,
        regions=dict.fromkeys(covered, whole),
        sure_contacts=NO_BOXES,
        unsure_contacts=NO_BOXES,
    )


def _gather(results: list[tuple[WindowResult, Ints]], name: str) -> Rings:
    found = [(r.regions[name], corner) for r, corner in results if name in r.regions]
    return join_rings(
        [Rings(points=rings.points + corner, first=rings.first) for rings, corner in found]
    )


def _fetch(task: TileTask, tile: BoxDbu) -> dict[str, tuple[Ints, Rings]]:
    """Rectangles and other shapes of each layer but the contacts', around the tile [grid steps]."""
    names = sorted({*task.program.layers(wide=False), *task.program.layers(wide=True)})
    pairs = sorted({pair for name in names for pair in task.layers[name]})
    columns = task.source.window(_widened(task, tile), pairs)
    cleaned: dict[bytes, Rings] = {}
    shapes = {}
    for name in names:
        parts = [_separate(columns[pair], cleaned) for pair in task.layers[name]]
        shapes[name] = (
            np.concatenate([boxes for boxes, _ in parts]),
            join_rings([rings for _, rings in parts]),
        )
    return shapes


def _widened(task: TileTask, tile: BoxDbu) -> BoxDbu:
    """A tile with its margin."""
    margin = _margin_dbu(task)
    x0, y0, x1, y1 = tile
    return (x0 - margin, y0 - margin, x1 + margin, y1 + margin)


def _margin_dbu(task: TileTask) -> int:
    return int(np.ceil(task.program.margin_um / task.source.database_unit_um))


def _separate(columns: PolygonColumns, cleaned: dict[bytes, Rings]) -> tuple[Ints, Rings]:
    """Rectangles as boxes; all other shapes as rings that wind once around their insides."""
    points, first = columns.points * SUBGRID, columns.first
    sizes = np.diff(first)
    four = sizes == 4
    corners = points if four.all() else points[np.repeat(four, sizes)]
    x, y = corners.reshape(-1, 4, 2).transpose(2, 1, 0)
    flat = (y[0] == y[1]) & (x[1] == x[2]) & (y[2] == y[3]) & (x[3] == x[0])
    upright = flat | ((x[0] == x[1]) & (y[1] == y[2]) & (x[2] == x[3]) & (y[3] == y[0]))
    ends = corners.reshape(-1, 4, 2)[upright][:, [0, 2]]
    boxes = np.hstack([ends.min(axis=1), ends.max(axis=1)])
    boxes = boxes[(boxes[:, 0] < boxes[:, 2]) & (boxes[:, 1] < boxes[:, 3])]
    other = np.ones(len(sizes), dtype=np.bool_)
    other[np.flatnonzero(four)[upright]] = False
    if not other.any():
        return boxes, no_rings()
    kept = select_rings(Rings(points=points, first=first), other)
    return boxes, _cleaned(kept, cleaned)


def _cleaned(rings: Rings, known: dict[bytes, Rings]) -> Rings:
    """The same areas without crossings: a lobe that winds backwards would cancel overlaps."""
    corners = rings.points[rings.first[:-1]]
    relative = rings.points - np.repeat(corners, np.diff(rings.first), axis=0)
    kinds: dict[bytes, int] = {}
    parts: list[Rings] = []
    kind = np.empty(rings.count, dtype=np.int64)
    buffer, width = relative.tobytes(), relative.itemsize * 2
    limits = (rings.first * width).tolist()
    for row, (start, end) in enumerate(pairwise(limits)):
        key = buffer[start:end]
        if key not in kinds:
            kinds[key] = len(parts)
            parts.append(_clean(key, known))
        kind[row] = kinds[key]
    lobes = np.array([part.count for part in parts])[kind]
    first = np.cumsum([0, *(part.count for part in parts)])[kind]
    picked = np.repeat(first, lobes) + within_runs(lobes)
    found = pick_rings(join_rings(parts), picked)
    moved = np.repeat(np.repeat(corners, lobes, axis=0), np.diff(found.first), axis=0)
    return Rings(points=found.points + moved, first=found.first)


def _clean(key: bytes, known: dict[bytes, Rings]) -> Rings:
    """One ring, given as bytes relative to its first point, without crossings."""
    if key not in known:
        points = np.frombuffer(key, dtype=np.int64).reshape(-1, 2)
        one = Rings(points=points, first=np.array([0, len(points)], dtype=np.int64))
        known[key] = to_rings(merged(draw_rings(one)))
    return known[key]


def _choose_grid(task: TileTask, tile: BoxDbu, shape_count: int) -> Grid:
    """Windows of about `SHAPES_A_WINDOW` shapes, multiples of the pitch where there is one."""
    x0, y0, x1, y1 = tile
    if task.window_dbu is not None:
        size = task.window_dbu
    else:
        unit = task.source.database_unit_um
        share = SHAPES_A_WINDOW / shape_count * (x1 - x0) * (y1 - y0)
        largest = max(LARGEST_WINDOW_UM / unit, max(x1 - x0, y1 - y0) / MOST_WINDOWS_A_SIDE)
        side = min(max(share**0.5, SMALLEST_WINDOW_UM / unit), largest)
        pitch_x, pitch_y = task.pitch_dbu or (1, 1)
        size = (
            pitch_x * max(1, round(side / pitch_x)),
            pitch_y * max(1, round(side / pitch_y)),
        )
    return Grid(
        tile=(x0 * SUBGRID, y0 * SUBGRID, x1 * SUBGRID, y1 * SUBGRID),
        size=(size[0] * SUBGRID, size[1] * SUBGRID),
        counts=(-(-(x1 - x0) // size[0]), -(-(y1 - y0) // size[1])),
        margin=_margin_dbu(task) * SUBGRID,
    )


def _derive_windows(
    task: TileTask,
    grid: Grid,
    columns: Mapping[str, Mapping[str, SortedShapes]],
    memory: _Memory,
) -> list[tuple[WindowResult, Ints]]:
    """Result and corner of every window."""
    block = np.array(task.block_dbu, dtype=np.int64) * SUBGRID
    unit = task.source.database_unit_um
    found = []
    for index in range(grid.counts[0] * grid.counts[1]):
        window, corner = cut_window(grid, index, columns, block)
        if not memory.hopeful:
            found.append((evaluate(task.program, window, unit), corner))
            continue
        key = window_key(window)
        result = memory.results.get(key)
        if result is None:
            memory.misses += 1
            result = memory.results[key] = evaluate(task.program, window, unit)
        else:
            memory.misses = 0
        found.append((result, corner))
    return found
