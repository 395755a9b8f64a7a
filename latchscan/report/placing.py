"""Find a free place for a small label near the thing it names."""

from __future__ import annotations

from dataclasses import dataclass, field

from latchscan.layout.model import Box

_STEPS = (0.0, 12.0, 24.0, 36.0)
"""Gaps between thing and label that are tried, nearest first [page units]."""
_INSET = 4.0
"""Room between a box and a label inside it [page units]."""
_SIDES = (
    (-1.0, -1.0),
    (1.0, -1.0),
    (1.0, 1.0),
    (-1.0, 1.0),
    (0.0, -1.0),
    (1.0, 0.0),
    (0.0, 1.0),
    (-1.0, 0.0),
)
"""Directions that are tried at each gap; page y grows downwards."""


@dataclass(slots=True, kw_only=True)
class Places:
    """Labels placed so far inside an area of the page (x0, y0, x1, y1)."""

    area: Box
    taken: list[Box] = field(default_factory=list)

    def take(self, around: Box, width: float, height: float) -> tuple[float, float] | None:
        """Middle of a free label of the given size beside the box `around`.

        In a corner of the box where nothing beside it is free, as for a box that fills the
        area.  None where that is taken too; a label that hides others helps nobody.
        """
        for gap in (*_STEPS, *_inward_steps(around, width, height)):
            for side in _SIDES:
                box = _moved(around, width, height, side, gap)
                if _contains(self.area, box) and not any(
                    _overlap(box, other) for other in self.taken
                ):
                    self.taken.append(box)
                    return ((box[0] + box[2]) / 2, (box[1] + box[3]) / 2)
        return None


def _inward_steps(around: Box, width: float, height: float) -> tuple[float, ...]:
    """The gap that puts a label just inside a box large enough not to be hidden by it."""
    roomy = around[2] - around[0] > 3 * width and around[3] - around[1] > 3 * height
    return (-max(width, height) - _INSET,) if roomy else ()


def _moved(around: Box, width: float, height: float, side: tuple[float, float], gap: float) -> Box:
    """A label box that touches `around` at `side`, `gap` away from it."""
    half_x = (around[2] - around[0] + width) / 2 + gap
    half_y = (around[3] - around[1] + height) / 2 + gap
    x = (around[0] + around[2]) / 2 + side[0] * half_x
    y = (around[1] + around[3]) / 2 + side[1] * half_y
    return (x - width / 2, y - height / 2, x + width / 2, y + height / 2)


def _overlap(one: Box, other: Box) -> bool:
    return one[0] < other[2] and other[0] < one[2] and one[1] < other[3] and other[1] < one[3]


def _contains(area: Box, box: Box) -> bool:
    return area[0] <= box[0] and area[1] <= box[1] and box[2] <= area[2] and box[3] <= area[3]
