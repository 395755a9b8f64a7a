"""Chips drawn at random: pads to diffusions, wells to rails and rings are what was drawn.

Source of every expectation: the numbers that `drawn_chips` drew, worked out by hand or with
shapely.  That the way of drawing changes nothing is Euclidean and hierarchical invariance.
What is connected does not depend on any field, so none is solved here but by the command.
"""

from __future__ import annotations

import json
import subprocess
import sys
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import gdstk
import numpy as np
import pytest
import shapely
from drawn_chips import Chip, draw_chip
from layouts import Block, fractured, turned

from latchscan.block.load import load_block
from latchscan.layout.connections import POLARITIES, RING_KINDS
from latchscan.layout.pairs import find_pairs
from latchscan.layout.source import open_layout
from latchscan.parasitics.model import BodyFields, Resistances, Transfers
from latchscan.report.record import scan_record
from latchscan.scan import Scan, ScanOptions, scan
from latchscan.tasks import Silent, Workers, open_workers
from latchscan.technology.load import load_technology

SEEDS = (2, 5, 13, 28)
TURNED_SEED = 7
PLACE_UM = 0.02
WIDTH_UM = 0.004
"""Corners of slots and octagons are rounded to the database unit of 1 nm, twice on each side."""
CUTS = {(20, 0), (22, 0), (24, 0), (26, 0)}
PLACES = {"x_um", "y_um", "bbox_um", "box_um", "width_at_um", "worst_tap_distance_at_um"}
NAMES = {"id", "subject", "message", "detail", "sentence", "file_name", "sha256", "top"}
LISTS = ("nets", "pins", "injectors", "rings", "bodies", "resistors", "findings", "caveats")


@pytest.fixture(scope="module", autouse=True)
def no_fields() -> Iterator[None]:
    """Leave out pairs and fields, which other tests solve and which take most of a scan."""

    def one_ohm(layout: Any, pairs: Any, *_: Any) -> BodyFields:
        every = np.ones(len(layout.emitters.ids) + len(layout.bodies))
        none = np.ones(len(pairs.anode))
        return BodyFields(
            resistances=Resistances(
                mean_ohm=every, max_ohm=every, patch_ohm=every, relative_error=0 * every
            ),
            transfers=Transfers(well_ohm=none, substrate_ohm=none),
        )

    with pytest.MonkeyPatch.context() as patch:
        patch.setattr("latchscan.scan.solve_wells", one_ohm)
        patch.setattr("latchscan.scan.solve_substrate", one_ohm)
        patch.setattr("latchscan.scan.find_pairs", lambda layout, _: find_pairs(layout, 1e-9))
        yield


def scanned(
    path: Path, block: Path | None, workers: Workers | None = None, window_um: Any = None
) -> Scan:
    """Scan a chip with or without its block file."""
    loaded = load_technology("larch180")
    source = open_layout(path, technology=loaded.technology, top=None)
    options = ScanOptions(block=None if block is None else load_block(block), window_um=window_um)
    return scan(source, loaded, options, workers or Workers())


def written(chip: Chip, folder: Path) -> tuple[Path, Path]:
    """The chip's layout and block file."""
    block = folder / "chip_block.yaml"
    block.write_text(chip.block_file(), encoding="utf-8")
    return chip.write(folder / "chip.gds"), block


def near(one: Any, other: Any, by: float = PLACE_UM) -> bool:
    """Whether two places or boxes agree."""
    return bool(np.abs(np.asarray(one) - np.asarray(other)).max() <= by)


def middle(box: Any) -> tuple[float, float]:
    """Middle of a box."""
    return (box[0] + box[2]) / 2, (box[1] + box[3]) / 2


def spoken(names: tuple[str, ...]) -> str:
    """Names of a net, but for Z: that label of the gates names whatever wire passes over it."""
    return "+".join(name for name in names if name != "Z")


@pytest.fixture(scope="module", params=SEEDS)
def chip(request: pytest.FixtureRequest) -> Chip:
    """One chip."""
    return draw_chip(request.param)


