"""Which diffusions the labels of the open process's cells reach.

Source: the cells' own names and labels.  A standard cell's outputs are called X, Y, Z, Q, Q_N
or GCLK, every other pin but VDD and VSS is an input; the library's antenna cell, its bus keeper
and its tie cells say so in their names.  The clamps' names say which rail the pad's diode goes
to and how many kilovolts, that is how many fingers, it is drawn for.
"""

from __future__ import annotations

import warnings
from collections import Counter
from dataclasses import dataclass
from pathlib import Path

import gdstk
import numpy as np
import pytest

from latchscan.layout.bodies import assemble_layout
from latchscan.layout.connections import Injectors, Nets, Pins, Ties
from latchscan.layout.emitter_nets import emitter_nets
from latchscan.layout.injectors import find_injectors
from latchscan.layout.model import Layout
from latchscan.layout.nets import trace_nets
from latchscan.layout.pins import name_nets
from latchscan.layout.regions import derive_regions
from latchscan.layout.source import open_layout
from latchscan.layout.ties import tie_bodies
from latchscan.parasitics.resistors import link_resistances
from latchscan.tasks import Workers
from latchscan.technology.load import load_technology

OUTPUTS = {"X", "Y", "Z", "Q", "Q_N", "GCLK"}
ODD = {
    ("sg13g2_antennanp", "A"): {"p": 1, "n": 1},
    ("sg13g2_sighold", "SH"): {"p": 1, "n": 1},
    ("sg13g2_tiehi", "L_HI"): {"p": 1},
    ("sg13g2_tielo", "L_LO"): {"n": 1},
}
SHARED = ("VDD", "VSS", "dant", "dpant")
"""Labels of standard cells that are no signal's: the rails and remarks on antenna diodes."""
ANTENNA_DIODES = ("dantenna", "dpantenna")
"""Cells whose only label the technology calls a remark: it adds nothing to a net's own name."""
CELLS = {
    "dantenna": {"dant": {"n": 1}},
    "dpantenna": {"dpant": {"p": 1}},
    "diodevdd_2kv": {"PAD": {"p": 1}},
    "diodevdd_4kv": {"PAD": {"p": 2}},
    "diodevss_2kv": {"PAD": {"n": 1}},
    "diodevss_4kv": {"PAD": {"n": 2}},
    # between two rails: nothing that a signal pin drives
    "nmoscl_2": {},
    "nmoscl_4": {},
    # the n-well is the cathode; its anode is a contact to bare silicon, which no implant joins
    "schottky_nbl1": {"MINUS": {"nwell": 1}, "PLUS": {}, "TIE": {}},
    "ntap1": {"well": {"nwell": 1}},
    # two anodes in isolated p-wells, a cathode in each
    "scr1": {"A": {"n": 1, "pwell": 1}, "B": {"n": 1, "pwell": 1}},
}
"""What each signal label can inject from."""
RAILS = {
    # the diode's n-well and its tap on VDD, a ring of substrate taps on VSS
    "diodevdd_2kv": {"PAD": {"p": 1}, "VDD": {"nwell tap": 1}, "VSS": {"substrate tap": 1}},
    "diodevdd_4kv": {"PAD": {"p": 2}, "VDD": {"nwell tap": 1}, "VSS": {"substrate tap": 1}},
    # the diode's substrate taps on VSS, a ring of n-well on VDD
    "diodevss_2kv": {"PAD": {"n": 1}, "VDD": {"nwell tap": 1}, "VSS": {"substrate tap": 1}},
    "diodevss_4kv": {"PAD": {"n": 2}, "VDD": {"nwell tap": 1}, "VSS": {"substrate tap": 1}},
    # the fingers of a transistor between its rails, an isolated p-well and the n-well around it
    "nmoscl_2": {"VDD": {"n": 6, "nwell tap": 1}, "VSS": {"n": 7, "pwell tap": 1}},
    "nmoscl_4": {"VDD": {"n": 12, "nwell tap": 1}, "VSS": {"n": 13, "pwell tap": 1}},
    "schottky_nbl1": {"MINUS": {"nwell tap": 1}, "PLUS": {}, "TIE": {"substrate tap": 1}},
    "scr1": {"A": {"n": 1, "pwell tap": 1}, "B": {"n": 1, "pwell tap": 1}},
}
"""Emitters and taps on the net of each label of the clamps: which kinds, by the labels' names;
how many fingers, as traced once and held against change."""


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Reach:
    """What is on the nets of a layout."""

    layout: Layout
    nets: Nets
    pins: Pins
    ties: Ties
    injectors: Injectors

    def injected(self) -> dict[str, dict[str, int]]:
        """What every signal pin can inject from, by sort and count."""
        counts: dict[str, Counter[str]] = {
            str(name): Counter()
            for name, kind in zip(self.pins.names, self.pins.kind, strict=True)
            if kind == "signal"
        }
        found, layout = self.injectors, self.layout
        for row in np.flatnonzero(found.pin >= 0).tolist():
            emitter, body = int(found.emitter[row]), layout.bodies[found.body[row]]
            named = layout.emitters.ids[emitter] if emitter >= 0 else body.id
            counts[str(self.pins.names[found.pin[row]])][str(named).split("-")[0]] += 1
        return {name: dict(count) for name, count in counts.items()}

    def on_nets(self) -> dict[str, dict[str, int]]:
        """Emitters and taps on the net of every name, by sort and count."""
        counts = {name: Counter[str]() for names in self.nets.names for name in names}
        layout = self.layout
        shapes = [str(name).split("-")[0] for name in layout.emitters.ids]
        shapes += [f"{layout.bodies[body].id.split('-')[0]} tap" for body in layout.taps.body]
        net_of_shape = [*emitter_nets(layout, self.nets).tolist(), *self.ties.tap_net.tolist()]
        for shape, net in zip(shapes, net_of_shape, strict=True):
            for name in self.nets.names[net] if net >= 0 else ():
                counts[name][shape] += 1
        return {name: dict(count) for name, count in counts.items()}


