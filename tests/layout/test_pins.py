"""What nets are called and what they are, on wiring written by hand.

Expected values follow from the block file format and the technology's patterns by definition;
the usual test current is that of JESD78, from memory.
"""

from __future__ import annotations

import numpy as np
import pytest
from connected import Wiring
from hypothesis import given
from hypothesis import strategies as st

from latchscan.block.load import LoadedBlock, load_block
from latchscan.errors import BlockError
from latchscan.layout.naming.places import pin_places
from latchscan.layout.pins import name_conflicts, name_nets
from latchscan.technology.load import load_technology

TECHNOLOGY = load_technology("larch180").technology

BLOCK = """\
format: latchscan-block
format_version: 1
supplies:
  VDD: {low_v: 1.62, typical_v: 1.8, high_v: 1.98}
  VDDIO: {low_v: 3.0, typical_v: 3.3, high_v: 3.6}
grounds: [VSS, VSSIO]
pins:
  OUT: {kind: signal, supply: VDDIO, test_current_a: 0.2}
  CORE: {kind: internal}
  SPARE: {kind: not_bonded, supply: VDD}
joined: [[VSS, VSSIO]]
"""
NAMES = ("VDD", "VDDIO", "VSS", "VSSIO", "OUT", "CORE", "SPARE")


@pytest.fixture
def loaded(tmp_path) -> LoadedBlock:
    path = tmp_path / "valve.yaml"
    path.write_text(BLOCK)
    return load_block(path)


def full_wiring(*without: str) -> Wiring:
    wiring = Wiring()
    for row, name in enumerate(NAMES):
        wiring.node(*(() if name in without else (name,)), at=(row, 10 + row))
    return wiring


def row(pins, name: str) -> int:
    return pins.names.tolist().index(name)


def codes(notes) -> list[str]:
    return [note.code for note in notes]


def detail(notes, code: str) -> str:
    (found,) = [note.detail for note in notes if note.code == code]
    return found


def test_a_block_file_says_what_each_name_is(loaded):
    nets = full_wiring().nets()
    pins, notes = name_nets(nets, TECHNOLOGY, loaded)
    assert pins.names.tolist() == ["CORE", "OUT", "SPARE", "VDD", "VDDIO", "VSS"]
    assert pins.kind.tolist() == [
        "internal", "signal", "not_bonded", "supply", "supply", "ground"
    ]  # fmt: skip
    assert pins.net_kind.tolist() == [
        "supply", "supply", "ground", "ground", "signal", "internal", "not_bonded"
    ]  # fmt: skip
    assert notes == ()
    assert pins.supply_known
    supply = row(pins, "VDDIO")
    assert (pins.low_v[supply], pins.high_v[supply]) == (3.0, 3.6)
    out = row(pins, "OUT")
    assert (pins.low_v[out], pins.high_v[out]) == (0.0, 3.6)
    assert pins.test_current_a[out] == 0.2
    assert np.isnan(np.delete(pins.test_current_a, out)).all()
    assert np.isnan(pins.high_v[row(pins, "CORE")])
    assert (pins.net_low_v[4], pins.net_high_v[4]) == (0.0, 3.6)
    assert (pins.x_um[out], pins.y_um[out]) == (4.0, 14.0)


def test_joined_names_are_one_pin_on_all_their_nets(loaded):
    pins, _ = name_nets(full_wiring().nets(), TECHNOLOGY, loaded)
    ground = row(pins, "VSS")
    assert pins.net[pins.net_first[ground] : pins.net_first[ground + 1]].tolist() == [2, 3]
    assert pins.joined_names[ground] == ("VSS", "VSSIO")
    assert pins.joined_names[row(pins, "OUT")] == ()
    assert pins.net_pin[2] == pins.net_pin[3] == ground
    assert pins.net_high_v[2] == pins.net_high_v[3] == 0.0


def test_a_name_the_layout_lacks_is_told_with_its_place_and_its_neighbours(loaded):
    wiring = full_wiring("OUT")
    wiring.node("OUT1")
    with pytest.raises(BlockError) as caught:
        name_nets(wiring.nets(), TECHNOLOGY, loaded)
    line = BLOCK.splitlines().index("  OUT: {kind: signal, supply: VDDIO, test_current_a: 0.2}")
    assert f"valve.yaml:{line + 1}:" in caught.value.message
    assert "'OUT1'" in caught.value.message
    assert "expected" in caught.value.message
    assert "\n" not in caught.value.message


