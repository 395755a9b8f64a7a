"""Random hierarchies: windows against the reference library's flattening."""

from __future__ import annotations

import math
import tempfile
from pathlib import Path

import gdstk
import numpy as np
from hypothesis import given, settings
from hypothesis import strategies as st
from reference_layouts import canonical, expected, outlines

from latchscan.layout.file.hierarchy import parents_first, top_cells
from latchscan.layout.file.reading import read_tables
from latchscan.layout.file.walk import Walker

PAIR = (1, 0)
coordinates = st.integers(-40, 40)
points = st.tuples(coordinates, coordinates)
placements = st.fixed_dictionaries(
    {
        "origin": points,
        "rotation": st.integers(-2, 5).map(lambda turns: turns * math.pi / 2),
        "x_reflection": st.booleans(),
        "magnification": st.sampled_from([1, 1, 2, 3]),
    }
)
grids = st.fixed_dictionaries(
    {"columns": st.integers(1, 5), "rows": st.integers(1, 4), "v1": points, "v2": points}
)


def spread(grid) -> bool:
    """Whether no two places coincide; places that do are walked once."""
    places = {
        tuple(i * a + j * b for a, b in zip(grid["v1"], grid["v2"], strict=True))
        for i in range(grid["columns"])
        for j in range(grid["rows"])
    }
    return len(places) == grid["columns"] * grid["rows"]


arrays = st.one_of(
    st.none(),
    grids.filter(spread).map(lambda grid: gdstk.Repetition(**grid)),
    st.lists(points, min_size=1, max_size=5).map(lambda rows: gdstk.Repetition(offsets=rows)),
)


@st.composite
def libraries(draw):
    """Up to four levels; each level draws boxes and places lower levels."""
    library = gdstk.Library()
    cells: list[gdstk.Cell] = []
    for level in range(draw(st.integers(1, 4))):
        cell = library.new_cell(f"level{level}")
        for x, y in draw(st.lists(points, min_size=1, max_size=3)):
            shape = gdstk.rectangle((x, y), (x + 3, y + 2), layer=1)
            if draw(st.booleans()):
                shape.repetition = draw(arrays)
            cell.add(shape)
        for _ in range(draw(st.integers(0, 3)) if cells else 0):
            reference = gdstk.Reference(draw(st.sampled_from(cells)), **draw(placements))
            reference.repetition = draw(arrays)
            cell.add(reference)
        cells.append(cell)
    top = library.new_cell("top")
    for cell in cells:
        top.add(gdstk.Reference(cell))
    return library


def walked(path: Path, box: tuple[int, int, int, int]):
    tables = read_tables(str(path), kind="gdsii", shape_pairs=[PAIR], text_pairs=[])
    order = parents_first(tables, "test")
    (top,) = top_cells(tables)
    walker = Walker(tables, top=top, order=order, pairs=(PAIR,))
    return sorted(canonical(points) for points in outlines(walker.window(box)[PAIR]))


@given(library=libraries(), corner=points, size=st.tuples(*[st.integers(0, 80)] * 2))
@settings(max_examples=60, deadline=None)
def test_any_hierarchy_gives_what_flattening_gives(library, corner, size):
    with tempfile.TemporaryDirectory() as folder:
        path = Path(folder) / "random.gds"
        library.write_gds(str(path))
        flat = expected(path, "top", PAIR)
        x0, y0 = (1_000 * value for value in corner)
        box = (x0, y0, x0 + 1_000 * size[0], y0 + 1_000 * size[1])
        meeting = [
            outline
            for outline in flat
            if np.max(outline, axis=0)[0] >= box[0]
            and np.max(outline, axis=0)[1] >= box[1]
            and np.min(outline, axis=0)[0] <= box[2]
            and np.min(outline, axis=0)[1] <= box[3]
        ]
        assert walked(path, box) == meeting
        assert walked(path, (-(2**50), -(2**50), 2**50, 2**50)) == flat