def reach(path: Path, top: str) -> Reach:
    """Nets, pins and injectors of a layout without a block file."""
    technology = load_technology("open130").technology
    if top in ANTENNA_DIODES:
        spoken = technology.labels.model_copy(update={"remark_names": ()})
        technology = technology.model_copy(update={"labels": spoken})
    source, workers = open_layout(path, technology=technology, top=top), Workers()
    layout = assemble_layout(derive_regions(source, technology, None, workers), technology)
    nets = trace_nets(source, technology, workers)
    links = link_resistances(nets, technology)
    pins, _ = name_nets(nets, technology, None)
    ties = tie_bodies(layout, nets, links, pins, technology)
    found = find_injectors(layout, nets, links, pins, ties, internal=False)
    return Reach(layout=layout, nets=nets, pins=pins, ties=ties, injectors=found)


@pytest.mark.parametrize("cell", sorted(CELLS))
def test_clamps_and_devices_reach_what_their_names_say(cell: str, open_layouts: Path) -> None:
    found = reach(open_layouts / f"{cell}.gds", cell)
    assert found.injected() == CELLS[cell]
    if cell in RAILS:
        assert found.on_nets() == RAILS[cell]


@pytest.fixture(scope="module")
def standard_cells(
    open_layouts: Path, tmp_path_factory: pytest.TempPathFactory
) -> tuple[Reach, list[str]]:
    """All standard cells side by side, far apart; each signal's label with its cell's name."""
    library = gdstk.read_gds(open_layouts / "sg13g2_stdcell.gds")
    cells = [cell for cell in library.top_level() if cell.name.startswith("sg13g2_")]
    shelf = gdstk.Cell("SHELF")
    for row, cell in enumerate(cells):
        shelf.add(gdstk.Reference(cell, (100.0 * (row % 10), 100.0 * (row // 10))))
        for label in cell.labels:
            if label.text not in SHARED:
                label.text = f"{cell.name}:{label.text}"
    library.add(shelf)
    path = tmp_path_factory.mktemp("standard_cells") / "shelf.gds"
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        library.write_gds(path)
    return reach(path, "SHELF"), [cell.name for cell in cells]


def test_rails_of_standard_cells_are_separate(standard_cells: tuple[Reach, list[str]]) -> None:
    """Each cell has a net VDD and another VSS, and its other labels are on neither."""
    found, cells = standard_cells
    assert len(cells) > 70
    names = found.nets.names
    assert [on_net for on_net in names if len(on_net) > 1] == []
    kinds = dict(zip(found.pins.names.tolist(), found.pins.kind.tolist(), strict=True))
    assert kinds.pop("VDD") == "supply"
    assert kinds.pop("VSS") == "ground"
    assert set(kinds.values()) == {"signal"}
    for rail in ("VDD", "VSS"):
        nets = [row for row, on_net in enumerate(names) if on_net == (rail,)]
        at = {tuple(np.floor(found.nets.box_um[row, :2] / 100.0 + 0.5)) for row in nets}
        assert len(nets) == len(at) == len(cells)


def test_standard_cells_drive_from_their_outputs_and_from_nothing_else(
    standard_cells: tuple[Reach, list[str]],
) -> None:
    reached = standard_cells[0].injected()
    # every pin is looked at, inputs and outputs alike
    assert {name.split(":")[0] for name in reached} >= {"sg13g2_inv_1", "sg13g2_dfrbp_1"}
    assert len(reached) > 250
    for name, found in reached.items():
        cell, pin = name.split(":")
        if (cell, pin) in ODD:
            assert found == ODD[cell, pin]
        elif pin in OUTPUTS:
            assert set(found) == {"p", "n"}, name
        else:
            assert found == {}, name
