"""What carries coarse images to finer ones, against the B-splines of scipy."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.integrate import quad
from scipy.interpolate import BSpline

from tilemap.project.vcycle import TWO_SCALE, TWO_SCALE_AVERAGED, _refine

QUARTIC = BSpline.basis_element(np.arange(6) - 2.5, extrapolate=False)


def quartic(x: np.ndarray) -> np.ndarray:
    return np.nan_to_num(QUARTIC(x))


def children(weights: np.ndarray, coefficients: np.ndarray) -> np.ndarray:
    """Coefficients on the finer grid: child 2 i and 2 i + 1 of coefficient i, whose pixel they halve."""
    padded = np.pad(np.asarray(coefficients, dtype=np.float64), 2)
    out = np.zeros(2 * len(coefficients))
    for i in range(len(coefficients)):
        near = padded[i : i + 5]
        out[2 * i], out[2 * i + 1] = near @ weights, near @ weights[::-1]
    return out


def test_refined_coefficients_are_the_same_spline():
    # Coarse pixel i is centred at 2 i + 1 in fine pixels, its children at 2 i + 1/2 and 2 i + 3/2.
    coarse = np.zeros(15)
    coarse[4:11] = np.random.default_rng(1).random(7)
    fine = children(TWO_SCALE, coarse)
    x = np.linspace(10, 20, 401)
    before = sum(c * quartic((x - (2 * i + 1)) / 2) for i, c in enumerate(coarse))
    after = sum(c * quartic(x - (j + 0.5)) for j, c in enumerate(fine))
    assert after == pytest.approx(before, abs=1e-7)


def test_the_last_refinement_gives_the_averages_of_the_spline_over_pixels():
    coarse = np.zeros(15)
    coarse[4:11] = np.random.default_rng(2).random(7)
    averages = children(TWO_SCALE_AVERAGED, coarse)

    def spline(x: float) -> float:
        return sum(c * float(quartic(np.array((x - (2 * i + 1)) / 2))) for i, c in enumerate(coarse))

    for j in range(8, 22):
        # Knots of the coarse spline lie at even places.
        assert averages[j] == pytest.approx(quad(spline, j, j + 1)[0], abs=1e-7)


@pytest.mark.parametrize("weights", [TWO_SCALE, TWO_SCALE_AVERAGED])
def test_all_weights_are_positive_and_keep_the_sum(weights):
    assert (weights >= 0).all()
    assert weights.sum(dtype=np.float64) == pytest.approx(1, abs=1e-7)


@pytest.mark.parametrize("weights", [TWO_SCALE, TWO_SCALE_AVERAGED])
def test_both_axes_are_refined_alike(weights):
    coarse = np.zeros((1, 12, 12), dtype=np.float32)
    column, row = np.random.default_rng(3).random((2, 6))
    coarse[0, 3:9, 3:9] = np.outer(row, column)
    fine = np.ones((1, 16, 16), dtype=np.float32)
    _refine(coarse, fine, 2, 2, 8, 8, weights)
    expected = np.outer(children(weights, np.pad(row, 1)), children(weights, np.pad(column, 1)))
    assert fine[0] == pytest.approx(1 + expected, abs=1e-6)


def test_images_finer_than_a_coarse_one_are_positive_where_it_is():
    coarse = np.zeros((1, 12, 12), dtype=np.float32)
    coarse[0, 5, 6] = 1.0
    fine = np.zeros((1, 16, 16), dtype=np.float32)
    _refine(coarse, fine, 2, 2, 8, 8, TWO_SCALE)
    assert fine.min() >= 0
    assert fine.sum(dtype=np.float64) == pytest.approx(4, rel=1e-6)
