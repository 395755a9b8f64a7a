"""Resistance of wiring: marked resistors, and poly that straps two pieces of metal.

In: the resistive pieces that `layout.nets` found, with the places where their nodes meet them.
Out: one `Links` row for every two terminals of a piece: its squares times its sheet
resistance, plus the contacts at either end in parallel.

Notes
-----
Squares come from a finite-difference solution on the piece's own shape (`fields.squares`),
within 1 percent for upright shapes; slanted ones are drawn as a staircase.  The silicon or
poly between a head's contacts and the body is neglected, and so is every change with
temperature: process documents rarely state it for poly.
"""

from __future__ import annotations

import itertools

import numpy as np
import shapely

from latchscan.fields.squares import graded_lines, squares_between
from latchscan.layout.connections import STRAP, Links, Nets, Resistors
from latchscan.layout.model import Floats, Geometries, frozen
from latchscan.layout.unconnected import no_links
from latchscan.technology.model import Technology

FINEST_SHARE = 1.0 / 32.0
"""Cell beside an edge in widths of the piece: a corner is then 1 percent short of its squares."""
SLANTED_CELLS = 12.0
"""Cells across the width of a piece with slanted edges."""
MOST_LINES = 1500
"""Lines along one axis; a piece with more corners than that is solved on coarser cells."""
_STEPS_PER_UM = 1e6
"""Equal pieces in other places must give equal keys whatever the last bits of coordinates."""


def link_resistances(nets: Nets, technology: Technology) -> Links:
    """Resistance between every two terminals of every resistive piece.

    Parameters
    ----------
    nets
        The nets with their resistors.
    technology
        Sheet and contact resistances of its ``conductors``.

    Returns
    -------
    Links
        Rows in the order of the pieces; `ohm` is at 27 degrees Celsius.
    """
    pieces = nets.resistors
    if not len(pieces.kind):
        return no_links()
    known: dict[bytes, Floats] = {}
    rows: list[tuple[int, int, int, float]] = []
    for row in range(len(pieces.kind)):
        first, last = int(pieces.terminal_first[row]), int(pieces.terminal_first[row + 1])
        shapes = pieces.terminal_shape[first:last]
        key = _key(pieces.polygons[row], shapes)
        if key not in known:
            known[key] = piece_squares(pieces.polygons[row], shapes)
        sheet_ohm, contact_ohm = _values(pieces, row, technology)
        ends = contact_ohm / np.maximum(pieces.terminal_contacts[first:last], 1)
        for one, other in itertools.combinations(range(last - first), 2):
            ohm = sheet_ohm * known[key][one, other] + ends[one] + ends[other]
            rows.append((row, first + one, first + other, float(ohm)))
    table = np.array([entry[:3] for entry in rows], dtype=np.int64).reshape(-1, 3)
    return Links(
        resistor=frozen(table[:, 0].copy()),
        node=frozen(np.asarray(pieces.terminal_node[table[:, 1:]], dtype=np.int64)),
        ohm=frozen(np.array([entry[3] for entry in rows], dtype=np.float64)),
    )


def piece_squares(polygon: object, terminals: Geometries) -> Floats:
    """Squares between every two terminals on the edge of, or in, one piece.

    Parameters
    ----------
    polygon
        The piece, a shapely polygon [um].
    terminals
        (t,) shapely lines along its edge or polygons inside it [um].

    Returns
    -------
    Floats
        (t, t) squares; NaN where a terminal does not meet the piece.
    """
    area, length = float(shapely.area(polygon)), float(shapely.length(polygon))
    width = 2.0 * area / length if length > 0 else 0.0
    if width <= 0.0:
        return np.full((len(terminals), len(terminals)), np.nan)
    points = shapely.get_coordinates([polygon, *terminals])
    slanted = _is_slanted(polygon)
    x, y = (_lines(points[:, axis], width, slanted) for axis in (0, 1))
    centre_x, centre_y = np.meshgrid((x[1:] + x[:-1]) / 2, (y[1:] + y[:-1]) / 2)
    shapely.prepare(polygon)
    sheet = shapely.contains_xy(polygon, centre_x, centre_y)
    node_x, node_y = np.meshgrid(x, y)
    # a terminal on a slanted edge lies between the nodes of the staircase
    reach = width / SLANTED_CELLS if slanted else 1e-6
    held = [
        shapely.intersects_xy(shapely.buffer(shape, reach), node_x, node_y) for shape in terminals
    ]
    return squares_between(x, y, np.asarray(sheet, dtype=np.bool_), held)


def _lines(places: Floats, width: float, slanted: bool) -> Floats:
    finest = width * FINEST_SHARE
    edges = np.array([places.min(), places.max()]) if slanted else _apart(places)
    if slanted:
        cells = max(1, int(np.ceil((edges[1] - edges[0]) / width * SLANTED_CELLS)))
        return np.linspace(edges[0], edges[1], min(cells, MOST_LINES) + 1)
    lines = graded_lines(edges, finest)
    while len(lines) > MOST_LINES and finest < width:
        finest *= 2.0
        lines = graded_lines(edges, finest)
    return lines


def _apart(places: Floats) -> Floats:
    """Distinct places; those within a millionth of a micrometre are one."""
    ordered = np.unique(places)
    return np.asarray(ordered[np.append(True, np.diff(ordered) > 1.0 / _STEPS_PER_UM)])


def _is_slanted(polygon: object) -> bool:
    for ring in shapely.get_rings(polygon):
        turn = np.diff(shapely.get_coordinates(ring), axis=0)
        if np.any(np.abs(turn).min(axis=1) > 1.0 / _STEPS_PER_UM):
            return True
    return False


def _key(polygon: object, terminals: Geometries) -> bytes:
    """Shape of a piece and its terminals relative to its corner."""
    shapes = [polygon, *terminals]
    points = shapely.get_coordinates(shapes)
    sizes = np.array([shapely.get_num_coordinates(shape) for shape in shapes], dtype=np.int64)
    corner = points.min(axis=0)
    steps = np.rint((points - corner) * _STEPS_PER_UM).astype(np.int64)
    return bytes(sizes.tobytes() + steps.tobytes())


def _values(pieces: Resistors, row: int, technology: Technology) -> tuple[float, float]:
    """Sheet resistance [ohm/sq] and resistance of one contact [ohm] of a piece."""
    conductors = technology.conductors
    assert conductors is not None
    kind, conductor = str(pieces.kind[row]), str(pieces.conductor[row])
    if kind != STRAP:
        device = conductors.resistors[kind]
        return device.sheet_resistance_ohm_sq.typical, device.contact_resistance_ohm.typical
    contact = next(
        (c.resistance_ohm.typical for c in conductors.connections.values() if conductor in c.joins),
        0.0,
    )
    return conductors.layers[conductor].sheet_resistance_ohm_sq.typical, contact
