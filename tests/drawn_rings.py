"""Rings of the sites in `drawn_sites`: of every shape and style of drawing, with every flaw."""

from __future__ import annotations

import math
import random
from dataclasses import dataclass
from itertools import pairwise
from typing import Any

import gdstk
import shapely
from drawn_sites import ALL_LAYERS, SUPPLIES, Box, Held, Point, Ring, Site, grown, middle


def octagon(box: Box, cut: float) -> Any:
    """A box with its corners cut at 45 degrees."""
    x0, y0, x1, y1 = box
    return shapely.Polygon(
        [
            (x0 + cut, y0), (x1 - cut, y0), (x1, y0 + cut), (x1, y1 - cut),
            (x1 - cut, y1), (x0 + cut, y1), (x0, y1 - cut), (x0, y0 + cut),
        ]
    )  # fmt: skip


def annulus(inner: Box, width: float, *, octagonal: bool) -> Any:
    """A closed ring around a box."""
    x0, y0, x1, y1 = inner
    outer = (x0 - width, y0 - width, x1 + width, y1 + width)
    if not octagonal:
        return shapely.box(*outer).difference(shapely.box(*inner))
    cut = round(0.25 * min(outer[2] - outer[0], outer[3] - outer[1]), 3)
    inside = round(cut - width * (2 - math.sqrt(2)), 3)
    return octagon(outer, cut).difference(octagon(inner, inside))


def slot(rng: random.Random, inner: Box, width: float, opening: float, *, oblique: bool) -> Any:
    """A quadrangle that cuts one straight arm of a ring, away from corners and octagons' cuts."""
    x0, y0, x1, y1 = inner
    side = rng.choice("nesw")
    low, high = (x0, x1) if side in "ns" else (y0, y1)
    # the slot must not meet a corner, nor the slanted arms of an octagon
    lean = rng.uniform(-1, 1) * min(0.9, math.atan(0.15 * (high - low) / (width + 2)))
    lean = lean if oblique else 0.0
    along = min(opening / math.cos(lean), 0.2 * (high - low))
    place = rng.uniform(0.45, 0.55) * (high - low) + low
    shift = (width + 2) * math.tan(lean)
    pieces = []
    for across, moved in ((-1.0, -shift / 2), (width + 1.0, shift / 2)):
        pieces.append((across, place - along / 2 + moved, place + along / 2 + moved))
    points = [(pieces[0][1], pieces[0][0]), (pieces[0][2], pieces[0][0]),
              (pieces[1][2], pieces[1][0]), (pieces[1][1], pieces[1][0])]  # fmt: skip
    turn = {
        "n": lambda a, b: (a, y1 + b),
        "s": lambda a, b: (a, y0 - b),
        "e": lambda a, b: (x1 + b, a),
        "w": lambda a, b: (x0 - b, a),
    }[side]
    return shapely.Polygon([turn(a, b) for a, b in points])


def opening_of(ring: Any, cut: Any) -> tuple[float, Point]:
    """Width and middle of the opening that a slot leaves in a ring: between its two faces."""
    edge = shapely.intersection(shapely.boundary(cut), ring)
    faces = [face for face in shapely.get_parts(shapely.line_merge(edge)) if face.length > 1e-6]
    assert len(faces) == 2, faces
    line = shapely.shortest_line(*faces)
    at = shapely.centroid(shapely.union_all(shapely.intersection(ring, cut)))
    return float(line.length), (at.x, at.y)


FLAWS = ("none", "slot", "narrow", "oblique", "corner", "two", "starved", "thin")
STYLES = ("bars", "keyhole", "halves", "pieces")


def arms(box: Box, width: float) -> list[Any]:
    """The four bars of a ring with this outer box, each of its full length."""
    x0, y0, x1, y1 = box
    return [
        shapely.box(x0, y0, x1, y0 + width), shapely.box(x0, y1 - width, x1, y1),
        shapely.box(x0, y0, x0 + width, y1), shapely.box(x1 - width, y0, x1, y1),
    ]  # fmt: skip


