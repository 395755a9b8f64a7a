"""Resistive pieces: bodies that the technology names resistors, and poly that straps nodes.

In: the block's components and what the bodies touch.  Out: `Device` values with terminals on
components; `layout.nets` numbers their nodes.  Few of a block's shapes end up here, so these
are objects; all are asked of the layout in one look-up.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np
import shapely

from latchscan.layout.derive.geometry import SUBGRID
from latchscan.layout.model import Geometries, Ints
from latchscan.layout.source import LayoutSource
from latchscan.layout.trace.elements import elements_of_rings
from latchscan.layout.trace.merging import Components
from latchscan.layout.trace.nodes import Wiring
from latchscan.layout.trace.stack import Stack
from latchscan.layout.trace.tiles import polygon_rings
from latchscan.technology.conductors import WELL_CONDUCTOR, Conductors

TOUCH_STEPS = 2.0
"""Edges of slanted shapes may lie so far from the body's edge by rounding [grid steps]."""
LEAST_OVERLAP_UM2 = 1e-6
"""Areas below one square nanometre are rounding, not overlap."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Terminal:
    """Where a node meets a resistive piece; contacts through which the current enters."""

    component: int
    shape: Any
    contacts: int


@dataclass(frozen=True, slots=True, kw_only=True)
class Device:
    """A resistive piece [um] between two or more nodes."""

    kind: str
    conductor: str
    polygon: Any
    terminals: tuple[Terminal, ...]


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Ground:
    """What all devices are worked out from.

    Attributes
    ----------
    derived
        Name of an expression -> its polygons [um].
    piece_component
        Sort -> component of each of its derived polygons.
    """

    source: LayoutSource
    stack: Stack
    conductors: Conductors
    derived: Mapping[str, Geometries]
    whole: Components
    wiring: Wiring
    piece_component: Mapping[int, Ints]

    @property
    def unit_um(self) -> float:
        """Length of a database unit [um]."""
        return self.source.database_unit_um

    @property
    def step_um(self) -> float:
        """Length of a grid step [um]."""
        return self.unit_um / SUBGRID


def marked_resistors(ground: Ground) -> list[Device]:
    """The bodies of the technology's resistors that part two nodes or more."""
    found = []
    for number, (name, device) in enumerate(ground.conductors.resistors.items()):
        bodies = ground.derived[f"body {name}"]
        if device.conductor == WELL_CONDUCTOR:
            ends = _well_ends(ground, name, bodies)
        else:
            ends = _drawn_ends(ground, number, bodies)
        for body, terminals in zip(bodies, ends, strict=True):
            if len(terminals) > 1:
                found.append(
                    Device(
                        kind=name,
                        conductor=device.conductor,
                        polygon=body,
                        terminals=tuple(terminals),
                    )
                )
    return found


def _drawn_ends(ground: Ground, probe: int, bodies: Geometries) -> list[list[Terminal]]:
    """Terminals of every body in a conductor: along its edge, else at contacts on it."""
    hits = ground.whole.hits
    rows = np.flatnonzero(hits.probe == probe)
    rows = rows[np.argsort(hits.number[rows], kind="stable")]
    edges = np.searchsorted(hits.number[rows], np.arange(len(bodies) + 1))
    conductor = ground.stack.probes[probe].sorts[0]
    ends = []
    for number, body in enumerate(bodies):
        own = rows[edges[number] : edges[number + 1]]
        # elements on several tiles come from each
        head = own[hits.sort[own] == conductor]
        terminals = _heads(ground, conductor, body, head)
        known = {terminal.component for terminal in terminals}
        above = own[hits.sort[own] != conductor]
        terminals += [end for end in _landings(ground, body, above) if end.component not in known]
        ends.append(terminals)
    return ends


