"""Pins on the map: a mark and a name each, and the shapes of its nets while it is pointed at.

The shapes are in the picture from the start and hidden by a short style sheet, so that
no script is needed.  A pin that is clicked keeps them until another place is clicked.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from xml.etree.ElementTree import Element

import numpy as np
import shapely

from latchscan.layout.connections import ABOVE_SUPPLY, BELOW_GROUND, Pins
from latchscan.layout.model import Box, Floats
from latchscan.report.frame import Frame, page_box
from latchscan.report.palette import HIGHLIGHT, INJECTOR_INK, PAPER, PIN_INK
from latchscan.report.placing import Places
from latchscan.report.plain import measure, plain_text
from latchscan.report.relations import injectors_of_pin, nets_of_pin
from latchscan.report.svg_injectors import add_outlines, reached_by_name
from latchscan.report.svg_nets import FILL_RULE, net_paths, on_nets, wiring_words
from latchscan.report.svg_parts import add, add_haloed, add_title, number, text_width
from latchscan.report.svg_paths import nm_transform, nm_width, path_data
from latchscan.rules.model import Evidence

LARGEST_PIN_COUNT = 60
WIRING_OPACITY = 0.4
"""Metals lie over everything and let it be seen."""
SMALLEST_MARK = 9.0
DOT = 1.8
STYLE = (
    ".pin{cursor:pointer;outline:none}"
    ".pin .net{visibility:hidden;pointer-events:none}"
    ".pin .net *{pointer-events:none}"
    ".pin:hover .net,.pin:focus .net{visibility:visible}"
    "#pins:hover .pin:not(:hover):not(:focus){opacity:.6}"
)
_LONGEST_NAME = 18
_MOST_LABELS = 4
_ROOMY_HEIGHT = 40.0
_BELOW_DOT = 11.0
"""How far below the dot of a large pad its name stands [page units]."""
_TOLD_SHARES = 3


@dataclass(frozen=True, slots=True, kw_only=True)
class PinMark:
    """One pin's place on the page.

    Attributes
    ----------
    pin
        Index among the pins.
    boxes
        Page boxes of its bond pads, or of a small mark where it has none.
    labels
        Middles of its name, one in each bond pad that is large enough, else one beside the
        first box; none where there was no room.
    """

    pin: int
    boxes: tuple[Box, ...]
    labels: tuple[tuple[float, float], ...]


def marked_pins(evidence: Evidence) -> list[int]:
    """Pins that are marked: those with injectors first, then signals, then supplies; by name."""
    pins = evidence.connections.pins
    inside = _inside(pins, evidence.layout.regions.bbox_um)
    driving = np.isin(np.arange(len(pins.names)), evidence.connections.injectors.pin)
    rank = np.select(
        [driving, pins.kind == "signal", np.isin(pins.kind, ("supply", "ground"))], [0, 1, 2], 3
    )
    order = np.lexsort((np.arange(len(rank)), rank))
    chosen = [pin for pin in order.tolist() if inside[pin]]
    return sorted(chosen[:LARGEST_PIN_COUNT])


def _inside(pins: Pins, box_um: Box) -> Floats:
    """(p,) whether a pin's place is known and lies on the map."""
    x0, y0, x1, y1 = box_um
    x, y = pins.x_um, pins.y_um
    return np.asarray((x >= x0) & (x <= x1) & (y >= y0) & (y <= y1))


def place_pins(evidence: Evidence, frame: Frame, places: Places) -> list[PinMark]:
    """Give every marked pin its place, marks before names."""
    boxes = {pin: _mark_boxes(evidence, frame, pin) for pin in marked_pins(evidence)}
    places.taken += [box for found in boxes.values() for box in found]
    names = evidence.connections.pins.names
    return [
        PinMark(
            pin=pin,
            boxes=found,
            labels=_labels(found, _shown(names[pin]), places),
        )
        for pin, found in boxes.items()
    ]