def pieces_of(shape: Any, style: str, rng: random.Random) -> list[Any]:
    """A shape cut into overlapping polygons without holes."""
    x0, y0, x1, y1 = grown(shape.bounds, 0.5)
    if style == "halves":
        at = (x0 + x1) / 2
        windows = [(x0, y0, at + 0.4, y1), (at - 0.4, y0, x1, y1)]
    elif style == "quarters":
        at_x, at_y = (x0 + x1) / 2 + 0.1, (y0 + y1) / 2 + 0.1
        windows = [
            (x0, y0, at_x, at_y), (at_x, y0, x1, at_y), (x0, at_y, at_x, y1), (at_x, at_y, x1, y1)
        ]  # fmt: skip
    else:
        at = sorted(rng.uniform(x0, x1) for _ in range(3))
        cuts = [x0, *at, x1]
        mid = rng.uniform(y0 + 2, y1 - 2)
        windows = [
            (left - 0.3, low, right + 0.3, high)
            for left, right in pairwise(cuts)
            for low, high in ((y0, mid + 0.2), (mid - 0.2, y1))
        ]
    found = []
    for window in windows:
        parts = shapely.get_parts(shapely.intersection(shape, shapely.box(*window)))
        found += [part for part in parts if part.geom_type == "Polygon" and part.area > 0]
    return found


def draw_shape(site: Site, layer: str, shape: Any, style: str) -> None:
    """Draw a shape with a hole or without in one of the styles."""
    if style == "keyhole":
        number, datatype = ALL_LAYERS[layer]
        for part in shapely.get_parts(shape):
            solid = gdstk.Polygon(shapely.get_coordinates(part.exterior)[:-1])
            holes = [gdstk.Polygon(shapely.get_coordinates(hole)[:-1]) for hole in part.interiors]
            found = gdstk.boolean(solid, holes, "not", layer=number, datatype=datatype)
            site.cell.add(*found)
        return
    for piece in pieces_of(shape, "quarters" if style == "bars" else style, site.rng):
        if not piece.interiors:
            site.shape(layer, piece)


@dataclass(slots=True, kw_only=True)
class Flawed:
    """A ring as drawn, with its openings, its least width and the part that has contacts."""

    shape: Any
    closed: Any
    gaps: list[tuple[float, Point]]
    least: float
    within: Box | None
    name: str


def flawed(rng: random.Random, inner: Box, width: float, flaw: str, *, octagonal: bool) -> Flawed:
    """A ring around a box with one kind of flaw."""
    whole = annulus(inner, width, octagonal=octagonal)
    outer = grown(inner, width)
    shape, gaps, within, least = whole, [], None, width
    cuts: list[Any] = []
    if flaw in ("slot", "narrow", "oblique"):
        wide = rng.uniform(0.02, 0.2) if flaw == "narrow" else rng.uniform(0.2, 2.5)
        cuts = [slot(rng, inner, width, wide, oblique=flaw == "oblique" or rng.random() < 0.4)]
    elif flaw == "corner":
        size = round(width + rng.uniform(0.05, 1.5), 3)
        x0, y0, x1, y1 = outer
        left, right = rng.choice(((x0 - 1, x0 + size), (x1 - size, x1 + 1)))
        low, high = rng.choice(((y0 - 1, y0 + size), (y1 - size, y1 + 1)))
        cuts = [shapely.box(left, low, right, high)]
    elif flaw == "two":
        while len(cuts) < 2:
            cut = slot(rng, inner, width, rng.uniform(0.1, 1.5), oblique=False)
            if not cuts or cut.distance(cuts[0]) > 2.5:
                cuts.append(cut)
    elif flaw == "starved":
        x0, y0, x1, y1 = outer
        within = (x0, y0, x1, y0 + width)
    elif flaw == "thin":
        least = round(rng.uniform(0.15, 0.45), 3)
        x0, y0, x1, y1 = outer
        reach = 0.38 * (x1 - x0)
        cuts = [shapely.box(x0 + reach, y1 - width + least, x1 - reach, y1 + 1)]
        shape = whole.difference(cuts[0])
        cuts = []
    for cut in cuts:
        gaps.append(opening_of(whole, cut))
        shape = shape.difference(cut)
    return Flawed(shape=shape, closed=whole, gaps=gaps, least=least, within=within, name=flaw)


