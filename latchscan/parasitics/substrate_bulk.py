"""A window of the substrate where the bulk alone carries the current.

The contacted taps are equipotentials on the layered conductor, tied to ground through
their contacts; every emitter forces its current evenly over its own area.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from latchscan.fields.layered import LayeredKernel
from latchscan.fields.layered_contacts import graded_patches, tapped_currents
from latchscan.layout.model import Floats, Ints
from latchscan.parasitics.substrate_windows import Arrivals, Shapes, Window, box_distances

_NEAREST_TAPS = 6
_POINTS_AT_ONCE = 1000
_FINE, _COARSE = 4, 3
"""Patches across each of the nearest taps, finely and coarsely; other taps are one patch."""
_FINE_ERROR = 1.0 / ((_FINE / _COARSE) ** 2 - 1.0)


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class WindowFields:
    """Results of one window: core emitters (c) and one array a use for the transfers.

    `rim_error` is the part of `relative_error` that the window's edge causes.
    """

    mean_ohm: Floats
    max_ohm: Floats
    patch_ohm: Floats
    relative_error: Floats
    rim_error: Floats
    transfer_ohm: tuple[Floats, ...]


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class BulkCurrents:
    """What flows into the bulk through its surface for 1 A into each core emitter (c).

    Attributes
    ----------
    boxes
        (b, 4) rectangles over which the currents spread evenly [um].
    current
        (b, c) currents into the bulk [A], negative where they leave it.
    level
        (c,) constant to add to the potential [ohm]; 0 for a contacted bottom.
    """

    boxes: Floats
    current: Floats
    level: Floats

    def transfers(self, uses: tuple[Arrivals, ...], kernel: LayeredKernel) -> tuple[Floats, ...]:
        """Potential at each arrival for 1 A into its cathode, one (a,) array a use [ohm].

        By reciprocity this is the potential at the cathode for 1 A arriving there.  Places
        that look alike mostly have their arrivals alike too: equal points are seen once.
        """
        cathode = np.concatenate([use.cathode for use in uses])
        points, index = np.unique(
            np.concatenate([use.points_um for use in uses]), axis=0, return_inverse=True
        )
        seen = np.empty((len(points), self.current.shape[1]))
        for start in range(0, len(points), _POINTS_AT_ONCE):
            part = slice(start, start + _POINTS_AT_ONCE)
            seen[part] = kernel.at_points(points[part], self.boxes) @ self.current + self.level
        found = seen[index.reshape(-1), cathode]
        ends = np.cumsum([len(use.cathode) for use in uses])
        return tuple(np.split(found, ends[:-1]))


def solve_bulk_window(
    window: Window, uses: tuple[Arrivals, ...], kernel: LayeredKernel, patch_um: float
) -> WindowFields:
    """Fields of the core emitters of one window.

    Notes
    -----
    The error is taken from a second solution with coarser taps.  Densities graded by the
    square make the error fall with the square of the patch count, which gives the finer
    solution's error as a multiple of the difference.
    """
    if kernel.floating and window.taps.count == 0:
        return unbounded(window, uses)
    everyone = joined(window.core, window.others)
    shares = window.core.shares
    direct = everyone.shares.T @ (kernel.between(everyone.boxes, window.core.boxes) @ shares)
    fine, flows = _solve(window, kernel, everyone, direct, _FINE)
    coarse, _ = _solve(window, kernel, everyone, direct, _COARSE)
    mean = np.diagonal(fine).copy()
    return WindowFields(
        mean_ohm=mean,
        max_ohm=mean + _rise_at_middle(window.core, kernel),
        patch_ohm=patch_means(fine, window, patch_um),
        relative_error=np.abs(np.diagonal(coarse) - mean) * _FINE_ERROR / mean,
        rim_error=np.zeros(window.core.count),
        transfer_ohm=flows.transfers(uses, kernel),
    )


def _solve(
    window: Window, kernel: LayeredKernel, everyone: Shapes, direct: Floats, across: int
) -> tuple[Floats, BulkCurrents]:
    """Mean potential of every emitter for 1 A into each core emitter, and the currents."""
    patches, contact = tap_patches(window, across)
    shares = window.core.shares
    currents, level = tapped_currents(
        kernel,
        patches,
        contact,
        window.series_ohm,
        kernel.between(patches, window.core.boxes) @ shares,
    )
    back = everyone.shares.T @ (kernel.between(everyone.boxes, patches) @ currents)
    flows = BulkCurrents(
        boxes=np.concatenate([window.core.boxes, patches]),
        current=np.concatenate([shares, -currents]),
        level=level,
    )
    return direct - back + level, flows


def tap_patches(window: Window, across: int) -> tuple[Floats, Ints]:
    """Patches of the window's taps and the tap of each; far taps are whole."""
    taps = window.taps
    if taps.count == 0:
        return np.zeros((0, 4)), np.zeros(0, dtype=np.int64)
    distance = box_distances(taps.boxes, window.core.boxes).min(axis=1)
    order = np.argsort(np.round(distance, 3), kind="stable")
    near = np.zeros(len(distance), dtype=bool)
    near[order[:_NEAREST_TAPS]] = True
    boxes, owner = graded_patches(taps.boxes[near], across)
    return (
        np.concatenate([boxes, taps.boxes[~near]]),
        np.concatenate([taps.owner[near][owner], taps.owner[~near]]),
    )


