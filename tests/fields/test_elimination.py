"""The slab elimination against a general sparse factorisation."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.sparse import csc_matrix, random_array
from scipy.sparse.linalg import spsolve

from latchscan.fields.layered_elimination import elimination_order, solve_network
from latchscan.fields.layered_network import GridLines, Network, SheetOnBulk

SHEET = np.array([[0.0, 0.0, 12.0, 9.0]])
HOLES = np.array([[3.0, 2.0, 5.0, 7.5], [8.2, 0.0, 8.8, 9.0]])
CONTACTS = np.array([[0.5, 0.5, 1.5, 4.0], [10.0, 7.0, 11.5, 8.0], [6.1, 1.0, 6.4, 1.4]])


def network(nx: int, ny: int) -> Network:
    problem = SheetOnBulk(
        conductance_s=1e-3,
        sheet=SHEET,
        holes=HOLES,
        contacts=CONTACTS,
        contact=np.array([0, 1, 0]),
        series_ohm=np.array([9.0, 3.0]),
        patches=CONTACTS,
        patch_contact=np.array([0, 1, 0]),
    )
    lines = GridLines(
        x=np.linspace(0.0, 12.0, nx + 1),
        y=np.linspace(0.0, 9.0, ny + 1),
        block_x=np.zeros(nx, dtype=np.int64),
        block_y=np.zeros(ny, dtype=np.int64),
    )
    return Network.of(problem, lines)


@pytest.mark.parametrize(("nx", "ny"), [(31, 22), (14, 40), (1, 5)])
def test_elimination_agrees_with_a_sparse_factorisation(nx: int, ny: int) -> None:
    # scipy's SuperLU on the same equations; a strip cut off by a hole is a part without contact
    grid = network(nx, ny)
    unknowns = grid.matrix.shape[0]
    right = csc_matrix(random_array((unknowns, 30), density=0.05, rng=np.random.default_rng(3)))
    expected = spsolve(grid.matrix, right).toarray()
    order = elimination_order(grid, right)
    assert sorted(order.tolist()) == list(range(30))
    np.testing.assert_allclose(solve_network(grid, right), expected, rtol=1e-6, atol=1e-6)
    ordered = solve_network(grid, right[:, order])
    np.testing.assert_allclose(ordered, expected[:, order], rtol=1e-6, atol=1e-6)


def test_an_even_bar_is_a_linear_ramp() -> None:
    # Ohm's law: 1 A along a bar of 10 squares of 1000 ohm to metal on its last square
    problem = SheetOnBulk(
        conductance_s=1e-3,
        sheet=np.array([[0.0, 0.0, 12.0, 1.0]]),
        holes=np.zeros((0, 4)),
        contacts=np.array([[11.0, 0.0, 12.0, 1.0]]),
        contact=np.array([0]),
        series_ohm=np.array([5.0]),
        patches=np.zeros((0, 4)),
        patch_contact=np.zeros(0, dtype=np.int64),
    )
    lines = GridLines(
        x=np.arange(13.0),
        y=np.array([0.0, 1.0]),
        block_x=np.arange(12),
        block_y=np.zeros(1, dtype=np.int64),
    )
    grid = Network.of(problem, lines)
    right = np.zeros((grid.matrix.shape[0], 1))
    right[0] = 1.0
    found = solve_network(grid, csc_matrix(right))[:, 0]
    # between the middles of the first and the sixth square lie five squares
    assert found[0] - found[5] == pytest.approx(5000.0, rel=1e-6)
    # the contact node carries everything through its 5 ohm
    assert found[-1] == pytest.approx(5.0, rel=1e-4)
