"""Nets by brute force: every pair of polygons that touches is an edge of one flat graph.

gdstk flattens the file, shapely fills polygons and answers each pair, networkx finds the
components; nothing of the project takes part but the technology's names.
"""

from __future__ import annotations

from collections import Counter
from dataclasses import dataclass
from itertools import combinations
from pathlib import Path
from typing import Any

import gdstk
import networkx
import numpy as np
import shapely
from shapely.geometry import LinearRing, Point

from latchscan.layout.connections import Nets
from latchscan.technology.model import Technology


@dataclass(frozen=True, slots=True, kw_only=True)
class Part:
    """One connected piece of a shape [database units]."""

    sort: str
    geometry: Any
    counted: bool


@dataclass(frozen=True, slots=True, kw_only=True)
class ReferenceNet:
    """What a net is told by: its names, shapes by sort, its number of nodes, its box."""

    names: tuple[str, ...]
    counts: tuple[tuple[str, int], ...]
    nodes: int
    box: tuple[int, ...]


def filled(points: np.ndarray) -> list[Any]:
    """Parts of what a ring winds around at all (nonzero rule), each with an area."""
    if len(points) == 4 and shapely.is_valid(shapely.polygons(points)):
        return [shapely.polygons(points)]
    ring = LinearRing(points)
    faces = shapely.get_parts(shapely.polygonize([shapely.unary_union(ring)]))
    inside = [face for face in faces if winding(points, face.representative_point())]
    return list(shapely.get_parts(shapely.unary_union(inside))) if inside else []


def winding(points: np.ndarray, at: Point) -> int:
    """How often a ring winds around a point: signed crossings of the ray to the right."""
    turns = 0
    for (x0, y0), (x1, y1) in zip(points, np.roll(points, -1, axis=0), strict=True):
        if (y0 <= at.y) != (y1 <= at.y):
            crossing = x0 + (at.y - y0) * (x1 - x0) / (y1 - y0)
            if crossing > at.x:
                turns += 1 if y1 > y0 else -1
    return turns


def drawn(path: Path, top: str, technology: Technology, layer: str) -> list[list[Any]]:
    """Parts of every polygon of a layer, flattened [database units]."""
    library = gdstk.read_gds(path)
    cell = next(cell for cell in library.cells if cell.name == top)
    found = []
    for pair in technology.layers[layer].gds:
        number, datatype = (int(word) for word in pair.split("/"))
        for polygon in cell.get_polygons(layer=number, datatype=datatype):
            points = np.floor(polygon.points * (library.unit / library.precision) + 0.5)
            distinct = points[(points != np.roll(points, 1, axis=0)).any(axis=1)]
            found.append(filled(distinct) if len(distinct) > 2 else [])
    return found


def lead(part: Any) -> tuple[float, ...]:
    x0, y0, x1, y1 = part.bounds
    return (y0, x0, y1, x1)


def parts_of(path: Path, top: str, technology: Technology) -> list[Part]:
    """All pieces of conductors and connections; diffusion is active without poly.

    Where its expression names the implants, active that neither reaches is none.
    """
    conductors = technology.conductors
    assert conductors is not None
    found = []
    for name, layer in conductors.layers.items():
        if layer.kind == "diffusion":
            active, poly = (whole(path, top, technology, n) for n in ("active", "poly"))
            shape = active - poly
            if "nplus" in layer.shape:
                shape -= bare(path, top, technology)
            pieces = [[piece] for piece in shapely.get_parts(shape)]
        else:
            drawn_name, _, marker = layer.shape.partition(" and not ")
            pieces = drawn(path, top, technology, drawn_name)
            if marker:
                cut = whole(path, top, technology, marker)
                pieces = [
                    [one for p in parts for one in shapely.get_parts(p - cut)] for parts in pieces
                ]
        found += [one for parts in pieces for one in counted(name, parts)]
    for name, connection in conductors.connections.items():
        for parts in drawn(path, top, technology, connection.shape):
            found += counted(name, parts)
    return found


def bare(path: Path, top: str, technology: Technology) -> Any:
    """Where no implant of open130 goes: n+ is blocked and not drawn, and there is no p+."""
    blocked, drawn_n, p_plus = (
        whole(path, top, technology, name) for name in ("nplus_block", "nplus_drawn", "pplus")
    )
    return blocked - drawn_n - p_plus


def whole(path: Path, top: str, technology: Technology, layer: str) -> Any:
    """A layer's polygons merged."""
    every = [p for parts in drawn(path, top, technology, layer) for p in parts]
    return shapely.union_all(np.array(every, dtype=np.object_))


def counted(sort: str, parts: list[Any]) -> list[Part]:
    """Parts of one drawn polygon; those that touch count once, where they begin."""
    ranked = sorted((part for part in parts if part.area > 0), key=lead)
    graph = networkx.Graph()
    graph.add_nodes_from(range(len(ranked)))
    graph.add_edges_from(
        (one, other)
        for one, other in combinations(range(len(ranked)), 2)
        if ranked[one].intersects(ranked[other])
    )
    first = {min(group) for group in networkx.connected_components(graph)}
    return [Part(sort=sort, geometry=part, counted=i in first) for i, part in enumerate(ranked)]


