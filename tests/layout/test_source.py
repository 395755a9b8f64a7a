"""Layouts opened and read by window, against the reference library's own flattening."""

from __future__ import annotations

import gzip
import math
import pickle
from pathlib import Path

import gdsii_records as gds
import gdstk
import numpy as np
import pytest
import shapely
from reference_layouts import (
    EVERYWHERE,
    canonical,
    expected,
    flattened,
    found,
    outlines,
    technology_of,
    worst_mismatch,
)

from latchscan.errors import LayoutError
from latchscan.layout.source import open_layout

PAIR = (1, 0)


def technology():
    return technology_of(one="1/0", two="2/0", labels=("3/0",))


def leaf(library: gdstk.Library, name: str = "leaf") -> gdstk.Cell:
    """A lopsided cell: no orientation looks like another."""
    cell = library.new_cell(name)
    cell.add(gdstk.Polygon([(0, 0), (3, 0), (3, 1), (1, 1), (1, 2.005), (0, 2.005)], layer=1))
    cell.add(gdstk.rectangle((4, 0), (4.5, 0.25), layer=2))
    return cell


def save(library: gdstk.Library, path: Path) -> Path:
    (library.write_oas if path.suffix == ".oas" else library.write_gds)(str(path))
    return path


def quarter_turned(path: Path) -> Path:
    """Every exact placement: eight orientations, arrays of all kinds, three levels."""
    library = gdstk.Library()
    small = leaf(library)
    middle = library.new_cell("middle")
    for turn in range(4):
        for mirror in (False, True):
            middle.add(
                gdstk.Reference(
                    small,
                    (20 * turn, 20 * mirror),
                    rotation=turn * math.pi / 2,
                    x_reflection=mirror,
                )
            )
    top = library.new_cell("top")
    top.add(gdstk.Reference(middle, (5, 7), columns=3, rows=2, spacing=(100, 60)))
    top.add(gdstk.Reference(middle, (0, 500), rotation=math.pi / 2, x_reflection=True))
    skewed = gdstk.Reference(small, (-50, -50))
    skewed.repetition = gdstk.Repetition(columns=4, rows=3, v1=(6, 1), v2=(-2, 5))
    top.add(skewed)
    listed = gdstk.Reference(small, (-80, 0), rotation=math.pi)
    listed.repetition = gdstk.Repetition(offsets=[(3, 9), (11, 40), (-4, 21.005)])
    top.add(listed)
    return save(library, path)


@pytest.mark.parametrize("suffix", [".gds", ".oas"])
@pytest.mark.parametrize("packed", [False, True])
def test_exact_placements_equal_the_reference_flattening(tmp_path, suffix, packed):
    path = quarter_turned(tmp_path / f"exact{suffix}")
    wanted = expected(path, "top", PAIR)
    if packed:
        packed_path = tmp_path / "named_by_nobody"
        packed_path.write_bytes(gzip.compress(path.read_bytes()))
        path = packed_path
    source = open_layout(path, technology=technology())
    assert len(wanted) == 8 * 7 + 12 + 4
    assert found(source, PAIR) == wanted
    assert source.total_polygons([PAIR]) == len(wanted)
    assert source.total_polygons([PAIR, (2, 0)]) == 2 * len(wanted)


@pytest.mark.parametrize("suffix", [".gds", ".oas"])
def test_any_angle_and_magnification_round_to_the_grid(tmp_path, suffix):
    library = gdstk.Library()
    small = leaf(library)
    middle = library.new_cell("middle")
    middle.add(gdstk.Reference(small, (10, 3), rotation=0.3, magnification=1.7, x_reflection=True))
    middle.add(gdstk.Reference(small, (-9, 2), rotation=math.radians(45), columns=3, rows=2,
                               spacing=(12, 9)))  # fmt: skip
    top = library.new_cell("top")
    top.add(gdstk.Reference(middle, (100, 50), rotation=-1.234, magnification=0.37))
    top.add(gdstk.Reference(middle, (0, 0), magnification=2.5))
    path = save(library, tmp_path / f"turned{suffix}")
    source = open_layout(path, technology=technology())
    theirs = flattened(path, "top", PAIR)
    # half a unit of rounding, and the reference library's last bits
    assert worst_mismatch(found(source, PAIR), theirs) <= 0.5 + 1e-4
    corners = np.concatenate(theirs + flattened(path, "top", (2, 0)))
    box = [*corners.min(axis=0), *corners.max(axis=0)]
    assert np.abs(np.array(source.bbox_dbu) - box).max() <= 0.5 + 1e-4


