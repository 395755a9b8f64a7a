"""The texts that may name a net, and the conductors that each may name.

In: the layout and the technology.  Out: labels with their conductors.  Remarks (texts with
white space in them, equal to the top cell's name, or like one of the technology's
`labels.remark_names`) name nothing.
"""

from __future__ import annotations

import fnmatch
import re
from collections.abc import Iterable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from latchscan.layout.derive.geometry import SUBGRID
from latchscan.layout.file.tables import Pair
from latchscan.layout.model import Label
from latchscan.layout.source import LayoutSource
from latchscan.layout.trace.sharing import Asked
from latchscan.technology.conductors import Conductors
from latchscan.technology.model import Technology
from latchscan.technology.quantities import layer_numbers

ANY = "any"
"""What a general text is expected on."""


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Texts:
    """Labels (l) sorted by (y, x, text).

    Attributes
    ----------
    labels
        The labels.
    sorts
        (l, conductors) the conductors that each may name.
    expected
        (l,) name of the first of them, "any" where all may be meant.
    """

    labels: tuple[Label, ...]
    sorts: NDArray[np.bool_]
    expected: tuple[str, ...]

    def asked(self, unit_um: float) -> Asked:
        """The labels' points [grid steps] and conductors."""
        points = [(label.x_um, label.y_um) for label in self.labels]
        place = np.array(points, dtype=np.float64).reshape(-1, 2)
        return Asked(at=np.rint(place / unit_um).astype(np.int64) * SUBGRID, sorts=self.sorts)


def read_texts(source: LayoutSource, technology: Technology, conductors: Conductors) -> Texts:
    """The labels of the block that may name a net."""
    names = list(conductors.layers)
    own: dict[Pair, list[int]] = {}
    for number, layer in enumerate(conductors.layers.values()):
        for text in layer.texts:
            own.setdefault(layer_numbers(text), []).append(number)
    general = {layer_numbers(text) for text in technology.labels.layers}
    every = source.labels(sorted(general | set(own)))
    # A text stands in every copy of its cell: one look at each is enough.
    remarks = _remarks({label.text for label in every}, source.top, technology.labels.remark_names)
    labels = tuple(label for label in every if label.text not in remarks)
    sorts = np.ones((len(labels), len(names)), dtype=np.bool_)
    expected = []
    for row, label in enumerate(labels):
        numbers = own.get((label.layer, label.texttype))
        if numbers is not None:
            sorts[row] = False
            sorts[row, numbers] = True
        expected.append(ANY if numbers is None else names[numbers[0]])
    return Texts(labels=labels, sorts=sorts, expected=tuple(expected))


def _remarks(texts: Iterable[str], top: str, patterns: Iterable[str]) -> set[str]:
    """Those of some texts that name nothing."""
    like = [re.compile(fnmatch.translate(pattern.lower())) for pattern in patterns]
    return {text for text in texts if _is_remark(text, top, like)}


def _is_remark(text: str, top: str, like: Iterable[re.Pattern[str]]) -> bool:
    if not text or any(sign.isspace() for sign in text) or text.lower() == top.lower():
        return True
    return any(pattern.match(text.lower()) for pattern in like)
