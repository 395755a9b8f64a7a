"""Pins, injectors and rings in the picture, read back as XML.

Source of every expected number: the hand-made scan of `synthetic_connections`.
"""

from __future__ import annotations

import dataclasses
import re
from typing import Any
from xml.etree import ElementTree

import numpy as np
import pytest
import shapely
import synthetic_scan
from synthetic_connections import VDD

from latchscan.layout.connections import BY_MARKER, Rings
from latchscan.report.svg_injectors import THROUGH_DASH
from latchscan.report.svg_map import heatmap_svg
from latchscan.report.svg_nets import net_outline
from latchscan.report.svg_pins import LARGEST_PIN_COUNT, marked_pins, pin_summary
from latchscan.report.svg_rings import LARGEST_RING_COUNT, marked_rings, ring_summary
from latchscan.rules.model import Evidence

SVG = "{http://www.w3.org/2000/svg}"
Element = ElementTree.Element


@pytest.fixture(name="measured", scope="module")
def _measured() -> Evidence:
    return synthetic_scan.evidence(connected=True)


@pytest.fixture(name="root", scope="module")
def _root(measured: Evidence) -> Element:
    return drawn(measured)


def drawn(measured: Evidence) -> Element:
    # without findings: the picture draws them elsewhere, and they would have to be judged
    scan = dataclasses.replace(synthetic_scan.scan(), evidence=measured, findings=())
    return ElementTree.fromstring(heatmap_svg(scan))


def groups(root: Element, name: str) -> list[Element]:
    """Groups whose class begins with `name`."""
    return [g for g in root.iter(f"{SVG}g") if (g.get("class") or "").split(" ")[0] == name]


def title(group: Element) -> str:
    assert group[0].tag == f"{SVG}title"
    return group[0].text or ""


def inside(group: Element, name: str) -> list[Element]:
    """Elements of class `name` in a group."""
    return [element for element in group.iter() if element.get("class") == name]


def crowd(measured: Evidence, pins: int, rings: int) -> Evidence:
    """`measured` with its pins and rings repeated until there are so many."""
    known = measured.connections
    row = np.arange(pins) % len(known.pins.names)
    # spread over the block, a pin of each kind in turn
    changed = synthetic_scan.changed(
        measured,
        "connections.pins",
        names=np.array([f"{known.pins.names[r]}_{i:04d}" for i, r in enumerate(row.tolist())]),
        net_first=np.arange(pins + 1),
        net=known.pins.net[row],
        x_um=np.linspace(0.0, 120.0, pins),
        y_um=np.linspace(0.0, 70.0, pins),
        joined_names=((),) * pins,
        **{
            name: getattr(known.pins, name)[row]
            for name in ("kind", "has_pad", "low_v", "high_v", "test_current_a")
        },
    )
    return synthetic_scan.changed(changed, "connections.rings", **ring_columns(known.rings, rings))


def ring_columns(rings: Rings, count: int) -> dict[str, Any]:
    """Columns of `rings` repeated to `count` rows, one opening and one member each."""
    row = np.arange(count) % 3
    offsets = np.arange(count + 1)
    return {
        "ids": np.array([f"ring-{index + 1}" for index in range(count)]),
        "gap_first": offsets,
        "member_first": offsets,
        "gap_um": np.full(count, 2.0),
        "gap_from_um": np.full((count, 2), 30.0),
        "gap_to_um": np.full((count, 2), 32.0),
        "member_injector": np.zeros(count, dtype=np.int64),
        "member_distance_um": np.ones(count),
    } | {
        name: getattr(rings, name)[row]
        for name in (
            "kind",
            "material",
            "polygons",
            "body",
            "net",
            "net_suits",
            "closed",
            "width_um",
            "width_at_um",
            "contacted_share",
            "between_emitters",
            "between_wells",
        )
    }


def test_the_same_scan_gives_the_same_bytes() -> None:
    assert heatmap_svg(synthetic_scan.scan()) == heatmap_svg(synthetic_scan.scan())


def test_nothing_is_added_where_nothing_is_known() -> None:
    root = drawn(synthetic_scan.evidence())
    assert not groups(root, "pin")
    assert not groups(root, "ring")
    assert not list(root.iter(f"{SVG}style"))
    assert "connection-key" not in {group.get("id") for group in root.iter(f"{SVG}g")}


