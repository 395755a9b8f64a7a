"""A small builder of layouts with injectors and strips for the tests of guard rings.

    site().n("pin", box).ptap("vss", ring).find()

Every net is a name: ``vdd`` a supply, ``vss`` a ground, ``-`` a net that nothing names, ``""``
no net, all others signal pins that drive what is on them.  Emitters on such a pin inject.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace
from pathlib import Path
from typing import Any, Self, cast

import numpy as np
import shapely

from latchscan.layout.connections import (
    ABOVE_SUPPLY,
    BELOW_GROUND,
    BY_PIN,
    Crossings,
    Injectors,
    Nets,
    Pins,
    Rings,
    Ties,
)
from latchscan.layout.model import (
    N_OUTSIDE_NWELL,
    P_IN_NWELL,
    SUBSTRATE_TAP,
    WELL_TAP,
    Body,
    Emitters,
    Layout,
    Regions,
    Taps,
)
from latchscan.layout.rings import find_rings
from latchscan.layout.source import LayoutSource
from latchscan.layout.unconnected import no_nets, no_pins, no_ties
from latchscan.technology.load import load_technology
from latchscan.technology.model import RingSearch, Technology

LARCH = Path(__file__).parents[2] / "techfiles" / "larch180.yaml"
KIND_OF = {"vdd": "supply", "vio": "supply", "vss": "ground", "-": "unknown"}
Boxes = Sequence[tuple[float, float, float, float]]


def technology(**search: float) -> Technology:
    """larch180 with another ring search."""
    loaded = load_technology(LARCH).technology
    return loaded.model_copy(update={"rings": RingSearch(**search)})


def column(shapes: Sequence[Any]) -> Any:
    """Shapes as an object array, also when there are none."""
    array = np.empty(len(shapes), dtype=object)
    array[:] = shapes
    return array


class Site:
    """A layout under construction; every method returns the site itself."""

    def __init__(self) -> None:
        self.wells: list[Any] = []
        self.emitters: list[tuple[str, int, Any]] = []
        self.taps: list[tuple[str, int, Any, Boxes]] = []
        self.injecting_wells: list[tuple[str, int]] = []

    def nwell(self, shape: Any) -> Self:
        """Add an n-well: a body of its own."""
        self.wells.append(shape)
        return self

    def n(self, net: str, *shapes: Any) -> Self:
        """Add n+ diffusions outside wells."""
        self.emitters += [(net, N_OUTSIDE_NWELL, shape) for shape in shapes]
        return self

    def p(self, net: str, *shapes: Any) -> Self:
        """Add p+ diffusions in wells."""
        self.emitters += [(net, P_IN_NWELL, shape) for shape in shapes]
        return self

    def ptap(self, net: str, shape: Any, contacts: Boxes = ((0, 0, 0.2, 0.2),)) -> Self:
        """Add substrate taps, one for each part of a shape."""
        parts = shapely.get_parts(shape)
        self.taps += [(net, SUBSTRATE_TAP, part, contacts) for part in parts]
        return self

    def ntap(self, net: str, shape: Any, contacts: Boxes = ((0, 0, 0.2, 0.2),)) -> Self:
        """Add well taps, one for each part of a shape."""
        parts = shapely.get_parts(shape)
        self.taps += [(net, WELL_TAP, part, contacts) for part in parts]
        return self

    def inject_well(self, net: str, well: int) -> Self:
        """Make a whole n-well an injector of a pin."""
        self.injecting_wells.append((net, well))
        return self

    def layout(self) -> Layout:
        """What is drawn."""
        bodies = [
            Body(id=f"nwell-{row + 1}", kind="nwell", polygons=column([shape]), sheets=())
            for row, shape in enumerate(self.wells)
        ]
        bodies.append(Body(id="substrate", kind="substrate", polygons=column([]), sheets=()))
        polygons = column([shape for _, _, shape in self.emitters])
        taps = column([shape for _, _, shape, _ in self.taps])
        contacts = [np.array(boxes).reshape(-1, 4) for _, _, _, boxes in self.taps]
        count = np.array([len(boxes) for boxes in contacts], dtype=np.int64)
        kind = np.array([kind for _, kind, _ in self.emitters], dtype=np.int64)
        return Layout(
            regions=Regions(
                bbox_um=(0, 0, 1, 1), shapes={}, contact_box_um=np.zeros((0, 4)), labels=()
            ),
            bodies=tuple(bodies),
            taps=Taps(
                polygons=taps,
                kind=np.array([kind for _, kind, _, _ in self.taps], dtype=np.int64),
                body=self._bodies([(kind == WELL_TAP, shape) for _, kind, shape, _ in self.taps]),
                contact_count=count,
                contact_first=np.concatenate([[0], np.cumsum(count)]).astype(np.int64),
                contact_box_um=np.concatenate([np.zeros((0, 4)), *contacts]),
            ),
            emitters=Emitters(
                ids=np.array([f"e-{row + 1}" for row in range(len(kind))], dtype=np.str_),
                polygons=polygons,
                kind=kind,
                body=self._bodies([(k == P_IN_NWELL, shape) for _, k, shape in self.emitters]),
                box_um=shapely.bounds(polygons).reshape(-1, 4),
                area_um2=np.asarray(shapely.area(polygons), dtype=np.float64),
                over_buried=np.zeros(len(kind), dtype=np.bool_),
                injector=np.full(len(kind), "", dtype="U8"),
            ),
        )

    def _bodies(self, shapes: Sequence[tuple[bool, Any]]) -> Any:
        found = []
        for in_well, shape in shapes:
            inside = [row for row, well in enumerate(self.wells) if well.covers(shape)]
            found.append(inside[0] if in_well else len(self.wells))
        return np.array(found, dtype=np.int64)

    def names(self) -> list[str]:
        """The nets that there are, in order."""
        used = {net for net, *_ in (*self.emitters, *self.taps, *self.injecting_wells)}
        return sorted(used - {""})

    def connected(self) -> tuple[Nets, Pins, Ties, Injectors]:
        """What the names say."""
        names, layout = self.names(), self.layout()
        number = {name: row for row, name in enumerate(names)} | {"": -1}
        kinds = [KIND_OF.get(name, "signal") for name in names]
        net = np.array([number[net] for net, _, _ in self.emitters], dtype=np.int64)
        nets = replace(
            no_nets(),
            node_net=np.arange(len(names)),
            piece_polygons=layout.emitters.polygons,
            piece_node=net,
        )
        pins = replace(
            no_pins(len(names)),
            net_kind=np.array(kinds, dtype="U16"),
            supply_known=any(kind in ("supply", "ground") for kind in kinds),
        )
        rail = np.full(len(layout.bodies), -1)
        tap_net = np.array([number[net] for net, *_ in self.taps], dtype=np.int64)
        for row in np.flatnonzero(layout.taps.kind == WELL_TAP)[::-1]:
            rail[layout.taps.body[row]] = tap_net[row]
        ties = replace(no_ties(len(layout.bodies), len(self.taps)), tap_net=tap_net, rail=rail)
        return nets, pins, ties, self._injectors(layout, net, number, kinds)

    def _injectors(self, layout: Layout, net: Any, number: Any, kinds: list[str]) -> Injectors:
        rows = [
            (kind, net[row], row, layout.emitters.body[row])
            for row, (_, kind, _) in enumerate(self.emitters)
            if net[row] >= 0 and kinds[net[row]] == "signal"
        ]
        rows += [(N_OUTSIDE_NWELL, number[name], -1, well) for name, well in self.injecting_wells]
        count = len(rows)
        kind, nets, emitter, body = np.array(rows, dtype=np.int64).reshape(-1, 4).T
        return Injectors(
            reason=np.full(count, BY_PIN),
            pin=nets,
            polarity=np.where(kind == N_OUTSIDE_NWELL, BELOW_GROUND, ABOVE_SUPPLY),
            emitter=emitter,
            body=body,
            net=nets,
            resistance_ohm=np.zeros(count),
            area_um2=np.ones(count),
            share=np.full(count, np.nan),
        )

    def find(self, source: Any = None, **search: float) -> tuple[Rings, Crossings]:
        """Rings and crossings of the site."""
        nets, pins, ties, injectors = self.connected()
        given = cast(LayoutSource, source)
        return find_rings(given, self.layout(), nets, pins, ties, injectors, technology(**search))


def site() -> Site:
    """Start a new site."""
    return Site()


def frame(x0: float, y0: float, x1: float, y1: float, width: float) -> Any:
    """A closed ring, its outer edges given."""
    inner = shapely.box(x0 + width, y0 + width, x1 - width, y1 - width)
    return shapely.box(x0, y0, x1, y1).difference(inner)
