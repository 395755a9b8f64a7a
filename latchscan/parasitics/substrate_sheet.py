"""A window of the substrate where a p-well sheet lies on the bulk.

The emitters force their current into the sheet; from there it reaches the taps along the
sheet or dives into the bulk and comes up elsewhere, also beneath the n-wells, which are
holes in the sheet.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from latchscan.fields.layered import LayeredKernel
from latchscan.fields.layered_contacts import graded_patches
from latchscan.fields.layered_network import (
    GridLines,
    SheetOnBulk,
    block_intervals,
    fit_lines,
    grow_lines,
)
from latchscan.fields.layered_sheet import SheetPotentials, solve_on_bulk
from latchscan.fields.rectangles import mean_log_from_middle, mean_log_within
from latchscan.layout.model import Floats, Ints
from latchscan.parasitics.substrate_bulk import (
    BulkCurrents,
    WindowFields,
    joined,
    patch_means,
    solve_bulk_window,
    unbounded,
)
from latchscan.parasitics.substrate_windows import (
    Arrivals,
    Shapes,
    Window,
    box_distances,
)

_CORE_CELLS = 4500
"""Grid cells over the core's box."""
_LEAST_STEP_UM, _MOST_STEP_UM = 0.12, 1.0
_MARGIN_STEPS = 5
_LINE_GROWTH = 1.2
_CORE_BLOCKS = 8
_LEAST_BLOCK_UM = 1.5
_BLOCK_GROWTH = 0.8
_NEAREST_TAPS, _PATCHES_ACROSS = 8, 3
_PATCH_GROWTH, _LEAST_PATCH_UM = 1.0, 2.5
"""Length of a long tap's patches over its distance from the core, and the least one."""
_FITTED_EDGES = 24
_CLOSE_UM = 1.0
"""Emitters this close to a tap have their edges on grid lines."""
_BLOCK_ERROR = 0.1
"""Error of the blocks' sizes over the change when four become one (measured: 0.02 to 0.1)."""
_RIM_ERROR = 3.0
"""Over the square of the rim's share: measured against windows four times as wide (up to 3.1)."""
_GRID_ERROR = 0.02
"""Of the grid over the core: measured against grids two to five times finer (0.004 at large,
0.013 beside taps) and against finite differences in space."""


def solve_sheet_window(
    window: Window,
    uses: tuple[Arrivals, ...],
    kernel: LayeredKernel,
    conductance_s: float,
    patch_um: float,
) -> WindowFields:
    """Fields of the core emitters of one window.

    Parameters
    ----------
    conductance_s
        Conductance of a square of the p-well sheet [S].

    Notes
    -----
    The window's edge is insulating.  The error adds a share of the change with larger
    blocks, the grid's measured error and a multiple of the square of the share of the
    potential that differs along the edge: the current that would cross it goes with that
    share, and so does its effect.  An emitter with no sheet below it forces its current
    straight into the bulk.
    """
    if kernel.floating and window.taps.count == 0:
        return unbounded(window, uses)
    everyone = joined(window.core, window.others)
    on_sheet = _sheet_area(everyone, window) > 0.0
    core = on_sheet[: window.core.count]
    if not core.any():
        return solve_bulk_window(window, uses, kernel, patch_um)
    patches, patch_tap = _tap_patches(window)
    solved = solve_on_bulk(
        SheetOnBulk(
            conductance_s=conductance_s,
            sheet=window.sheet,
            holes=window.holes,
            contacts=window.taps.boxes,
            contact=window.taps.owner,
            series_ohm=window.series_ohm,
            patches=patches,
            patch_contact=patch_tap,
        ),
        kernel,
        _grid(window),
        (window.core.boxes, window.core.owner, window.core.count),
        (everyone.boxes, everyone.owner, everyone.count),
    )
    result = _fields(window, uses, kernel, solved, conductance_s, patch_um, on_sheet)
    if core.all():
        return result
    return _chosen(core, uses, result, solve_bulk_window(window, uses, kernel, patch_um))


def _sheet_area(shapes: Shapes, window: Window) -> Floats:
    """Area of sheet below each polygon [um2]."""
    area = np.zeros(len(shapes.boxes))
    for boxes, sign in ((window.sheet, 1.0), (window.holes, -1.0)):
        low = np.maximum(shapes.boxes[:, None, :2], boxes[None, :, :2])
        high = np.minimum(shapes.boxes[:, None, 2:], boxes[None, :, 2:])
        area += sign * np.maximum(high - low, 0.0).prod(axis=2).sum(axis=1)
    total = np.bincount(shapes.owner, area, shapes.count)
    return np.where(total > 1e-6, total, 0.0)


