"""What no drawing may change about its nets, and what one cut must change.

Sources: none of these needs one; each is what a net is (its shapes and names do not depend
on how they are drawn, placed or cut into tiles).
"""

from __future__ import annotations

import math
import random
from pathlib import Path
from tempfile import TemporaryDirectory

import gdstk
import numpy as np
import pytest
import shapely
from hypothesis import Phase, given, settings
from hypothesis import strategies as st
from net_layouts import (
    DEVICE,
    GRID,
    PAIRS,
    Wiring,
    conductors,
    drawn_of,
    random_wiring,
    technology,
    traced,
)

from latchscan.layout.connections import Nets
from latchscan.tasks import Silent, open_workers
from latchscan.technology.model import Technology

FEW = settings(max_examples=6, deadline=None, phases=[Phase.generate])


def rich_technology() -> Technology:
    """Pads, a resistor in poly and local interconnect beside the plain sorts."""
    section = conductors(
        pads={"shape": "pad_recognition", "on": "metal3"},
        resistors={"marked": {"shape": "poly and thick_oxide", "conductor": "poly", **DEVICE}},
    )
    layers = section["layers"]
    assert isinstance(layers, dict)
    layers["poly"]["shape"] = "poly and not thick_oxide"
    return technology(section)


def rich_wiring(seed: int) -> Wiring:
    """Random wiring with pads and markers over it, general texts besides."""
    rng = random.Random(seed)
    drawn = random_wiring(seed, shapes=45)
    for layer in ("pad_recognition", "thick_oxide", "nwell"):
        for _ in range(4):
            x, y = (GRID * rng.randint(0, 150) for _ in range(2))
            drawn.rect(layer, x, y, x + 30 * GRID, y + 12 * GRID)
    for number in range(5):
        drawn.label(f"t{number}", "any", GRID * rng.randint(0, 150), GRID * rng.randint(0, 150))
    return drawn


def everything(nets: Nets) -> list[object]:
    """All values as bytes and texts."""
    device = nets.resistors
    shapes = (
        nets.piece_polygons,
        nets.pad_polygons,
        nets.shape_polygon,
        device.polygons,
        device.terminal_shape,
    )
    columns = (
        nets.box_um,
        nets.shape_count,
        nets.node_net,
        nets.piece_node,
        nets.pad_node,
        nets.label_node,
        nets.shape_net,
        nets.shape_layer,
        nets.shape_box_um,
        nets.shape_total,
        device.terminal_first,
        device.terminal_node,
        device.terminal_contacts,
    )
    return [
        nets.ids.tolist(),
        nets.names,
        nets.layers,
        nets.label_conductor,
        device.kind.tolist(),
        [(label.text, label.x_um, label.y_um) for label in nets.labels],
        [[shapely.to_wkb(shape) for shape in column] for column in shapes],
        [column.tobytes() for column in columns],
    ]


def essence(nets: Nets) -> list[object]:
    """What stays when a block is moved, mirrored, turned or drawn otherwise.

    Devices: kind, area, and of each terminal its net's names, extent and contacts.
    """
    device = nets.resistors
    held = []
    for row, kind in enumerate(device.kind.tolist()):
        ends = range(device.terminal_first[row], device.terminal_first[row + 1])
        held.append(
            (
                kind,
                round(shapely.area(device.polygons[row]), 6),
                sorted(
                    (
                        nets.names[nets.node_net[device.terminal_node[end]]],
                        round(shapely.length(device.terminal_shape[end]), 6),
                        int(device.terminal_contacts[end]),
                    )
                    for end in ends
                ),
            )
        )
    covered = [round(shapely.area(shape), 6) for shape in drawn_of(nets).values()]
    nodes = np.bincount(nets.node_net, minlength=len(nets.ids))
    size = np.sort(np.round(nets.box_um[:, 2:] - nets.box_um[:, :2], 6), axis=1)
    told = zip(nets.names, nets.shape_count.tolist(), nodes.tolist(), size.tolist(), strict=True)
    pads = sorted(
        (round(shapely.area(pad), 6), nets.names[nets.node_net[node]] if node >= 0 else ())
        for pad, node in zip(nets.pad_polygons, nets.pad_node, strict=True)
    )
    places = [
        (label.text, where, nets.names[nets.node_net[node]] if node >= 0 else ())
        for label, where, node in zip(
            nets.labels, nets.label_conductor, nets.label_node, strict=True
        )
    ]
    return [sorted(told), sorted(held), pads, sorted(places), sorted(covered)]


def file_of(library: gdstk.Library, folder: str) -> Path:
    path = Path(folder) / "drawn.gds"
    library.write_gds(path)
    return path


@pytest.mark.parametrize("seed", range(4))
def test_tiles_change_nothing(tmp_path: Path, seed: int) -> None:
    path = rich_wiring(seed).write(tmp_path / "a.gds")
    expected = everything(traced(path, rich_technology(), top="wiring"))
    for sizes in ({"tile_um": 0.61}, {"tile_um": 1.3, "window_um": 0.9}):
        assert everything(traced(path, rich_technology(), top="wiring", **sizes)) == expected


def test_workers_change_nothing(tmp_path: Path) -> None:
    path = rich_wiring(7).write(tmp_path / "a.gds")
    expected = everything(traced(path, rich_technology(), top="wiring"))
    with open_workers(2, Silent()) as workers:
        found = traced(path, rich_technology(), top="wiring", workers=workers, tile_um=1.0)
    assert everything(found) == expected


