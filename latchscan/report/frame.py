"""Where the layout lies on the page, and round numbers for axes and scale bars."""

from __future__ import annotations

import math
from collections.abc import Iterable
from dataclasses import dataclass

from latchscan.layout.model import Box

SMALLEST_SIDE_UM = 0.01
"""A block thinner than this is drawn as if it were this thick, to keep the scale finite."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Frame:
    """The map's rectangle: a box of the layout and its place on the page.

    Attributes
    ----------
    box_um
        Box of the layout that is shown.
    left, top
        Page coordinates of the box's upper left corner; page y grows downwards.
    scale
        Page units per um.
    """

    box_um: Box
    left: float
    top: float
    scale: float

    @property
    def width(self) -> float:
        """Width on the page."""
        return (self.box_um[2] - self.box_um[0]) * self.scale

    @property
    def height(self) -> float:
        """Height on the page."""
        return (self.box_um[3] - self.box_um[1]) * self.scale

    def x(self, x_um: float) -> float:
        """Page x of a layout x."""
        return self.left + (x_um - self.box_um[0]) * self.scale

    def y(self, y_um: float) -> float:
        """Page y of a layout y."""
        return self.top + (self.box_um[3] - y_um) * self.scale


def page_box(frame: Frame, box_um: Iterable[float], smallest: float = 0.0) -> Box:
    """Page rectangle of a layout box, grown around its middle to at least `smallest`."""
    x0, y0, x1, y1 = box_um
    middle_x, middle_y = (frame.x(x0) + frame.x(x1)) / 2, (frame.y(y0) + frame.y(y1)) / 2
    half_x = max((x1 - x0) * frame.scale, smallest) / 2
    half_y = max((y1 - y0) * frame.scale, smallest) / 2
    return (middle_x - half_x, middle_y - half_y, middle_x + half_x, middle_y + half_y)


def fit(box_um: Box, area: Box) -> Frame:
    """The largest frame for `box_um` inside `area` (page x0, y0, x1, y1), centred across."""
    x0, y0, x1, y1 = box_um
    width, height = max(x1 - x0, SMALLEST_SIDE_UM), max(y1 - y0, SMALLEST_SIDE_UM)
    scale = min((area[2] - area[0]) / width, (area[3] - area[1]) / height)
    left = area[0] + ((area[2] - area[0]) - width * scale) / 2
    return Frame(box_um=(x0, y0, x0 + width, y0 + height), left=left, top=area[1], scale=scale)


def round_length(length: float) -> float:
    """Largest of 1, 2, 5 times a power of ten that is not above `length`.

    Examples
    --------
    >>> round_length(73.0), round_length(0.24)
    (50.0, 0.2)
    """
    power = math.floor(math.log10(length))
    for digit in (5, 2, 1):
        if digit * 10.0**power <= length * (1 + 1e-12):
            return float(f"{digit}e{power}")
    return float(f"5e{power - 1}")


def ticks(low: float, high: float, count: int) -> list[float]:
    """Round values between `low` and `high`, `count` or somewhat more.

    Examples
    --------
    >>> ticks(3.0, 41.0, 4)
    [10.0, 20.0, 30.0, 40.0]
    """
    step = round_length((high - low) / max(count - 0.5, 1))
    first, last = math.ceil(low / step - 1e-9), math.floor(high / step + 1e-9)
    return [float(f"{index * step:.12g}") for index in range(first, last + 1)]