@pytest.fixture
def result(chip: Chip, tmp_path: Path, request: pytest.FixtureRequest) -> Scan:
    """Its scan, every second one without a block file."""
    layout, block = written(chip, tmp_path)
    seed = request.node.callspec.params["chip"]
    return scanned(layout, block if seed % 2 else None)


def test_what_is_drawn_is_what_is_found(chip: Chip, result: Scan) -> None:
    check_pins(chip, result)
    check_bodies(chip, result)
    check_rings(chip, result)
    check_openings(chip, result)
    check_findings(chip, result)


def check_pins(chip: Chip, result: Scan) -> None:
    """Every pin reaches the drawn diffusions and wells and no others."""
    connections, layout = result.evidence.connections, result.evidence.layout
    injectors, pins = connections.injectors, connections.pins
    found = []
    for row in range(len(injectors.pin)):
        emitter, body = int(injectors.emitter[row]), int(injectors.body[row])
        box = (
            layout.emitters.box_um[emitter]
            if emitter >= 0
            else shapely.total_bounds(layout.bodies[body].polygons)
        )
        way = POLARITIES[injectors.polarity[row]]
        pin = str(pins.names[injectors.pin[row]])
        found.append((pin, way, emitter < 0, middle(box), float(injectors.resistance_ohm[row])))
    for reached in chip.reached:
        key = (reached.pin, reached.polarity, reached.whole_well)
        rows = [row for row in found if row[:3] == key and near(row[3], reached.at)]
        assert len(rows) == 1, reached
        found.remove(rows[0])
        assert rows[0][4] == pytest.approx(reached.ohm, rel=reached.tolerance, abs=1e-6), reached
    assert found == []
    padded = {str(name) for name, pad in zip(pins.names, pins.has_pad, strict=True) if pad}
    assert padded == set(chip.padded)


def check_bodies(chip: Chip, result: Scan) -> None:
    """Every well hangs on the drawn nets and reaches the drawn rail."""
    evidence = result.evidence
    ties, nets = evidence.connections.ties, evidence.connections.nets
    left = [row for row, body in enumerate(evidence.layout.bodies) if body.kind != "substrate"]
    for held in chip.held:
        rows = [
            row
            for row in left
            if evidence.layout.bodies[row].kind == held.kind
            and near(middle(shapely.total_bounds(evidence.layout.bodies[row].polygons)), held.at)
        ]
        assert len(rows) == 1, held
        row = rows[0]
        left.remove(row)
        on = ties.net[ties.net_first[row] : ties.net_first[row + 1]].tolist()
        assert sorted(spoken(nets.names[net]) for net in on) == sorted(
            name or "" for name in held.nets
        ), held
        rail = int(ties.rail[row])
        if held.rail is None:
            assert rail < 0, held
        else:
            assert spoken(nets.names[rail]) in (held.rail, *held.nets), held
            assert ties.resistance_ohm[row] == pytest.approx(held.ohm, rel=0.12, abs=1e-6), held
    assert left == []


def check_rings(chip: Chip, result: Scan) -> None:
    """Every ring with its openings, net, width and contacts, and no ring that is not drawn."""
    connections = result.evidence.connections
    rings, nets = connections.rings, connections.nets
    left = list(range(len(rings.ids)))
    for drawn in chip.rings:
        rows = [
            row
            for row in left
            if RING_KINDS[rings.kind[row]] == drawn.kind
            and str(rings.material[row]) == drawn.material
            and near(shapely.bounds(rings.polygons[row]), drawn.box)
        ]
        assert len(rows) == 1, drawn
        row = rows[0]
        left.remove(row)
        run = slice(rings.gap_first[row], rings.gap_first[row + 1])
        assert bool(rings.closed[row]) is (not drawn.gaps), drawn
        widths = rings.gap_um[run].tolist()
        assert sorted(widths) == pytest.approx(sorted(w for w, _ in drawn.gaps), abs=WIDTH_UM)
        middles = ((rings.gap_from_um[run] + rings.gap_to_um[run]) / 2).tolist()
        for width, at in drawn.gaps:
            # anywhere along the slot
            assert any(near(at, place, max(width, drawn.width) + 0.05) for place in middles)
        assert spoken(nets.names[rings.net[row]]) == (drawn.net or ""), drawn
        assert rings.net_suits[row] == int(bool(drawn.suits)), drawn
        assert rings.width_um[row] == pytest.approx(drawn.width, abs=WIDTH_UM), drawn
        assert rings.contacted_share[row] == pytest.approx(drawn.share, abs=0.002), drawn
    assert left == []


