"""Reading in several passes, and the tables between the reader and those who look at them.

Sources: the polygons are the reference library's own; that passes, number widths and folders
show nowhere in the result needs none.
"""

from __future__ import annotations

import math
import pickle
import random
from collections import Counter
from pathlib import Path

import gdstk
import numpy as np
import pytest
from reference_layouts import expected, found, technology_of

from latchscan.errors import LayoutError
from latchscan.layout.file import library, passes, tables
from latchscan.layout.file.outlines import BLOCK, OutlineColumns
from latchscan.layout.file.passes import passes_over
from latchscan.layout.file.reading import read_tables
from latchscan.layout.file.tables import load_tables, save_tables
from latchscan.layout.source import open_layout

COUNTS = {(1, 0): 700, (2, 0): 300, (2, 5): 250, (3, 0): 40, (4, 0): 3}
SHAPES = sorted([*COUNTS, (9, 9)])
TEXTS = [(3, 0), (7, 0)]


def mixed(path: Path) -> Path:
    """Many shapes on few layers: rectangles, other polygons and paths in two cells, texts."""
    rng = random.Random(3)
    layout = gdstk.Library()
    small, top = layout.new_cell("small"), layout.new_cell("top")
    pairs = [pair for pair, count in COUNTS.items() for _ in range(count)]
    rng.shuffle(pairs)
    for number, (layer, datatype) in enumerate(pairs):
        x, y = rng.randint(0, 400), rng.randint(0, 400)
        names = {"layer": layer, "datatype": datatype}
        shape = gdstk.rectangle((x, y), (x + 2, y + 1), **names)
        if number % 7 == 1:
            shape = gdstk.Polygon([(x, y), (x + 3, y), (x, y + 2)], **names)
        if number % 7 == 2:
            shape = gdstk.FlexPath([(x, y), (x, y + 3)], 0.5, simple_path=True, **names)
        (small if number % 3 else top).add(shape)
    top.add(gdstk.Polygon([(0, 0), (1, 0), (2, 0)], layer=1))
    top.add(gdstk.Reference(small, (500, 0), rotation=math.pi / 2))
    small.add(gdstk.Label("pin", (1, 1), layer=7))
    layout.write_gds(path)
    return path


def read(path: Path):
    return read_tables(str(path), kind="gdsii", shape_pairs=SHAPES, text_pairs=TEXTS)


@pytest.mark.parametrize("most", [2, 100])
def test_the_tables_are_the_same_in_however_many_passes(tmp_path, monkeypatch, most):
    path = mixed(tmp_path / "mixed.gds")
    once = read(path)
    seen = []
    real = gdstk.read_gds
    monkeypatch.setattr(
        gdstk, "read_gds", lambda *a, **k: (seen.append(k["filter"]), real(*a, **k))[1]
    )
    monkeypatch.setattr(passes, "SHAPES_A_PASS", 1)
    monkeypatch.setattr(passes, "MOST_PASSES", most)
    often = read(path)
    assert len(seen) >= 2
    assert sorted(pair for part in seen for pair in part) == SHAPES
    for name in tables.Tables.__dataclass_fields__:
        one, other = getattr(once, name), getattr(often, name)
        if isinstance(one, np.ndarray):
            assert one.dtype == other.dtype
            assert np.array_equal(one, other), name
        else:
            assert one == other, name
    assert once.dropped_count == 1
    assert once.label_texts == ("pin",)
    counted = Counter(once.pairs[pair] for pair in once.polygon_pair.tolist())
    assert counted == COUNTS


def test_each_pass_takes_about_its_share(tmp_path, monkeypatch):
    path = mixed(tmp_path / "mixed.gds")
    info = gdstk.gds_info(path)
    total = sum(COUNTS.values()) + 1
    assert info["num_polygons"] + info["num_paths"] == total
    assert passes_over(path, info, set(SHAPES)) == [set(SHAPES)]
    monkeypatch.setattr(passes, "SHAPES_A_PASS", 720)
    parts = passes_over(path, info, set(SHAPES))
    loads = [sum(COUNTS.get(pair, 0) for pair in part) for part in parts]
    # the largest layer alone fills a pass, all others fit one more
    assert loads == [pytest.approx(703, abs=5), pytest.approx(590, abs=5)]
    assert sorted(pair for part in parts for pair in part) == SHAPES


def test_a_window_of_everything_holds_every_shape_with_an_area(tmp_path):
    path = mixed(tmp_path / "mixed.gds")
    named = {f"l{layer}_{kind}": f"{layer}/{kind}" for layer, kind in SHAPES}
    source = open_layout(path, technology=technology_of(**named))
    for pair, count in COUNTS.items():
        wanted = expected(path, "top", pair)
        assert len(wanted) == count + (pair == (1, 0))
        flat = [shape for shape in wanted if len({y for _, y in shape}) == 1]
        assert found(source, pair) == [shape for shape in wanted if shape not in flat]


