"""The plain ways of doing the same, written with general libraries, to compare times with.

``python tests/bench/peers.py union LAYOUT`` merges every layer with one `shapely.union_all`;
``python tests/bench/peers.py wells LAYOUT COUNT`` solves `COUNT` emitters of the largest well
one by one, each with its own sparse factorisation of the whole well;
``python tests/bench/peers.py nets LAYOUT`` flattens the layout, asks one `shapely.STRtree` which
shapes touch and networkx what hangs together; ``pairs`` instead of ``nets`` asks every pair.
"""

from __future__ import annotations

import itertools
import json
import sys
import time
from collections.abc import Iterator
from pathlib import Path

import gdstk
import networkx
import numpy as np
import scipy.sparse
import scipy.sparse.linalg
import shapely
from generators import ACTIVE, N_WELL, P_IMPLANT
from wiring import CONTACT, METALS, POLY, VIAS

from latchscan.constants import REFERENCE_TEMPERATURE_K
from latchscan.layout.bodies import assemble_layout
from latchscan.layout.model import P_IN_NWELL, WELL_TAP, Layout
from latchscan.layout.regions import derive_regions
from latchscan.layout.source import open_layout
from latchscan.tasks import Workers
from latchscan.technology.load import load_technology

GROWTH = 1.15
"""Ratio of neighbouring grid steps; at 1.5 the grid itself is 1 percent off."""
DEVICE_LAYERS = (ACTIVE, POLY, P_IMPLANT, N_WELL)


def union_per_layer(path: Path) -> dict[str, float]:
    """Seconds of one `union_all` per device layer on the flat layout, reading not counted.

    Contacts, which the package derives too, are left out: hundreds of thousands of them take
    `union_all` minutes.
    """
    (top,) = gdstk.read_gds(path).top_level()
    seconds = {}
    for pair in DEVICE_LAYERS:
        shapes = top.get_polygons(layer=pair[0], datatype=pair[1])
        flat = [shapely.Polygon(shape.points) for shape in shapes]
        start = time.perf_counter()
        shapely.union_all(flat)
        seconds[f"{pair[0]}/{pair[1]}"] = time.perf_counter() - start
    return seconds


def graded_lines(edges: np.ndarray, low: float, high: float, finest: float) -> np.ndarray:
    """Grid lines on all edges, `finest` apart beside them and growing between."""
    lines = np.unique(np.concatenate((edges, [low, high])).round(6))
    lines = lines[(lines >= low) & (lines <= high)]
    pieces = []
    for first, last in itertools.pairwise(lines):
        steps, width = [0.0], finest
        while steps[-1] + width < (last - first) / 2:
            steps.append(steps[-1] + width)
            width *= GROWTH
        half = np.asarray(steps)
        pieces.append(np.concatenate((first + half, last - half[::-1])))
    return np.unique(np.concatenate(pieces).round(9))


def solve_one(layout: Layout, emitter: int, taps: np.ndarray, finest: float) -> float:
    """Self-resistance in squares of one emitter, by finite volumes on the whole well."""
    well = layout.bodies[layout.emitters.body[emitter]].polygons[0]
    x0, y0, x1, y1 = well.bounds
    box = layout.emitters.box_um[emitter]
    metal = shapely.union_all(layout.taps.polygons[taps])
    corners = shapely.get_coordinates(metal)
    xs = graded_lines(np.concatenate((box[[0, 2]], corners[:, 0])), x0, x1, finest)
    ys = graded_lines(np.concatenate((box[[1, 3]], corners[:, 1])), y0, y1, finest)
    dx, dy = np.diff(xs), np.diff(ys)
    cx, cy = xs[:-1] + dx / 2, ys[:-1] + dy / 2
    index = np.arange(len(cx) * len(cy)).reshape(len(cy), len(cx))
    across = dy[:, None] / ((dx[:-1] + dx[1:]) / 2)[None, :]
    along = dx[None, :] / ((dy[:-1] + dy[1:]) / 2)[:, None]
    rows = np.concatenate((index[:, :-1].ravel(), index[:-1].ravel()))
    columns = np.concatenate((index[:, 1:].ravel(), index[1:].ravel()))
    links = np.concatenate((across.ravel(), along.ravel()))
    grid_x, grid_y = np.meshgrid(cx, cy)
    tied = np.where(shapely.contains_xy(metal, grid_x, grid_y), 1e6, 0.0).ravel()
    laplacian = scipy.sparse.coo_array((links, (rows, columns)), shape=(index.size, index.size))
    laplacian = laplacian + laplacian.T
    matrix = scipy.sparse.diags_array(laplacian.sum(axis=1) + tied) - laplacian
    weights = np.where(
        (grid_x > box[0]) & (grid_x < box[2]) & (grid_y > box[1]) & (grid_y < box[3]),
        dx[None, :] * dy[:, None],
        0.0,
    ).ravel()
    weights /= weights.sum()
    factor = scipy.sparse.linalg.splu(
        matrix.tocsc(), permc_spec="MMD_AT_PLUS_A", options={"SymmetricMode": True}
    )
    return float(weights @ factor.solve(weights))