def check_openings(chip: Chip, result: Scan) -> None:
    """Openings that keep a p-well from being isolated, and no others."""
    ties = result.evidence.connections.ties
    assert sorted(ties.gap_um.tolist()) == pytest.approx(
        sorted(width for width, _ in chip.openings), abs=WIDTH_UM
    )
    middles = (ties.gap_from_um + ties.gap_to_um) / 2
    for _, at in chip.openings:
        # anywhere along a slot through a well of 2.4 um
        assert any(near(at, place, 2.5) for place in middles)


def check_findings(chip: Chip, result: Scan) -> None:
    """Rules of rings speak of those rings that break them, and of no others."""
    told = dict.fromkeys(("ring-gap", "ring-net", "ring-width", "ring-contacts"), 0)
    for finding in result.findings:
        if finding.rule in told:
            told[finding.rule] += finding.count
    assert told == {
        "ring-gap": sum(bool(ring.gaps) for ring in chip.rings),
        "ring-net": sum(ring.suits is False for ring in chip.rings),
        "ring-width": sum(ring.width < 0.5 for ring in chip.rings),
        "ring-contacts": sum(ring.share is not None and ring.share < 0.5 for ring in chip.rings),
    }


# --- drawn otherwise ---------------------------------------------------------------------------


def as_block(chip: Chip) -> Block:
    """The chip as the builder of `layouts` knows blocks."""
    found = Block.__new__(Block)
    found.library, found.cell = chip.library, chip.top
    return found


def plain_record(result: Scan) -> dict[str, Any]:
    """`scan.json` without places, and with names instead of numbers."""
    record = json.loads(json.dumps(scan_record(result)))
    says = {net["id"]: "+".join(net["names"]) + net["kind"] for net in record["nets"]}
    says |= {body["id"]: f"{body['kind']} on {body['rail_pin']}" for body in record["bodies"]}
    numbered = ("net-", "ring-", "n-", "p-", "nwell-", "pwell-", "tap-", "site-")

    def plain(value: Any) -> Any:
        if isinstance(value, dict):
            return {key: plain(one) for key, one in value.items() if key not in PLACES | NAMES}
        if isinstance(value, list):
            return sorted((plain(one) for one in value), key=json.dumps)
        if isinstance(value, float):
            return float(f"{value:.3g}")
        if isinstance(value, str) and value.startswith(numbered):
            return says.get(value, value.split("-")[0])
        return value

    return {name: plain(record[name]) for name in (*LISTS, "totals", "regions")}


def redrawn(how: str, folder: Path) -> Path:
    """The chip of `TURNED_SEED`, drawn in another way."""
    chip = draw_chip(TURNED_SEED)
    if how in ("flat", "cut"):
        chip.top.flatten()
    if how == "flat":
        chip.library = gdstk.Library("flat", unit=1e-6, precision=1e-9)
        chip.library.add(chip.top)
        return chip.write(folder / "flat.gds")
    if how == "cut":
        found = fractured(as_block(chip), TURNED_SEED)
        cuts = [shape for shape in found.cell.polygons if (shape.layer, shape.datatype) in CUTS]
        found.cell.remove(*cuts)
        whole = [shape for shape in chip.top.polygons if (shape.layer, shape.datatype) in CUTS]
        found.cell.add(*whole)
        return found.write(folder / "cut.gds")
    turns, mirrored, move = {
        "moved": (0, False, (7.003, -3.011)),
        "mirrored": (0, True, (0.0, 0.0)),
        "turned": (1, False, (1234.567, -89.123)),
        "turned_back": (3, True, (0.001, 0.0)),
    }[how]
    found = turned(as_block(chip), quarter_turns=turns, mirrored=mirrored, move=move)
    return found.write(folder / "turned.gds")


