"""Nets against brute force (gdstk, shapely, networkx) and worked examples."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
import shapely
from net_layouts import DEVICE, Wiring, conductors, random_wiring, technology, traced
from net_reference import reference_nets, told


@pytest.mark.parametrize("seed", range(12))
def test_partition_is_that_of_brute_force(tmp_path: Path, seed: int) -> None:
    drawn = random_wiring(seed)
    path = drawn.write(tmp_path / "wiring.gds")
    expected = reference_nets(path, "wiring", technology(), drawn.labels)
    assert len(expected) > 5
    for tile_um in (None, 0.7, 2.0):
        sizes = {} if tile_um is None else {"tile_um": tile_um}
        assert told(traced(path, technology(), top="wiring", **sizes)) == expected


def test_every_way_of_not_conducting(tmp_path: Path) -> None:
    """Vias on nothing, flat shapes and texts beside all shapes: worked by hand."""
    drawn = Wiring().rect("active", 0, 0, 400, 400).rect("contact", 100, 100, 200, 200)
    drawn.rect("metal1", 60, 60, 240, 240).label("A", "metal1", 100, 100)
    drawn.rect("via1", 2000, 2000, 2100, 2100)
    drawn.polygon("metal1", [(240, 100), (600, 100), (900, 100)])
    drawn.rect("metal1", 900, 60, 1100, 240).label("B", "metal1", 1000, 100)
    drawn.label("C", "metal1", 700, 100).label("D", "any", 3000, 3000)
    nets = traced(drawn.write(tmp_path / "a.gds"), technology())
    assert nets.names == (("A",), ("B",))
    assert nets.layers[:3] == ("diffusion", "poly", "metal1")
    assert nets.shape_count[:, [0, 2, 5, 6]].tolist() == [[1, 1, 1, 0], [0, 1, 0, 0]]
    node = dict(zip((label.text for label in nets.labels), nets.label_node, strict=True))
    where = dict(zip((label.text for label in nets.labels), nets.label_conductor, strict=True))
    assert node["C"] == node["D"] == -1
    assert where == {"A": "metal1", "B": "metal1", "C": "metal1", "D": "any"}
    assert nets.piece_node.tolist() == [node["A"]]
    assert np.allclose(nets.box_um, [[0, 0, 0.4, 0.4], [0.9, 0.06, 1.1, 0.24]])


def test_names_are_gathered_by_net_and_remarks_are_none(tmp_path: Path) -> None:
    """Two names on one net, one name on two nets, remarks, general and own texts."""
    drawn = Wiring().rect("metal1", 0, 0, 400, 100).label("A", "metal1", 50, 50)
    drawn.label("B", "any", 350, 50).label("B", "any", 350, 60)
    drawn.rect("metal1", 0, 500, 400, 600).label("A", "metal1", 0, 500)
    drawn.label("a remark", "metal1", 50, 50).label("WIRING", "metal1", 50, 50)
    # a general text takes the uppermost conductor, an own text only its own
    drawn.rect("metal1", 0, 1000, 400, 1100).rect("metal2", 0, 1000, 400, 1100)
    drawn.label("UP", "any", 100, 1050).label("DOWN", "metal1", 100, 1050)
    nets = traced(drawn.write(tmp_path / "a.gds"), technology())
    assert nets.names == (("A", "B"), ("A",), ("DOWN",), ("UP",))
    assert [label.text for label in nets.labels] == ["A", "B", "B", "A", "DOWN", "UP"]
    assert nets.label_conductor[-2:] == ("metal1", "metal2")
    assert nets.ids.tolist() == ["net-1", "net-2", "net-3", "net-4"]


def test_texts_that_the_technology_calls_remarks_name_nothing(tmp_path: Path) -> None:
    """Patterns in any case, exact but for `*` and `?`; worked by hand."""
    drawn = Wiring().rect("metal1", 0, 0, 400, 100)
    for text in ("Ae=1*0.9", "sub!", "SUB!", "sub", "sub!2", "Rsil", "rsil_x"):
        drawn.label(text, "metal1", 50, 50).label(text, "any", 60, 50)
    path, plain = drawn.write(tmp_path / "a.gds"), technology()
    remarks = plain.labels.model_copy(update={"remark_names": ("*=*", "Sub!", "rsi?")})
    nets = traced(path, plain.model_copy(update={"labels": remarks}))
    assert nets.names == (("rsil_x", "sub", "sub!2"),)
    assert {label.text for label in nets.labels} == {"sub", "sub!2", "rsil_x"}
    none = plain.labels.model_copy(update={"remark_names": ()})
    assert len(traced(path, plain.model_copy(update={"labels": none})).names[0]) == 7


def test_general_text_on_two_equal_boxes_keeps_its_order(tmp_path: Path) -> None:
    drawn = Wiring().rect("metal3", 0, 0, 100, 100).rect("metal2", 0, 0, 100, 100)
    drawn.label("TOP", "metal3", 50, 50).label("LOW", "metal2", 50, 50)
    assert traced(drawn.write(tmp_path / "a.gds"), technology()).names == (("LOW",), ("TOP",))


def strapped() -> Wiring:
    """A metal from a tap, 2 um of poly with two contacts and one, a second metal."""
    drawn = Wiring().rect("nwell", -500, -500, 1000, 1000).rect("active", 0, 0, 400, 400)
    drawn.rect("contact", 100, 100, 260, 260).rect("metal1", 0, 0, 800, 400)
    drawn.rect("poly", 600, 100, 2600, 300)
    drawn.rect("contact", 620, 120, 780, 280).rect("contact", 640, 120, 800, 280)
    drawn.rect("contact", 2400, 120, 2560, 280).rect("metal1", 2300, 0, 2700, 400)
    return drawn.label("VDD", "metal1", 2500, 50)


def test_poly_between_two_metals_is_a_strap(tmp_path: Path) -> None:
    drawn = strapped().rect("poly", 600, 5000, 800, 5400).rect("contact", 620, 5020, 780, 5180)
    drawn.rect("metal1", 600, 5000, 800, 5200).label("GATE", "poly", 700, 5300)
    nets = traced(drawn.write(tmp_path / "a.gds"), technology())
    assert nets.names == (("VDD",), ("GATE",))
    assert nets.node_net.tolist() == [0, 0, 1]
    strap = nets.resistors
    assert strap.kind.tolist() == ["strap"]
    assert strap.conductor.tolist() == ["poly"]
    assert shapely.equals(strap.polygons[0], shapely.box(0.6, 0.1, 2.6, 0.3))
    assert strap.terminal_first.tolist() == [0, 2]
    assert strap.terminal_node.tolist() == [0, 1]
    assert strap.terminal_contacts.tolist() == [2, 1]
    assert np.allclose(shapely.bounds(strap.terminal_shape[0]), (0.62, 0.12, 0.8, 0.28))
    assert np.allclose(shapely.bounds(strap.terminal_shape[1]), (2.4, 0.12, 2.56, 0.28))
    assert nets.piece_node.tolist() == [0]
    # poly of one contact is part of its metal's node
    assert nets.label_node.tolist() == [1, 2]


def test_straps_of_nets_without_name_pad_or_tap_are_left_out(tmp_path: Path) -> None:
    """The same without the label and with the active outside the well: p+ is none either."""
    drawn = Wiring().rect("active", 0, 0, 400, 400).rect("contact", 100, 100, 260, 260)
    drawn.rect("metal1", 0, 0, 800, 400).rect("poly", 600, 100, 2600, 300)
    drawn.rect("contact", 620, 120, 780, 280).rect("contact", 2400, 120, 2560, 280)
    drawn.rect("metal1", 2300, 0, 2700, 400)
    nets = traced(drawn.write(tmp_path / "a.gds"), technology())
    assert len(nets.ids) == 1
    assert nets.node_net.tolist() == [0, 0]
    assert len(nets.resistors.kind) == 0


def test_named_poly_without_contact_is_a_net(tmp_path: Path) -> None:
    drawn = Wiring().rect("poly", 0, 0, 100, 1000).label("IN", "poly", 50, 50)
    drawn.rect("contact", 20, 900, 80, 960).rect("active", 500, 0, 600, 100)
    nets = traced(drawn.write(tmp_path / "a.gds"), technology())
    assert nets.names == (("IN",), ())
    assert nets.shape_count[0].tolist() == [0, 1, 0, 0, 0, 1, 0, 0]
    assert nets.label_node.tolist() == [0]


MARKED = {
    "marked_poly": {"shape": "poly and thick_oxide", "conductor": "poly", **DEVICE},
    "marked_well": {"shape": "nwell and esd_recognition", "conductor": "nwell", **DEVICE},
}


def marked_technology():
    section = conductors(resistors=MARKED)
    section["layers"]["poly"]["shape"] = "poly and not thick_oxide"
    return technology(section)


@pytest.mark.parametrize("tile_um", [None, 0.5])
def test_marked_poly_parts_its_net(tmp_path: Path, tile_um: float | None) -> None:
    """Two bodies in a row with a head between them that no contact touches."""
    drawn = Wiring().rect("poly", 0, 0, 4000, 200)
    drawn.rect("thick_oxide", 1000, -100, 1500, 300).rect("thick_oxide", 2000, -100, 3000, 300)
    drawn.rect("contact", 100, 20, 260, 180).rect("metal1", 0, 0, 400, 200)
    drawn.rect("contact", 3500, 20, 3660, 180).rect("contact", 3700, 20, 3860, 180)
    drawn.rect("metal1", 3400, 0, 4000, 200).label("A", "metal1", 50, 50)
    drawn.label("B", "metal1", 3450, 50).rect("active", 0, 1000, 100, 1100)
    sizes = {} if tile_um is None else {"tile_um": tile_um}
    nets = traced(drawn.write(tmp_path / "a.gds"), marked_technology(), **sizes)
    assert nets.names == (("A",), (), ("B",), ())
    device = nets.resistors
    assert device.kind.tolist() == ["marked_poly", "marked_poly"]
    assert device.conductor.tolist() == ["poly", "poly"]
    assert device.terminal_node.tolist() == [0, 1, 1, 2]
    assert device.terminal_contacts.tolist() == [1, 0, 0, 2]
    ends = [shapely.bounds(shape).tolist() for shape in device.terminal_shape]
    assert np.allclose(ends, [[1, 0, 1, 0.2], [1.5, 0, 1.5, 0.2], [2, 0, 2, 0.2], [3, 0, 3, 0.2]])
    assert nets.shape_count[:3, 1].tolist() == [1, 1, 1]


def test_contacts_on_a_body_are_its_terminals(tmp_path: Path) -> None:
    drawn = Wiring().rect("poly", 0, 0, 4000, 200).rect("thick_oxide", -100, -100, 4100, 300)
    drawn.rect("contact", 100, 20, 260, 180).rect("metal1", 0, 0, 400, 200)
    drawn.rect("contact", 3500, 20, 3660, 180).rect("metal1", 3400, 0, 4000, 200)
    drawn.rect("active", 0, 1000, 100, 1100)
    nets = traced(drawn.write(tmp_path / "a.gds"), marked_technology())
    device = nets.resistors
    assert device.kind.tolist() == ["marked_poly"]
    assert device.terminal_node.tolist() == [0, 1]
    assert device.terminal_contacts.tolist() == [1, 1]
    assert np.allclose(shapely.bounds(device.terminal_shape[0]), (0.1, 0.02, 0.26, 0.18))


def test_well_resistor_joins_the_taps_of_its_heads(tmp_path: Path) -> None:
    drawn = Wiring().rect("nwell", 0, 0, 6000, 1000).rect("esd_recognition", 2000, -100, 4000, 1100)
    for x, number in ((200, 3), (4800, 2)):
        drawn.rect("active", x, 200, x + 1000, 800)
        for i in range(number):
            drawn.rect("contact", x + 100 + 300 * i, 300, x + 260 + 300 * i, 460)
        drawn.rect("metal1", x, 200, x + 1000, 800)
    drawn.label("A", "metal1", 300, 300)
    nets = traced(drawn.write(tmp_path / "a.gds"), marked_technology())
    device = nets.resistors
    assert device.kind.tolist() == ["marked_well"]
    assert device.conductor.tolist() == ["nwell"]
    assert shapely.equals(device.polygons[0], shapely.box(2, 0, 4, 1))
    assert nets.node_net[device.terminal_node].tolist() == [0, 1]
    assert device.terminal_contacts.tolist() == [3, 2]
    ends = [shapely.bounds(shape).tolist() for shape in device.terminal_shape]
    assert np.allclose(ends, [[2, 0, 2, 1], [4, 0, 4, 1]], atol=1e-3)


def test_taps_under_a_well_resistors_marker_are_its_ends(tmp_path: Path) -> None:
    drawn = Wiring().rect("nwell", 0, 0, 6000, 1000).rect("esd_recognition", -100, -100, 6100, 1100)
    for x in (200, 4800):
        drawn.rect("active", x, 200, x + 1000, 800).rect("contact", x + 100, 300, x + 260, 460)
        drawn.rect("metal1", x, 200, x + 1000, 800)
    nets = traced(drawn.write(tmp_path / "a.gds"), marked_technology())
    device = nets.resistors
    assert device.kind.tolist() == ["marked_well"]
    assert nets.node_net[device.terminal_node].tolist() == [0, 1]
    assert device.terminal_contacts.tolist() == [1, 1]
    ends = [shapely.bounds(shape).tolist() for shape in device.terminal_shape]
    assert np.allclose(ends, [[0.2, 0.2, 1.2, 0.8], [4.8, 0.2, 5.8, 0.8]], atol=1e-3)


def test_pads_take_the_node_most_of_which_lies_beneath(tmp_path: Path) -> None:
    section = conductors(pads={"shape": "pad_recognition", "on": "metal3"})
    drawn = Wiring().rect("metal3", 0, 0, 1000, 1000).rect("metal3", 1100, 0, 2000, 1000)
    drawn.rect("pad_recognition", 500, 100, 1300, 900)
    drawn.rect("pad_recognition", 5000, 100, 5800, 900)
    drawn.rect("active", 0, 3000, 100, 3100)
    nets = traced(drawn.write(tmp_path / "a.gds"), technology(section))
    assert len(nets.ids) == 2
    assert np.allclose(nets.box_um[0], (0, 0, 1, 1))
    assert nets.pad_node.tolist() == [0, -1]
    assert np.allclose(shapely.bounds(nets.pad_polygons[0]), (0.5, 0.1, 1.3, 0.9))


def test_local_interconnect_joins_what_it_touches(tmp_path: Path) -> None:
    section = conductors()
    section["layers"]["metal1"]["touches"] = ["diffusion", "poly"]
    drawn = Wiring().rect("active", 0, 0, 400, 400).rect("metal1", 400, 0, 800, 400)
    drawn.rect("poly", 700, 100, 1700, 200).rect("metal1", 1500, 0, 2000, 400)
    drawn.label("LEFT", "metal1", 450, 50)
    nets = traced(drawn.write(tmp_path / "a.gds"), technology(section))
    assert len(nets.ids) == 1
    assert nets.node_net.tolist() == [0, 0]
    assert nets.piece_node.tolist() == [0]
    assert nets.resistors.kind.tolist() == ["strap"]
    assert np.allclose(shapely.bounds(nets.resistors.terminal_shape[0]), (0.7, 0.1, 0.8, 0.2))
    apart = traced(tmp_path / "a.gds", technology())
    assert len(apart.ids) == 2


def test_without_conductors_there_are_no_nets(tmp_path: Path) -> None:
    path = strapped().write(tmp_path / "a.gds")
    bare = technology().model_copy(update={"conductors": None})
    nets = traced(path, bare)
    assert len(nets.ids) == 0
    assert nets.layers == ()


def test_resistors_in_slanted_poly_in_metal_and_in_diffusion(tmp_path: Path) -> None:
    """Lines where heads meet bodies, and the contacts on each head: worked by hand."""
    devices = {
        "tilted": {"shape": "poly and thick_oxide", "conductor": "poly", **DEVICE},
        "thin_metal": {"shape": "metal2 and thick_oxide", "conductor": "metal2", **DEVICE},
        "silicon": {"shape": "active and thick_oxide", "conductor": "diffusion", **DEVICE},
    }
    section = conductors(resistors=devices)
    section["layers"]["poly"]["shape"] = "poly and not thick_oxide"
    section["layers"]["metal2"]["shape"] = "metal2 and not thick_oxide"
    section["layers"]["diffusion"]["shape"] = "active and not poly and not thick_oxide"
    drawn = Wiring()
    drawn.polygon("poly", [(0, 0), (2000, 2000), (1800, 2200), (-200, 200)])
    drawn.polygon("thick_oxide", [(900, 700), (1300, 1100), (900, 1500), (500, 1100)])
    drawn.label("PA", "poly", 0, 200).label("PB", "poly", 1800, 2000)
    drawn.rect("metal2", 5000, 0, 8000, 200).rect("thick_oxide", 6000, -50, 7000, 250)
    drawn.rect("via1", 5050, 20, 5100, 80).rect("via1", 5150, 20, 5200, 80)
    drawn.rect("via1", 7900, 20, 7950, 80)
    drawn.label("MA", "metal2", 5010, 10).label("MB", "metal2", 7990, 10)
    drawn.rect("active", 5000, 1000, 8000, 1200).rect("thick_oxide", 6000, 950, 7000, 1250)
    drawn.rect("contact", 5050, 1020, 5100, 1080).rect("metal1", 5000, 1000, 5500, 1200)
    drawn.label("DA", "metal1", 5010, 1010)
    nets = traced(drawn.write(tmp_path / "a.gds"), technology(section))
    device = nets.resistors
    assert device.kind.tolist() == ["tilted", "thin_metal", "silicon"]
    ends = [nets.names[nets.node_net[node]] for node in device.terminal_node]
    lengths = shapely.length(device.terminal_shape)
    met = dict(zip(ends, zip(lengths, device.terminal_contacts, strict=True), strict=True))
    for name, length, contacts in (
        ("PA", 0.2 * 2**0.5, 0),
        ("PB", 0.2 * 2**0.5, 0),
        ("MA", 0.2, 2),
        ("MB", 0.2, 1),
        ("DA", 0.2, 1),
    ):
        # a slanted edge may seem longer by the rounding that its corners are allowed
        assert met[(name,)][0] == pytest.approx(length, abs=5e-4), name
        assert met[(name,)][1] == contacts, name
    assert met[()] == (pytest.approx(0.2), 0)


def test_slanted_pads_lie_on_slanted_metal(tmp_path: Path) -> None:
    section = conductors(pads={"shape": "pad_recognition", "on": "metal3"})

    def octagon(side: int, at: int) -> list[tuple[int, int]]:
        one, two, three = side, 2 * side, 3 * side
        ring = [(one, 0), (two, 0), (three, one), (three, two), (two, three), (one, three)]
        return [(x + at, y + at) for x, y in [*ring, (0, two), (0, one)]]

    drawn = Wiring().polygon("metal3", octagon(1000, 0)).label("PAD", "metal3", 1500, 1500)
    drawn.polygon("pad_recognition", octagon(800, 300)).rect("metal3", 2900, 2900, 3000, 3000)
    drawn.rect("active", 9000, 0, 9100, 100)
    nets = traced(drawn.write(tmp_path / "a.gds"), technology(section))
    assert [nets.names[nets.node_net[node]] for node in nets.pad_node] == [("PAD",)]