def test_every_pin_tells_what_is_known_of_it(measured: Evidence, root: Element) -> None:
    pins = groups(root, "pin")
    assert [title(pin).split(":")[0] for pin in pins] == [
        f"Pin {name}" for name in ("VDD", "VIO", "VSS", "drive", "sense")
    ]
    drive = title(pins[3]).split("\n")
    share = "16.7 %"
    assert drive == [
        "Pin drive: signal, with a bond pad",
        "nets net-1",
        "works from 0 V to 1.98 V",
        "tested with 100 mA",
        f"injectors below ground: 6, largest shares n-1 {share}, n-5 {share}, n-9 {share}",
        "injectors above the supply: 1, largest shares p-1 100 %",
    ]
    supply = pin_summary(measured, 0).split("\n")
    assert supply[0] == "Pin VDD: supply, with a bond pad"
    assert supply[2] == "wiring shown: the 3 largest of 25 shapes"
    assert not any(line.startswith("tested") for line in supply)
    assert supply[-1] == "injectors above the supply: none"
    assert "not known" in pin_summary(measured, 4)


def test_names_stand_at_the_marks(root: Element) -> None:
    for pin in groups(root, "pin"):
        name = title(pin)[4:].split(":")[0]
        assert [text.text for text in pin.iter(f"{SVG}text")] == [name]
        assert len(inside(pin, "pin-mark")) == 1


def test_a_pin_holds_the_shapes_of_its_nets_hidden(measured: Evidence, root: Element) -> None:
    nets = measured.connections.nets
    vdd = groups(root, "pin")[0]
    (hidden,) = inside(vdd, "net")
    (shapes,) = inside(hidden, "net-shapes")
    # every rectangle is a subpath of its own
    pieces = int(np.sum(np.isin(nets.piece_node, np.flatnonzero(nets.node_net == VDD))))
    assert (shapes.get("d") or "").count("M") == pieces + 1, "and one bond pad"
    (style,) = root.iter(f"{SVG}style")
    assert ".pin .net{visibility:hidden" in (style.text or "")
    assert ".pin:hover .net" in (style.text or "")


def test_the_outline_of_a_net_is_its_pieces_and_pads(measured: Evidence) -> None:
    nets = measured.connections.nets
    found = shapely.union_all(net_outline(nets, np.array([VDD])))
    on_net = [
        shape
        for shape, node in zip(nets.piece_polygons, nets.piece_node.tolist(), strict=True)
        if nets.node_net[node] == VDD
    ]
    expected = shapely.union_all([*on_net, nets.pad_polygons[2]])
    assert found.symmetric_difference(expected).area < 1e-9
    assert len(net_outline(nets, np.array([], dtype=np.int64))) == 0


def test_a_pin_shows_injectors_behind_a_resistor_too(root: Element) -> None:
    sense = groups(root, "pin")[4]
    (hidden,) = inside(sense, "net")
    assert len(inside(hidden, "through")) == 1
    drive = groups(root, "pin")[3]
    assert not inside(drive, "through")


def test_injectors_behind_a_resistor_are_dotted(root: Element) -> None:
    found = {title(group).split(":")[0]: group for group in groups(root, "injector")}
    assert set(found) == {"Injector drive", "Injector sense"}
    assert title(found["Injector drive"]) == "Injector drive: 7 emitters that it can bias"
    assert title(found["Injector sense"]).split("\n") == [
        "Injector sense: 1 emitter that it can bias",
        "through a resistor 1 emitter, 250 ohm",
    ]
    dashes = {
        name: [path.get("stroke-dasharray") for path in group.iter(f"{SVG}path")]
        for name, group in found.items()
    }
    assert dashes["Injector drive"] == [None, None]
    assert dashes["Injector sense"] == [None, THROUGH_DASH]


def test_an_injector_that_no_pin_drives_is_drawn_as_direct(measured: Evidence) -> None:
    injectors = measured.connections.injectors
    count = len(injectors.pin)
    changed = synthetic_scan.changed(
        measured,
        "connections.injectors",
        pin=np.full(count, -1),
        reason=np.full(count, BY_MARKER),
        resistance_ohm=np.full(count, np.nan),
    )
    for group in groups(drawn(changed), "injector"):
        assert not inside(group, "through")
        assert "resistor" not in title(group)


def test_every_large_pad_of_a_pin_carries_its_name(measured: Evidence) -> None:
    pads = measured.connections.nets.pad_polygons.copy()
    pads[0], pads[1] = shapely.box(50.0, 30.0, 65.0, 45.0), shapely.box(90.0, 30.0, 105.0, 45.0)
    node = np.array(measured.connections.nets.pad_node)
    node[1] = node[0]
    changed = synthetic_scan.changed(measured, "connections.nets", pad_polygons=pads, pad_node=node)
    pin = groups(drawn(changed), "pin")[3]
    (mark,) = inside(pin, "pin-mark")
    boxes = [
        tuple(map(float, found))
        for found in re.findall(r"M(\S+) (\S+)H([\d.]+)V([\d.]+)H", mark.get("d") or "")
    ]
    texts = list(pin.iter(f"{SVG}text"))
    assert len(boxes) == len(texts) == 2
    for (x0, y0, x1, y1), text in zip(boxes, texts, strict=True):
        assert text.text == "drive"
        assert x0 < float(text.get("x") or "nan") < x1
        assert y0 < float(text.get("y") or "nan") < y1


