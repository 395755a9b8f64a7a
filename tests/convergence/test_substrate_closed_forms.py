"""Contacts on bulk silicon against closed forms and values computed apart from the project."""

from __future__ import annotations

import numpy as np
import pytest
import shapely
from numpy.typing import NDArray

from latchscan.fields.layered import LayeredKernel, Stack, tabulate_kernel
from latchscan.fields.layered_contacts import (
    contact_conductances,
    graded_cuts,
    graded_patches,
    tapped_currents,
)
from latchscan.parasitics.pieces import equal_area_boxes

Floats = NDArray[np.float64]
HALF_SPACE = Stack(resistivity_ohm_um=(1.0,), thickness_um=(1.0e5,), bottom_contacted=True)
EPI = Stack(resistivity_ohm_um=(1.0e5, 1.0e2), thickness_um=(5.0, 300.0), bottom_contacted=True)


@pytest.fixture(scope="module")
def half_space() -> LayeredKernel:
    return tabulate_kernel(HALF_SPACE, 2000.0)


def disk_patches(radius: float, count: int, x: float = 0.0) -> Floats:
    """Cells graded towards the edge of a disk, clipped to it."""
    cuts = graded_cuts(2.0 * radius, count) - radius
    disk = shapely.Point(0.0, 0.0).buffer(radius, quad_segs=64)
    scale = np.sqrt(np.pi * radius**2 / disk.area)
    disk = shapely.transform(disk, lambda c: c * scale)
    x0, y0 = np.meshgrid(cuts[:-1], cuts[:-1], indexing="ij")
    x1, y1 = np.meshgrid(cuts[1:], cuts[1:], indexing="ij")
    parts = shapely.intersection(shapely.box(x0.ravel(), y0.ravel(), x1.ravel(), y1.ravel()), disk)
    areas = shapely.area(parts)
    real = areas > 1e-9 * radius**2
    return equal_area_boxes(parts[real], areas[real]) + np.array([x, 0.0, x, 0.0])


def resistance(kernel: LayeredKernel, patches: Floats) -> float:
    contact = np.zeros(len(patches), dtype=np.int64)
    return float(1.0 / contact_conductances(kernel, patches, contact)[0, 0])


def square_resistance(kernel: LayeredKernel, count: int) -> float:
    patches, _ = graded_patches(np.array([[0.0, 0.0, 1.0, 1.0]]), count)
    return resistance(kernel, patches)


def test_square_on_a_half_space(half_space: LayeredKernel) -> None:
    # 0.4339 rho / side, from the capacitance of the unit square plate 0.36679 x 4 pi eps0
    assert square_resistance(half_space, 12) == pytest.approx(0.4339, rel=0.005)


def test_square_converges_with_the_square_of_the_patch_count(half_space: LayeredKernel) -> None:
    # Error against 1 / (4 x 0.36679 pi / 2) = 0.43391 (unit square plate, 0.3667896 published)
    exact = 1.0 / (2.0 * np.pi * 0.3667896)
    counts = np.array([4, 8, 16])
    errors = [square_resistance(half_space, n) - exact for n in counts]
    order = -np.polyfit(np.log(counts), np.log(errors), 1)[0]
    assert 1.6 < order < 2.4


def test_disk_on_a_half_space(half_space: LayeredKernel) -> None:
    # rho / 4a (Holm, Electric Contacts)
    assert resistance(half_space, disk_patches(1.0, 16)) == pytest.approx(0.25, rel=0.01)


@pytest.mark.parametrize(
    ("radius", "ohm"), [(1.0, 22804), (5.0, 3134), (10.0, 1073), (20.0, 323.5)]
)
def test_disk_on_epi(radius: float, ohm: float) -> None:
    # 10 ohm cm, 5 um over 0.01 ohm cm: axisymmetric boundary elements, computed apart from the
    # project; limits of Schumann & Gardner, J. Electrochem. Soc. 116, 87, 1969
    kernel = tabulate_kernel(EPI, 500.0)
    assert resistance(kernel, disk_patches(radius, 20)) == pytest.approx(ohm, rel=0.01)