@pytest.fixture(scope="module")
def folder(tmp_path_factory: pytest.TempPathFactory) -> Path:
    return tmp_path_factory.mktemp("unseen")


@pytest.fixture(scope="module")
def drawn(folder: Path) -> tuple[Path, Path]:
    """Layout and block file of the chip that is drawn in other ways."""
    return written(draw_chip(TURNED_SEED), folder)


@pytest.fixture(scope="module")
def whole(drawn: tuple[Path, Path], no_fields: None) -> Scan:
    """Its scan."""
    return scanned(*drawn)


@pytest.mark.parametrize("how", ["flat", "cut", "moved", "mirrored", "turned", "turned_back"])
def test_the_way_of_drawing_changes_nothing(
    how: str, folder: Path, drawn: tuple[Path, Path], whole: Scan
) -> None:
    one = plain_record(whole)
    other = plain_record(scanned(redrawn(how, folder), drawn[1]))
    if how == "cut":
        for net in (*one["nets"], *other["nets"]):
            del net["shape_counts"]
    for name in one:
        assert other[name] == one[name], name


def test_two_processes_find_the_same(drawn: tuple[Path, Path], whole: Scan) -> None:
    with open_workers(2, Silent()) as workers:
        shared = scanned(*drawn, workers)
    assert scan_record(shared) == scan_record(whole)


def test_a_window_knows_the_nets_of_the_whole_chip(drawn: tuple[Path, Path], whole: Scan) -> None:
    """Nets and pins are equal; whatever lies in the window is on the same pin by the same way."""
    x0, y0, x1, y1 = whole.origin.bbox_um
    window = (x0, y0, (x0 + x1) / 2, (y0 + y1) / 2)
    part = scanned(*drawn, window_um=window)
    assert part.evidence.connections.nets.names == whole.evidence.connections.nets.names
    assert part.evidence.connections.pins.names.tolist() == (
        whole.evidence.connections.pins.names.tolist()
    )

    def rows(result: Scan) -> set[tuple[Any, ...]]:
        injectors, boxes = result.evidence.connections.injectors, result.evidence.layout.emitters
        found = set()
        for row in np.flatnonzero(injectors.emitter >= 0).tolist():
            box = boxes.box_um[injectors.emitter[row]]
            if (box < np.array([x1, y1, window[2], window[3]])).all():
                ohm = float(f"{injectors.resistance_ohm[row]:.6g}")
                found.add((int(injectors.pin[row]), *np.round(box, 3).tolist(), ohm))
        return found

    assert rows(part) == rows(whole) != set()


def test_the_command_writes_the_same_truth(tmp_path: Path, repository: Path) -> None:
    """Pins, wells and rings of a small chip in `scan.json`, as the command writes it."""
    chip = draw_chip(3, sites=1)
    layout, block = written(chip, tmp_path)
    options = ["--tech", "larch180", "--block", str(block), "--out", str(tmp_path / "out")]
    run = subprocess.run(
        [sys.executable, "-m", "latchscan", "scan", str(layout), *options],
        cwd=repository,
        capture_output=True,
        text=True,
        check=False,
    )
    assert run.returncode in (0, 1), run.stderr
    record = json.loads((tmp_path / "out" / "scan.json").read_text(encoding="utf-8"))
    reached = sorted((row["pin"], row["polarity"]) for row in record["injectors"])
    assert reached == sorted((found.pin, found.polarity) for found in chip.reached)
    rings = sorted((ring["kind"], ring["closed"]) for ring in record["rings"])
    assert rings == sorted((ring.kind, not ring.gaps) for ring in chip.rings)
    bodies = [body for body in record["bodies"] if body["kind"] != "substrate"]
    assert sorted(str(body["rail_pin"]) for body in bodies) == sorted(
        str(held.rail) for held in chip.held
    )