def test_a_whole_well_can_be_an_injector(measured: Evidence) -> None:
    injectors = measured.connections.injectors
    emitter, body = np.array(injectors.emitter), np.array(injectors.body)
    emitter[-1], body[-1] = -1, 2
    ohm = np.where(np.arange(len(emitter)) == 1, np.nan, injectors.resistance_ohm)
    changed = synthetic_scan.changed(
        measured, "connections.injectors", emitter=emitter, body=body, resistance_ohm=ohm
    )
    titles = [title(group) for group in groups(drawn(changed), "injector")]
    assert titles == [
        "Injector drive: 7 emitters that it can bias\nthrough a resistor 1 emitter, not known",
        "Injector sense: 1 emitter and 1 well that it can bias\nthrough a resistor 1 well, 250 ohm",
    ]


def test_closed_rings_are_solid_open_ones_dashed_with_marked_openings(root: Element) -> None:
    found = {group.get("id"): group for group in groups(root, "ring")}
    assert set(found) == {"ring-1", "ring-2", "ring-3"}
    for name, group in found.items():
        (strips,) = inside(group, "strips")
        is_open = name != "ring-1"
        assert (strips.get("stroke-dasharray") is not None) == is_open
    opened = {group.get("id"): group for group in groups(root, "openings")}
    assert set(opened) == {"ring-2-openings", "ring-3-openings"}
    for group in opened.values():
        assert len(inside(group, "gap")) == len(inside(group, "opening")) == 1
    assert title(opened["ring-2-openings"]) == title(found["ring-2"])


def test_no_outline_of_a_finding_covers_an_opening() -> None:
    root = ElementTree.fromstring(heatmap_svg(synthetic_scan.scan()))
    order = [group.get("id") for group in root.iter(f"{SVG}g")]
    assert order.index("rings") < order.index("findings") < order.index("openings")


def test_rings_tell_what_is_known_of_them(measured: Evidence, root: Element) -> None:
    found = {group.get("id"): title(group) for group in groups(root, "ring")}
    assert found["ring-2"].split("\n") == [
        "ring-2: majority ring of substrate tap, open",
        "openings: 2 um at (2.000, 24.400) um",
        "least width 0.4 um, 30 % of its area near a contact",
        "on net-2 (VSS), which suits it",
        "1 injector inside, the nearest 0.4 um away",
        "between them 0 emitters of other nets and 0 foreign wells",
    ]
    assert "closed" in found["ring-1"]
    assert "openings" not in found["ring-1"]
    assert "does not suit" in found["ring-3"]
    unknown = np.full(3, -1)
    changed = synthetic_scan.changed(
        measured,
        "connections.rings",
        net=unknown,
        net_suits=unknown,
        contacted_share=np.full(3, np.nan),
    )
    assert "its net is not known" in ring_summary(changed, 0)
    assert "contact" not in ring_summary(changed, 0)


def test_the_panel_counts_what_is_not_marked(measured: Evidence) -> None:
    root = drawn(crowd(measured, 300, 400))
    assert len(groups(root, "pin")) == LARGEST_PIN_COUNT
    assert len(groups(root, "ring")) == LARGEST_RING_COUNT
    words = "\n".join(text.text or "" for text in root.iter(f"{SVG}text"))
    assert f"Not marked: {300 - LARGEST_PIN_COUNT} pins, {400 - LARGEST_RING_COUNT} rings" in words
    assert "Pins: 120 signal, 120 supply, 60 ground" in words


def test_pins_that_drive_and_rings_that_fail_come_first(measured: Evidence) -> None:
    many = crowd(measured, 300, 400)
    driving = set(np.unique(many.connections.injectors.pin).tolist())
    chosen = marked_pins(many)
    assert driving <= set(chosen)
    assert {str(many.connections.pins.kind[pin]) for pin in set(chosen) - driving} == {"signal"}
    rings = many.connections.rings
    kept = marked_rings(rings)
    assert not rings.closed[kept].any(), "267 are open"