def guard(
    site: Site, kind: str, inner: Box, net: str | None, *, label: str, material: str, suits: bool,
    flaw: str | None = None,
) -> Box:  # fmt: skip
    """Draw a ring of taps or strips around a box, on a net; return its outer box."""
    rng = site.rng
    width = round(rng.uniform(0.6, 1.6), 3)
    octagonal = min(inner[2] - inner[0], inner[3] - inner[1]) > 9 and rng.random() < 0.35
    if octagonal:
        inner = grown(inner, 0.25 * min(inner[2] - inner[0], inner[3] - inner[1]))
    flaw = rng.choice(FLAWS) if flaw is None else flaw
    if octagonal and flaw in ("corner", "thin"):
        flaw = "none"
    drawn = flawed(rng, inner, width, flaw, octagonal=octagonal)
    style, outer = rng.choice(STYLES), grown(inner, width)
    draw_shape(site, "active", drawn.shape, style)
    draw_shape(site, "metal1", drawn.closed, "halves")
    implant = drawn.closed.buffer(0.2, join_style="mitre")
    draw_shape(site, f"{kind}plus", implant, "bars")
    boxes = ring_contacts(site, drawn, outer, width)
    x0, y0, x1, y1 = outer
    if net is not None:
        in_x, in_y = 0.4 * (x1 - x0), 0.4 * (y1 - y0)
        site.port(
            net,
            (x0 + in_x, y0 + 0.3, x1 - in_x, y0 + width - 0.3),
            (x0 + in_x, y1 - width + 0.3, x1 - in_x, y1 - 0.3),
            (x0 + 0.3, y0 + in_y, x0 + width - 0.3, y1 - in_y),
            (x1 - width + 0.3, y0 + in_y, x1 - 0.3, y1 - in_y),
        )
    site.rings.append(
        Ring(
            kind=label,
            material=material,
            box=outer,
            net=net,
            suits=suits if net is not None else False,
            gaps=drawn.gaps,
            width=drawn.least,
            share=share_near(drawn.shape, boxes),
            style=f"{style}{' octagon' if octagonal else ''} {drawn.name}",
        )
    )
    return outer


def ring_contacts(site: Site, drawn: Flawed, outer: Box, width: float) -> list[Any]:
    """Fill a ring's arms with contacts."""
    boxes: list[Any] = []
    for arm in arms(outer, width):
        area = drawn.shape.intersection(arm)
        for part in shapely.get_parts(area):
            if part.geom_type == "Polygon":
                boxes += site.contacts(part, drawn.within)
    return boxes


def share_near(shape: Any, boxes: list[Any], reach: float = 2.0) -> float:
    """Share of a shape within reach of its contacts, in x and in y."""
    near = shapely.union_all([shapely.box(*grown(box.bounds, reach)) for box in boxes])
    return float(shape.intersection(near).area / shape.area)


def choose_net(
    rng: random.Random, right: tuple[str, ...], wrong: tuple[str | None, ...]
) -> tuple[str | None, bool]:
    """A rail that suits, or in one of five cases what does not."""
    if wrong and rng.random() < 0.2:
        return rng.choice(wrong), False
    return rng.choice(right), True


def collector(site: Site, inner: Box, *, net: str | None = None, flaw: str | None = None) -> Box:
    """A ring of n-well with a ring of taps in it, both cut by the same slot."""
    rng = site.rng
    width, tap = 2.4, 0.8
    flaw = rng.choice(("none", "none", "slot", "oblique", "narrow")) if flaw is None else flaw
    drawn = flawed(rng, inner, width, flaw, octagonal=False)
    outer = grown(inner, width)
    draw_shape(site, "nwell", drawn.shape, rng.choice(STYLES))
    inside = grown(inner, (width - tap) / 2)
    taps = annulus(inside, tap, octagonal=False)
    kept = taps.intersection(drawn.shape.buffer(-0.3, join_style="mitre"))
    draw_shape(site, "active", kept, "bars")
    draw_shape(site, "metal1", taps, "halves")
    implant = shapely.box(*grown(inside, tap + 0.2)).difference(shapely.box(*grown(inside, -0.2)))
    draw_shape(site, "nplus", implant, "bars")
    boxes = ring_contacts(
        site,
        Flawed(shape=kept, closed=taps, gaps=[], least=tap, within=None, name=""),
        grown(inside, tap),
        tap,
    )
    net = rng.choice(SUPPLIES) if net is None else net
    x0, y0, x1, y1 = grown(inside, tap / 2)
    in_x, in_y = 0.2 * (x1 - x0), 0.2 * (y1 - y0)
    site.port(
        net,
        *((x0 + in_x, y, x1 - in_x, y) for y in (y0, y1)),
        *((x, y0 + in_y, x, y1 - in_y) for x in (x0, x1)),
    )
    site.rings.append(
        Ring(
            kind="minority", material="nwell", box=outer, net=net, suits=True, gaps=drawn.gaps,
            width=width, share=share_near(drawn.shape, boxes), style=f"collector {drawn.name}",
        )
    )  # fmt: skip
    site.held.append(Held(kind="nwell", at=middle(outer), nets=(net,), rail=net))
    return outer