@pytest.mark.parametrize("unit_um", [0.0001, 0.001, 0.005])
@pytest.mark.parametrize("suffix", [".gds", ".oas"])
def test_database_units(tmp_path, unit_um, suffix):
    library = gdstk.Library(unit=1e-6, precision=unit_um * 1e-6)
    library.new_cell("top").add(gdstk.rectangle((-1.5, 0.005), (2.0, 7.125), layer=1))
    source = open_layout(save(library, tmp_path / f"u{suffix}"), technology=technology())
    assert source.database_unit_um == unit_um
    assert source.bbox_dbu == tuple(round(v / unit_um) for v in (-1.5, 0.005, 2.0, 7.125))
    assert source.bbox_um == (-1.5, 0.005, 2.0, 7.125)


def test_path_ends_have_the_areas_of_the_stream_format(tmp_path):
    # GDSII manual, record PATHTYPE: 0 flush, 1 round, 2 half a width further, 4 by extensions
    length, width = 10_000, 2_000
    xy = (0, 0, length, 0)
    kinds = [
        gds.path(1, 0, 0, width, xy),
        gds.path(1, 0, 1, width, xy),
        gds.path(1, 0, 2, width, xy),
        gds.path(1, 0, 4, width, xy, extensions=(300, 1_200)),
    ]
    wanted = [
        length * width,
        length * width + math.pi * width**2 / 4,
        (length + width) * width,
        (length + 300 + 1_200) * width,
    ]
    for kind, area in zip(kinds, wanted, strict=True):
        path = tmp_path / "path.gds"
        path.write_bytes(gds.library(gds.cell("top", kind)))
        (outline,) = found(open_layout(path, technology=technology()), PAIR)
        assert shapely.Polygon(outline).area == pytest.approx(area, rel=1e-3)


@pytest.mark.parametrize("ends", ["flush", "round", "extended", (0.3, 0.1)])
@pytest.mark.parametrize("suffix", [".gds", ".oas"])
def test_bent_paths_equal_the_reference_outline(tmp_path, ends, suffix):
    library = gdstk.Library()
    bent = gdstk.FlexPath([(0, 0), (5, 0), (5, 4), (9, 8)], 0.5, ends=ends, layer=1,
                          simple_path=True)  # fmt: skip
    library.new_cell("top").add(bent)
    if suffix == ".oas" and ends == "round":
        bent.set_ends("extended")  # OASIS has no round ends (SEMI P39, path extensions)
    path = save(library, tmp_path / f"bent{suffix}")
    source = open_layout(path, technology=technology())
    assert worst_mismatch(found(source, PAIR), flattened(path, "top", PAIR)) <= 0.5 + 1e-4


def test_boxes_are_read(tmp_path):
    path = tmp_path / "box.gds"
    path.write_bytes(gds.library(gds.cell("top", gds.box(1, 0, 0, 0, 0, 50, 70, 50, 70, 0, 0, 0))))
    source = open_layout(path, technology=technology())
    assert found(source, PAIR) == [((0, 0), (70, 0), (70, 50), (0, 50))]


def test_array_whose_span_its_columns_do_not_divide(tmp_path):
    # 3 columns over 100 units: places 0, 33.33, 66.67 round to the nearest unit
    path = tmp_path / "array.gds"
    cells = [
        gds.cell("top", gds.array("leaf", 3, 1, (0, 0, 100, 0, 0, 10))),
        gds.cell("leaf", gds.boundary(1, 0, 0, 0, 5, 0, 5, 5, 0, 5, 0, 0)),
    ]
    path.write_bytes(gds.library(*cells))
    source = open_layout(path, technology=technology())
    assert [outline[0] for outline in found(source, PAIR)] == [(0, 0), (33, 0), (67, 0)]


