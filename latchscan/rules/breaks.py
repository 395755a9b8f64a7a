"""The value a rule returns: every member that breaks a limit, in columns.

A rule never groups, numbers or sorts; it says which members break which limit, where, by
how much, and how to tell a person about one of them.
"""

from __future__ import annotations

from dataclasses import dataclass, fields, replace
from itertools import compress
from typing import Any

import numpy as np
from numpy.typing import NDArray

from latchscan.layout.left_out import inside_any
from latchscan.layout.model import Floats, Ints, Layout

GROUPING_DISTANCE_UM = 10.0
"""Default of `Breaks.grouping_um`; common practice, no published source."""


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Breaks:
    """Members (k) that break a limit of one rule.

    Attributes
    ----------
    member
        (k,) row of the member among its own kind (emitter, tap, body, spacing, site).
    subject
        (k,) id of the member.
    body
        (k,) index of the body it concerns, -1 where there is none.
    reason
        (k,) which of the rule's limits is broken; members of different reasons never share
        a finding.
    x_um, y_um
        (k,) where the limit is broken.
    measured, limit
        (k,) the measure and its limit; a measure of NaN means that it could not be
        evaluated, which never counts as passed.
    excess
        (k,) how bad it is, larger is worse; NaN measures count as the worst.
    box_um
        (k, 4) bounding box of the member.
    detail
        (k,) words about each member that only `check` knows and `describe` repeats; empty
        where the rule has none.
    grouping_um
        Gap between two members' boxes up to which a person would mend both at once.
    """

    member: Ints
    subject: NDArray[np.str_]
    body: Ints
    reason: Ints
    x_um: Floats
    y_um: Floats
    measured: Floats
    limit: Floats
    excess: Floats
    box_um: Floats
    detail: tuple[str, ...] = ()
    grouping_um: float = GROUPING_DISTANCE_UM

    def __len__(self) -> int:
        return len(self.member)


def outside(breaks: Breaks, boxes_um: Floats) -> Breaks:
    """The breaks whose places (x, y) lie in none of the boxes (k, 4) [um]."""
    if not len(boxes_um):
        return breaks
    kept = ~inside_any(breaks.x_um, breaks.y_um, boxes_um)
    columns: dict[str, Any] = {}
    for column in fields(breaks):
        value = getattr(breaks, column.name)
        if isinstance(value, np.ndarray):
            columns[column.name] = value[kept]
        elif isinstance(value, tuple) and len(value) == len(breaks):
            columns[column.name] = tuple(compress(value, kept.tolist()))
    return replace(breaks, **columns)


def over_limit(measured: Floats, limit: Floats) -> NDArray[np.bool_]:
    """Whether each measure breaks its upper limit or could not be evaluated at all."""
    return np.isnan(measured) | (measured > limit)


def ratio(worse: Floats, better: Floats) -> Floats:
    """Excess as ``worse / better``; a NaN on either side counts as infinitely bad.

    Examples
    --------
    >>> ratio(np.array([3.0, np.nan]), np.array([2.0, 2.0])).tolist()
    [1.5, inf]
    """
    with np.errstate(divide="ignore", invalid="ignore", over="ignore"):
        quotient = np.asarray(worse / better, dtype=np.float64)
    return np.where(np.isnan(quotient), np.inf, quotient)


def tied_bodies(layout: Layout) -> NDArray[np.bool_]:
    """Whether each body has at least one contacted tap; one entry a body."""
    tied = np.zeros(len(layout.bodies), dtype=np.bool_)
    tied[layout.taps.body[layout.taps.contact_count > 0]] = True
    return tied


def tap_ids(rows: Ints) -> NDArray[np.str_]:
    """Ids of taps, ``tap-1`` being the first row."""
    return np.array([f"tap-{row + 1}" for row in rows.tolist()], dtype=np.str_)


def place(x_um: float, y_um: float) -> str:
    """Print a point as messages do.

    Examples
    --------
    >>> place(1.0, 2.3456)
    '(1.000, 2.346) um'
    """
    return f"({x_um + 0.0:.3f}, {y_um + 0.0:.3f}) um"


def and_others(count: int, noun: str) -> str:
    """Words for the other members of a finding; empty for a lone one.

    Examples
    --------
    >>> and_others(3, "emitter")
    ' (worst of 3 emitters)'
    """
    return "" if count == 1 else f" (worst of {count} {noun}s)"
