"""net-names: several names on one net, one name on several nets, and how messages show names.

The expected values are planted here by hand; that names must be unambiguous is common practice,
no published source.
"""

from __future__ import annotations

import numpy as np
import pytest
import synthetic_scan
from synthetic_connections import DRIVE, SENSE, SENSE_INNER, VDD, VIO, VSS, WELL_NET
from synthetic_scan import changed, findings_of

from latchscan.layout.connections import Connections
from latchscan.layout.model import Label
from latchscan.rules import judge
from latchscan.rules.model import Evidence
from latchscan.rules.rails import LONGEST_NAME, net_title, same_rail, short_name

NETS = "connections.nets"


@pytest.fixture(name="measured")
def _measured() -> Evidence:
    return synthetic_scan.evidence(connected=True)


def named(measured: Evidence, **more: tuple[str, ...]) -> Evidence:
    """The same with further names on nets, each by a label at (50, 10 x net) um."""
    nets = measured.connections.nets
    rows = {"vdd": VDD, "vss": VSS, "inner": SENSE_INNER, "well": WELL_NET, "vio": VIO}
    names = list(nets.names)
    labels, nodes = list(nets.labels), nets.label_node.tolist()
    for key, texts in more.items():
        net = rows[key]
        names[net] = tuple(sorted({*names[net], *texts}))
        labels += [
            Label(text=text, layer=8, texttype=25, x_um=50.0, y_um=10.0 * net) for text in texts
        ]
        nodes += [net] * len(texts)
    return changed(
        measured,
        NETS,
        names=tuple(names),
        labels=tuple(labels),
        label_node=np.array(nodes),
        label_conductor=("metal1",) * len(labels),
    )


def joined(measured: Evidence, *names: str) -> Evidence:
    """The same with `names` joined by the block file into the first pin."""
    groups = (tuple(sorted(names)), *((),) * 4)
    return changed(measured, "connections.pins", joined_names=groups)


def with_pin(measured: Evidence, name: str) -> Evidence:
    """The same with its last pin called `name`."""
    names = measured.connections.pins.names.tolist()
    return changed(measured, "connections.pins", names=np.array([*names[:-1], name]))


def test_finds_a_net_of_two_names(measured: Evidence) -> None:
    assert findings_of("net-names", measured) == ()
    (found,) = findings_of("net-names", named(measured, well=("A", "B")))
    assert (found.subject, found.body, found.count) == ("net-7", "", 1)
    assert (found.measured, found.limit, found.unit) == (2.0, 1.0, "1")
    assert (found.x_um, found.y_um) == (50.0, 60.0)
    x0, y0, x1, y1 = found.box_um
    assert (x0, y0) == (15.0, 43.0)
    assert (x1, y1) == (50.0, 60.0)
    assert "Net net-7 carries 2 names (A, B), the first at (50.000, 60.000) um" in found.message


def test_finds_a_name_on_two_nets(measured: Evidence) -> None:
    (found,) = findings_of("net-names", named(measured, inner=("VDD",)))
    assert (found.subject, found.measured, found.limit) == ("VDD", 2.0, 1.0)
    assert (found.x_um, found.y_um) == (61.0, -1.5)
    assert "The name VDD lies on 2 separate nets (net-3, net-5)" in found.message


def test_names_that_the_block_file_joins_are_one(measured: Evidence) -> None:
    both = named(measured, vss=("VSSIO",), inner=("VSSIO",))
    assert {one.subject for one in findings_of("net-names", both)} == {"net-2"}
    apart = with_pin(both, "VSSIO")
    assert {one.subject for one in findings_of("net-names", apart)} == {"net-2", "VSSIO"}
    assert findings_of("net-names", joined(both, "VSS", "VSSIO")) == ()


def test_a_local_name_of_placed_cells_is_no_break(measured: Evidence) -> None:
    every = dict.fromkeys(("vdd", "vss", "inner", "well", "vio"), ("A",))
    assert findings_of("net-names", named(measured, **every)) == ()
    del every["vio"]
    found = findings_of("net-names", with_pin(named(measured, **every), "A"))
    assert max(one.measured for one in found) == 4.0
    assert "A" in [one.subject for one in found]


def test_every_conflict_is_a_finding_of_its_own(measured: Evidence) -> None:
    found = findings_of("net-names", named(measured, well=("A", "B", "C"), inner=("D", "E")))
    assert [(one.subject, one.measured) for one in found] == [("net-7", 3.0), ("net-5", 2.0)]


def test_long_lists_and_long_names_are_cut(measured: Evidence) -> None:
    texts = tuple(f"{letter}{'x' * 300}" for letter in "ABCDEFG")
    (found,) = findings_of("net-names", named(measured, well=texts))
    assert found.measured == 7.0
    assert "and 3 more" in found.message
    assert len(found.message) < 500


def test_without_nets_there_are_no_names() -> None:
    measured = synthetic_scan.evidence()
    found = judge(measured, synthetic_scan.technology())
    assert "net-names" not in [one.rule for one in found]


@pytest.fixture(name="connections")
def _connections(measured: Evidence) -> Connections:
    return measured.connections


def test_titles_of_nets(connections: Connections, measured: Evidence) -> None:
    assert net_title(connections, DRIVE) == "drive (net-1)"
    assert net_title(connections, SENSE_INNER) == "unnamed net-5"
    pins = connections.pins
    names = pins.names.copy()
    names[pins.net_pin[SENSE]] = "pad-1"
    padded = changed(measured, "connections.pins", names=names).connections
    assert net_title(padded, SENSE) == "pad-1/sense (net-4)"
    assert len(short_name("y" * 999)) == LONGEST_NAME


def test_rails_are_one_by_net_by_pin_or_by_name(
    connections: Connections, measured: Evidence
) -> None:
    assert same_rail(connections, VDD, VDD)
    assert not same_rail(connections, VDD, VIO)
    assert not same_rail(connections, SENSE_INNER, WELL_NET), "two nets without pin or name"
    assert not same_rail(connections, -1, VDD)
    assert same_rail(named(measured, inner=("VDD",)).connections, VDD, SENSE_INNER)
