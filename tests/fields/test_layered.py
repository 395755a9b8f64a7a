"""The layered kernel against images, quadrature and symmetry."""

from __future__ import annotations

import numpy as np
import pytest
from numpy.typing import NDArray
from scipy.integrate import dblquad

from latchscan.fields.layered import LayeredKernel, Stack, surface_ratio, tabulate_kernel
from latchscan.fields.rectangles import (
    inverse_distance_at,
    inverse_distance_between,
    mean_log_from_middle,
    mean_log_within,
)

Floats = NDArray[np.float64]
SLAB = (1.0e5, 5.0)


def slab(*, contacted: bool) -> LayeredKernel:
    stack = Stack(
        resistivity_ohm_um=(SLAB[0],), thickness_um=(SLAB[1],), bottom_contacted=contacted
    )
    return tabulate_kernel(stack, 500.0)


def images(r: float, *, sign: float, count: int = 200_000) -> float:
    """Method of images for a slab (any field text); the mean of two partial sums."""
    n = np.arange(1, count + 1)
    terms = 2.0 * sign**n / np.sqrt(r * r + (2.0 * n * SLAB[1]) ** 2)
    if sign > 0.0:
        terms -= 2.0 / (2.0 * n * SLAB[1])
    total = 1.0 / r + terms.sum() - 0.5 * terms[-1]
    return float(SLAB[0] / (2.0 * np.pi) * total)


@pytest.mark.parametrize("r", [0.1, 1.0, 5.0, 20.0])
def test_slab_on_metal_is_a_sum_of_images(r: float) -> None:
    expected = images(r, sign=-1.0)
    assert slab(contacted=True).point(np.array([r]))[0] == pytest.approx(expected, rel=2e-6)


def test_insulated_slab_is_a_sum_of_images_up_to_a_constant() -> None:
    r = [0.1, 1.0, 5.0, 20.0, 100.0]
    found = slab(contacted=False).point(np.array(r))
    expected = np.array([images(x, sign=1.0) for x in r])
    difference = found - expected
    assert np.ptp(difference) < 2e-5 * np.ptp(expected)


def test_insulated_slab_falls_like_a_sheet_far_away() -> None:
    # A current in a sheet: the potential falls by rho / (2 pi t) a factor of e
    kernel = slab(contacted=False)
    near, far = kernel.point(np.array([100.0, 100.0 * np.e]))
    assert near - far == pytest.approx(SLAB[0] / (2.0 * np.pi * SLAB[1]), rel=1e-4)


@pytest.mark.parametrize("contacted", [True, False])
def test_equal_layers_are_one_layer(contacted: bool) -> None:
    k = np.geomspace(1e-4, 3.0, 40)
    whole = Stack(resistivity_ohm_um=(7.0,), thickness_um=(6.0,), bottom_contacted=contacted)
    parts = Stack(
        resistivity_ohm_um=(7.0,) * 3, thickness_um=(1.0, 2.0, 3.0), bottom_contacted=contacted
    )
    np.testing.assert_allclose(
        surface_ratio(parts, k), surface_ratio(whole, k), rtol=1e-9, atol=1e-12
    )


def test_mean_of_inverse_distance_by_quadrature() -> None:
    # scipy's adaptive quadrature is the reference
    a = np.array([[0.0, 0.0, 1.0, 2.0]])
    b = np.array([[3.0, 1.0, 3.5, 7.0]])

    def seen_from(y: float, x: float) -> float:
        return float(inverse_distance_at(np.array([[x, y]]), b)[0])

    point, _ = dblquad(lambda y, x: 1.0 / np.hypot(x - 0.5, y - 0.5), 3.0, 3.5, 1.0, 7.0)
    assert seen_from(0.5, 0.5) == pytest.approx(point / 3.0, rel=1e-8)
    mean, _ = dblquad(seen_from, 0.0, 1.0, 0.0, 2.0)
    assert inverse_distance_between(a, b)[0] == pytest.approx(mean / 2.0, rel=1e-6)


def test_mean_inverse_distance_within_a_square() -> None:
    # 4 ln(1 + sqrt 2) - 4 (sqrt 2 - 1) / 3 = 2.97321 (a textbook integral)
    unit = np.array([[0.0, 0.0, 1.0, 1.0]])
    expected = 4.0 * np.log(1.0 + np.sqrt(2.0)) - 4.0 * (np.sqrt(2.0) - 1.0) / 3.0
    assert inverse_distance_between(unit, unit)[0] == pytest.approx(expected, rel=1e-9)


def test_mean_logarithms_of_a_rectangle() -> None:
    # Square: ln of 0.44705 of the side (Maxwell's geometric mean distance); from the middle
    # by scipy's quadrature over a quarter
    box = np.array([[0.0, 0.0, 1.0, 1.0]])
    assert np.exp(mean_log_within(box)) == pytest.approx(0.44705, rel=1e-4)
    strip = np.array([[0.0, 0.0, 4.0, 1.0]])
    quarter, _ = dblquad(lambda y, x: np.log(np.hypot(x, y)), 0.0, 2.0, 0.0, 0.5)
    assert mean_log_from_middle(strip) == pytest.approx(quarter, rel=1e-5)
    halves = np.array([[0.0, 0.0, 2.0, 1.0], [2.0, 0.0, 4.0, 1.0]])
    assert mean_log_within(halves) == pytest.approx(mean_log_within(strip), abs=0.04)


@pytest.mark.parametrize("contacted", [True, False])
def test_means_between_rectangles_agree_with_points(contacted: bool) -> None:
    # Means over 20 x 20 points of the potential at a point are the reference
    kernel = slab(contacted=contacted)
    sources = np.array([[0.0, 0.0, 4.0, 1.0], [0.0, 3.0, 12.0, 15.0], [40.0, 0.0, 41.0, 1.0]])
    receivers = np.array([[1.0, 0.5, 3.0, 6.0], [20.0, 4.0, 30.0, 6.0]])
    found = kernel.between(receivers, sources)
    t = (np.arange(20) + 0.5) / 20.0
    for row, (x0, y0, x1, y1) in enumerate(receivers):
        x, y = np.meshgrid(x0 + (x1 - x0) * t, y0 + (y1 - y0) * t)
        points = np.stack([x.ravel(), y.ravel()], axis=1)
        expected = kernel.at_points(points, sources).mean(axis=0)
        np.testing.assert_allclose(found[row], expected, rtol=3e-3, atol=2.0)


def test_reciprocity_and_shift() -> None:
    kernel = slab(contacted=True)
    rng = np.random.default_rng(3)
    low = rng.uniform(0.0, 20.0, (12, 2))
    boxes = np.concatenate([low, low + rng.uniform(0.2, 6.0, (12, 2))], axis=1)
    matrix = kernel.between(boxes, boxes)
    np.testing.assert_allclose(matrix, matrix.T, rtol=1e-9, atol=1e-9)
    np.testing.assert_allclose(kernel.between(boxes + 7.0, boxes + 7.0), matrix, rtol=1e-8)
    assert np.linalg.eigvalsh(matrix).min() > 0.0