@FEW
@given(
    seed=st.integers(0, 10_000),
    turns=st.integers(0, 3),
    mirrored=st.booleans(),
    by=st.tuples(st.integers(-900, 900), st.integers(-900, 900)),
)
def test_placing_changes_nothing(
    seed: int, turns: int, mirrored: bool, by: tuple[int, int]
) -> None:
    drawn = rich_wiring(seed)
    with TemporaryDirectory() as folder:
        path = file_of(drawn.library, folder)
        expected = essence(traced(path, rich_technology(), top="wiring"))
        placed = drawn.library.new_cell("placed")
        at = (by[0] / 1000, by[1] / 1000)
        placed.add(
            gdstk.Reference(drawn.cell, at, rotation=turns * math.pi / 2, x_reflection=mirrored)
        )
        path = file_of(drawn.library, folder)
        assert essence(traced(path, rich_technology(), top="placed", tile_um=1.7)) == expected


@FEW
@given(seed=st.integers(0, 10_000))
def test_flattening_changes_nothing(seed: int) -> None:
    drawn = rich_wiring(seed)
    with TemporaryDirectory() as folder:
        expected = everything(
            traced(file_of(drawn.library, folder), rich_technology(), top="wiring")
        )
        drawn.cell.flatten()
        assert (
            everything(traced(file_of(drawn.library, folder), rich_technology(), top="wiring"))
            == expected
        )


@FEW
@given(seed=st.integers(0, 10_000), columns=st.integers(1, 3), rows=st.integers(1, 3))
def test_copies_in_an_array_are_nets_of_their_own(seed: int, columns: int, rows: int) -> None:
    """Far enough apart, n copies have n times every net of one."""
    drawn = rich_wiring(seed)
    with TemporaryDirectory() as folder:
        one = essence(traced(file_of(drawn.library, folder), rich_technology(), top="wiring"))
        array = drawn.library.new_cell("array")
        array.add(gdstk.Reference(drawn.cell, (0, 0), columns=columns, rows=rows, spacing=(20, 20)))
        many = traced(file_of(drawn.library, folder), rich_technology(), top="array")
        repeated = [sorted(part * (columns * rows)) for part in one]
        assert essence(many) == repeated


@FEW
@given(links=st.integers(2, 30), data=st.data())
def test_cutting_one_via_of_a_chain_splits_one_net(links: int, data: st.DataObject) -> None:
    cut = data.draw(st.integers(0, links - 2))
    layers = ("metal1", "metal2")

    def chain(without: int | None) -> Wiring:
        drawn = Wiring().rect("metal3", -500, 0, -300, 100)
        drawn.label("OTHER", "metal3", -400, 50)
        for link in range(links):
            drawn.rect(layers[link % 2], 400 * link, 0, 400 * link + 500, 100)
            drawn.label(f"l{link}", layers[link % 2], 400 * link + 250, 50)
            if link < links - 1 and link != without:
                drawn.rect("via1", 400 * link + 420, 20, 400 * link + 480, 80)
        return drawn

    with TemporaryDirectory() as folder:
        whole = traced(file_of(chain(None).library, folder), technology()).names
        parted = traced(file_of(chain(cut).library, folder), technology()).names
    every = {f"l{link}" for link in range(links)}
    assert sorted(map(set, whole), key=len) == [{"OTHER"}, every]
    left = {f"l{link}" for link in range(cut + 1)}
    assert {frozenset(names) for names in parted} == {
        frozenset({"OTHER"}),
        frozenset(left),
        frozenset(every - left),
    }


@FEW
@given(seed=st.integers(0, 10_000))
def test_cutting_shapes_into_pieces_changes_no_net(seed: int) -> None:
    """Upright shapes fractured along a line keep nodes and names; only the counts grow."""
    drawn = rich_wiring(seed)
    rng = random.Random(seed)
    cut = Wiring()
    for shape in drawn.cell.copy("flat", deep_copy=True).flatten().polygons:
        (x0, y0), (x1, y1) = shape.bounding_box()
        upright = all(
            (a == b).any() for a, b in zip(shape.points, np.roll(shape.points, 1, 0), strict=True)
        )
        vias = (PAIRS["contact"], PAIRS["via1"], PAIRS["via2"])
        if not upright or (shape.layer, shape.datatype) in vias:
            cut.cell.add(shape)
            continue
        middle = GRID * round((x0 + rng.random() * (x1 - x0)) * 1000 / GRID) / 1000
        for box in (((x0, y0), (middle, y1)), ((middle, y0), (x1, y1))):
            pieces = gdstk.boolean(
                shape, gdstk.rectangle(*box), "and", layer=shape.layer, datatype=shape.datatype
            )
            cut.cell.add(*pieces)
    cut.cell.add(*drawn.cell.labels)
    with TemporaryDirectory() as folder:
        one = traced(file_of(drawn.library, folder), technology(), top="wiring")
        other = traced(file_of(cut.library, folder), technology(), top="wiring")
    assert sorted(zip(one.names, one.box_um.tolist(), strict=True)) == sorted(
        zip(other.names, other.box_um.tolist(), strict=True)
    )
    assert np.array_equal(one.node_net, other.node_net)
