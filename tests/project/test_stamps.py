"""The products that stamps are made of: their numbers are those that fitting gives, and keep what drawing relies on."""

from __future__ import annotations

import numpy as np
import pytest
from drawing import KERNELS

from tilemap.project.fit import CHOSEN, fit_kernel
from tilemap.project.kernels import KERNELS as BY_NAME
from tilemap.project.stamp_numbers import NUMBERS, Numbers
from tilemap.project.stamps import COARSE_PX, ENDS, RANK, SIGNS, TERMS, stamps_for


def stamp(numbers: Numbers, radius_px: float, across: float = 0.0, down: float = 0.0) -> np.ndarray:
    """The weights of a coarse stamp whose centre lies so far from a pixel's edge."""
    width = numbers.reach * np.sqrt(radius_px**2 - numbers.squeeze)
    orders = np.array(numbers.orders).reshape(-1, RANK, TERMS)
    polynomials = np.tensordot(width ** (-2.0 * np.arange(len(orders))), orders, axes=1)
    shares = []
    for place in (down, across):
        x = np.clip((np.arange(-int(width) - 2, int(width) + 3) - place) / width, -1, 1)
        shares.append(np.diff(x * np.polynomial.polynomial.polyval(2 * x**2 - 1, polynomials.T), axis=1))
    return np.einsum("k,ki,kj->ij", numbers.signs, *shares)


def test_fitting_gives_the_numbers_that_are_kept():
    # One kernel stands for all, as a fit takes seconds; another machine's rounding may end at another of many equal fits.
    again, kept = fit_kernel(BY_NAME["quintic"], *CHOSEN["quintic"]), NUMBERS["quintic"]
    off = [np.abs(stamp(again, radius) - stamp(kept, radius)).sum() for radius in (COARSE_PX, 2 * COARSE_PX, 100)]
    assert max(off) < 3e-4


@pytest.mark.parametrize("kernel", KERNELS)
def test_the_products_of_every_width_hold_all_of_the_particle(kernel):
    rows = stamps_for(kernel).spline.astype(np.float64)
    sums = (rows[:, SIGNS:] * (2 * rows[:, ENDS:SIGNS]) ** 2).sum(axis=1)
    assert np.abs(sums - 1).max() < 2e-7


@pytest.mark.parametrize("radius_px", [COARSE_PX, 10.0, 2 * COARSE_PX, 40.0])
@pytest.mark.parametrize("kernel", KERNELS)
def test_what_drawing_clips_from_a_coarse_stamp_is_below_what_mass_allows(kernel, radius_px):
    places = np.linspace(0, 1, 6)[:-1]
    stamps = [stamp(NUMBERS[kernel], radius_px, across, down) for across in places for down in places]
    clipped = [-np.minimum(weights, 0).sum() for weights in stamps]
    assert np.mean(clipped) < 7e-7
    assert max(clipped) < 1.5e-6
