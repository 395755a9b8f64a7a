"""Resistances of the n+ emitters in the substrate, and transfers from the partners' holes.

In go the layout, the pairs and the technology; out come `BodyFields`.  Two cases: the bulk
alone carries the current (`substrate_bulk`), or a p-well sheet lies on it
(`substrate_sheet`).  Emitters are solved by windows, equal windows once.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from latchscan.fields.layered import LayeredKernel, Stack, tabulate_kernel
from latchscan.layout.model import Floats, Layout, Pairs, frozen
from latchscan.parasitics.material import pwell_temperature_factor
from latchscan.parasitics.model import BodyFields, Resistances, Transfers
from latchscan.parasitics.substrate_bulk import WindowFields, solve_bulk_window
from latchscan.parasitics.substrate_sheet import solve_sheet_window
from latchscan.parasitics.substrate_windows import (
    MOST_HALO_UM,
    WindowCutter,
    WindowUses,
    substrate_scene,
)
from latchscan.tasks import Workers
from latchscan.technology.model import UM_PER_CM, Technology

ACCEPTED_RIM_ERROR = 0.05
"""Relative error that a window's edge may cause before a wider window is solved."""
_KERNEL_REACH_UM = 2000.0
"""Distances beyond it are those of a window's diagonal and a pair's reach together."""


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class _Task:
    """One distinct window to be solved, wherever it is used."""

    window: WindowUses
    kernel: LayeredKernel
    conductance_s: float | None
    patch_um: float


def solve_substrate(
    layout: Layout, pairs: Pairs, technology: Technology, temperature_k: float, workers: Workers
) -> BodyFields:
    """Resistances of the substrate's n+ emitters and transfers of the pairs on them.

    Parameters
    ----------
    layout, pairs
        See their classes; pairs whose base is another body stay NaN.
    technology
        Substrate stack, p-well sheet, contact resistance and patch radius.
    temperature_k
        Temperature of the scan [K]; silicon's resistances follow it, contacts do not.
    workers
        Where windows are solved.

    Returns
    -------
    BodyFields
        Infinite where neither a contacted tap nor the back side carries current away.

    Notes
    -----
    Emitters of a window without a trustworthy solution stay NaN.  Taps outside an emitter's
    window are left out, which can only raise a resistance.  Holes arrive at the surface: the
    depth of the n-well is small against the distances.
    """
    substrate = technology.substrate
    factor = pwell_temperature_factor(technology, temperature_k)
    sheet = substrate.pwell_sheet_resistance_ohm_sq
    scene = substrate_scene(
        layout,
        substrate.substrate_tap_contact_resistance_ohm.typical,
        with_sheet=sheet is not None,
    )
    fields = _Columns.of(layout, pairs)
    if len(scene.emitter_index) == 0:
        return fields.frozen()
    kernel = tabulate_kernel(substrate_stack(technology, factor), _KERNEL_REACH_UM)
    cutter = WindowCutter(scene, pairs, technology.loop.patch_radius_um)
    windows = cutter.all_windows()
    while windows:
        tasks = [
            _Task(
                window=window,
                kernel=kernel,
                conductance_s=None if sheet is None else 1.0 / (factor * sheet.typical),
                patch_um=technology.loop.patch_radius_um,
            )
            for window in windows
        ]
        results = workers.attempt("substrate", _solve, tasks)
        narrow = []
        for window, solved in zip(windows, results, strict=True):
            if solved is not None:
                fields.fill(window, solved)
                if _too_narrow(window, solved):
                    narrow.append(window)
        windows = cutter.wider(narrow)
    return fields.frozen()


def _too_narrow(window: WindowUses, solved: WindowFields) -> bool:
    """Whether what lies beyond the window matters and a wider one is allowed."""
    worst = float(solved.rim_error.max(initial=0.0))
    return worst > ACCEPTED_RIM_ERROR and window.window.halo_um < MOST_HALO_UM


def substrate_stack(technology: Technology, factor: float) -> Stack:
    """The substrate's layers, resistivities multiplied by a factor, as the kernel takes them."""
    substrate = technology.substrate
    return Stack(
        resistivity_ohm_um=tuple(
            factor * layer.resistivity_ohm_cm.typical * UM_PER_CM for layer in substrate.layers
        ),
        thickness_um=tuple(layer.thickness_um.typical for layer in substrate.layers),
        bottom_contacted=substrate.back_side == "contacted",
    )


def _solve(task: _Task) -> WindowFields:
    window, uses = task.window.window, tuple(task.window.uses)
    if task.conductance_s is None:
        return solve_bulk_window(window, uses, task.kernel, task.patch_um)
    return solve_sheet_window(window, uses, task.kernel, task.conductance_s, task.patch_um)


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class _Columns:
    """The result while it fills up."""

    mean_ohm: Floats
    max_ohm: Floats
    patch_ohm: Floats
    relative_error: Floats
    transfer_ohm: Floats

    @classmethod
    def of(cls, layout: Layout, pairs: Pairs) -> _Columns:
        rows = len(layout.emitters.kind) + len(layout.bodies)
        return cls(
            mean_ohm=np.full(rows, np.nan),
            max_ohm=np.full(rows, np.nan),
            patch_ohm=np.full(rows, np.nan),
            relative_error=np.full(rows, np.nan),
            transfer_ohm=np.full(len(pairs.cathode), np.nan),
        )

    def fill(self, window: WindowUses, solved: WindowFields) -> None:
        """Enter a solved window at every place where it is used."""
        for use, transfer in zip(window.uses, solved.transfer_ohm, strict=True):
            self.mean_ohm[use.emitters] = solved.mean_ohm
            self.max_ohm[use.emitters] = solved.max_ohm
            self.patch_ohm[use.emitters] = solved.patch_ohm
            self.relative_error[use.emitters] = solved.relative_error
            self.transfer_ohm[use.pairs] = transfer

    def frozen(self) -> BodyFields:
        """Return the finished result."""
        resistances = Resistances(
            mean_ohm=frozen(self.mean_ohm),
            max_ohm=frozen(self.max_ohm),
            patch_ohm=frozen(self.patch_ohm),
            relative_error=frozen(self.relative_error),
        )
        nothing = np.full(len(self.transfer_ohm), np.nan)
        transfers = Transfers(well_ohm=frozen(nothing), substrate_ohm=frozen(self.transfer_ohm))
        return BodyFields(resistances=resistances, transfers=transfers)
