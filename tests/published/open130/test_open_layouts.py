"""Cells of an open 130 nm BiCMOS process, scanned with ``techfiles/open130.yaml``.

Sources: the GDSII files of the Python wheel ``ihp-gdsfactory`` 2.0.1 (Apache-2.0); the layer
numbers and layer derivations of the process's published layout rules (rev 0.4, sections 4.2
and 7.2).  Counts, areas and distances are checked against `shapely` on the flat layout that
`gdstk` reads, written out here without any code of the package.
"""

from __future__ import annotations

from functools import lru_cache
from pathlib import Path

import gdstk
import numpy as np
import pytest
import shapely
from shapely.geometry.base import BaseGeometry

from latchscan.layout.source import open_layout
from latchscan.scan import Scan, ScanOptions, scan
from latchscan.tasks import Workers
from latchscan.technology.load import load_technology

CLAMPS = ("diodevdd_2kv", "diodevdd_4kv", "diodevss_2kv", "diodevss_4kv", "nmoscl_2", "nmoscl_4")
TRANSISTORS = ("nmos", "pmos", "nmosHV", "pmosHV", "rfnmos", "rfpmos", "rfnmosHV", "rfpmosHV")
LOGIC = (
    "sg13g2_inv_1",
    "sg13g2_nand2_1",
    "sg13g2_a21o_1",
    "sg13g2_buf_16",
    "sg13g2_dfrbp_1",
    "sg13g2_mux4_1",
    "sg13g2_xor2_1",
    "sg13g2_sdfbbp_1",
)
SAMPLE_UM = 0.05


def scanned(path: Path, top: str | None = None) -> Scan:
    """Scan one cell as the command does."""
    loaded = load_technology("open130")
    source = open_layout(path, technology=loaded.technology, top=top)
    return scan(source, loaded, ScanOptions(), Workers())


@lru_cache(maxsize=64)
def drawn(path: Path, top: str) -> dict[tuple[int, int], BaseGeometry]:
    """Union of every layer of the flat cell [um]."""
    (cell,) = [cell for cell in gdstk.read_gds(path).cells if cell.name == top]
    layers: dict[tuple[int, int], list[BaseGeometry]] = {}
    for shape in cell.get_polygons():
        made = shapely.make_valid(shapely.Polygon(shape.points))
        layers.setdefault((shape.layer, shape.datatype), []).append(made)
    return {
        pair: shapely.set_precision(shapely.union_all(shapes), 0.001)
        for pair, shapes in layers.items()
    }


def roles(layers: dict[tuple[int, int], BaseGeometry]) -> dict[str, BaseGeometry]:
    """Emitters and taps by the derivations of section 4.2."""

    def layer(number: int, datatype: int = 0) -> BaseGeometry:
        return layers.get((number, datatype), shapely.Polygon())

    active, poly, p_drawn = layer(1), layer(5), layer(14)
    n_type = active.difference(p_drawn.union(layer(7, 21))).union(active & layer(7))
    p_type = active & p_drawn
    nwell = layer(31)
    pwell_kept_out = nwell.union(layer(46, 21)).difference(layer(46))
    return {
        "p_diffusion_in_nwell": (p_type & nwell).difference(poly),
        "n_diffusion_outside_nwell": n_type.difference(pwell_kept_out).difference(poly),
        "well_tap": n_type & nwell,
        "substrate_tap": p_type.difference(pwell_kept_out),
        "nwell": nwell,
    }


def pieces(shape: BaseGeometry) -> list[shapely.Polygon]:
    """The polygons of a shape, slivers of rounding left out."""
    parts = shapely.get_parts(shape)
    return [part for part in parts if part.geom_type == "Polygon" and part.area > 1e-6]


def cases() -> list[tuple[str, str]]:
    """File stem and top cell of every scanned cell."""
    alone = [(name, name) for name in (*CLAMPS, *TRANSISTORS, "scr1", "ptap", "ntap")]
    return alone + [("sg13g2_stdcell", name) for name in LOGIC]


@pytest.mark.parametrize(("stem", "top"), cases(), ids=lambda name: name)
def test_regions_and_distances(open_layouts: Path, stem: str, top: str) -> None:
    path = open_layouts / f"{stem}.gds"
    result = scanned(path, top)
    expected = roles(drawn(path, top))
    for name, shape in expected.items():
        found = result.evidence.layout.regions.shapes[name]
        assert len(found) == len(pieces(shape)), name
        assert shapely.area(found).sum() == pytest.approx(shape.area, abs=1e-4), name
    assert_distances(result)


def assert_distances(result: Scan) -> None:
    """Bound every tap distance from both sides by sampling: distance is 1-Lipschitz."""
    layout, distances = result.evidence.layout, result.evidence.distances
    contacted = layout.taps.contact_count > 0
    for row, emitter in enumerate(layout.emitters.polygons):
        own = contacted & (layout.taps.body == layout.emitters.body[row])
        claimed = distances.tap_distance_um[row]
        if not own.any():
            assert np.isnan(claimed)
            continue
        x0, y0, x1, y1 = emitter.bounds
        steps = [max(2, int((high - low) / SAMPLE_UM)) for low, high in ((x0, x1), (y0, y1))]
        x, y = np.meshgrid(np.linspace(x0, x1, steps[0]), np.linspace(y0, y1, steps[1]))
        points = shapely.points(x.ravel(), y.ravel())
        points = points[shapely.intersects(emitter, points)]
        sampled = shapely.distance(points, shapely.union_all(layout.taps.polygons[own])).max()
        assert sampled - 1e-6 <= claimed <= sampled + SAMPLE_UM * 2


def test_the_deliberate_thyristor_latches_first(open_layouts: Path) -> None:
    """`scr1` is a thyristor by intent; single transistors and logic cells are not."""
    thyristor = scanned(open_layouts / "scr1.gds").evidence.sites
    assert thyristor.loop_gain_ceiling[0] > 1
    fires_at = np.nanmin(thyristor.trigger_current_a)
    assert np.isfinite(fires_at)
    for stem, top in cases():
        if top == "scr1":
            continue
        other = scanned(open_layouts / f"{stem}.gds", top).evidence.sites
        fired = other.trigger_current_a[np.isfinite(other.trigger_current_a)]
        assert np.all(fired > fires_at), top


def test_the_thyristor_is_the_pair_of_isolated_wells(open_layouts: Path) -> None:
    """Its anode is one isolated p-well, its cathode the n+ in the other."""
    evidence = scanned(open_layouts / "scr1.gds").evidence
    pair = evidence.sites.pair[0]
    body = int(evidence.pairs.anode[pair]) - len(evidence.layout.emitters.ids)
    assert body >= 0
    assert evidence.layout.bodies[body].kind == "isolated_pwell"
    base = evidence.layout.bodies[evidence.pairs.base[pair]]
    assert base.kind == "isolated_pwell"
    assert base.id != evidence.layout.bodies[body].id


def test_a_layout_whose_only_injector_is_its_well(open_layouts: Path) -> None:
    """The varactor has an n-well on its pin W (its label) and no emitter at all."""
    result = scanned(open_layouts / "SVaricap.gds")
    evidence = result.evidence
    assert len(evidence.layout.emitters.ids) == 0
    injectors, pins = evidence.connections.injectors, evidence.connections.pins
    assert [str(pins.names[pin]) for pin in injectors.pin] == ["W"]
    assert injectors.emitter.tolist() == [-1]
    (missing,) = [finding for finding in result.findings if finding.rule == "ring-missing"]
    assert missing.subject == "nwell-1"
