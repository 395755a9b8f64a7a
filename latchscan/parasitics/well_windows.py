"""One window of a well: its sources' resistances, with their errors.

In goes a `WellWindow`, the shapes around a group of sources relative to a corner; out comes a
`WindowResult`.  A window is solved with two panellings (their difference is the
discretisation error) and with its cut insulated and grounded (the truth lies between).
"""

from __future__ import annotations

import hashlib
from dataclasses import dataclass
from typing import Any

import numpy as np
import shapely
from numpy.typing import NDArray

from latchscan.errors import AnalysisError, ConvergenceError, ResolutionError
from latchscan.fields.sheet import (
    PanelRule,
    SheetProblem,
    SheetSolution,
    SheetSources,
    solve_sheet,
)
from latchscan.fields.sheet_peak import largest_potentials
from latchscan.layout.model import Box, Floats, Geometries, Ints
from latchscan.parasitics.sheet_geometry import SheetOutline, outline_sheet, spread_sources

PANELS = PanelRule()
COARSER = 2.0
PANEL_FACTORS = (1.0, 0.5, 2.0, 4.0)
"""Panel lengths to try in turn: finer if currents do not balance, longer if there are too many."""
EXTRAPOLATION = 0.5
"""Share of the change between the two panellings that is still to come: the error falls like
length**1.6 (measured), so 1/(2**1.6 - 1)."""
LEAST_ERROR = 3.0e-3


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class WellWindow:
    """Shapes of a body around a group of sources.

    Attributes
    ----------
    sheets
        (conductance per square [S], polygon) pairs.
    taps, tap_resistance_ohm
        (t,) contacted taps and the resistance of each one's contacts.
    box_um
        The window; None where it holds the whole body.
    polygons
        The c sources to solve, followed by their neighbours in patches.
    count
        c.
    patch_source, patch_member, patch_share
        Columns: source, polygon, and share of the patch's current that enters the polygon.
    points_um, point_source
        (m, 2) points where the potential of the source (m,) is wanted.
    """

    sheets: tuple[tuple[float, Any], ...]
    taps: Geometries
    tap_resistance_ohm: Floats
    box_um: Box | None
    polygons: Geometries
    count: int
    patch_source: Ints
    patch_member: Ints
    patch_share: Floats
    points_um: Floats
    point_source: Ints

    def digest(self) -> bytes:
        """Fingerprint of everything the result depends on."""
        sha = hashlib.sha256()
        sha.update(np.array([value for value, _ in self.sheets]).tobytes())
        for shapes in (np.array([p for _, p in self.sheets], dtype=object), self.taps):
            for wkb in shapely.to_wkb(shapely.normalize(shapes)):
                sha.update(wkb)
        for wkb in shapely.to_wkb(self.polygons):
            sha.update(wkb)
        for array in (
            self.tap_resistance_ohm,
            np.array(self.box_um or (), dtype=np.float64),
            np.array([self.count]),
            self.patch_source,
            self.patch_member,
            self.patch_share,
            self.points_um,
            self.point_source,
        ):
            sha.update(np.ascontiguousarray(array).tobytes())
            sha.update(b"|")
        return sha.digest()


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class WindowResult:
    """Resistances of a window's c sources and m points.

    Attributes
    ----------
    mean_ohm, max_ohm, patch_ohm
        (c,) see `latchscan.parasitics.model.Resistances`; inf where the window shows no path
        to a tap.
    panel_error, cut_error
        (c,) relative errors of the mean from the panels and from the cut.
    point_ohm
        (m,) potentials.
    """

    mean_ohm: Floats
    max_ohm: Floats
    patch_ohm: Floats
    panel_error: Floats
    cut_error: Floats
    point_ohm: Floats


def solve_window(window: WellWindow) -> WindowResult:
    """Solve one window (runs in any process).

    Raises
    ------
    AnalysisError
        No panelling gives a solution that passes its own checks.
    """
    c, m = window.count, len(window.points_um)
    result = WindowResult(
        mean_ohm=np.full(c, np.inf),
        max_ohm=np.full(c, np.inf),
        patch_ohm=np.full(c, np.inf),
        panel_error=np.zeros(c),
        cut_error=np.where(np.full(c, window.box_um is None), 0.0, np.inf),
        point_ohm=np.full(m, np.inf),
    )
    outline = outline_sheet(window.sheets, window.taps, window.tap_resistance_ohm, window.box_um)
    where = _home(outline, window.polygons[:c])
    # a source that lies on no sheet at all sits on a tap: its current meets no sheet
    lost = where < 0
    for values in (result.mean_ohm, result.max_ohm, result.patch_ohm):
        values[lost] = 0.0
    result.cut_error[lost] = 0.0
    result.point_ohm[lost[window.point_source]] = 0.0
    solved = ~lost & outline.tied[np.maximum(where, 0)]
    if solved.any():
        used = np.isin(outline.component, outline.component[where[solved]])
        _fill(window, outline, used, np.flatnonzero(solved), result)
    return result