def _labels(boxes: tuple[Box, ...], words: str, places: Places) -> tuple[tuple[float, float], ...]:
    """Middles of a pin's name: inside its bond pads where they are large, else beside one."""
    width = text_width(words, 11) + 6
    within = [
        ((x0 + x1) / 2, (y0 + y1) / 2 + _BELOW_DOT)
        for x0, y0, x1, y1 in boxes
        if x1 - x0 >= width and y1 - y0 >= _ROOMY_HEIGHT
    ]
    if within:
        return tuple(within[:_MOST_LABELS])
    beside = places.take(boxes[0], width, 13)
    return () if beside is None else (beside,)


def _mark_boxes(evidence: Evidence, frame: Frame, pin: int) -> tuple[Box, ...]:
    """Page boxes of a pin's bond pads, or of the point where it is shown."""
    pins, nets = evidence.connections.pins, evidence.connections.nets
    pads = nets.pad_polygons[on_nets(nets, nets.pad_node, nets_of_pin(pins, pin))]
    if len(pads) == 0:
        x, y = float(pins.x_um[pin]), float(pins.y_um[pin])
        return (page_box(frame, (x, y, x, y), SMALLEST_MARK),)
    return tuple(page_box(frame, pad.bounds, SMALLEST_MARK) for pad in pads)


def add_pins(parent: Element, evidence: Evidence, frame: Frame, marks: list[PinMark]) -> None:
    """Draw the pins, each with the hidden shapes of its nets."""
    if not marks:
        return
    add(parent, "style").text = STYLE
    group = add(parent, "g", id="pins")
    nets, pins = evidence.connections.nets, evidence.connections.pins
    paths = net_paths(nets, [nets_of_pin(pins, mark.pin) for mark in marks], frame)
    for mark, drawn in zip(marks, paths, strict=True):
        member = add(group, "g", class_="pin", tabindex="0")
        member.set("id", f"pin-mark-{mark.pin + 1}")
        add_title(member, pin_summary(evidence, mark.pin))
        _add_net(member, evidence, frame, mark.pin, drawn)
        add(member, "path", class_="pin-mark", d=pin_mark(mark.boxes), fill=PAPER,
            fill_opacity=0.55, fill_rule="evenodd", stroke=PIN_INK, stroke_width=1.5,
            pointer_events="all")  # fmt: skip
        for label in mark.labels:
            add_haloed(member, label, _shown(pins.names[mark.pin]), PIN_INK)


def _add_net(
    member: Element, evidence: Evidence, frame: Frame, pin: int, drawn: tuple[str, str]
) -> None:
    """A veil over the map and, above it, the shapes of a pin's nets and its injectors.

    Parameters
    ----------
    drawn
        Paths of the nets' wiring and of their diffusions and pads.
    """
    own = nets_of_pin(evidence.connections.pins, pin)
    wiring, shapes = drawn
    group = add(member, "g", class_="net", clip_path="url(#map-frame)")
    add(group, "rect", class_="veil", x=frame.left, y=frame.top, width=frame.width,
        height=frame.height, fill=PAPER, fill_opacity=0.6)  # fmt: skip
    around = shapely.box(*evidence.connections.nets.box_um[own].T)
    add(group, "path", class_="net-box", d=path_data(around, frame), fill="none",
        transform=nm_transform(frame), stroke=HIGHLIGHT, stroke_width=nm_width(frame, 1),
        stroke_dasharray=f"{nm_width(frame, 2)} {nm_width(frame, 3)}")  # fmt: skip
    if wiring:
        # one opacity for all of the path: where its parts meet it is no darker
        add(group, "path", class_="net-wiring", d=wiring, transform=nm_transform(frame),
            fill=HIGHLIGHT, fill_rule=FILL_RULE, stroke=HIGHLIGHT,
            stroke_width=nm_width(frame, 0.6), opacity=WIRING_OPACITY)  # fmt: skip
    add(group, "path", class_="net-shapes", d=shapes, transform=nm_transform(frame),
        fill=HIGHLIGHT, fill_rule=FILL_RULE, stroke=HIGHLIGHT,
        stroke_width=nm_width(frame, 1))  # fmt: skip
    outlines = add(group, "g", fill=HIGHLIGHT, fill_opacity=0.3, stroke=INJECTOR_INK)
    rows = injectors_of_pin(evidence.connections, pin).tolist()
    for reached in reached_by_name(evidence, rows).values():
        add_outlines(outlines, evidence, frame, reached, weight=1.6)