def _rise_at_middle(core: Shapes, kernel: LayeredKernel) -> Floats:
    """How far the potential of an emitter's own current at its middle is above its mean.

    A current spread evenly over a rectangle on a conductor peaks at the middle of it; the
    taps add a potential that hardly varies over an emitter.
    """
    shares = core.shares
    middles = (core.boxes[:, :2] + core.boxes[:, 2:]) / 2.0
    mean = np.diagonal(shares.T @ kernel.between(core.boxes, core.boxes) @ shares)
    own = (kernel.at_points(middles, core.boxes) @ shares)[np.arange(len(core.owner)), core.owner]
    peak = np.full(core.count, -np.inf)
    np.maximum.at(peak, core.owner, own)
    return np.maximum(peak - mean, 0.0)


def joined(first: Shapes, second: Shapes) -> Shapes:
    """Shapes of both, the first's polygons before the second's."""
    return Shapes(
        boxes=np.concatenate([first.boxes, second.boxes]),
        owner=np.concatenate([first.owner, second.owner + first.count]),
        count=first.count + second.count,
    )


def patch_means(
    potentials: Floats,
    window: Window,
    patch_um: float,
    driven: NDArray[np.bool_] | None = None,
) -> Floats:
    """Mean potential of each core emitter with all emitters near it driven together.

    Parameters
    ----------
    potentials
        (n, c) mean potential of every emitter (core first) for 1 A into each core emitter;
        by reciprocity also that of the core emitter for 1 A into any other.
    driven
        (n,) emitters that take part; all where None.
    """
    everyone = joined(window.core, window.others)
    pieces = box_distances(everyone.boxes, window.core.boxes)
    apart = np.full((everyone.count, len(window.core.boxes)), np.inf)
    np.minimum.at(apart, everyone.owner, pieces)
    apart = np.minimum.reduceat(
        apart, np.searchsorted(window.core.owner, np.arange(window.core.count)), axis=1
    )
    weight = np.where(apart <= patch_um, everyone.areas[:, None], 0.0)
    if driven is not None:
        weight[~driven] = 0.0
    total = np.maximum(weight.sum(axis=0), 1e-300)
    return np.asarray((weight * potentials).sum(axis=0) / total, dtype=np.float64)


def unbounded(window: Window, uses: tuple[Arrivals, ...]) -> WindowFields:
    """Fields of a window from which no current finds a way out."""
    endless = np.full(window.core.count, np.inf)
    return WindowFields(
        mean_ohm=endless,
        max_ohm=endless,
        patch_ohm=endless,
        relative_error=np.zeros(window.core.count),
        rim_error=np.zeros(window.core.count),
        transfer_ohm=tuple(np.full(len(use.pairs), np.inf) for use in uses),
    )