def test_a_pin_outside_the_map_is_not_marked(measured: Evidence) -> None:
    x = np.array(measured.connections.pins.x_um)
    x[0], x[1] = 1e4, np.nan
    changed = synthetic_scan.changed(measured, "connections.pins", x_um=x)
    assert marked_pins(changed) == [2, 3, 4]


def test_names_that_find_no_room_leave_their_marks(measured: Evidence) -> None:
    many = crowd(measured, 60, 3)
    place = np.full(60, 20.0)
    bare = synthetic_scan.changed(many, "connections.nets", pad_node=np.full(4, -1))
    bare = synthetic_scan.changed(bare, "connections.pins", x_um=place, y_um=place)
    found = groups(drawn(bare), "pin")
    assert len(found) == 60
    named = [pin for pin in found if list(pin.iter(f"{SVG}text"))]
    assert 0 < len(named) < 60


def test_a_crowd_stays_small(measured: Evidence) -> None:
    many = crowd(measured, 2000, 3000)
    scan = dataclasses.replace(synthetic_scan.scan(), evidence=many)
    finding = scan.findings[0]
    findings = tuple(
        dataclasses.replace(finding, id=f"{finding.id}-{index}") for index in range(300)
    )
    data = heatmap_svg(dataclasses.replace(scan, findings=findings))
    assert sum(1 for _ in ElementTree.fromstring(data).iter()) <= 5_000
    assert len(data) <= 5_000_000


def test_a_large_connected_block_stays_small() -> None:
    large = synthetic_scan.evidence(rows=60, cells=187, connected=True)
    scan = dataclasses.replace(synthetic_scan.scan(), evidence=large, findings=())
    data = heatmap_svg(scan)
    assert len(data) <= 5_000_000
    assert sum(1 for _ in ElementTree.fromstring(data).iter()) <= 5_000


def test_a_wired_block_with_many_pins_stays_small() -> None:
    """Sixty pins on nets of 20 000 wires each, over the diffusions of 11 000 cells."""
    many = crowd(synthetic_scan.evidence(rows=60, cells=187, connected=True), 60, 3)
    rng = np.random.default_rng(3)
    x1, y1 = many.layout.regions.bbox_um[2:]
    corner = rng.uniform((0.0, 0.0), (x1, y1), size=(7 * 20_000, 2))
    long = rng.uniform(0.2, 40.0, size=len(corner))
    lying = rng.random(len(corner)) < 0.5
    side = np.where(lying[:, None], np.column_stack([long, 0 * long + 0.3]), 0.3)
    side[~lying, 1] = long[~lying]
    wired = synthetic_scan.changed(
        many,
        "connections.nets",
        shape_net=np.repeat(np.arange(7), 20_000),
        shape_layer=np.full(len(corner), 2),
        shape_box_um=np.hstack([corner, corner + side]),
        shape_polygon=np.full(len(corner), None, dtype=np.object_),
        shape_total=np.full(7, 30_000),
    )
    scan = dataclasses.replace(synthetic_scan.scan(), evidence=wired, findings=())
    data = heatmap_svg(scan)
    assert len(data) <= 2_500_000
    root = ElementTree.fromstring(data)
    assert sum(1 for _ in root.iter()) <= 5_000
    assert len(groups(root, "pin")) == 60
    assert all(len(inside(pin, "net-wiring")) == 1 for pin in groups(root, "pin"))


def test_many_injector_names_are_drawn_together(measured: Evidence) -> None:
    injector = np.array([f"pin-{row:03d}" for row in range(len(measured.layout.emitters.ids))])
    changed = synthetic_scan.changed(
        synthetic_scan.evidence(), "layout.emitters", injector=injector
    )
    root = drawn(changed)
    found = groups(root, "injector")
    assert len(found) == 121
    assert title(found[-1]) == f"Injectors of {len(injector) - 120} more pins"


def test_hostile_names_are_text(measured: Evidence) -> None:
    hostile = '"><script>alert(1)</script>\u0007\u202e}.pin{display:none}' + "z" * 500
    names = np.array(["VDD", "VIO", "VSS", hostile, "sense"])
    changed = synthetic_scan.changed(measured, "connections.pins", names=names)
    scan = dataclasses.replace(synthetic_scan.scan(), evidence=changed, findings=())
    data = heatmap_svg(scan)
    assert b"<script" not in data
    root = ElementTree.fromstring(data)
    (style,) = root.iter(f"{SVG}style")
    assert "display" not in (style.text or "")
    assert "url(" not in (style.text or "")
    assert re.search(r"@import|https?:", style.text or "") is None
    longest = max(len(text.text or "") for text in root.iter(f"{SVG}text"))
    assert longest <= 200
