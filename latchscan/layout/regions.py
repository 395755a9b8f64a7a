"""Regions of the block: wells, taps, diffusions, merged and exact.

In: an opened layout and a technology.  Out: `Regions`, or the polygons of any expressions.
The block is cut into tiles, the tiles into windows (`tiles.py`); the expressions run in each
window (`evaluation.py`); what meets on a seam is joined (`stitching.py`).  The result does
not depend on the sizes of tiles and windows, nor on the number of workers.
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from dataclasses import dataclass
from itertools import pairwise

import numpy as np
import shapely

from latchscan.errors import LayoutError, OptionError
from latchscan.layout.derive.contacts import distinct_boxes, merged_across, merged_boxes
from latchscan.layout.derive.derivation import (
    DRAWN_REGIONS,
    TAPS,
    Program,
    compile_expressions,
    compile_program,
)
from latchscan.layout.derive.geometry import SUBGRID, rings_to_polygons
from latchscan.layout.derive.stitching import Rings, join_rings, select_rings, sort_rings, stitch
from latchscan.layout.derive.tiles import Pair, TileResult, TileTask, derive_tiles
from latchscan.layout.derive.windows import BoxDbu
from latchscan.layout.model import (
    REGION_NAMES,
    Box,
    Floats,
    Geometries,
    Ints,
    Label,
    Regions,
    frozen,
)
from latchscan.layout.source import LayoutSource
from latchscan.tasks import Workers
from latchscan.technology.model import Technology
from latchscan.technology.quantities import layer_numbers

TILES_A_SIDE = 3
SMALLEST_TILE_UM = 100.0
LARGEST_TILE_UM = 500.0
MOST_TILES_A_SIDE = 40
LARGEST_BLOCK_DBU = 2**30 // SUBGRID
"""Products of two coordinates [grid steps] must fit into 64 bits."""
LARGEST_PITCH_UM = 50.0
"""Windows that follow a coarser pitch would hold too much to be seen twice."""
MOST_TILES_A_TASK = 4
MOST_POLYGONS = 100_000_000
"""Polygons after expansion, contacts not counted: about an hour of work."""
FEW_TASKS = 6
"""A process that gets a task must first open the layout: few tasks, but enough to share."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Sizes:
    """Sizes of tiles and windows [um]; None leaves the choice to the program."""

    tile_um: float | None = None
    window_um: float | None = None


@dataclass(frozen=True, slots=True, kw_only=True)
class RegionStatistics:
    """Number of polygons of a region and their total area."""

    count: int
    area_um2: float


def derive_regions(
    source: LayoutSource,
    technology: Technology,
    window_um: Box | None,
    workers: Workers,
    *,
    sizes: Sizes | None = None,
) -> Regions:
    """Merged regions of the block or of a window of it.

    Parameters
    ----------
    source
        The opened layout.
    technology
        Its role expressions say what each region is.
    window_um
        Box x0, y0, x1, y1 [um] to analyse; None for the whole block.  Shapes around it
        still count for grown and thinned layers.
    workers
        Where the tiles run.
    sizes
        Sizes of tiles and windows; they change nothing but the time.

    Raises
    ------
    OptionError
        If the window does not meet the block or holds nothing.
    LayoutError
        If the block holds nothing on any layer that the roles use, or is too large.
    """
    program = compile_program(technology)
    block = analysed_box(source, window_um)
    tasks = _tasks(source, program, technology, block, sizes or Sizes())
    if window_um is None:
        names = {*program.layers(wide=False), *program.layers(wide=True)}
        require_bearable(source, [tasks[0].layers[name] for name in sorted(names)])
    results = _derived(tasks, workers, "regions")
    if not any(result.shape_count for result in results):
        raise _nothing_found(source, window_um)
    unit = source.database_unit_um
    lines = _seams(tasks, block)
    shapes = {
        name: rings_to_polygons(_joined(results, name, lines), unit) for name in DRAWN_REGIONS
    }
    label_pairs = [layer_numbers(text) for text in technology.labels.layers]
    return Regions(
        bbox_um=_to_um(block, unit),
        shapes=shapes,
        contact_box_um=frozen(_tap_contacts(results, shapes, unit, lines)),
        labels=_labels_inside(source, label_pairs, _to_um(block, unit)),
    )


