"""One window: the technology's steps run on the polygons of a small box.

In: a `Program` and the window's drawn layers, relative to the window's corner [grid steps].
Out: the rings of every region inside the window, and the boxes where contacts are on a tap.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass, field

import numpy as np

from latchscan.layout.derive.contacts import NO_BOXES, meets_any
from latchscan.layout.derive.derivation import MITRE_LIMIT, TAPS, Program, Step
from latchscan.layout.derive.geometry import (
    SUBGRID,
    Drawn,
    both,
    bounding_boxes,
    draw_boxes,
    draw_rings,
    grown,
    merged,
    to_rings,
    wide_parts,
    without,
)
from latchscan.layout.derive.slabs import cut_upright, upright_rings
from latchscan.layout.derive.stitching import Rings, join_rings, select_rings
from latchscan.layout.model import Ints


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class DrawnLayer:
    """A layer in a window: rectangles, clipped to it, and all other shapes, whole.

    Attributes
    ----------
    boxes
        (n, 4) x0, y0, x1, y1 [grid steps].
    rings
        The other shapes; each winds around its inside counter-clockwise.
    """

    boxes: Ints
    rings: Rings


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Window:
    """Everything a window's result depends on, relative to its corner [grid steps].

    Attributes
    ----------
    frame, margin_frame
        x0, y0, x1, y1 of the window and of the window with its margin.
    block_frame
        The part of the margin frame inside the analysed box: what a complement is part of.
    narrow, wide
        Layer name -> what is drawn in the frame, in the margin frame.
    """

    frame: tuple[int, int, int, int]
    margin_frame: tuple[int, int, int, int]
    block_frame: tuple[int, int, int, int]
    narrow: Mapping[str, DrawnLayer]
    wide: Mapping[str, DrawnLayer]


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class WindowResult:
    """Regions in a window, relative to its corner [grid steps].

    Attributes
    ----------
    regions
        Region name -> rings (holes on slits); empty regions are left out.
    tap_boxes
        (n, 4) rectangles that make up the taps.
    slanted_tap_boxes
        (m, 4) bounding boxes of the taps that are not made of rectangles.
    contacts
        (k, 4) boxes of contacts that overlap any of these boxes, where contacts are derived
        by an expression; contacts that are drawn are fetched once the taps are known.
    """

    regions: Mapping[str, Rings]
    tap_boxes: Ints
    slanted_tap_boxes: Ints
    contacts: Ints


def evaluate(program: Program, window: Window, database_unit_um: float) -> WindowResult:
    """Regions and tap boxes of one window, and contacts where they are derived."""
    run = _Run(program=program, window=window, steps_per_um=SUBGRID / database_unit_um)
    regions = {}
    for name, index in program.regions:
        rings = to_rings(run.finished(index))
        if rings.count:
            regions[name] = rings
    taps = join_rings([regions[name] for name in TAPS if name in regions])
    if not taps.count:
        return WindowResult(
            regions=regions, tap_boxes=NO_BOXES, slanted_tap_boxes=NO_BOXES, contacts=NO_BOXES
        )
    upright = upright_rings(taps.points, taps.first)
    plain = select_rings(taps, upright)
    boxes, _ = cut_upright(plain.points, plain.first, np.arange(plain.count))
    slanted = bounding_boxes(select_rings(taps, ~upright))
    return WindowResult(
        regions=regions,
        tap_boxes=boxes,
        slanted_tap_boxes=slanted,
        contacts=_derived_contacts(run, np.concatenate([boxes, slanted])),
    )


def _derived_contacts(run: _Run, tap_boxes: Ints) -> Ints:
    """Boxes of the contacts that an expression gives, those that may lie on a tap."""
    if run.program.contact_layers:
        return NO_BOXES
    contacts = bounding_boxes(to_rings(run.drawn(run.program.contact)))
    return contacts[meets_any(contacts, tap_boxes)]


@dataclass(slots=True, kw_only=True)
class _Run:
    """The steps of one window, each drawn at most once and only when asked for."""

    program: Program
    window: Window
    steps_per_um: float
    done: dict[int, Drawn] = field(default_factory=dict)
    united: set[int] = field(default_factory=set)

    def drawn(self, index: int) -> Drawn:
        """Polygons of a step; of its complement where the step is complemented."""
        if index not in self.done:
            self.done[index] = _DRAW[self.program.steps[index].kind](self, index)
        return self.done[index]

    def finished(self, index: int) -> Drawn:
        """Merged polygons of a step inside the frame, complements drawn out."""
        drawn = self.drawn(index)
        if self.program.steps[index].complemented:
            return without(draw_boxes(np.array([self.window.frame])), drawn)
        return drawn if len(drawn) < 2 or index in self.united else merged(drawn)

    def layer(self, index: int) -> Drawn:
        """A layer's polygons inside the step's frame."""
        step = self.program.steps[index]
        layers, frame = (
            (self.window.wide, self.window.margin_frame)
            if step.wide
            else (self.window.narrow, self.window.frame)
        )
        layer = layers.get(step.layer)
        if layer is None:
            return []
        boxes = draw_boxes(layer.boxes)
        if not layer.rings.count:
            return boxes
        return boxes + _clipped(layer.rings, frame)

    def same(self, index: int) -> Drawn:
        """A complement's polygons are those of its item."""
        (item,) = self.program.steps[index].items
        drawn = self.drawn(item)
        if item in self.united:
            self.united.add(index)
        return drawn

    def conjunction(self, index: int) -> Drawn:
        """What all items share; of complements only, the union of what they leave out."""
        items = self.program.steps[index].items
        plain, complements = self._by_sign(items)
        if not plain:
            return self._all(complements)
        return self._shared(index, plain, complements)

    def disjunction(self, index: int) -> Drawn:
        """What any item covers; with complements, what they all leave out and no item covers."""
        items = self.program.steps[index].items
        plain, complements = self._by_sign(items)
        if not complements:
            return self._all(plain)
        return self._shared(index, complements, plain)

    def offset(self, index: int) -> Drawn:
        """A grown, shrunk or thinned item, inside the step's frame."""
        step = self.program.steps[index]
        (item,) = step.items
        drawn = self.drawn(item)
        if self.program.steps[item].complemented:
            drawn = without(draw_boxes(np.array([self.window.block_frame])), drawn)
        result = _OFFSET[step.kind](drawn, step, self.steps_per_um)
        self.united.add(index)
        if step.wide:
            return result
        return both(result, draw_boxes(np.array([self.window.frame])))

    def _by_sign(self, items: tuple[int, ...]) -> tuple[list[int], list[int]]:
        flags = [self.program.steps[item].complemented for item in items]
        plain = [item for item, flag in zip(items, flags, strict=True) if not flag]
        return plain, [item for item, flag in zip(items, flags, strict=True) if flag]

    def _all(self, items: list[int]) -> Drawn:
        return [polygon for item in items for polygon in self.drawn(item)]

    def _shared(self, index: int, kept: list[int], removed: list[int]) -> Drawn:
        """Common polygons of the kept items without those of the removed ones."""
        drawn = self.drawn(kept[0])
        for item in kept[1:]:
            if not drawn:
                return []
            drawn = both(drawn, self.drawn(item))
        if drawn and (gone := self._all(removed)):
            drawn = without(drawn, gone)
        elif len(kept) == 1 and kept[0] not in self.united:
            return drawn
        self.united.add(index)
        return drawn


