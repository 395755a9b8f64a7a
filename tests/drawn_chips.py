"""Small chips drawn at random on the layers of ``larch180``, with the truth about each.

A chip is rows of *sites*.  A site is a cell of its own: a device that a pin drives, or a well,
with the rings around it; it is placed mirrored and turned at an odd offset.  Whatever a site
connects to the outside leaves it by a port, straight up through vias to metal 3, and by metal 3
to a metal 2 track in the channel above its row; metal 4 joins the tracks of a net across rows
and carries its bond pad.  So wires of all four metals cross wires of other nets everywhere.

`draw_chip(seed)` returns a `Chip`: the library, and what every reader of the drawing must find
out again.  The truth is worked out from the numbers that were drawn, by hand or with shapely,
never with the package under test.  Lengths are in um.
"""

from __future__ import annotations

import datetime
import math
import random
from dataclasses import dataclass, field
from pathlib import Path

import gdstk
import shapely
from drawn_rings import choose_net, collector, guard
from drawn_sites import (
    ALL_LAYERS,
    CONTACT_OHM,
    DEVICES,
    GROUNDS,
    LEVELS,
    POLY_OHM_SQ,
    SUPPLIES,
    Box,
    Held,
    Point,
    Reached,
    Ring,
    Site,
    grown,
    middle,
)

TRACK_STEP_UM = 1.3
TRUNK_STEP_UM, PAD_UM = 30.0, 22.0


@dataclass(slots=True, kw_only=True)
class Chip:
    """A drawing and its truth."""

    library: gdstk.Library
    top: gdstk.Cell
    pins: tuple[str, ...]
    padded: frozenset[str]
    nets: frozenset[str] = frozenset()
    reached: list[Reached] = field(default_factory=list)
    held: list[Held] = field(default_factory=list)
    rings: list[Ring] = field(default_factory=list)
    openings: list[tuple[float, Point]] = field(default_factory=list)
    unringed: list[Point] = field(default_factory=list)
    sites: list[str] = field(default_factory=list)

    def write(self, path: Path) -> Path:
        """Write the GDSII file and return its path."""
        self.library.write_gds(path, timestamp=datetime.datetime(2000, 1, 1))
        return path

    def block_file(self) -> str:
        """What a block file says of the chip."""
        lines = ["format: latchscan-block", "format_version: 1", "supplies:"]
        lines += [
            *(f"  {name}: {LEVELS[name]}" for name in SUPPLIES if name in self.nets),
            f"grounds: [{', '.join(name for name in GROUNDS if name in self.nets)}]",
            "pins:",
            *(f"  {pin}: {{kind: signal}}" for pin in self.pins),
        ]
        return "\n".join(lines) + "\n"


# --- sites ------------------------------------------------------------------------------------


def n_site(site: Site, pin: str, device: str) -> None:
    """An n-type device in the substrate, in a ring of taps and perhaps in a collector."""
    rng = site.rng
    box = DEVICES[device](site, "n", pin, rng.choice(GROUNDS))
    if rng.random() < 0.12:
        site.unringed += [found.at for found in site.reached]
        return
    net, suits = choose_net(rng, GROUNDS, (*SUPPLIES, pin, None))
    inner = grown(box, rng.uniform(1.0, 3.5))
    box = guard(site, "p", inner, net, label="majority", material="substrate_tap", suits=suits)
    more = rng.random()
    if more < 0.35:
        collector(site, grown(box, rng.uniform(0.8, 3.0)))
    elif more < 0.5:
        net, suits = choose_net(rng, SUPPLIES, ())
        inner = grown(box, rng.uniform(0.8, 3.0))
        guard(site, "n", inner, net, label="minority", material="n_strip", suits=suits)


def p_site(site: Site, pin: str, device: str) -> None:
    """A p-type device in a well, in a ring of taps and perhaps in a ring around the well."""
    rng = site.rng
    rail = rng.choice(SUPPLIES)
    box = DEVICES[device](site, "p", pin, rail)
    inner = grown(box, rng.uniform(1.0, 3.0))
    box = guard(site, "n", inner, rail, label="majority", material="well_tap", suits=True)
    well = grown(box, 0.6)
    site.rect("nwell", *well)
    site.held.append(Held(kind="nwell", at=middle(well), nets=(rail,), rail=rail))
    if rng.random() < 0.6:
        net, suits = choose_net(rng, GROUNDS, (pin, None))
        inner = grown(well, rng.uniform(0.8, 3.0))
        guard(site, "p", inner, net, label="minority", material="substrate_tap", suits=suits)