def derive_expressions(
    source: LayoutSource,
    technology: Technology,
    expressions: Mapping[str, str],
    workers: Workers,
    *,
    sizes: Sizes | None = None,
) -> dict[str, Geometries]:
    """Merged polygons [um] of any expressions over the whole block.

    Parameters
    ----------
    source
        The opened layout.
    technology
        Names the layers and derived names that the expressions use.
    expressions
        Name -> text of an expression, for example ``active and not poly``.
    workers
        Where the tiles run.
    sizes
        Sizes of tiles and windows; they change nothing but the time.

    Returns
    -------
    dict
        Name -> disjoint polygons sorted by (y0, x0), as the regions are; none where the
        expression holds nothing.

    Raises
    ------
    LayoutError
        If the block is too large.
    """
    if not expressions:
        return {}
    program = compile_expressions(technology, expressions)
    block = analysed_box(source, None)
    tasks = _tasks(source, program, technology, block, sizes or Sizes())
    require_bearable(source, [pairs for _, pairs in sorted(tasks[0].layers.items())])
    results = _derived(tasks, workers, "conductors")
    lines = _seams(tasks, block)
    return {
        name: rings_to_polygons(_joined(results, name, lines), source.database_unit_um)
        for name in expressions
    }


def _derived(tasks: list[TileTask], workers: Workers, stage: str) -> list[TileResult]:
    batches = workers.map(stage, derive_tiles, tasks)
    return [result for batch in batches for result in batch]


def region_statistics(regions: Regions) -> dict[str, RegionStatistics]:
    """Count and area [um2] of every region of `REGION_NAMES`."""
    return {
        name: RegionStatistics(
            count=len(regions.shapes[name]),
            area_um2=float(np.sum(shapely.area(regions.shapes[name]))),
        )
        for name in REGION_NAMES
    }


def _to_um(box: BoxDbu, unit_um: float) -> Box:
    x0, y0, x1, y1 = (value * unit_um for value in box)
    return (x0, y0, x1, y1)


def is_bearable(source: LayoutSource, layers: Iterable[tuple[Pair, ...]]) -> bool:
    """Whether the polygons on these layers are few enough to be worked off."""
    pairs = [pair for pairs in layers for pair in pairs]
    return source.total_polygons(pairs) <= MOST_POLYGONS


def require_bearable(source: LayoutSource, layers: Iterable[tuple[Pair, ...]]) -> None:
    """Refuse what could not be worked off before any work is done."""
    layers = list(layers)
    if not is_bearable(source, layers):
        count = source.total_polygons([pair for pairs in layers for pair in pairs])
        raise LayoutError(
            f"{source.name}: cell {source.top} holds {count} polygons on the layers of its"
            f" regions; expected at most {MOST_POLYGONS}",
            hint="scan it in parts with --window",
        )


def analysed_box(source: LayoutSource, window_um: Box | None) -> BoxDbu:
    """The block's box, or the part of it in a window [database units].

    Raises
    ------
    OptionError
        If the window does not meet the block.
    LayoutError
        If the block is too large.
    """
    block = source.bbox_dbu
    width, height = block[2] - block[0], block[3] - block[1]
    if max(width, height) > LARGEST_BLOCK_DBU:
        raise LayoutError(
            f"{source.name}: cell {source.top} is {width} x {height} database units large;"
            f" expected at most {LARGEST_BLOCK_DBU} along each side",
            hint="a stray shape far outside the block makes it that large",
        )
    if window_um is None:
        return block
    x0, y0, x1, y1 = (round(value / source.database_unit_um) for value in window_um)
    cut = (max(x0, block[0]), max(y0, block[1]), min(x1, block[2]), min(y1, block[3]))
    if cut[0] >= cut[2] or cut[1] >= cut[3]:
        raise _nothing_found(source, window_um)
    return cut


def _nothing_found(source: LayoutSource, window_um: Box | None) -> LayoutError | OptionError:
    block = " ".join(f"{value:.10g}" for value in source.bbox_um)
    if window_um is None:
        return LayoutError(
            f"{source.name}: cell {source.top} holds no shape on the layers that the roles use;"
            f" expected at least one, got none in its box {block} um"
        )
    asked = " ".join(f"{value:.10g}" for value in window_um)
    return OptionError(
        f"--window {asked}: no shape on any layer of the technology there; expected a window"
        f" on the block's shapes, got an empty one",
        hint=f"the block's box is {block} um",
    )


def _used_layers(program: Program, technology: Technology) -> dict[str, tuple[Pair, ...]]:
    names = {*program.layers(wide=False), *program.layers(wide=True), *program.contact_layers}
    return {
        name: tuple(layer_numbers(text) for text in technology.layers[name].gds)
        for name in sorted(names)
    }


