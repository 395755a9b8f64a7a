"""Numbers of the machine-readable result: how many digits they carry, and null for the rest."""

from __future__ import annotations

from collections.abc import Iterable

import shapely

from latchscan.layout.model import Geometries
from latchscan.report.plain import significant

DRAWN_DIGITS = 9
SOLVED_DIGITS = 6


def drawn(value: float) -> float | None:
    """A number taken from the drawing or a file; None where it is not finite.

    Examples
    --------
    >>> drawn(1234.56789012), drawn(float("nan"))
    (1234.56789, None)
    """
    return significant(float(value), DRAWN_DIGITS)


def solved(value: float) -> float | None:
    """A number that was worked out; None where it is not finite.

    Examples
    --------
    >>> solved(1234.56789012), solved(float("inf"))
    (1234.57, None)
    """
    return significant(float(value), SOLVED_DIGITS)


def box(box_um: Iterable[float]) -> list[float | None]:
    """A box or a point of the drawing."""
    return [drawn(value) for value in box_um]


def box_around(shapes: Geometries) -> list[float | None] | None:
    """Box around all shapes; None where nothing is drawn."""
    return known(box(shapely.total_bounds(shapes)))


def known(numbers: list[float | None]) -> list[float | None] | None:
    """The numbers of a box or point; None where any of them does not exist."""
    return None if None in numbers else numbers