def wells_one_by_one(path: Path, count: int) -> dict[str, object]:
    """Seconds and resistances of `count` emitters spread over the largest well."""
    technology = load_technology("open130").technology
    source = open_layout(path, technology=technology, top=None)
    layout = assemble_layout(derive_regions(source, technology, None, Workers()), technology)
    emitters = layout.emitters
    p_rows = np.flatnonzero(emitters.kind == P_IN_NWELL)
    body = np.bincount(emitters.body[p_rows]).argmax()
    rows = p_rows[emitters.body[p_rows] == body]
    chosen = rows[np.linspace(0, len(rows) - 1, count).astype(int)]
    taps = np.flatnonzero((layout.taps.kind == WELL_TAP) & (layout.taps.body == body))
    start = time.perf_counter()
    squares = [solve_one(layout, int(row), taps, 0.02) for row in chosen]
    return {
        "seconds_each": (time.perf_counter() - start) / count,
        "emitters": [str(name) for name in emitters.ids[chosen]],
        "squares": squares,
        "temperature_k": REFERENCE_TEMPERATURE_K,
    }


def conductors_and_joins(path: Path) -> tuple[np.ndarray, np.ndarray]:
    """Every shape that conducts as a polygon [nm], and its place in the stack.

    Places: diffusion 0, poly 1, metals 2 to 8, then contacts 9 and vias 10 to 15.
    """
    (top,) = gdstk.read_gds(path).top_level()

    def drawn(pair: tuple[int, int]) -> np.ndarray:
        shapes = top.get_polygons(layer=pair[0], datatype=pair[1])
        found = [shapely.Polygon(np.rint(shape.points * 1000.0)) for shape in shapes]
        return np.array(found, dtype=np.object_)

    active, poly = shapely.get_parts(shapely.union_all(drawn(ACTIVE))), drawn(POLY)
    rows, gates = shapely.STRtree(poly).query(active, predicate="intersects")
    starts = np.searchsorted(rows, np.arange(len(active) + 1))
    diffusion = [
        shapely.difference(shape, shapely.union_all(poly[gates[starts[i] : starts[i + 1]]]))
        for i, shape in enumerate(active)
    ]
    sorts = [shapely.get_parts(np.array(diffusion, dtype=np.object_)), poly]
    sorts += [drawn(pair) for pair in (*METALS, CONTACT, *VIAS)]
    return np.concatenate(sorts), np.repeat(np.arange(len(sorts)), [len(sort) for sort in sorts])


def joined_places() -> Iterator[tuple[int, int]]:
    """Places of the stack whose shapes are one where they touch."""
    yield from ((place, place) for place in range(16))
    yield from ((place, 9) for place in (0, 1, 2))
    yield from ((2 + via + step, 10 + via) for via in range(6) for step in (0, 1))


def nets_by_touch(path: Path, *, every_pair: bool) -> dict[str, float]:
    """Nets that hold a diffusion, from all pairs of shapes that touch.

    Seconds are those of the processor, reading included.
    """
    start = time.process_time()
    shapes, place = conductors_and_joins(path)
    graph = networkx.Graph()
    graph.add_nodes_from(range(len(shapes)))
    for one, other in joined_places():
        rows, others = np.flatnonzero(place == one), np.flatnonzero(place == other)
        if every_pair:
            for row in rows.tolist():
                touched = others[shapely.intersects(shapes[row], shapes[others])]
                graph.add_edges_from((row, beside) for beside in touched.tolist())
        else:
            found = shapely.STRtree(shapes[others]).query(shapes[rows], predicate="intersects")
            pairs = np.column_stack([rows[found[0]], others[found[1]]])
            graph.add_edges_from(pairs.tolist())
    diffusions = int((place == 0).sum())
    nets = sum(min(part) < diffusions for part in networkx.connected_components(graph))
    return {"seconds": time.process_time() - start, "nets": nets, "shapes": len(shapes)}


if __name__ == "__main__":
    if sys.argv[1] == "union":
        print(json.dumps(union_per_layer(Path(sys.argv[2]))))
    elif sys.argv[1] in ("nets", "pairs"):
        print(json.dumps(nets_by_touch(Path(sys.argv[2]), every_pair=sys.argv[1] == "pairs")))
    else:
        print(json.dumps(wells_one_by_one(Path(sys.argv[2]), int(sys.argv[3]))))
