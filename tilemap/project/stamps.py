"""What one particle looks like on pixels: tables for drawing projected kernels, for each of the six.

A projected kernel is, on the square around it, close to a sum of few products (rank 4: L1 error 1e-4 to 8e-4)

    K(x, y) = s_1 a_1(x) a_1(y) + ... + s_4 a_4(x) a_4(y),   s = +-1,   a_k even polynomials, zero outside [-1, 1],

so that its *stamp*, the particle's weights on pixels, is a sum of products of rows and columns: four multiply-adds a
pixel. Rows and columns are differences of A_k, the integral of a_k, between the edges of pixels. That averages over
pixels exactly, however small the kernel is, and the weights sum to one because differences telescope.

Two kinds of image are drawn on:

- the finest image holds averages over pixels: its stamps are just that. Small ones have polynomials of their own, with
  fewer terms, fitted to averages over pixels rather than to the kernel, of whose shape less is left there;
- coarser images hold coefficients of quartic B-splines (see `vcycle`), so their stamps are weights whose spline is the
  kernel. They are narrower than the kernel, as averages and splines widen what they carry, and change with its radius.

The polynomials are fitted by `fit`, so that no sum is negative; their numbers are kept in `stamp_numbers`.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from functools import lru_cache

import numpy as np
from numpy.typing import NDArray

from tilemap.project.kernels import kernel_named
from tilemap.project.stamp_numbers import NUMBERS

COARSE_PX = 7.9
"""Smallest support radius drawn on a coarse image: a spline misses 1.7e-3 of a cubic kernel there (1.8e-3 at 7.7
pixels), less of all others."""
LARGE_PX = 2 * COARSE_PX
"""Largest support radius in pixels drawn on an image that has a coarser one above it."""
RANK = 4
"""Products in a stamp: three leave 1.5e-3 of a cubic kernel."""
TERMS = 9
"""Coefficients of A_k(x) / x in powers of v = 2 x^2 - 1 (powers of x^2 need larger ones that cancel)."""
ENDS, SIGNS = RANK * TERMS, RANK * TERMS + RANK
SMALL_TERMS = 7
SMALL_ENDS, SMALL_SIGNS = RANK * SMALL_TERMS, RANK * SMALL_TERMS + RANK
SMALL_PX = 3.5
"""Largest half width of a small stamp: it touches at most eight pixels each way."""
NODES = 64
"""Widths for which coarse stamps are tabulated, evenly in 1 / width^2: the nearest is within 1e-5 of the right one."""


@dataclass(frozen=True)
class Stamps:
    """Tables of one kernel. A row holds the coefficients of A_1 to A_4, their values at 1, and the factors s_k.

    Attributes
    ----------
    reach : float
        Half width of a stamp on the finest image in units of the support radius: beyond it lies at most 2e-5 of the mass.
    squeeze : float
        Square pixels by which stamps on coarse images are narrower: half width is reach sqrt(R^2 - squeeze).
    averaged : float32 (1, RANK (TERMS + 2))
        On the finest image, for all radii but those of small stamps.
    small_reach : float
        As reach, for small stamps: those whose half width is then at most SMALL_PX.
    small : float32 (RANK (SMALL_TERMS + 2),)
        On the finest image, for small stamps.
    spline : float32 (NODES, RANK (TERMS + 2))
        On coarse images; row k is for a half width of sqrt(density / k).
    density : float
        Square pixels.
    """

    reach: float
    squeeze: float
    averaged: NDArray[np.float32]
    small_reach: float
    small: NDArray[np.float32]
    spline: NDArray[np.float32]
    density: float


@lru_cache(maxsize=8)
def stamps_for(kernel_name: str) -> Stamps:
    """The tables of a kernel by name; InputError where there is no such kernel."""
    numbers = NUMBERS[kernel_named(kernel_name).name]
    orders = np.array(numbers.orders).reshape(-1, RANK, TERMS)
    narrowest = numbers.reach * math.sqrt(COARSE_PX**2 - numbers.squeeze)
    density = (NODES - 1) * narrowest**2
    powers = (np.arange(NODES) / density)[:, None] ** np.arange(len(orders))
    spline = _rows(np.tensordot(powers, orders, axes=1), numbers.signs)
    small = _rows(np.array(numbers.small).reshape(1, RANK, SMALL_TERMS), numbers.small_signs)[0]
    return Stamps(numbers.reach, numbers.squeeze, spline[:1], numbers.small_reach, small, spline, density)


def _rows(polynomials: NDArray[np.float64], signs: tuple[int, ...]) -> NDArray[np.float32]:
    """Rows of a table from polynomials (n, RANK, terms): ends as drawing computes them, signs so that weights sum to one."""
    count, _, terms = polynomials.shape
    rows = np.empty((count, RANK * (terms + 2)), dtype=np.float32)
    rows[:, : RANK * terms] = polynomials.reshape(count, -1)
    coefficients = rows[:, : RANK * terms].reshape(polynomials.shape)
    ends = coefficients[..., -1]
    for k in range(terms - 2, -1, -1):  # Horner's rule at v = 1 in single precision
        ends = ends + coefficients[..., k]
    mass = (np.array(signs) * (2.0 * ends.astype(np.float64)) ** 2).sum(axis=1)
    # Where a stamp is one pixel, rounding may leave 1 - 6e-8 of it: the nearest factors that leave it whole are taken.
    steps = np.stack(np.meshgrid(np.arange(-4, 5), *[np.arange(-2, 3)] * (RANK - 1), indexing="ij"), -1).reshape(
        -1, RANK
    )
    steps = steps[np.argsort(np.abs(steps).sum(axis=1), kind="stable")]
    change = steps[:, None] * 2.0**-26 / (2.0 * ends.astype(np.float64)) ** 2
    factors = (np.array(signs) * (1.0 + np.clip(change, -0.02, 0.02)) / mass[:, None]).astype(np.float32)
    whole = _one_pixel(ends, factors) == 1.0
    rows[:, RANK * terms :] = np.hstack([ends, factors[np.argmax(whole, axis=0), np.arange(count)]])
    return rows


def _one_pixel(ends: NDArray[np.float32], factors: NDArray[np.float32]) -> NDArray[np.float32]:
    """The weight of a pixel that holds all of a stamp, rounded as drawing rounds it, with fused multiply-adds."""
    across = ends + ends
    down = (across * factors).astype(np.float64)
    weight = np.zeros(factors.shape[:-1], dtype=np.float32)
    for k in range(RANK):
        weight = (down[..., k] * across[..., k] + weight).astype(np.float32)
    return weight