def test_a_name_whose_labels_all_lie_on_nothing_is_told_too(loaded):
    wiring = full_wiring("VSSIO")
    wiring.loose_label("VSSIO", 3.5, -2.0)
    with pytest.raises(BlockError, match=r"lies on no shape.*\(3\.5, -2\)"):
        name_nets(wiring.nets(), TECHNOLOGY, loaded)


def test_labels_that_the_block_file_does_not_hold_are_internal(loaded):
    wiring = full_wiring()
    wiring.node("probe")
    wiring.node()
    pins, notes = name_nets(wiring.nets(), TECHNOLOGY, loaded)
    assert pins.net_kind[-2:].tolist() == ["internal", "unknown"]
    assert pins.net_pin[-2:].tolist() == [-1, -1]
    assert "probe" not in pins.names.tolist()
    assert notes == ()


def test_pads_beside_the_block_file_are_signal_pins_by_place(loaded):
    wiring = full_wiring()
    wiring.node("probe", pads=[(50, 50, 60, 60)])
    wiring.node(pads=[(90, 0, 100, 10), (200, 0, 210, 10)])
    pins, notes = name_nets(wiring.nets(), TECHNOLOGY, loaded)
    first, second = row(pins, "pad-1"), row(pins, "pad-2")
    assert (pins.x_um[first], pins.y_um[first]) == (95.0, 5.0)
    assert (pins.x_um[second], pins.y_um[second]) == (55.0, 55.0)
    assert pins.kind[[first, second]].tolist() == ["signal", "signal"]
    assert pins.has_pad[[first, second]].all()
    assert "`pad-1` at (95, 5) um" in detail(notes, "unnamed-pad")


def test_without_a_block_file_patterns_name_the_rails():
    wiring = Wiring()
    for name in ("vdd", "VSS", "OUT", "IN"):
        wiring.node(name)
    pins, notes = name_nets(wiring.nets(), TECHNOLOGY, None)
    assert pins.kind.tolist() == ["signal", "signal", "ground", "supply"]
    supply = TECHNOLOGY.loop.supply_v
    assert pins.low_v[row(pins, "vdd")] == pytest.approx(0.9 * supply)
    assert pins.high_v[row(pins, "vdd")] == pytest.approx(1.1 * supply)
    assert pins.high_v[row(pins, "VSS")] == 0.0
    assert pins.test_current_a[row(pins, "IN")] == 0.1
    assert np.isnan(pins.high_v[row(pins, "IN")])
    assert codes(notes) == ["assumed-supply", "assumed-pins"]
    assert "`vdd`" in detail(notes, "assumed-supply")
    assert detail(notes, "assumed-pins") == "2: `IN`, `OUT`"


@pytest.mark.parametrize(("copies", "is_pin"), [(1, True), (4, True), (5, False)])
def test_a_name_on_many_nets_is_local_to_its_cells(copies, is_pin):
    wiring = Wiring()
    wiring.node("VDD")
    for _ in range(copies):
        wiring.node("A")
    pins, notes = name_nets(wiring.nets(), TECHNOLOGY, None)
    assert ("A" in pins.names.tolist()) == is_pin
    assert ("local-names" in codes(notes)) == (not is_pin)
    if is_pin:
        assert np.diff(pins.net_first)[row(pins, "A")] == copies
    else:
        assert pins.net_kind[1:].tolist() == ["internal"] * copies


def test_a_rail_is_never_a_local_name():
    wiring = Wiring()
    for _ in range(9):
        wiring.node("VSS", "A")
    pins, _ = name_nets(wiring.nets(), TECHNOLOGY, None)
    assert pins.names.tolist() == ["VSS"]
    assert pins.net_kind.tolist() == ["ground"] * 9


def test_a_local_name_names_the_only_bond_pad_it_has_and_no_other():
    wiring = Wiring()
    for copy in range(6):
        wiring.node("P", "Q", pads=[(20 * copy, 0, 20 * copy + 10, 10)] if copy == 3 else [])
    pins, notes = name_nets(wiring.nets(), TECHNOLOGY, None)
    assert pins.names.tolist() == ["P"]
    assert pins.net.tolist() == [3]
    assert detail(notes, "local-names") == "1: `Q`"


def test_several_pads_under_one_local_name_are_several_pins():
    wiring = Wiring()
    for copy in range(6):
        wiring.node("P", pads=[(20 * copy, 0, 20 * copy + 10, 10)] if copy < 2 else [])
    pins, _ = name_nets(wiring.nets(), TECHNOLOGY, None)
    assert pins.names.tolist() == ["pad-1", "pad-2"]