def _home(outline: SheetOutline, polygons: Geometries) -> Ints:
    """A domain that each polygon overlaps, or -1."""
    home = np.full(len(polygons), -1)
    if len(outline.parts) == 0:
        return home
    shapely.prepare(outline.parts)
    tree = shapely.STRtree(outline.parts)
    inner, part = tree.query(shapely.point_on_surface(polygons), predicate="intersects")
    home[inner] = part
    rest = np.flatnonzero(home < 0)
    if len(rest):
        index, part = tree.query(polygons[rest], predicate="intersects")
        area = shapely.area(shapely.intersection(polygons[rest[index]], outline.parts[part]))
        real = area > 1e-4
        home[rest[index[real]]] = part[real]
    return home


def _fill(
    window: WellWindow,
    outline: SheetOutline,
    used: NDArray[np.bool_],
    rows: Ints,
    result: WindowResult,
) -> None:
    """Solve the sources `rows` on the domains `used` and write their values into the result."""
    kept = outline.keep(used)
    sources = spread_sources(window.polygons[rows], kept.parts)
    # listeners: the same sources, then the neighbours
    order = np.concatenate([rows, np.arange(window.count, len(window.polygons))])
    heard = spread_sources(window.polygons[order], kept.parts)
    place = _numbers(order, len(window.polygons))
    fine, coarse = _solve_twice(kept.problem, sources, heard)
    own = np.arange(len(rows))
    fine_mean = fine.mean_ohm[:, own, own]
    change = fine_mean - coarse.mean_ohm[:, own, own]
    mean = fine_mean + EXTRAPOLATION * change
    middle = mean.mean(axis=0)
    result.mean_ohm[rows] = middle
    result.panel_error[rows] = EXTRAPOLATION * np.abs(change).max(axis=0) / middle + LEAST_ERROR
    result.cut_error[rows] = 0.5 * np.ptp(mean, axis=0) / middle
    growth = middle / fine_mean.mean(axis=0)
    result.max_ohm[rows] = largest_potentials(fine).mean(axis=0) * growth
    result.patch_ohm[rows] = _patches(window, fine, place, rows) * growth
    _fill_points(window, outline, used, fine, rows, result)


def _solve_twice(
    problem: SheetProblem, sources: SheetSources, heard: SheetSources
) -> tuple[SheetSolution, SheetSolution]:
    """Solutions with fine and with coarse panels; other panels where the usual ones fail."""
    failure: AnalysisError | None = None
    for factor in PANEL_FACTORS:
        rule = PANELS.coarser(factor)
        try:
            fine = solve_sheet(problem, sources, listeners=heard, rule=rule)
            direct = fine.direct_ohm[: sources.count]
            rule = rule.coarser(COARSER)
            return fine, solve_sheet(problem, sources, rule=rule, direct_ohm=direct)
        except (ConvergenceError, ResolutionError) as error:
            failure = error
    raise failure or ConvergenceError("wells: no panelling was tried")


def _patches(window: WellWindow, fine: SheetSolution, place: Ints, rows: Ints) -> Floats:
    """(len(rows),) mean potential over each source when its patch is driven.

    By reciprocity it is the mean over every member when the source alone is driven, weighted
    by the members' currents.
    """
    member = place[window.patch_member]
    source = _numbers(rows, window.count)[window.patch_source]
    # a neighbour in another piece of sheet adds nothing here
    chosen = (source >= 0) & (member >= 0) & (member < fine.mean_ohm.shape[1])
    mutual = fine.mean_ohm.mean(axis=0)[member[chosen], source[chosen]]
    result = np.zeros(len(rows))
    np.add.at(result, source[chosen], mutual * window.patch_share[chosen])
    return result


def _fill_points(
    window: WellWindow,
    outline: SheetOutline,
    used: NDArray[np.bool_],
    fine: SheetSolution,
    rows: Ints,
    result: WindowResult,
) -> None:
    """Potentials at the points, each taken to the nearest place of the sheet."""
    source = _numbers(rows, window.count)[window.point_source]
    wanted = np.flatnonzero(source >= 0)
    if len(wanted) == 0:
        return
    # many pairs ask for the same place, each for its own source
    places, which = np.unique(window.points_um[wanted], axis=0, return_inverse=True)
    points = shapely.points(places)
    tree = shapely.STRtree(outline.parts)
    near, part = tree.query_nearest(points, all_matches=False)
    lines = shapely.shortest_line(points[near], outline.parts[part])
    at = np.empty((len(places), 2))
    at[near] = shapely.get_coordinates(lines)[1::2]
    domain = np.full(len(places), -1)
    domain[near] = np.where(used, np.cumsum(used) - 1, -1)[part]
    # a point on another piece of sheet feels nothing of these sources
    value = np.zeros((len(places), len(rows)))
    real = np.flatnonzero(domain >= 0)
    value[real] = fine.potentials(at[real], domain[real]).mean(axis=0)
    own = value[which.reshape(-1), source[wanted]]
    result.point_ohm[wanted] = np.maximum(own, 0.0)


def _numbers(rows: Ints, count: int) -> Ints:
    """(count,) place of every index in `rows`, or -1."""
    number = np.full(count, -1)
    number[rows] = np.arange(len(rows))
    return number