def test_outlines_are_counter_clockwise_clean_and_have_area(tmp_path):
    path = tmp_path / "dirty.gds"
    shapes = [
        gds.boundary(1, 0, 0, 0, 0, 10, 10, 10, 10, 0, 0, 0),  # clockwise
        gds.boundary(1, 0, 20, 0, 20, 0, 30, 0, 30, 0, 30, 10, 20, 10, 20, 0),  # repeated
        gds.boundary(1, 0, 40, 0, 50, 0, 60, 0, 40, 0),  # a line
    ]
    path.write_bytes(gds.library(gds.cell("top", *shapes)))
    source = open_layout(path, technology=technology())
    assert ("flat-shapes", "1") in {(note.code, note.detail) for note in source.notes}
    columns = source.window(EVERYWHERE, [PAIR])[PAIR]
    assert [len(points) for points in outlines(columns)] == [4, 4]
    assert [shapely.LinearRing(points).is_ccw for points in outlines(columns)] == [True, True]
    mirrored = gdstk.Library()
    mirrored.new_cell("top").add(gdstk.Reference(leaf(mirrored), x_reflection=True))
    source = open_layout(save(mirrored, tmp_path / "m.gds"), technology=technology())
    (points,) = outlines(source.window(EVERYWHERE, [PAIR])[PAIR])
    assert shapely.LinearRing(points).is_ccw


def test_a_large_array_of_one_shape_stays_small(tmp_path):
    library = gdstk.Library()
    shape = gdstk.rectangle((0, 0), (1, 1), layer=1)
    shape.repetition = gdstk.Repetition(columns=30_000, rows=20_000, spacing=(2, 3))
    library.new_cell("top").add(shape)
    source = open_layout(save(library, tmp_path / "many.oas"), technology=technology())
    assert source.total_polygons([PAIR]) == 600_000_000
    assert found(source, PAIR, (3_500, 2_500, 4_500, 3_500)) == [
        ((4_000, 3_000), (5_000, 3_000), (5_000, 4_000), (4_000, 4_000)),
    ]
    with pytest.raises(LayoutError, match="more than"):
        source.window(EVERYWHERE, [PAIR])


def crowded(path: Path) -> Path:
    """More references and more polygons in one cell than the plain comparison takes."""
    rng = np.random.default_rng(7)
    library = gdstk.Library()
    small = leaf(library)
    top = library.new_cell("top")
    for x, y in rng.integers(-200, 200, (1_500, 2)).tolist():
        size = float(rng.integers(1, 9))
        top.add(gdstk.rectangle((x, y), (x + size, y + 0.5), layer=1))
    for x, y in rng.integers(-200, 200, (900, 2)).tolist():
        turn = rng.choice([0.0, math.pi / 2, math.pi, 0.2])
        top.add(gdstk.Reference(small, (x, y), rotation=turn, x_reflection=bool(turn == math.pi)))
    top.add(gdstk.Reference(small, (-100, -100), columns=40, rows=30, spacing=(5, 4)))
    return save(library, path)