def _heads(ground: Ground, conductor: int, body: Any, rows: Ints) -> list[Terminal]:
    """Terminals where pieces of the conductor touch the body's edge."""
    hits = ground.whole.hits
    steps = shapely.transform(body, lambda points: np.rint(points / ground.step_um))
    edge = shapely.boundary(steps)
    terminals = []
    node = ground.wiring.home[hits.component[rows]]
    for home in np.unique(node).tolist():
        own = rows[node == home]
        slanted = np.array([polygon is not None for polygon in hits.polygon[own]], dtype=np.bool_)
        boxes = shapely.box(*np.unique(hits.box[own[~slanted]], axis=0).astype(np.float64).T)
        bent = shapely.buffer(
            hits.polygon[own[slanted]].astype(object), TOUCH_STEPS, join_style="mitre"
        )
        touched = _lines(shapely.intersection(edge, shapely.union_all([*boxes, *bent])))
        if touched is None:
            continue
        terminals.append(
            Terminal(
                component=home,
                shape=in_um(touched, ground.unit_um),
                contacts=_head_contacts(ground, conductor, body, own),
            )
        )
    return terminals


def _lines(shape: Any) -> Any:
    """The lines of an overlay's result as one geometry, None where there is none."""
    parts = shapely.get_parts(shapely.get_parts(shape))
    parts = parts[shapely.get_type_id(parts) == 1]
    parts = parts[shapely.length(parts) > 0]
    if not len(parts):
        return None
    return shapely.normalize(shapely.line_merge(shapely.union_all(parts)))


def _landings(ground: Ground, body: Any, rows: Ints) -> list[Terminal]:
    """Terminals where contacts lie on the body itself."""
    hits, stack = ground.whole.hits, ground.stack
    # a contact under no conductor leads nowhere
    rows = rows[ground.whole.sort()[hits.component[rows]] < stack.conductor_count]
    terminals = []
    node = ground.wiring.home[hits.component[rows]]
    for home in np.unique(node).tolist():
        boxes = np.unique(hits.box[rows[node == home]], axis=0)
        shapes = boxes_in_um(boxes, ground.unit_um)
        shared = shapely.area(shapely.intersection(shapes, body))
        on_body = shapes[shared > LEAST_OVERLAP_UM2]
        if len(on_body):
            terminals.append(
                Terminal(
                    component=home,
                    shape=shapely.normalize(shapely.union_all(on_body)),
                    contacts=len(on_body),
                )
            )
    return terminals


def _head_contacts(ground: Ground, conductor: int, body: Any, rows: Ints) -> int:
    """Contacts on the pieces of a conductor that touch a body at some elements."""
    hits = ground.whole.hits
    components = np.unique(hits.component[rows])
    if ground.stack.is_poly(conductor):
        return sum(ground.wiring.contacts(component) for component in components.tolist())
    if conductor in ground.piece_component:
        polygons = ground.derived[ground.stack.sorts[conductor].name]
        near = shapely.STRtree(polygons).query(body, predicate="intersects")
        mine = np.isin(ground.piece_component[conductor][near], components)
        head = polygons[near[mine]]
    else:
        head = boxes_in_um(hits.box[rows], ground.unit_um)
    return _contacts_on(
        ground, shapely.union_all(head), ground.stack.probes[hits.probe[rows[0]]].sorts[1:]
    )


def _contacts_on(ground: Ground, head: Any, sorts: tuple[int, ...]) -> int:
    """Connection shapes of some sorts that touch a polygon [um]."""
    return sum(len(_contact_boxes(ground, head, sort)) for sort in sorts)


def _contact_boxes(ground: Ground, shape: Any, sort: int) -> Ints:
    """(c, 4) distinct boxes [grid steps] of a connection's shapes that touch a polygon [um]."""
    connection = ground.stack.sorts[sort]
    if connection.expression:
        polygons = ground.derived[connection.name]
        near = np.sort(shapely.STRtree(polygons).query(shape, predicate="intersects"))
        bounds = shapely.bounds(polygons[near]).reshape(-1, 4)
        return np.asarray(np.rint(bounds / ground.step_um), dtype=np.int64)
    unit = ground.unit_um
    around = np.rint(np.array(shapely.bounds(shape)) / unit).astype(np.int64)
    columns = ground.source.near(around.reshape(1, 4), connection.pairs)
    boxes = np.unique(elements_of_rings(polygon_rings(columns, connection.pairs)).boxes, axis=0)
    drawn = boxes_in_um(boxes, ground.unit_um)
    return np.asarray(boxes[shapely.intersects(drawn, shape)])