def pin_mark(boxes: tuple[Box, ...]) -> str:
    """Path of a pin's mark: a rectangle around each box and a dot in its middle."""
    dot = f"h{number(2 * DOT)}m{number(-DOT)} {number(-DOT)}v{number(2 * DOT)}"
    return "".join(
        f"M{number(x0)} {number(y0)}H{number(x1)}V{number(y1)}H{number(x0)}z"
        f"M{number((x0 + x1) / 2 - DOT)} {number((y0 + y1) / 2)}{dot}"
        for x0, y0, x1, y1 in boxes
    )


def _shown(name: str) -> str:
    return plain_text(str(name), longest=_LONGEST_NAME)


def pin_summary(evidence: Evidence, pin: int) -> str:
    """What is known of one pin, a line each."""
    pins, nets = evidence.connections.pins, evidence.connections.nets
    own = nets_of_pin(pins, pin)
    ids = ", ".join(str(nets.ids[net]) for net in own[:8].tolist()) or "none"
    pad = "with a bond pad" if pins.has_pad[pin] else "without a bond pad"
    lines = [
        f"Pin {plain_text(str(pins.names[pin]), 120)}: {str(pins.kind[pin]).replace('_', ' ')},"
        f" {pad}",
        f"nets {ids}" + (f" and {len(own) - 8} more" if len(own) > 8 else ""),
        _voltage_words(float(pins.low_v[pin]), float(pins.high_v[pin])),
    ]
    drawn = wiring_words(nets, own)
    if drawn:
        lines.insert(2, drawn)
    test_a = float(pins.test_current_a[pin])
    if math.isfinite(test_a):
        lines.append(f"tested with {test_a * 1e3:.4g} mA")
    lines.append(_injector_words(evidence, pin, BELOW_GROUND, "below ground"))
    lines.append(_injector_words(evidence, pin, ABOVE_SUPPLY, "above the supply"))
    return "\n".join(lines)


def _voltage_words(low_v: float, high_v: float) -> str:
    """Range of a pin's voltage in normal work."""
    if math.isnan(low_v) and math.isnan(high_v):
        return "its voltage is not known"
    return f"works from {measure(low_v, 'V')} to {measure(high_v, 'V')}"


def _injector_words(evidence: Evidence, pin: int, polarity: int, words: str) -> str:
    """How many injectors a pin drives in one polarity, and the largest shares among them."""
    injectors = evidence.connections.injectors
    rows = np.flatnonzero((injectors.pin == pin) & (injectors.polarity == polarity))
    if len(rows) == 0:
        return f"injectors {words}: none"
    shares = injectors.share[rows]
    known = rows[np.isfinite(shares)]
    order = known[np.lexsort((known, -injectors.share[known]))][:_TOLD_SHARES].tolist()
    told = ", ".join(
        f"{_injector_id(evidence, row)} {100 * float(injectors.share[row]):.3g} %" for row in order
    )
    return f"injectors {words}: {len(rows)}" + (f", largest shares {told}" if told else "")


def _injector_id(evidence: Evidence, row: int) -> str:
    injectors, layout = evidence.connections.injectors, evidence.layout
    emitter = int(injectors.emitter[row])
    return str(
        layout.emitters.ids[emitter] if emitter >= 0 else layout.bodies[injectors.body[row]].id
    )