def _tasks(
    source: LayoutSource,
    program: Program,
    technology: Technology,
    block: BoxDbu,
    sizes: Sizes,
) -> list[TileTask]:
    layers = _used_layers(program, technology)
    unit = source.database_unit_um
    pitch = source.repeat_pitch_dbu()
    if pitch is not None and max(pitch) * unit > LARGEST_PITCH_UM:
        pitch = None
    x_cuts, y_cuts = (
        tile_cuts(block[i], block[i + 2], sizes.tile_um, unit, (pitch or (1, 1))[i]) for i in (0, 1)
    )
    window = None
    if sizes.window_um is not None:
        window = (max(1, round(sizes.window_um / unit)),) * 2
    tiles = [(x0, y0, x1, y1) for y0, y1 in pairwise(y_cuts) for x0, x1 in pairwise(x_cuts)]
    share = max(1, min(MOST_TILES_A_TASK, len(tiles) // FEW_TASKS))
    return [
        TileTask(
            source=source,
            program=program,
            layers=layers,
            tiles_dbu=tuple(tiles[start : start + share]),
            block_dbu=block,
            window_dbu=window,
            pitch_dbu=pitch,
        )
        for start in range(0, len(tiles), share)
    ]


def tile_cuts(
    low: int, high: int, tile_um: float | None, unit_um: float, pitch_dbu: int
) -> list[int]:
    """Edges of the tiles along one axis [database units], whole pitches apart."""
    side = tile_um
    if side is None:
        side = (high - low) * unit_um / TILES_A_SIDE
        side = min(max(side, SMALLEST_TILE_UM), LARGEST_TILE_UM)
        side = max(side, (high - low) * unit_um / MOST_TILES_A_SIDE)
    step = pitch_dbu * max(1, round(side / unit_um / pitch_dbu))
    return [*range(low, high, step), high]


def _seams(tasks: list[TileTask], block: BoxDbu) -> tuple[Ints, Ints]:
    """Places (x, y) of the lines between tiles [grid steps]."""
    x = {tile[0] for task in tasks for tile in task.tiles_dbu} - {block[0]}
    y = {tile[1] for task in tasks for tile in task.tiles_dbu} - {block[1]}
    return (
        np.array(sorted(x), dtype=np.int64) * SUBGRID,
        np.array(sorted(y), dtype=np.int64) * SUBGRID,
    )


def _joined(results: list[TileResult], name: str, seams: tuple[Ints, Ints]) -> Rings:
    """Rings of a region over all tiles; only those that reach a seam need joining."""
    rings = join_rings([r.regions[name] for r in results if name in r.regions])
    if not rings.count:
        return rings
    on_seam = np.isin(rings.points[:, 0], seams[0]) | np.isin(rings.points[:, 1], seams[1])
    reaches = np.logical_or.reduceat(on_seam, rings.first[:-1])
    joined = stitch(select_rings(rings, reaches))
    return sort_rings(join_rings([select_rings(rings, ~reaches), joined]))


def _tap_contacts(
    results: list[TileResult],
    shapes: Mapping[str, Geometries],
    unit_um: float,
    seams: tuple[Ints, Ints],
) -> Floats:
    """Boxes [um] of contacts on taps: merged, each once, sorted by (y0, x0)."""
    found = np.concatenate([r.sure_contacts for r in results])
    unsure = distinct_boxes(np.concatenate([r.unsure_contacts for r in results]))
    if len(unsure):
        taps = np.concatenate([shapes[name] for name in TAPS])
        boxes = shapely.box(*(unsure / SUBGRID * unit_um).T)
        row, tap = shapely.STRtree(taps).query(boxes, predicate="intersects")
        shared = shapely.area(shapely.intersection(boxes[row], taps[tap]))
        on_tap = np.unique(row[shared > 0])
        steps = merged_boxes(distinct_boxes(np.concatenate([found, unsure[on_tap]])))
    else:
        steps = merged_across(found, *seams)
    return steps[np.lexsort((steps[:, 0], steps[:, 1]))] / SUBGRID * unit_um


def _labels_inside(source: LayoutSource, pairs: list[Pair], box: Box) -> tuple[Label, ...]:
    x0, y0, x1, y1 = box
    return tuple(
        label for label in source.labels(pairs) if x0 <= label.x_um <= x1 and y0 <= label.y_um <= y1
    )