@pytest.mark.parametrize("reach", [2**31 - 1, 2**31, 2**40])
def test_coordinates_of_any_width(tmp_path, reach):
    # OASIS holds coordinates beyond the 32 bits of GDSII
    layout = gdstk.Library(unit=1e-6, precision=1e-6)
    top = layout.new_cell("top")
    top.add(gdstk.rectangle((reach - 10, -reach), (reach, 5 - reach), layer=1))
    top.add(gdstk.rectangle((0, 0), (3, 4), layer=1))
    path = tmp_path / "far.oas"
    layout.write_oas(path)
    source = open_layout(path, technology=technology_of(one="1/0"))
    assert source.bbox_dbu == (0, -reach, reach, 4)
    assert found(source, (1, 0)) == expected(path, "top", (1, 0))
    corner = (reach, -reach, reach, -reach)
    assert found(source, (1, 0), corner) == [
        (
            (reach - 10, -reach),
            (reach, -reach),
            (reach, 5 - reach),
            (reach - 10, 5 - reach),
        )
    ]
    assert source.window(corner, [(1, 0)])[1, 0].points.dtype == np.int64


def test_tables_come_back_as_they_were_saved(tmp_path):
    first = read(mixed(tmp_path / "mixed.gds"))
    save_tables(first, tmp_path)
    again = load_tables(tmp_path)
    for name in tables.Tables.__dataclass_fields__:
        one, other = getattr(first, name), getattr(again, name)
        if isinstance(one, np.ndarray):
            assert (one.dtype, one.shape) == (other.dtype, other.shape)
            assert np.array_equal(one, other)
            assert not other.flags.writeable
        else:
            assert one == other


def test_boxes_are_those_of_the_vertices(tmp_path):
    one = read(mixed(tmp_path / "mixed.gds"))
    vertices = np.split(one.polygon_points, one.polygon_first[1:-1])
    boxes = [[*rows.min(axis=0), *rows.max(axis=0)] for rows in vertices]
    assert one.polygon_box.tolist() == np.array(boxes).tolist()


def test_neighbours_in_the_tables_are_neighbours_in_the_plane():
    # 64 x 64 squares in any order: blocks of 64 of them cover little more than 64 squares do
    side = 64
    rng = np.random.default_rng(2)
    columns = OutlineColumns(1.0)
    for place in rng.permutation(side * side).tolist():
        x, y = place % side, place // side
        square = [(x, y), (x + 1, y), (x + 1, y + 1), (x, y + 1)]
        columns.add(np.array(square, dtype=float), 0, 0)
    box = columns.finish().box.reshape(-1, BLOCK, 4)
    size = box[..., 2:].max(axis=1) - box[..., :2].min(axis=1)
    assert size.prod(axis=1).max() <= 2 * BLOCK


def test_the_tables_leave_no_folder_behind(tmp_path, monkeypatch):
    monkeypatch.setattr(tables.tempfile, "tempdir", str(tmp_path / "temporary"))
    (tmp_path / "temporary").mkdir()
    path = mixed(tmp_path / "mixed.gds")
    source = open_layout(path, technology=technology_of(one="1/0"))
    (folder,) = (tmp_path / "temporary").iterdir()
    copy = pickle.loads(pickle.dumps(source))
    assert found(copy, (1, 0)) == found(source, (1, 0))
    del source
    assert not folder.exists()
    # whoever holds the tables still has them
    assert len(found(copy, (1, 0))) == COUNTS[1, 0]
    library._revived.cache_clear()
    path.write_bytes(path.read_bytes()[:200])
    with pytest.raises(LayoutError, match="damaged"):
        open_layout(path, technology=technology_of(one="1/0"))
    assert list((tmp_path / "temporary").iterdir()) == []


def test_texts_of_many_copies_of_several_cells(tmp_path):
    rng = random.Random(8)
    layout = gdstk.Library()
    cells = [layout.new_cell(name) for name in ("a", "b", "c", "textless", "unused")]
    for number, cell in enumerate(cells[:3] + cells[4:]):
        for text in ("b", "a", f"own{number}", "a"):
            at = (rng.randint(-9, 9), rng.randint(-9, 9))
            cell.add(gdstk.Label(text, at, layer=rng.choice((7, 8)), texttype=rng.choice((0, 1))))
    cells[1].add(gdstk.Reference(cells[0], (3, 4), rotation=math.pi / 2, x_reflection=True))
    cells[2].add(gdstk.Reference(cells[1], (1, 2), columns=3, rows=2, spacing=(5, 7)))
    cells[3].add(gdstk.Reference(cells[0], (30, 0)), gdstk.rectangle((0, 0), (1, 1), layer=1))
    top = layout.new_cell("top")
    for cell in cells[:4]:
        turned = gdstk.Reference(cell, (40, -20), rotation=math.pi, magnification=2)
        top.add(turned, gdstk.Reference(cell, (0, 0), columns=4, rows=3, spacing=(11, 13)))
    path = tmp_path / "texts.gds"
    layout.write_gds(path)
    kinds = ("7/0", "7/1", "8/1")
    source = open_layout(path, technology=technology_of(one="1/0", labels=kinds), top="top")
    pairs = [(7, 0), (7, 1), (8, 1)]
    ours = [
        (label.y_um, label.x_um, label.text, (label.layer, label.texttype))
        for label in source.labels(pairs)
    ]
    flat = next(c for c in gdstk.read_gds(path).cells if c.name == "top").get_labels()
    theirs = [
        (round(y, 3), round(x, 3), label.text, (label.layer, label.texttype))
        for label in flat
        for x, y in [label.origin]
        if (label.layer, label.texttype) in pairs
    ]
    assert len(theirs) > 300
    assert ours == sorted(theirs)
    assert source.labels([(55, 0)]) == ()