def test_a_net_of_several_names_is_its_rail_then_the_first_of_the_alphabet():
    wiring = Wiring()
    wiring.node("OUT", "VSS", "VDD")
    wiring.node("B", "C")
    pins, _ = name_nets(wiring.nets(), TECHNOLOGY, None)
    assert pins.names.tolist() == ["B", "VDD"]
    assert pins.net_kind.tolist() == ["supply", "signal"]


def test_without_rails_ties_cannot_be_judged():
    wiring = Wiring()
    wiring.node("A")
    pins, notes = name_nets(wiring.nets(), TECHNOLOGY, None)
    assert not pins.supply_known
    assert "no-supplies" in codes(notes)


def test_without_conductors_nothing_is_named(loaded):
    bare = TECHNOLOGY.model_copy(update={"conductors": None})
    pins, notes = name_nets(Wiring().nets(), bare, loaded)
    assert len(pins.names) == 0
    assert codes(notes) == ["no-conductors"]


def test_labels_on_nothing_are_told_one_by_one_up_to_eight():
    wiring = Wiring()
    wiring.node("VDD")
    for place in range(10):
        wiring.loose_label("A", 1.2, 3.4 + place)
    _, notes = name_nets(wiring.nets(), TECHNOLOGY, None)
    told = [note.detail for note in notes if note.code == "label-on-nothing"]
    assert told[0] == "`A` (8/25) at (1.2, 3.4) um, expected metal1"
    assert len(told) == 9
    assert told[-1] == "2 more"


def test_a_layout_of_loose_labels_alone_has_no_pins(loaded):
    wiring = Wiring()
    wiring.loose_label("A", 0, 0)
    nets = wiring.nets()
    pins, notes = name_nets(nets, TECHNOLOGY, None)
    assert len(pins.names) == 0
    assert codes(notes) == ["label-on-nothing", "no-supplies"]
    assert pin_places(nets, pins)[0].tolist() == []
    with pytest.raises(BlockError, match="the layout has none"):
        name_nets(nets, TECHNOLOGY, loaded)


def test_a_pad_on_nothing_is_told_and_is_no_pin():
    wiring = Wiring()
    wiring.node("VDD")
    wiring.loose_pad((0, 0, 10, 10))
    pins, notes = name_nets(wiring.nets(), TECHNOLOGY, None)
    assert pins.names.tolist() == ["VDD"]
    assert detail(notes, "pad-on-nothing") == "1, the first at (5, 5) um"


def test_conflicts_are_nets_of_two_names_and_names_of_two_nets():
    wiring = Wiring()
    wiring.node("VDD", "VCC", at=(3, 4))
    wiring.node("OUT", at=(1, 1))
    wiring.node("OUT", at=(2, 2))
    for _ in range(5):
        wiring.node("A", "B")
    nets = wiring.nets()
    pins, _ = name_nets(nets, TECHNOLOGY, None)
    found = name_conflicts(nets, pins)
    assert found.subject == ("net-1", "OUT")
    assert found.names == (("VCC", "VDD"), ("OUT",))
    assert found.nets == ((0,), (1, 2))
    assert found.count.tolist() == [2, 2]
    assert found.x_um.tolist() == [3.0, 1.0]


def test_joined_names_and_nets_are_no_conflict(loaded):
    wiring = full_wiring()
    wiring.node("VSSIO", "VSS")
    nets = wiring.nets()
    pins, _ = name_nets(nets, TECHNOLOGY, loaded)
    assert name_conflicts(nets, pins).subject == ()
    # the same names, joined by nothing
    apart, _ = name_nets(nets, TECHNOLOGY, None)
    assert name_conflicts(nets, apart).subject == ("net-8", "VSS", "VSSIO")


@given(st.lists(st.sets(st.sampled_from(["VDD", "VSS", "A", "B", "C"]), max_size=3), max_size=8))
def test_pins_and_nets_agree_whatever_the_names(names):
    wiring = Wiring()
    for found in names:
        wiring.node(*found)
    nets = wiring.nets()
    pins, _ = name_nets(nets, TECHNOLOGY, None)
    assert pins.names.tolist() == sorted(pins.names.tolist())
    owner = np.repeat(np.arange(len(pins.names)), np.diff(pins.net_first))
    assert sorted(pins.net.tolist()) == np.flatnonzero(pins.net_pin >= 0).tolist()
    assert (pins.net_pin[pins.net] == owner).all()
    for net, pin in enumerate(pins.net_pin.tolist()):
        if pin >= 0:
            assert pins.names[pin] in nets.names[net]
            assert pins.net_kind[net] == pins.kind[pin]
        rails = {"VDD", "VSS"} & set(nets.names[net])
        assert (pins.net_kind[net] in ("supply", "ground")) == bool(rails)
