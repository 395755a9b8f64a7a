"""Contacts on a layered conductor: each an equipotential of unknown current density.

In go rectangles (patches) grouped into contacts, out come the conductances between the
contacts, or the currents that a source elsewhere drives through them.  The idea (dual form, or
method of moments): the unknowns live on the contacts alone; their density is singular
along the edges, so patches are graded towards them.

References
----------
R. F. Harrington, *Field Computation by Moment Methods*, 1968, section 2-2 (charged plate).
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray
from scipy.linalg import lu_factor, lu_solve

from latchscan.errors import ConvergenceError
from latchscan.fields.layered import LayeredKernel

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

_BALANCE = 1e-6


def graded_cuts(length: float, count: int) -> Floats:
    """Cuts of an interval, closer towards both ends, from 0 to `length`.

    Notes
    -----
    The cuts follow ``s^2`` from each end: a density that grows as one over the root of the
    distance from the edge then gives every piece about the same current.
    """
    t = np.linspace(-1.0, 1.0, count + 1)
    graded = 1.0 - np.sign(t) * (np.abs(t) - 1.0) ** 2 * np.sign(t)
    return np.asarray(length * (1.0 + np.sign(t) * graded) / 2.0, dtype=np.float64)


def graded_patches(
    boxes: Floats, count: int, aspect: float = 4.0, least_um: Floats | None = None
) -> tuple[Floats, Ints]:
    """Patches of rectangles, graded towards all four sides.

    Parameters
    ----------
    boxes
        (n, 4) x0, y0, x1, y1.
    count
        Patches across the narrow side; at least 2.  The long side gets more, so that an
        inner patch is at most `aspect` times as long as the narrow side's mean patch.
    least_um
        (n,) length that inner patches may have at any rate; 0 where None.

    Returns
    -------
    patches, owner
        (p, 4) and the index of the rectangle each came from, (p,).
    """
    parts, owner = [], []
    least = np.zeros(len(boxes)) if least_um is None else least_um
    for index, (x0, y0, x1, y1) in enumerate(boxes):
        narrow = min(x1 - x0, y1 - y0)
        most = max(aspect * narrow / count, float(least[index]))
        xs, ys = (
            side0 + _side_cuts(side1 - side0, narrow, count, most)
            for side0, side1 in ((x0, x1), (y0, y1))
        )
        left, low = np.meshgrid(xs[:-1], ys[:-1], indexing="ij")
        right, high = np.meshgrid(xs[1:], ys[1:], indexing="ij")
        parts.append(np.stack([left, low, right, high], axis=-1).reshape(-1, 4))
        owner.append(np.full(left.size, index, dtype=np.int64))
    return np.concatenate(parts), np.concatenate(owner)


def _side_cuts(length: float, narrow: float, count: int, most: float) -> Floats:
    if length <= 1.5 * narrow:
        return graded_cuts(length, count)
    ends = graded_cuts(narrow, count)
    half = ends[ends <= narrow / 2.0 * (1.0 + 1e-9)]
    middle = length - 2.0 * half[-1]
    pieces = max(int(np.ceil(middle / most)), 1)
    inner = half[-1] + middle * np.arange(1, pieces) / pieces
    return np.concatenate([half, inner, length - half[::-1]])


def contact_conductances(kernel: LayeredKernel, patches: Floats, contact: Ints) -> Floats:
    """Currents [A] out of the contacts per volt on each, (c, c) [S].

    Parameters
    ----------
    patches
        (p, 4) rectangles x0, y0, x1, y1 [um].
    contact
        (p,) index of the contact of each patch, 0 .. c - 1.

    Notes
    -----
    With a bottom that is insulated the currents sum to 0 and every row sums to 0.
    """
    count = int(contact.max()) + 1
    member = (contact[:, None] == np.arange(count)).astype(np.float64)
    influence = kernel.between(patches, patches)
    matrix, width = _bordered(influence, kernel.floating)
    right = np.zeros((len(matrix), count))
    right[:width] = member
    current = lu_solve(lu_factor(matrix), right)[:width]
    return np.asarray(member.T @ current, dtype=np.float64)


def tapped_currents(
    kernel: LayeredKernel, patches: Floats, contact: Ints, series_ohm: Floats, seen: Floats
) -> tuple[Floats, Floats]:
    """Currents out of the stack through contacts that are tied to potential 0.

    Parameters
    ----------
    patches, contact
        See `contact_conductances`; may be empty where the bottom is contacted.
    series_ohm
        (c,) resistance between each contact and potential 0 [ohm].
    seen
        (p, s) mean potential over each patch for 1 A into each source, as if there were
        no contact [ohm].

    Returns
    -------
    currents, level
        (p, s) currents out of the stack [A] and the constant (s,) by which the potential
        of a stack with an insulated bottom rises [ohm], 0 for the others.

    Raises
    ------
    ConvergenceError
        Where the currents do not balance or an equation is left unsatisfied.
    """
    sources = seen.shape[1]
    if len(patches) == 0:
        return np.zeros((0, sources)), np.zeros(sources)
    tie = np.where(contact[:, None] == contact[None, :], series_ohm[contact][:, None], 0.0)
    matrix, width = _bordered(kernel.between(patches, patches) + tie, kernel.floating)
    right = np.ones((len(matrix), sources))
    right[:width] = seen
    solution = lu_solve(lu_factor(matrix), right)
    worst = float(np.abs(matrix @ solution - right).max() / np.abs(right).max())
    if not worst < _BALANCE:
        raise ConvergenceError(
            f"substrate contacts: residual {worst:.1e}; expected below {_BALANCE:.0e}"
        )
    level = solution[width] if kernel.floating else np.zeros(sources)
    return solution[:width], level


def _bordered(influence: Floats, floating: bool) -> tuple[Floats, int]:
    """The influence matrix, with the free constant and its balance where there is one.

    The last unknown is the constant; its equation makes the currents sum to what the
    right side says.
    """
    width = len(influence)
    if not floating:
        return influence, width
    matrix = np.zeros((width + 1, width + 1))
    matrix[:width, :width] = influence
    matrix[:width, width] = -1.0
    matrix[width, :width] = 1.0
    return matrix, width