def test_wide_contact_on_a_slab_is_a_plate() -> None:
    # rho t / A, every edge moved outwards by t ln 4 / pi for the fringe (the conformal map of a
    # half-plane electrode over a plane, any field text)
    stack = Stack(resistivity_ohm_um=(100.0,), thickness_um=(1.0,), bottom_contacted=True)
    side = 60.0
    patches, _ = graded_patches(np.array([[0.0, 0.0, side, side]]), 10)
    widened = side + 2.0 * np.log(4.0) / np.pi
    found = resistance(tabulate_kernel(stack, 500.0), patches)
    assert found == pytest.approx(100.0 / widened**2, rel=0.01)


@pytest.mark.parametrize("distance", [3.0, 6.0, 20.0])
def test_two_disks(half_space: LayeredKernel, distance: float) -> None:
    # (rho / 2r)(1 - (2 / pi) asin(r / d)), the two fields superposed (textbook); that leaves
    # out the crowding of two disks nearer than about a radius
    patches = np.concatenate([disk_patches(1.0, 12), disk_patches(1.0, 12, x=distance)])
    contact = np.repeat([0, 1], len(patches) // 2)
    ohm = np.linalg.inv(contact_conductances(half_space, patches, contact))
    between = ohm[0, 0] + ohm[1, 1] - 2.0 * ohm[0, 1]
    expected = 0.5 * (1.0 - 2.0 / np.pi * np.arcsin(1.0 / distance))
    assert between == pytest.approx(expected, rel=0.012)


def test_far_contacts_see_points(half_space: LayeredKernel) -> None:
    # Transfer resistance rho / (2 pi d) of two far contacts [derived]
    patches = np.array([[0.0, 0.0, 1.0, 1.0], [80.0, 0.0, 81.0, 1.0]])
    ohm = np.linalg.inv(contact_conductances(half_space, patches, np.array([0, 1])))
    assert ohm[0, 1] == pytest.approx(1.0 / (2.0 * np.pi * 80.0), rel=1e-3)


def test_insulated_bottom_balances_its_currents() -> None:
    # Between two contacts on a floating slab far thinner than their distance: two disks in a
    # sheet, R = rho / (pi t) ln(d / a) plus what each spreads below itself; the second cancels
    # between two distances
    stack = Stack(resistivity_ohm_um=(100.0,), thickness_um=(1.0,), bottom_contacted=False)
    kernel = tabulate_kernel(stack, 1000.0)
    found = []
    for distance in (50.0, 200.0):
        first, _ = graded_patches(np.array([[0.0, 0.0, 2.0, 2.0]]), 6)
        patches = np.concatenate([first, first + np.array([distance, 0.0, distance, 0.0])])
        contact = np.repeat([0, 1], len(first))
        conductance = contact_conductances(kernel, patches, contact)
        np.testing.assert_allclose(conductance.sum(axis=1), 0.0, atol=1e-9)
        found.append(1.0 / conductance[0, 0])
    expected = 100.0 / np.pi * np.log(200.0 / 50.0)
    assert found[1] - found[0] == pytest.approx(expected, rel=2e-3)


def test_currents_into_taps_sum_to_the_forced_one() -> None:
    stack = Stack(resistivity_ohm_um=(1.0e5,), thickness_um=(300.0,), bottom_contacted=False)
    kernel = tabulate_kernel(stack, 500.0)
    boxes = np.array([[0.0, 0.0, 2.0, 1.0], [20.0, 5.0, 21.0, 6.0]])
    patches, contact = graded_patches(boxes, 4)
    seen = kernel.between(patches, np.array([[9.0, 2.0, 10.0, 3.0]]))
    currents, level = tapped_currents(kernel, patches, contact, np.array([10.0, 20.0]), seen)
    assert currents.sum() == pytest.approx(1.0, abs=1e-9)
    # every patch of a tap is at the potential of its contacts' resistance
    potential = seen[:, 0] - kernel.between(patches, patches) @ currents[:, 0] + level[0]
    tap = np.array([10.0, 20.0]) * np.bincount(contact, currents[:, 0])
    np.testing.assert_allclose(potential, tap[contact], atol=1e-4)