def test_a_window_is_the_brute_force_filter(tmp_path):
    source = open_layout(crowded(tmp_path / "crowded.gds"), technology=technology())
    everything = found(source, PAIR)
    boxes = np.array([[*np.min(o, axis=0), *np.max(o, axis=0)] for o in everything])
    rng = np.random.default_rng(11)
    hits = 0
    for _ in range(40):
        x0, y0 = rng.integers(-230_000, 230_000, 2).tolist()
        width, height = rng.choice([0, 1, 900, 20_000, 150_000], 2).tolist()
        box = (x0, y0, x0 + width, y0 + height)
        meets = (
            (boxes[:, 0] <= box[2])
            & (boxes[:, 2] >= box[0])
            & (boxes[:, 1] <= box[3])
            & (boxes[:, 3] >= box[1])
        )
        wanted = [everything[row] for row in np.flatnonzero(meets)]
        assert found(source, PAIR, box) == wanted
        hits += len(wanted)
    assert hits > 500
    # touching counts, one unit further does not
    edge = boxes[0]
    touching = (int(edge[0]) - 5, int(edge[1]) - 5, int(edge[0]), int(edge[1]))
    assert everything[0] in found(source, PAIR, touching)
    apart = (int(edge[0]) - 5, int(edge[1]) - 5, int(edge[0]) - 1, int(edge[1]))
    assert everything[0] not in found(source, PAIR, apart)


def test_a_pickled_source_is_small_and_gives_the_same(tmp_path):
    source = open_layout(crowded(tmp_path / "crowded.gds"), technology=technology())
    box = (-50_000, -50_000, 50_000, 50_000)
    before = found(source, PAIR, box)
    packed = pickle.dumps(source)
    assert len(packed) < 3_000
    again = pickle.loads(packed)
    assert found(again, PAIR, box) == before
    assert (again.top, again.bbox_dbu, again.notes) == (source.top, source.bbox_dbu, source.notes)


def test_texts_are_placed_like_shapes(tmp_path):
    library = gdstk.Library()
    small = leaf(library)
    small.add(gdstk.Label("pin\x07 <&>", (1, 2), layer=3))
    small.add(gdstk.Label("ignored", (1, 2), layer=9))
    top = library.new_cell("top")
    top.add(gdstk.Reference(small, (10, 20), rotation=math.pi / 2, x_reflection=True))
    top.add(gdstk.Reference(small, (0, 0), rotation=0.4, magnification=3, columns=2, rows=2,
                            spacing=(50, 40)))  # fmt: skip
    top.add(gdstk.Label("VDD", (-3, 0.005), layer=3))
    path = save(library, tmp_path / "texts.gds")
    labels = open_layout(path, technology=technology()).labels([(3, 0)])
    flat = next(c for c in gdstk.read_gds(str(path)).cells if c.name == "top").get_labels()
    wanted = sorted((*label.origin[::-1], label.text) for label in flat if label.layer == 3)
    assert [label.text for label in labels] == [row[2] for row in wanted]
    ours = np.array([(label.y_um, label.x_um) for label in labels])
    assert np.abs(ours - [row[:2] for row in wanted]).max() <= 0.0005 + 1e-9
    assert {(label.layer, label.texttype) for label in labels} == {(3, 0)}


def test_near_gives_what_windows_give_box_by_box(tmp_path):
    source = open_layout(crowded(tmp_path / "crowded.gds"), technology=technology())
    rng = np.random.default_rng(5)
    low = rng.integers(-230_000, 230_000, (25, 2))
    boxes = np.hstack([low, low + rng.choice([0, 1, 900, 60_000], (25, 2))])
    near = source.near(boxes, [PAIR])[PAIR]
    single = [source.window(tuple(box), [PAIR])[PAIR] for box in boxes.tolist()]
    expected = sorted(canonical(points) for columns in single for points in outlines(columns))
    assert len(expected) > 200
    assert sorted(canonical(points) for points in outlines(near)) == expected


def test_repeat_pitch_of_an_array_with_straps(tmp_path):
    library = gdstk.Library()
    bit = leaf(library)
    row = library.new_cell("row")
    row.add(gdstk.Reference(bit, (0, 0), columns=8, rows=1, spacing=(5, 3)))
    row.add(gdstk.Reference(bit, (5, 6), x_reflection=True, columns=8, rows=1, spacing=(5, 3)))
    top = library.new_cell("top")
    # a strap of 1.7 um after every 8 cells: only the strap's period takes all onto all
    top.add(gdstk.Reference(row, (0, 0), columns=6, rows=20, spacing=(8 * 5 + 1.7, 6)))
    source = open_layout(save(library, tmp_path / "sram.gds"), technology=technology())
    assert source.repeat_pitch_dbu() == (41_700, 6_000)