def _well_ends(ground: Ground, name: str, bodies: Geometries) -> list[list[Terminal]]:
    """Terminals of every body in a well: where the rest of the well goes on beside it.

    Taps under the marker are terminals too: there the current enters the body through them.
    """
    heads, taps = ground.derived[f"head {name}"], ground.derived["tap well_tap"]
    row, head = shapely.STRtree(heads).query(bodies, predicate="intersects")
    node = {number: _head_node(ground, heads[number], taps) for number in np.unique(head).tolist()}
    ends: list[list[Terminal]] = []
    for number, body in enumerate(bodies):
        found: list[Terminal] = []
        by_node: dict[int, list[int]] = {}
        for one in np.sort(head[row == number]).tolist():
            if node[one][1]:
                by_node.setdefault(node[one][0], []).append(one)
        for home, own in sorted(by_node.items()):
            wide = shapely.buffer(heads[own], TOUCH_STEPS * ground.step_um, join_style="mitre")
            touched = _lines(shapely.intersection(shapely.boundary(body), shapely.union_all(wide)))
            if touched is not None:
                contacts = sum(node[one][1] for one in own)
                found.append(Terminal(component=home, shape=touched, contacts=contacts))
        known = {terminal.component for terminal in found}
        inside = _nodes_on(ground, body, taps)
        found += [
            Terminal(
                component=home,
                shape=shapely.normalize(shapely.union_all(shapes)),
                contacts=contacts,
            )
            for home, (contacts, shapes) in sorted(inside.items())
            if contacts and home not in known
        ]
        ends.append(found)
    return ends


def _head_node(ground: Ground, head: Any, taps: Geometries) -> tuple[int, int]:
    """Component that most contacts of a well's taps lead to, and their number."""
    contacts = {home: count for home, (count, _) in _nodes_on(ground, head, taps).items()}
    best = min(contacts, key=lambda home: (-contacts[home], home), default=-1)
    return best, contacts.get(best, 0)


def _nodes_on(ground: Ground, well: Any, taps: Geometries) -> dict[int, tuple[int, list[Any]]]:
    """Components of the taps in a part of a well, with their contacts and shapes there [um]."""
    inside = np.sort(shapely.STRtree(taps).query(well, predicate="intersects"))
    inside = inside[shapely.area(shapely.intersection(taps[inside], well)) > LEAST_OVERLAP_UM2]
    found: dict[int, tuple[int, list[Any]]] = {}
    for sort, components in sorted(ground.piece_component.items()):
        if ground.stack.sorts[sort].kind != "diffusion":
            continue
        polygons = ground.derived[ground.stack.sorts[sort].name]
        tree = shapely.STRtree(polygons)
        joined = [
            b for a, b in ground.stack.joins if a == sort and b >= ground.stack.conductor_count
        ]
        for tap in taps[inside]:
            near = np.sort(tree.query(tap, predicate="intersects"))
            near = near[shapely.area(shapely.intersection(polygons[near], tap)) > LEAST_OVERLAP_UM2]
            for piece in near.tolist():
                shared = shapely.intersection(polygons[piece], shapely.intersection(tap, well))
                home = int(ground.wiring.home[components[piece]])
                count, shapes = found.get(home, (0, []))
                more = _contacts_on(ground, shared, tuple(joined))
                found[home] = (count + more, [*shapes, shared] if more else shapes)
    return found


def in_um(shape: Any, unit_um: float) -> Any:
    """Geometry [grid steps] in um, with the very coordinates that regions have."""
    return shapely.transform(shape, lambda points: points / SUBGRID * unit_um)


def boxes_in_um(boxes: Ints, unit_um: float) -> Geometries:
    """Boxes (n, 4) [grid steps] as polygons [um]."""
    return np.asarray(shapely.box(*(boxes / SUBGRID * unit_um).T), dtype=np.object_)