def graphs(parts: list[Part], technology: Technology) -> tuple[networkx.Graph, networkx.Graph]:
    """What touches and is joined: on one net, and without the edges between poly and others."""
    conductors = technology.conductors
    assert conductors is not None
    kinds = {name: layer.kind for name, layer in conductors.layers.items()}
    joined = {frozenset((n, o)) for n, layer in conductors.layers.items() for o in layer.touches}
    joined |= {frozenset((n, o)) for n, via in conductors.connections.items() for o in via.joins}
    every, apart = networkx.Graph(), networkx.Graph()
    for graph in (every, apart):
        graph.add_nodes_from(range(len(parts)))
    geometry = np.array([part.geometry for part in parts], dtype=np.object_)
    pairs = shapely.STRtree(geometry).query(geometry, predicate="intersects").T.tolist()
    for one, other in pairs:
        a, b = parts[one].sort, parts[other].sort
        if one < other and (a == b or frozenset((a, b)) in joined):
            every.add_edge(one, other)
            if (kinds.get(a) == "poly") == (kinds.get(b) == "poly"):
                apart.add_edge(one, other)
    return every, apart


def reference_shapes(
    path: Path, top: str, technology: Technology, labels: list[tuple[str, str, float, float]]
) -> dict[tuple[tuple[str, ...], str], Any]:
    """(names, conductor) -> all that is drawn of the nets of these names there, merged.

    Diffusions and nets without a name are left out; see `reference_nets` for the labels.
    """
    conductors = technology.conductors
    assert conductors is not None
    parts = parts_of(path, top, technology)
    carried = carriers(parts, list(conductors.layers), labels)
    found: dict[tuple[tuple[str, ...], str], list[Any]] = {}
    for members in networkx.connected_components(graphs(parts, technology)[0]):
        names = tuple(sorted({text for text, i in carried if i in members}))
        for part in (parts[i] for i in members if names):
            layer = conductors.layers.get(part.sort)
            if layer is not None and layer.kind != "diffusion":
                found.setdefault((names, part.sort), []).append(part.geometry)
    return {key: shapely.union_all(np.array(own, np.object_)) for key, own in found.items()}


def reference_nets(
    path: Path, top: str, technology: Technology, labels: list[tuple[str, str, float, float]]
) -> list[ReferenceNet]:
    """Nets with a label or a diffusion, in order of what they are told by.

    Parameters
    ----------
    labels
        (text, conductor, x, y) [database units].
    """
    conductors = technology.conductors
    assert conductors is not None
    parts = parts_of(path, top, technology)
    kinds = {name: layer.kind for name, layer in conductors.layers.items()}
    every, apart = graphs(parts, technology)
    islands = list(networkx.connected_components(apart))
    found = []
    carried = carriers(parts, list(kinds), labels)
    for members in networkx.connected_components(every):
        names = {text for text, i in carried if i in members}
        if not names and not any(kinds.get(parts[i].sort) == "diffusion" for i in members):
            continue
        counts = Counter(parts[i].sort for i in members if parts[i].counted)
        bounds = np.array([parts[i].geometry.bounds for i in members])
        nodes = [
            island
            for island in islands
            if island <= members
            and any(kinds.get(parts[i].sort) in ("metal", "diffusion") for i in island)
        ]
        found.append(
            ReferenceNet(
                names=tuple(sorted(names)),
                counts=tuple(sorted(counts.items())),
                nodes=max(1, len(nodes)),
                box=(
                    *(int(v) for v in np.floor(bounds[:, :2].min(axis=0))),
                    *(int(v) for v in np.ceil(bounds[:, 2:].max(axis=0))),
                ),
            )
        )
    return sorted(found, key=repr)


def carriers(
    parts: list[Part], order: list[str], labels: list[tuple[str, str, float, float]]
) -> list[tuple[str, int]]:
    """(text, part) of every label on a part; a text of "any" takes the uppermost conductor."""
    if not parts:
        return []
    tree = shapely.STRtree([part.geometry for part in parts])
    found = []
    for text, sort, x, y in labels:
        under = tree.query(Point(x, y), predicate="intersects").tolist()
        under = [i for i in under if parts[i].sort in (order if sort == "any" else (sort,))]
        highest = max((order.index(parts[i].sort) for i in under), default=-1)
        found += [(text, i) for i in under if order.index(parts[i].sort) == highest]
    return found


def told(nets: Nets) -> list[ReferenceNet]:
    """The traced nets as the reference tells its own, without those of pads and resistors."""
    nodes = np.bincount(nets.node_net, minlength=len(nets.ids))
    boxes = nets.box_um * 1000
    low, high = np.floor(boxes[:, :2] + 1e-6), np.ceil(boxes[:, 2:] - 1e-6)
    found = [
        ReferenceNet(
            names=names,
            counts=tuple(
                sorted((sort, int(n)) for sort, n in zip(nets.layers, row, strict=True) if n)
            ),
            nodes=int(count),
            box=tuple(int(v) for v in box),
        )
        for names, row, count, box in zip(
            nets.names, nets.shape_count, nodes, np.hstack([low, high]), strict=True
        )
        if names or row[[sort == "diffusion" for sort in nets.layers]].any()
    ]
    return sorted(found, key=repr)