_DRAW: Mapping[str, Callable[[_Run, int], Drawn]] = {
    "layer": _Run.layer,
    "not": _Run.same,
    "and": _Run.conjunction,
    "or": _Run.disjunction,
    "grow": _Run.offset,
    "shrink": _Run.offset,
    "wider": _Run.offset,
}


def _grow(drawn: Drawn, step: Step, steps_per_um: float) -> Drawn:
    return grown(drawn, round(step.um * steps_per_um), MITRE_LIMIT)


def _shrink(drawn: Drawn, step: Step, steps_per_um: float) -> Drawn:
    return grown(drawn, -round(step.um * steps_per_um), MITRE_LIMIT)


def _wider(drawn: Drawn, step: Step, steps_per_um: float) -> Drawn:
    return wide_parts(drawn, step.um * steps_per_um, MITRE_LIMIT)


_OFFSET: Mapping[str, Callable[[Drawn, Step, float], Drawn]] = {
    "grow": _grow,
    "shrink": _shrink,
    "wider": _wider,
}


def _clipped(rings: Rings, frame: tuple[int, int, int, int]) -> Drawn:
    """Shapes inside a frame; those that do not stick out are left as they are."""
    boxes = bounding_boxes(rings)
    x0, y0, x1, y1 = frame
    inside = (boxes[:, 0] >= x0) & (boxes[:, 1] >= y0) & (boxes[:, 2] <= x1) & (boxes[:, 3] <= y1)
    kept = draw_rings(select_rings(rings, inside)) if inside.any() else []
    if inside.all():
        return kept
    sticking = draw_rings(select_rings(rings, ~inside))
    return kept + both(sticking, draw_boxes(np.array([frame])))