def test_arrays_of_contacts_hide_no_repeat_pitch(tmp_path):
    library = gdstk.Library()
    contact = library.new_cell("contact")
    contact.add(gdstk.rectangle((0, 0), (0.2, 0.2), layer=1))
    bit = leaf(library)
    top = library.new_cell("top")
    top.add(gdstk.Reference(bit, (0, 0), columns=30, rows=20, spacing=(7, 3)))
    top.add(gdstk.Reference(contact, (0.1, 80.3), columns=200, rows=70, spacing=(0.5, 0.5)))
    source = open_layout(save(library, tmp_path / "field.gds"), technology=technology())
    assert source.repeat_pitch_dbu() == (7_000, 3_000)


def test_no_repeat_pitch_without_repetition(tmp_path):
    source = open_layout(crowded(tmp_path / "crowded.gds"), technology=technology())
    assert source.repeat_pitch_dbu() is None


def two_tops(path: Path) -> Path:
    library = gdstk.Library()
    library.new_cell("wide").add(gdstk.rectangle((0, 0), (20, 2), layer=1))
    library.new_cell("narrow").add(gdstk.rectangle((0, 0), (3, 2), layer=2))
    library.new_cell("frame").add(gdstk.rectangle((-500, -500), (500, 500), layer=77))
    return save(library, path)


def test_several_tops_are_listed_largest_first(tmp_path):
    path = two_tops(tmp_path / "tops.gds")
    with pytest.raises(LayoutError) as caught:
        open_layout(path, technology=technology())
    assert "wide (20 x 2 um), narrow (3 x 2 um)" in caught.value.message
    assert "frame" not in caught.value.message
    assert "--top" in caught.value.hint
    assert open_layout(path, technology=technology(), top="narrow").bbox_um == (0, 0, 3, 2)


def test_top_cells_without_technology_layers_are_passed_over(tmp_path):
    path = two_tops(tmp_path / "tops.gds")
    source = open_layout(path, technology=technology_of(one="1/0"))
    assert source.top == "wide"
    passed = [note.detail for note in source.notes if note.code == "passed-over-cell"]
    assert passed == ["frame", "narrow"]
    # the frame's huge shape is on no layer of the technology
    assert source.bbox_um == (0, 0, 20, 2)


def test_an_unknown_top_names_the_nearest(tmp_path):
    path = two_tops(tmp_path / "tops.gds")
    with pytest.raises(LayoutError, match="no cell 'narow'") as caught:
        open_layout(path, technology=technology(), top="narow")
    assert "narrow" in caught.value.hint


def test_layers_ignored_or_absent_are_noted(tmp_path):
    path = two_tops(tmp_path / "tops.gds")
    source = open_layout(path, technology=technology_of(one="1/0", poly="5/1", spare="6/1"))
    notes = {(note.code, note.detail) for note in source.notes}
    assert ("unnamed-layer", "2/0, 77/0") in notes
    assert ("absent-layer", "poly") in notes
    with pytest.raises(LayoutError, match=r"required layer other \(5/1\).*has 1/0, 2/0, 77/0"):
        open_layout(path, technology=technology_of(one="1/0", other="5/1", required=("other",)))
    with pytest.raises(LayoutError, match=r"expected some of 5/1, the file has 1/0, 2/0, 77/0"):
        open_layout(path, technology=technology_of(other="5/1"))


def test_notes_are_the_same_from_either_format(tmp_path):
    technology = technology_of(one="1/0", other="5/1")
    notes = [
        open_layout(two_tops(tmp_path / f"tops{suffix}"), technology=technology).notes
        for suffix in (".gds", ".oas")
    ]
    assert notes[0] == notes[1]


def test_canonical_outlines_tell_shapes_apart():
    # the comparison above must be able to fail
    square = np.array([(0, 0), (1, 0), (1, 1), (0, 1)])
    assert canonical(square) == canonical(square[::-1])
    assert canonical(square) != canonical(square + 1)