def isolated_site(site: Site, pin: str, device: str) -> None:
    """An n-type device in an isolated p-well, whose n-well ring may be open."""
    rng = site.rng
    ground, supply = rng.choice(GROUNDS), rng.choice(SUPPLIES)
    box = DEVICES[device](site, "n", pin, ground)
    inner = grown(box, rng.uniform(1.0, 3.0))
    box = guard(site, "p", inner, ground, label="majority", material="substrate_tap", suits=True)
    inner = grown(box, rng.uniform(0.8, 2.0))
    outer = collector(site, inner, net=supply, flaw=rng.choice(("none", "none", "slot", "oblique")))
    site.rect("deep_nwell", *grown(outer, -0.8))
    if site.rings[-1].gaps:
        site.openings += site.rings[-1].gaps
    else:
        site.held.append(Held(kind="isolated_pwell", at=middle(inner), nets=(ground,), rail=ground))


def logic_site(site: Site, pin: str, device: str) -> None:
    """Rows of gates on VDD and VSS from an array of a cell, every second row upside down."""
    rng = site.rng
    name = f"{site.name}_gate"
    cell = Site(site.library, name, rng)
    cell.rect("nwell", -0.5, 4.0, 6.5, 8.5)
    for kind, low, high in (("n", 1.0, 2.6), ("p", 4.8, 7.0)):
        cell.diffusion(kind, 0.4, low, 2.8, high)
        cell.rect("poly", 1.3, low - 0.3, 1.7, high + 0.3)
        for left in (0.5, 2.1):
            cell.contacts(shapely.box(left, low, left + 0.6, high))
    cell.rect("poly", 1.3, 2.6, 1.7, 5.0)
    cell.rect("metal1", 0.5, 0.0, 1.1, 2.6)
    cell.rect("metal1", 0.5, 4.8, 1.1, 8.0)
    cell.rect("metal1", 2.1, 1.0, 2.7, 7.0)
    cell.strap("p", 4.0, 1.0, 5.0, 2.6)
    cell.strap("n", 4.0, 4.8, 5.0, 7.0)
    cell.rect("metal1", 4.0, 0.0, 5.0, 1.0)
    cell.rect("metal1", 4.0, 7.0, 5.0, 8.0)
    number, texttype = ALL_LAYERS["text"]
    cell.cell.add(gdstk.Label("Z", (2.4, 3.5), layer=number, texttype=texttype))
    columns, rows = rng.randint(3, 6), rng.choice((2, 4))
    for row in range(rows):
        flipped = row % 2 == 1
        base = (row + 1 if flipped else row) * 8.0
        site.cell.add(
            gdstk.Reference(
                cell.cell, (0, base), x_reflection=flipped, columns=columns, spacing=(6.0, 0)
            )
        )
    right = columns * 6.0 - 1.0
    for rail in range(rows + 1):
        y = rail * 8.0
        site.rect("metal1", 0.0, y - 0.3, right, y + 0.3)
        site.port("VSS" if rail % 2 == 0 else "VDD", (0.3, y, right - 0.3, y))
    # wells of two rows that meet are one
    for pair in range(rows // 2):
        low, high = pair * 16.0 + 4.0, pair * 16.0 + 12.0
        at = middle((-0.5, low, columns * 6.0 + 0.5, high))
        site.held.append(Held(kind="nwell", at=at, nets=("VDD",), rail="VDD"))


def well_site(site: Site, pin: str, device: str) -> None:
    """An n-well tied in one of the ways that wells must not, or only may, be tied."""
    rng = site.rng
    width, height = round(rng.uniform(8, 14), 3), round(rng.uniform(6, 9), 3)
    site.rect("nwell", 0, 0, width, height)
    site.diffusion("p", width - 3, 2, width - 1.5, height - 2)
    at = (width / 2, height / 2)
    if device == "untied":
        site.diffusion("n", 1, 1, 2.5, height - 1)
        site.held.append(Held(kind="nwell", at=at, nets=(), rail=None))
        return
    site.strap("n", 1, 1, 2.5, height - 1)
    if device == "signal":
        site.port(pin, (1.3, 1.3, 2.2, height - 1.3))
        site.reached.append(Reached(pin=pin, polarity="below_ground", at=at, whole_well=True))
        site.held.append(Held(kind="nwell", at=at, nets=(pin,), rail=None))
        site.unringed.append(at)
    elif device == "internal":
        site.held.append(Held(kind="nwell", at=at, nets=(None,), rail=None))
    elif device == "two":
        site.strap("n", 3.5, 1, 4.5, 2.5)
        site.port("VDD", (1.3, height - 2.2, 2.2, height - 1.3))
        site.port("VDDIO", (3.8, 1.3, 4.2, 2.2))
        site.held.append(Held(kind="nwell", at=at, nets=("VDD", "VDDIO"), rail="VDD"))
    else:
        length, across = round(rng.uniform(3, 12), 3), rng.choice((0.6, 1.0))
        x, y = -1.0, round(height / 2, 3)
        site.rect("metal1", x - 0.8, y - 0.5, 1.2, y + 0.5)
        site.rect("poly", x - length - 1.6, y - across / 2, x, y + across / 2)
        ends = [site.contacts(shapely.box(left, y - 0.3, left + 0.8, y + 0.3))
                for left in (x - 0.8, x - length - 1.6)]  # fmt: skip
        site.rect("metal1", x - length - 1.6, y - 0.5, x - length - 0.8, y + 0.5)
        site.port("VDD", (x - length - 1.3, y - 0.2, x - length - 1.1, y + 0.2))
        squares = (length + 0.8 - 0.5) / across
        ohm = POLY_OHM_SQ * squares + CONTACT_OHM * sum(1 / len(end) for end in ends)
        site.held.append(Held(kind="nwell", at=at, nets=("VDD",), rail="VDD", ohm=ohm))


def well_resistor_site(site: Site, pin: str, device: str) -> None:
    """A marked n-well between a pin and a diode; the well itself is the first junction."""
    rng = site.rng
    length, width = round(rng.uniform(8, 20), 3), round(rng.uniform(3, 5), 3)
    right = length + 4.0
    site.rect("nwell", 0, 0, right, width)
    site.rect("well_resistor_marker", -0.2, -0.2, right + 0.2, width + 0.2)
    for left in (0.6, right - 1.6):
        many = site.strap("n", left, 0.6, left + 1.0, width - 0.6)
    start = right + 2.0
    site.rect("metal1", right - 1.6, 0.8, start + 0.5, 1.6)
    site.strap("n", start, 0.5, start + 3.0, 3.5)
    site.port(pin, (0.9, 0.9, 1.3, width - 0.9))
    at = (right / 2, width / 2)
    ohm = 900.0 * (right - 3.2) / width + 2 * CONTACT_OHM / many
    site.reached.append(Reached(pin=pin, polarity="below_ground", at=at, whole_well=True))
    site.reached.append(
        Reached(pin=pin, polarity="below_ground", at=(start + 1.5, 2.0), ohm=ohm, tolerance=0.15)
    )
    site.held.append(Held(kind="nwell", at=at, nets=(pin, None), rail=None))
    site.unringed += [at, (start + 1.5, 2.0)]


SITES = (
    *((n_site, device) for device in DEVICES),
    *((p_site, device) for device in ("diode", "fingers", "behind_diffusion")),
    *((isolated_site, device) for device in ("diode", "fingers", "behind_poly")),
    (logic_site, "gates"),
    *((well_site, device) for device in ("untied", "signal", "internal", "two", "poly")),
    (well_resistor_site, "resistor"),
)


# --- the chip ---------------------------------------------------------------------------------


@dataclass(frozen=True, slots=True, kw_only=True)
class Placed:
    """How a site is placed: mirrored in x, turned by quarters, then moved."""

    mirrored: bool
    quarters: int
    move: Point

    def point(self, at: Point) -> Point:
        """A place of the site on the chip."""
        x, y = at[0], -at[1] if self.mirrored else at[1]
        for _ in range(self.quarters):
            x, y = -y, x
        return x + self.move[0], y + self.move[1]

    def box(self, box: Box) -> Box:
        """A box of the site on the chip."""
        (a, b), (c, d) = self.point(box[:2]), self.point(box[2:])
        return min(a, c), min(b, d), max(a, c), max(b, d)


class _Router:
    """Tracks, trunks, pads and labels of a chip."""

    def __init__(self, top: Site, rng: random.Random) -> None:
        self.top, self.rng = top, rng
        self.rows: list[tuple[list[tuple[float, float, str]], dict[str, float]]] = []

    def channel(self, ports: list[tuple[float, float, str]], y: float) -> float:
        """Tracks for the ports of a row from `y` upwards; return the channel's upper end."""
        nets = sorted({net for _, _, net in ports})
        self.rng.shuffle(nets)
        track = {net: round(y + 1.0 + TRACK_STEP_UM * row, 3) for row, net in enumerate(nets)}
        for x, low, net in ports:
            self.top.rect("metal3", x - 0.2, low, x + 0.2, track[net] + 0.2)
            self.top.rect("metal3", x - 0.3, track[net] - 0.3, x + 0.3, track[net] + 0.3)
            self.top.rect("via2", x - 0.13, track[net] - 0.13, x + 0.13, track[net] + 0.13)
        self.rows.append((ports, track))
        return y + 2.0 + TRACK_STEP_UM * len(nets)

    def trunks(self, left: float, top_y: float, padded: frozenset[str]) -> None:
        """Join the tracks of every net by metal 4, up to its pad or its label."""
        nets = sorted({net for _, track in self.rows for net in track})
        self.rng.shuffle(nets)
        taken = [x for ports, _ in self.rows for x, _, _ in ports]
        for place, net in enumerate(nets):
            middle_x = left + 15.0 + TRUNK_STEP_UM * place
            while True:
                x = round(middle_x + self.rng.uniform(-3.5, 3.5), 3)
                if all(abs(x - other) > 1.0 for other in taken):
                    break
            low = top_y
            for ports, track in self.rows:
                if net in track:
                    y, low = track[net], min(low, track[net])
                    ends = [x, *(at for at, _, name in ports if name == net)]
                    self.top.rect("metal2", min(ends) - 0.3, y - 0.3, max(ends) + 0.3, y + 0.3)
                    for layer in ("metal3", "metal4"):
                        self.top.rect(layer, x - 0.3, y - 0.3, x + 0.3, y + 0.3)
                    for layer in ("via2", "via3"):
                        self.top.rect(layer, x - 0.13, y - 0.13, x + 0.13, y + 0.13)
            self.top.rect("metal4", x - 0.3, low - 0.3, x + 0.3, top_y + 1)
            if net in padded:
                half = PAD_UM / 2
                self.top.rect("metal4", x - half, top_y, x + half, top_y + PAD_UM)
                self.top.rect("pad", x - half + 2, top_y + 2, x + half - 2, top_y + PAD_UM - 2)
            number, texttype = ALL_LAYERS["text"]
            at = (x, top_y + (PAD_UM / 2 if net in padded else 0.5))
            self.top.cell.add(gdstk.Label(net, at, layer=number, texttype=texttype))


def draw_chip(seed: int, *, sites: int = 10) -> Chip:
    """Draw one chip."""
    rng = random.Random(seed)
    library = gdstk.Library(f"chip_{seed}", unit=1e-6, precision=1e-9)
    top = Site(library, "chip", rng)
    plan = [SITES[rng.randrange(len(SITES))] for _ in range(sites)]
    plan += [(logic_site, "gates"), (logic_site, "gates")]
    rng.shuffle(plan)
    left, y = round(rng.uniform(-300, 300), 3), round(rng.uniform(-300, 300), 3)
    router = _Router(top, rng)
    pins: list[str] = []
    chip = Chip(library=library, top=top.cell, pins=(), padded=frozenset())
    for first in range(0, len(plan), 5):
        x, highest, ports = left, y, []
        for number, (draw, device) in enumerate(plan[first : first + 5], start=first):
            pin = rng.choice(pins) if pins and rng.random() < 0.3 else f"P{number}"
            quarters = rng.randrange(4)
            site = Site(library, f"site_{number}_{device}", rng, quarters)
            draw(site, pin, device)
            if any(net == pin for _, _, net in site.ports) and pin not in pins:
                pins.append(pin)
            (x0, y0), (x1, y1) = site.cell.bounding_box()
            turn = Placed(mirrored=rng.random() < 0.5, quarters=quarters, move=(0, 0))
            box = turn.box((x0, y0, x1, y1))
            move = (round(x - box[0], 3), round(y - box[1] + rng.uniform(0, 8), 3))
            placed = Placed(mirrored=turn.mirrored, quarters=turn.quarters, move=move)
            top.cell.add(
                gdstk.Reference(
                    site.cell, move, rotation=turn.quarters * math.pi / 2,
                    x_reflection=turn.mirrored,
                )
            )  # fmt: skip
            _collect(chip, site, placed)
            ports += [(*placed.point((a, b)), net) for a, b, net in site.ports]
            highest = max(highest, box[3] + move[1])
            x = round(x + box[2] - box[0] + rng.uniform(3, 14), 3)
        y = round(router.channel(ports, highest + 1.0) + rng.uniform(3, 9), 3)
    chip.nets = frozenset(net for row, _ in router.rows for _, _, net in row)
    chip.pins = tuple(sorted(pins))
    chip.padded = frozenset(net for net in sorted(chip.nets) if rng.random() < 0.8)
    router.trunks(left, y + 2, chip.padded)
    return chip


def _collect(chip: Chip, site: Site, placed: Placed) -> None:
    """Add a site's truth to the chip's."""
    chip.sites.append(site.name)
    for found in site.reached:
        found.at = placed.point(found.at)
    for held in site.held:
        held.at = placed.point(held.at)
    for ring in site.rings:
        ring.box = placed.box(ring.box)
        ring.gaps = [(wide, placed.point(at)) for wide, at in ring.gaps]
    chip.reached += site.reached
    chip.held += site.held
    chip.rings += site.rings
    chip.openings += [(wide, placed.point(at)) for wide, at in site.openings]
    chip.unringed += [placed.point(at) for at in site.unringed]
