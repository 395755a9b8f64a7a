"""Nets of the block: what hangs together through contacts, vias, metals, poly and silicon.

In: an opened layout and a technology that names its conductors.  Out: `Nets`.  Conductors that
are plain layers are taken as drawn, the others are derived like the regions; tile by tile
(`trace/tiles.py`) shapes that touch become components, which are joined over the tiles
(`trace/merging.py`), folded into nodes (`trace/nodes.py`) and separated by resistive pieces
(`trace/devices.py`, `trace/straps.py`).  Always the whole block: a net does not end where a
window does.  The result does not depend on tiles, nor on the number of workers.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
import shapely
from numpy.typing import NDArray

from latchscan.layout.components import connected
from latchscan.layout.connections import Nets, Resistors
from latchscan.layout.derive.geometry import SUBGRID
from latchscan.layout.model import Floats, Geometries, Ints, frozen
from latchscan.layout.regions import (
    Sizes,
    analysed_box,
    derive_expressions,
    is_bearable,
    require_bearable,
)
from latchscan.layout.runs import offsets
from latchscan.layout.source import LayoutSource
from latchscan.layout.trace.devices import (
    LEAST_OVERLAP_UM2,
    Device,
    Ground,
    boxes_in_um,
    in_um,
    marked_resistors,
)
from latchscan.layout.trace.drawn import NetShapes, shapes_of_nets
from latchscan.layout.trace.elements import elements_of_polygons
from latchscan.layout.trace.merging import Components, merge_tiles
from latchscan.layout.trace.nodes import wire
from latchscan.layout.trace.sharing import share_out
from latchscan.layout.trace.stack import PADS, Stack, build_stack
from latchscan.layout.trace.straps import straps_of
from latchscan.layout.trace.texts import Texts, read_texts
from latchscan.layout.trace.tiles import trace_tiles
from latchscan.layout.unconnected import no_nets
from latchscan.tasks import Workers
from latchscan.technology.conductors import WELL_CONDUCTOR, Conductors
from latchscan.technology.model import Technology

TAPS = ("well_tap", "substrate_tap")


def trace_nets(
    source: LayoutSource,
    technology: Technology,
    workers: Workers,
    *,
    sizes: Sizes | None = None,
) -> Nets:
    """Nets of the whole block.

    Parameters
    ----------
    source
        The opened layout.
    technology
        Its section ``conductors`` says what conducts; without it there are no nets.
    workers
        Where the tiles run.
    sizes
        Sizes of tiles and windows; they change nothing but the time.

    Returns
    -------
    Nets
        Nets with a label, a pad, a diffusion or a terminal of a resistor.  Shapes of one
        sort, and of sorts that touch, hang together where they have any point in common.

    Raises
    ------
    LayoutError
        If the block is too large.
    """
    conductors = technology.conductors
    if conductors is None:
        return no_nets()
    sizes = sizes or Sizes()
    block = analysed_box(source, None)
    stack = build_stack(technology, conductors)
    require_bearable(source, [sort.pairs for sort in stack.sorts])
    expressions = _expressions(technology, conductors, stack)
    derived = derive_expressions(source, technology, expressions, workers, sizes=sizes)
    unit = source.database_unit_um
    texts = read_texts(source, technology, conductors)
    tasks = share_out(
        source,
        stack,
        {
            number: elements_of_polygons(derived[sort.name], unit)
            for number, sort in enumerate(stack.sorts)
            if sort.expression
        },
        tuple(elements_of_polygons(derived[probe.name], unit) for probe in stack.probes),
        texts.asked(unit),
        block,
        sizes.tile_um,
    )
    tiles = [tile for batch in workers.map("nets", trace_tiles, tasks) for tile in batch]
    whole = merge_tiles(tiles, stack)
    ground = Ground(
        source=source,
        stack=stack,
        conductors=conductors,
        derived=derived,
        whole=whole,
        wiring=wire(whole),
        piece_component=_pieces(stack, whole, derived),
    )
    return _assembled(ground, texts)


def can_trace(source: LayoutSource, technology: Technology) -> bool:
    """Whether the whole block is small enough for its nets to be traced."""
    conductors = technology.conductors
    if conductors is None:
        return True
    stack = build_stack(technology, conductors)
    return is_bearable(source, [sort.pairs for sort in stack.sorts])


def _expressions(technology: Technology, conductors: Conductors, stack: Stack) -> dict[str, str]:
    """All that must be derived, by name: conductors by their own names, others by a word more."""
    found = {sort.name: sort.expression for sort in stack.sorts if sort.expression}
    found.update((probe.name, probe.expression) for probe in stack.probes)
    roles = technology.roles
    found.update((f"tap {name}", getattr(roles, name)) for name in TAPS)
    for name, device in conductors.resistors.items():
        if device.conductor == WELL_CONDUCTOR:
            found[f"head {name}"] = f"({roles.nwell}) and not ({device.shape})"
    return found


def _pieces(stack: Stack, whole: Components, derived: Mapping[str, Geometries]) -> dict[int, Ints]:
    """Sort -> component of every derived polygon, -1 for one that no tile counts."""
    found = {}
    for number, sort in enumerate(stack.sorts):
        if sort.expression:
            component = np.full(len(derived[sort.name]), -1)
            rows = whole.piece[:, 0] == number
            component[whole.piece[rows, 1]] = whole.piece_component[rows]
            found[number] = component
    return found


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class _Found:
    """What lies on which component: labels (l), pads (q), pieces of diffusion (m), devices."""

    label: Ints
    pad: Ints
    piece: Ints
    polygons: Geometries
    devices: list[Device]


def _assembled(ground: Ground, texts: Texts) -> Nets:
    """Nets out of all that is known of the components."""
    found, label_sort = _gathered(ground, texts)
    whole, stack, unit = ground.whole, ground.stack, ground.unit_um
    node_component, component_node, net_group = _numbered(ground, found)
    group_net = np.full(len(whole.box), -1)
    group_net[net_group] = np.arange(len(net_group))
    member = group_net[ground.wiring.group]
    rows = np.flatnonzero(member >= 0)
    box, count = _totals(whole, member, rows, len(net_group))
    names: list[set[str]] = [set() for _ in net_group]
    for component, label in zip(found.label.tolist(), texts.labels, strict=True):
        if component >= 0:
            names[member[component]].add(label.text)
    sorts = tuple(sort.name for sort in stack.sorts)
    pads = ground.derived.get(PADS, np.zeros(0, dtype=np.object_))
    told = [bool(one) for one in names]
    drawn = _drawn(ground, member, np.array(told, dtype=np.bool_), found.pad)
    return Nets(
        ids=frozen(np.array([f"net-{i + 1}" for i in range(len(net_group))], dtype=np.str_)),
        names=tuple(tuple(sorted(one)) for one in names),
        box_um=frozen(box / SUBGRID * unit),
        layers=sorts,
        shape_count=frozen(count),
        node_net=frozen(member[node_component]),
        piece_polygons=frozen(found.polygons),
        piece_node=frozen(component_node[found.piece]),
        pad_polygons=frozen(pads),
        pad_node=frozen(component_node[found.pad]),
        shape_net=frozen(drawn.net),
        shape_layer=frozen(drawn.layer),
        shape_box_um=frozen(drawn.box_um),
        shape_polygon=frozen(drawn.polygon),
        shape_total=frozen(drawn.total),
        labels=texts.labels,
        label_node=frozen(component_node[found.label]),
        label_conductor=tuple(
            sorts[sort] if sort >= 0 else expected
            for sort, expected in zip(label_sort.tolist(), texts.expected, strict=True)
        ),
        resistors=_resistors(found.devices, component_node),
    )


def _drawn(ground: Ground, member: Ints, told: NDArray[np.bool_], pad: Ints) -> NetShapes:
    """What is drawn of the nets that are told by a name or have a pad.

    Parameters
    ----------
    member
        (components,) net of each, -1 for those on none.
    told
        (k,) whether a net has a name.
    pad
        (q,) component under each pad, -1 where none is.
    """
    told[member[pad[pad >= 0]]] = True
    net = np.where((member >= 0) & told[member], member, -1) if len(told) else member
    sorts = len(ground.stack.sorts)
    return shapes_of_nets(ground.whole.shapes, net, len(told), sorts, ground.unit_um)


def _gathered(ground: Ground, texts: Texts) -> tuple[_Found, Ints]:
    """What lies on which component, and the sort that each label lies on."""
    whole, wiring, stack = ground.whole, ground.wiring, ground.stack
    label = np.full(len(texts.labels), -1)
    label_sort = np.full(len(texts.labels), -1)
    label[whole.label] = wiring.home[whole.label_component]
    label_sort[whole.label] = whole.label_sort
    diffusions = [n for n, sort in enumerate(stack.sorts) if sort.kind == "diffusion"]
    none = np.zeros(0, dtype=np.int64)
    piece = np.concatenate([none, *(ground.piece_component[n] for n in diffusions)])
    polygons = [ground.derived[stack.sorts[n].name] for n in diffusions]
    shapes = np.concatenate([np.zeros(0, dtype=np.object_), *polygons])
    pad = _pads(ground, label)
    marked = marked_resistors(ground)
    taps = _taps(ground, shapes)
    seeds = np.concatenate([label[label >= 0], pad[pad >= 0], piece[taps]])
    devices = marked + straps_of(ground, _chosen_straps(ground, marked, seeds))
    found = _Found(label=label, pad=pad, piece=piece, polygons=shapes, devices=devices)
    return found, label_sort


def _pads(ground: Ground, label: Ints) -> Ints:
    """(q,) node's component beneath most of each pad, -1 where there is none.

    Of two that lie beneath as much, the one with a label is meant, then the larger one: where
    they lie decides last, for that changes as the block is turned.
    """
    pads = ground.derived.get(PADS)
    if pads is None:
        return np.zeros(0, dtype=np.int64)
    hits = ground.whole.hits
    rows = np.flatnonzero(hits.probe == len(ground.stack.probes) - 1)
    found = np.full(len(pads), -1)
    order = rows[np.argsort(hits.number[rows], kind="stable")]
    edges = np.searchsorted(hits.number[order], np.arange(len(pads) + 1))
    for number, pad in enumerate(pads):
        own = order[edges[number] : edges[number + 1]]
        node = ground.wiring.home[hits.component[own]]
        best = (-1.0, False, 0.0)
        for home in np.unique(node).tolist():
            mine = own[node == home]
            bent = hits.polygon[mine] != np.array(None)
            below = [
                *boxes_in_um(hits.box[mine[~bent]], ground.unit_um),
                *(in_um(shape, ground.unit_um) for shape in hits.polygon[mine[bent]]),
            ]
            area = float(shapely.area(shapely.intersection(pad, shapely.union_all(below))))
            x0, y0, x1, y1 = ground.whole.box[home].tolist()
            rank = (
                LEAST_OVERLAP_UM2 * round(area / LEAST_OVERLAP_UM2),
                bool(np.any(label == home)),
                float((x1 - x0) * (y1 - y0)),
            )
            if rank > best:
                best, found[number] = rank, home
    return found


def _taps(ground: Ground, pieces: Geometries) -> Ints:
    """Indices of the pieces of diffusion that overlap a tap."""
    taps = np.concatenate([ground.derived[f"tap {name}"] for name in TAPS])
    tap, piece = shapely.STRtree(pieces).query(taps, predicate="intersects")
    shared = shapely.area(shapely.intersection(taps[tap], pieces[piece]))
    return np.unique(piece[shared > LEAST_OVERLAP_UM2])


def _chosen_straps(ground: Ground, marked: list[Device], seeds: Ints) -> Ints:
    """Straps on nets that have a name, a pad or a tap, or a resistor to such a net."""
    group = ground.wiring.group
    pairs = [
        (device.terminals[0].component, end.component)
        for device in marked
        for end in device.terminals[1:]
    ]
    ends = group[np.array(pairs, dtype=np.int64).reshape(-1, 2)]
    cluster = connected(int(group.max(initial=-1)) + 1, ends[:, 0], ends[:, 1])
    told = np.zeros(len(cluster), dtype=np.bool_)
    told[cluster[group[seeds]]] = True
    strap = ground.wiring.strap
    return np.asarray(strap[told[cluster[group[strap]]]])


def _numbered(ground: Ground, found: _Found) -> tuple[Ints, Ints, Ints]:
    """Component of every node, node of every component (-1 at the end too), group of every net."""
    whole, wiring = ground.whole, ground.wiring
    ends = [end.component for device in found.devices for end in device.terminals]
    carried = np.concatenate([found.label, found.pad, found.piece, np.array(ends, dtype=np.int64)])
    groups = np.unique(wiring.group[carried[carried >= 0]])
    recorded = np.zeros(len(whole.box), dtype=np.bool_)
    recorded[np.isin(wiring.group, groups)] = True
    node = np.flatnonzero(recorded & (wiring.home == np.arange(len(whole.box))))
    member = np.searchsorted(groups, wiring.group)
    rows = np.flatnonzero(recorded)
    box, _ = _totals(whole, np.where(recorded, member, -1), rows, len(groups))
    first = np.full(len(groups), len(whole.box))
    np.minimum.at(first, member[rows], rows)
    order = np.lexsort((first, box[:, 2], box[:, 3], box[:, 0], box[:, 1]))
    rank = np.empty(len(groups), dtype=np.int64)
    rank[order] = np.arange(len(groups))
    place = whole.box[node]
    keys = (node, place[:, 2], place[:, 3], place[:, 0], place[:, 1], rank[member[node]])
    node = node[np.lexsort(keys)]
    number = np.full(len(whole.box) + 1, -1)
    number[node] = np.arange(len(node))
    return node, number, groups[order]


def _totals(whole: Components, member: Ints, rows: Ints, nets: int) -> tuple[Floats, Ints]:
    """Box [grid steps] and shape counts of every net out of the components in `rows`."""
    box = np.column_stack([np.full((nets, 2), np.inf), np.full((nets, 2), -np.inf)])
    count = np.zeros((nets, whole.count.shape[1]), dtype=np.int64)
    np.minimum.at(box[:, :2], member[rows], whole.box[rows, :2])
    np.maximum.at(box[:, 2:], member[rows], whole.box[rows, 2:])
    np.add.at(count, member[rows], whole.count[rows])
    return box, count


def _resistors(devices: list[Device], component_node: Ints) -> Resistors:
    """Columns of all devices, those of the technology first, each kind by place."""
    ends = [
        end
        for device in devices
        for end in sorted(device.terminals, key=lambda end: int(component_node[end.component]))
    ]
    shapes = np.empty(len(ends), dtype=np.object_)
    shapes[:] = [end.shape for end in ends]
    polygons = np.empty(len(devices), dtype=np.object_)
    polygons[:] = [device.polygon for device in devices]
    components = np.array([end.component for end in ends], dtype=np.int64)
    return Resistors(
        kind=frozen(np.array([device.kind for device in devices], dtype=np.str_)),
        conductor=frozen(np.array([device.conductor for device in devices], dtype=np.str_)),
        polygons=frozen(polygons),
        terminal_first=frozen(
            offsets(np.array([len(device.terminals) for device in devices], dtype=np.int64))
        ),
        terminal_node=frozen(component_node[components]),
        terminal_shape=frozen(shapes),
        terminal_contacts=frozen(np.array([end.contacts for end in ends], dtype=np.int64)),
    )