def _tap_patches(window: Window) -> tuple[Floats, Ints]:
    """Graded patches of the nearest taps; the others act through the sheet around them."""
    taps = window.taps
    if len(taps.boxes) == 0:
        return taps.boxes, taps.owner
    distance = box_distances(taps.boxes, window.core.boxes).min(axis=1)
    near = np.sort(np.argsort(np.round(distance, 3), kind="stable")[:_NEAREST_TAPS])
    least = np.maximum(_PATCH_GROWTH * distance[near], _LEAST_PATCH_UM)
    boxes, index = graded_patches(taps.boxes[near], _PATCHES_ACROSS, least_um=least)
    return boxes, taps.owner[near][index]


def _grid(window: Window) -> GridLines:
    """Grid that is fine over the core and blocks that follow it."""
    boxes = window.core.boxes
    low, high = boxes[:, :2].min(axis=0), boxes[:, 2:].max(axis=0)
    side = high - low
    step = float(np.clip(np.sqrt(side.prod() / _CORE_CELLS), _LEAST_STEP_UM, _MOST_STEP_UM))
    block = max(float(side.max()) / _CORE_BLOCKS, _LEAST_BLOCK_UM)
    lines, blocks = [], []
    for axis in (0, 1):
        start, stop = float(window.box_um[axis]), float(window.box_um[axis + 2])
        margin = _MARGIN_STEPS * step
        inner = (max(float(low[axis]) - margin, start), min(float(high[axis]) + margin, stop))
        cuts = grow_lines(start, stop, inner, step, _LINE_GROWTH)
        cuts = fit_lines(cuts, _edges(window, axis))
        lines.append(cuts)
        blocks.append(block_intervals(cuts, inner, block, _BLOCK_GROWTH))
    return GridLines(x=lines[0], y=lines[1], block_x=blocks[0], block_y=blocks[1])


def _edges(window: Window, axis: int) -> Floats:
    """Coordinates that grid lines shall hold, the most needed first.

    The nearest taps' edges, then those of emitters close to a tap, between which little sheet
    is left; at last all emitters' edges where rows or columns share a few.
    """
    taps, core = window.taps.boxes, window.core.boxes
    sides = [axis, axis + 2]
    found = [np.zeros(0)]
    if len(taps):
        distance = box_distances(taps, core)
        order = np.argsort(np.round(distance.min(axis=1), 3), kind="stable")
        low, high = window.box_um[axis], window.box_um[axis + 2]
        tap = taps[order][:, sides].ravel()
        tap = tap[(tap > low + 1e-6) & (tap < high - 1e-6)]
        _, first = np.unique(np.round(tap, 3), return_index=True)
        found.append(tap[np.sort(first)][:_FITTED_EDGES])
        found.append(np.unique(core[distance.min(axis=0) < _CLOSE_UM][:, sides]))
    shared = np.unique(core[:, sides])
    if len(shared) <= _FITTED_EDGES:
        found.append(shared)
    return np.concatenate(found)


def _fields(
    window: Window,
    uses: tuple[Arrivals, ...],
    kernel: LayeredKernel,
    solved: SheetPotentials,
    conductance_s: float,
    patch_um: float,
    on_sheet: NDArray[np.bool_],
) -> WindowFields:
    mean = np.diagonal(solved.mean_ohm).copy()
    flows = BulkCurrents(boxes=solved.block_boxes, current=solved.block_current, level=solved.level)
    with np.errstate(divide="ignore", invalid="ignore"):
        rim = _RIM_ERROR * (solved.rim_ohm / mean) ** 2
        error = _BLOCK_ERROR * solved.change_ohm / mean + rim + _GRID_ERROR
    return WindowFields(
        mean_ohm=mean,
        max_ohm=np.maximum(mean + _rise(window.core, conductance_s), solved.peak_ohm),
        patch_ohm=patch_means(solved.mean_ohm, window, patch_um, on_sheet),
        relative_error=error,
        rim_error=rim,
        transfer_ohm=flows.transfers(uses, kernel),
    )


def _rise(core: Shapes, conductance_s: float) -> Floats:
    """How far each emitter's own current lifts its middle above its mean [ohm]."""
    rise = np.empty(core.count)
    for index in range(core.count):
        boxes = core.boxes[core.owner == index]
        rise[index] = mean_log_within(boxes) - mean_log_from_middle(boxes)
    return np.maximum(rise, 0.0) / (2.0 * np.pi * conductance_s)


def _chosen(
    core: NDArray[np.bool_], uses: tuple[Arrivals, ...], first: WindowFields, second: WindowFields
) -> WindowFields:
    """Rows of the first where `core` is True, of the second elsewhere."""
    return WindowFields(
        mean_ohm=np.where(core, first.mean_ohm, second.mean_ohm),
        max_ohm=np.where(core, first.max_ohm, second.max_ohm),
        patch_ohm=np.where(core, first.patch_ohm, second.patch_ohm),
        relative_error=np.where(core, first.relative_error, second.relative_error),
        rim_error=np.where(core, first.rim_error, second.rim_error),
        transfer_ohm=tuple(
            np.where(core[use.cathode], a, b)
            for use, a, b in zip(uses, first.transfer_ohm, second.transfer_ohm, strict=True)
        ),
    )
