"""Injectors on the map: outlined, with a dotted line where a resistor lies between."""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass, field
from xml.etree.ElementTree import Element

import numpy as np
import shapely

from latchscan.layout.model import Box
from latchscan.report.frame import Frame, page_box
from latchscan.report.palette import INJECTOR_INK, PAPER
from latchscan.report.placing import Places
from latchscan.report.plain import measure, plain_text
from latchscan.report.relations import injector_name
from latchscan.report.svg_parts import add, add_haloed, add_title, number, text_width
from latchscan.rules.model import Evidence

LARGEST_NAME_COUNT = 60
"""More names than this are not written on the map."""
LARGEST_GROUP_COUNT = 120
"""Injectors beyond this many pins are drawn together."""
THROUGH_DASH = "1.4 1.8"
_SMALLEST = 3.0
_CLOSED_GAP = 6.0


@dataclass(slots=True, kw_only=True)
class Reached:
    """What one pin or marker can bias.

    Attributes
    ----------
    direct, through
        Emitters (index) and drawn wells (body, polygon number) without, and with, resistance
        on the way to them.
    least_ohm, most_ohm
        Smallest and largest resistance on the way to those of `through`; NaN where none is
        known.
    """

    direct: list[int | tuple[int, int]] = field(default_factory=list)
    through: list[int | tuple[int, int]] = field(default_factory=list)
    least_ohm: float = np.nan
    most_ohm: float = np.nan

    def take(self, members: Iterable[int | tuple[int, int]], ohm: float) -> None:
        """Add emitters or wells that lie behind `ohm` (NaN where it was not worked out)."""
        if ohm == 0.0:
            self.direct += members
            return
        self.through += members
        self.least_ohm = float(np.fmin(self.least_ohm, ohm))
        self.most_ohm = float(np.fmax(self.most_ohm, ohm))


def reached_by_name(evidence: Evidence, rows: Iterable[int] | None = None) -> dict[str, Reached]:
    """Name of a pin or marker -> what it can bias, by name; of some `rows` or of all."""
    injectors, emitters = evidence.connections.injectors, evidence.layout.emitters
    found: dict[str, Reached] = {}
    chosen = range(len(injectors.pin)) if rows is None else rows
    for row in chosen:
        emitter, body = int(injectors.emitter[row]), int(injectors.body[row])
        wells = evidence.layout.bodies[body].polygons
        members = [emitter] if emitter >= 0 else [(body, well) for well in range(len(wells))]
        reached = found.setdefault(injector_name(evidence, row), Reached())
        # where no pin drives it there is no way from a pin, hence no resistance on it
        driven = int(injectors.pin[row]) >= 0
        reached.take(members, float(injectors.resistance_ohm[row]) if driven else 0.0)
    if rows is None:
        # where no net is known an emitter carries its injector's name and nothing else
        bare = emitters.injector != ""
        bare[injectors.emitter[injectors.emitter >= 0]] = False
        for emitter in np.flatnonzero(bare).tolist():
            found.setdefault(str(emitters.injector[emitter]), Reached()).take([emitter], 0.0)
    return {name: found[name] for name in sorted(found)}


def add_injectors(parent: Element, evidence: Evidence, frame: Frame, places: Places) -> None:
    """Outline every injector and name each pin once."""
    group = add(parent, "g", id="injectors", fill="none", stroke=INJECTOR_INK)
    found = reached_by_name(evidence)
    names = list(found)
    for name in names[:LARGEST_GROUP_COUNT]:
        member = add(group, "g", class_="injector")
        add_title(member, injector_summary(name, found[name]))
        add_outlines(member, evidence, frame, found[name])
        if len(names) <= LARGEST_NAME_COUNT:
            first = (found[name].direct + found[name].through)[:1]
            _add_name(member, name, _boxes(evidence, frame, first), places)
    rest = [found[name] for name in names[LARGEST_GROUP_COUNT:]]
    if rest:
        together = Reached(
            direct=[one for reached in rest for one in reached.direct],
            through=[one for reached in rest for one in reached.through],
        )
        member = add(group, "g", class_="injector")
        add_title(member, f"Injectors of {len(rest)} more pins")
        add_outlines(member, evidence, frame, together)


def add_outlines(
    parent: Element, evidence: Evidence, frame: Frame, reached: Reached, *, weight: float = 1.2
) -> None:
    """Outline emitters and wells; those behind a resistor with a dotted line."""
    for members, dash in ((reached.direct, ""), (reached.through, THROUGH_DASH)):
        boxes = _boxes(evidence, frame, members)
        if not boxes:
            continue
        outline = _joined_outline(boxes)
        add(parent, "path", d=outline, stroke=PAPER, stroke_width=weight + 1.4)
        line = add(parent, "path", d=outline, stroke_width=weight, pointer_events="all")
        if dash:
            line.set("stroke-dasharray", dash)
            line.set("class", "through")


def injector_summary(name: str, reached: Reached) -> str:
    """What a pin or marker can bias, a line each for direct and through a resistor."""
    lines = [
        f"Injector {plain_text(name)}: {_counted(reached.direct + reached.through)} that it can"
        " bias"
    ]
    if reached.through:
        lines.append(
            f"through a resistor {_counted(reached.through)},"
            f" {_range(reached.least_ohm, reached.most_ohm)}"
        )
    return "\n".join(lines)


def _range(least_ohm: float, most_ohm: float) -> str:
    low, high = measure(least_ohm, "ohm"), measure(most_ohm, "ohm")
    return low if low == high else f"{low} to {high}"


def _counted(members: list[int | tuple[int, int]]) -> str:
    """How many emitters and wells there are, in words."""
    wells = len({member[0] for member in members if isinstance(member, tuple)})
    emitters = len({member for member in members if not isinstance(member, tuple)})
    words = [_plural(emitters, "emitter")] if emitters or not wells else []
    return " and ".join([*words, _plural(wells, "well")] if wells else words)


def _plural(count: int, noun: str) -> str:
    return f"{count} {noun}" if count == 1 else f"{count} {noun}s"


def _boxes(evidence: Evidence, frame: Frame, members: list[int | tuple[int, int]]) -> list[Box]:
    """Page boxes of emitters and wells."""
    boxes = evidence.layout.emitters.box_um
    bodies = evidence.layout.bodies
    return [
        page_box(
            frame,
            bodies[member[0]].polygons[member[1]].bounds
            if isinstance(member, tuple)
            else boxes[member],
            _SMALLEST,
        )
        for member in members
    ]


def _joined_outline(boxes: list[Box]) -> str:
    """Path around page boxes, gaps as narrow as between a driver's fingers closed."""
    corners = np.array(boxes)
    grown = shapely.box(*(corners + np.array([-1, -1, 1, 1]) * _CLOSED_GAP / 2).T)
    joined = shapely.buffer(shapely.union_all(grown), -_CLOSED_GAP / 2, join_style="mitre")
    rings = []
    for polygon in shapely.get_parts(joined):
        for ring in (polygon.exterior, *polygon.interiors):
            points = shapely.get_coordinates(ring)[:-1].tolist()
            rings.append("M" + "L".join(f"{number(x)} {number(y)}" for x, y in points) + "z")
    return "".join(rings)


def _add_name(member: Element, name: str, boxes: list[Box], places: Places) -> None:
    """Write the pin's name beside its first emitter."""
    words = "▲ " + plain_text(name, longest=18)
    label = places.take(boxes[0], text_width(words, 11) + 4, 13) if boxes else None
    if label is not None:
        add_haloed(member, label, words, INJECTOR_INK)
