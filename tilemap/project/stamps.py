"""What one particle looks like on pixels: tables for drawing projected kernels, made once for each kernel.

Two kinds of image are drawn on, and a *stamp* is the particle's weights on one of them:

- the finest image holds averages over pixels, so its stamps are kernels averaged over pixels, not sampled at centres;
- coarser images hold coefficients of quartic B-splines (see `vcycle`), so their stamps are the weights whose spline is
  the kernel. They are a little narrower than the kernel, as a spline widens what it carries.

Stamps wider than `SMALL_PX` are isotropic polynomials: no branch, no look-up, so rows of them vectorise. In
u = 1 - (r / R')^2, R'^2 = R^2 + REACH for a support radius R, t = 2 u - 1 (powers of t need coefficients a hundred
times smaller than powers of u, which single precision needs), they are

    u^3 (q0 + q1 t + ... + q8 t^8) / R'^2,   q = a + b / R^2 + c / R^4,

where a is the kernel as it is, and b and c are what averaging or the spline changes; a factor of the same form makes
them sum to one. Narrower ones, on the finest image
alone, come from a table of the kernel's mass left of x and above y: four look-ups give the mass inside a pixel, and the
sum over pixels is exact because it telescopes.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache

import numpy as np
from numpy.typing import NDArray
from scipy.interpolate import BSpline

from tilemap.project.kernels import Kernel, kernel_named

SMALL_PX = 4.0
"""Support radius in pixels below which the cumulative table is used: the fit's error passes 1e-3 below it."""
COARSE_PX = 7.9
"""Smallest support radius drawn on a coarse image: a spline misses 1.8e-3 of a cubic kernel there at worst (2.1e-3 at
7.7 pixels), less of all others."""
LARGE_PX = 2 * COARSE_PX
"""Largest support radius in pixels drawn on an image that has a coarser one above it."""
REACH = 2.0
"""Square pixels by which R'^2 exceeds R^2: averaging spreads a kernel beyond its support (3.5 and 5 fit less well)."""
CELLS = 256
"""Cells across the cumulative table: L1 error at most 2.2e-4 for a particle (64 cells 4e-3, 128 cells 8e-4)."""
FIRST_POWER = 3
TERMS = 9
ORDERS = 3

_AVERAGED_RADII = (4.0, 4.4, 5.0, 5.8, 7.0, 9.4, 15.8)
_SPLINE_RADII = (7.9, 8.6, 9.6, 11.0, 13.0, 15.8)
_QUARTIC = BSpline.basis_element(np.arange(6) - 2.5, extrapolate=False)


@dataclass(frozen=True)
class Stamps:
    """Tables of one kernel.

    Attributes
    ----------
    cumulative : float32 (CELLS + 1, CELLS + 1)
        Mass share of the quadrant below (x, y), both from -1 to 1 in units of the support radius.
    averaged : float32 (ORDERS, TERMS + 1)
        Polynomial of stamps on the finest image: the rows a, b, c; the last column is the factor.
    spline : float32 (ORDERS, TERMS + 1)
        The same on coarse images.
    """

    cumulative: NDArray[np.float32]
    averaged: NDArray[np.float32]
    spline: NDArray[np.float32]


@lru_cache(maxsize=8)
def stamps_for(kernel_name: str) -> Stamps:
    """The tables of a kernel by name; InputError where there is no such kernel."""
    kernel = kernel_named(kernel_name)
    plain = _plain(kernel)
    averaged = _corrected(plain, [_averaged_rows(kernel, radius) for radius in _AVERAGED_RADII])
    spline = _corrected(plain, [_spline_rows(kernel, radius) for radius in _SPLINE_RADII])
    averaged, spline = _with_norm(averaged, _AVERAGED_RADII), _with_norm(spline, _SPLINE_RADII)
    return Stamps(_cumulative(kernel), averaged.astype(np.float32), spline.astype(np.float32))


def _cumulative(kernel: Kernel) -> NDArray[np.float32]:
    gauss_x, gauss_w = np.polynomial.legendre.leggauss(5)
    half, width = CELLS // 2, 2.0 / CELLS
    where = ((np.arange(half)[:, None] + 0.5 * (gauss_x + 1.0)) * width).ravel()
    weight = np.tile(0.5 * width * gauss_w, half)
    values = kernel.projected(np.hypot(where[:, None], where[None, :])) * np.multiply.outer(weight, weight)
    quarter = values.reshape(half, 5, half, 5).sum(axis=(1, 3))
    cells = np.block([[quarter[::-1, ::-1], quarter[::-1]], [quarter[:, ::-1], quarter]])
    table = np.zeros((CELLS + 1, CELLS + 1))
    table[1:, 1:] = cells.cumsum(axis=0).cumsum(axis=1)
    return (table / table[-1, -1]).astype(np.float32)


def pixel_average(kernel: Kernel, radius_px: float, x: NDArray, y: NDArray, cuts: int = 2) -> NDArray[np.float64]:
    """Average of the projected kernel over the unit pixels centred at (x, y), by Gauss-Legendre on cuts x cuts parts.

    Parameters
    ----------
    kernel : Kernel
    radius_px : float
        Support radius, pixels.
    x, y : float64 (...)
        Pixel centres relative to the particle, pixels.
    cuts : int
        Parts along a side, six points each.

    Returns
    -------
    float64 (...), mass share per pixel.
    """
    gauss_x, gauss_w = np.polynomial.legendre.leggauss(6)
    offset = ((np.arange(cuts)[:, None] + 0.5 * (gauss_x + 1.0)) / cuts - 0.5).ravel()
    weight = np.tile(gauss_w / (2 * cuts), cuts)
    r = np.hypot(x[..., None, None] + offset[:, None], y[..., None, None] + offset[None, :])
    return np.einsum("...ij,i,j->...", kernel.projected(r / radius_px), weight, weight) / radius_px**2


def _basis(u: NDArray[np.float64]) -> NDArray[np.float64]:
    """The terms of the polynomial at u (any shape), along a new last axis."""
    u = np.clip(u, 0.0, None)
    return (u**FIRST_POWER)[..., None] * (2.0 * u - 1.0)[..., None] ** np.arange(TERMS)


def _least_deviation(rows: NDArray[np.float64], target: NDArray[np.float64], area: NDArray[np.float64]) -> NDArray:
    """Coefficients of least absolute deviation, the L1 that is promised, by reweighted least squares."""
    solution = np.linalg.lstsq(rows * area[:, None], target * area, rcond=1e-9)[0]
    for _ in range(5):
        weight = area / np.sqrt(np.abs(rows @ solution - target) + 1e-6 * np.abs(target).max())
        solution = np.linalg.lstsq(rows * weight[:, None], target * weight, rcond=1e-9)[0]
    return solution


def _plain(kernel: Kernel) -> NDArray[np.float64]:
    q = np.linspace(0.0, 1.0, 200)
    return _least_deviation(_basis(1.0 - q**2), kernel.projected(q), np.sqrt(q + 0.01))


Rows = tuple[float, NDArray[np.float64], NDArray[np.float64], NDArray[np.float64]]


def _averaged_rows(kernel: Kernel, radius: float) -> Rows:
    angles = (np.arange(5) + 0.5) / 5 * np.pi / 4
    reach = np.sqrt(radius**2 + REACH)
    r = np.linspace(0.0, reach, 100)
    average = pixel_average(kernel, radius, np.outer(np.cos(angles), r), np.outer(np.sin(angles), r)).mean(axis=0)
    return radius, _basis(1.0 - (r / reach) ** 2) / reach**2, average, np.sqrt((r + 0.05) / radius)


def _spline_rows(kernel: Kernel, radius: float, offsets: int = 3, cuts: int = 2) -> Rows:
    """What each term contributes to the spline on a fine grid, for a few places of the particle within its pixel."""
    reach = np.sqrt(radius**2 + REACH)
    half = int(np.ceil(reach + 3))
    cells = np.arange(-half, half + 1)
    fine = (np.arange(-half * cuts, half * cuts) + 0.5) / cuts
    carry = np.nan_to_num(_QUARTIC(fine[:, None] - cells[None, :]))
    rows, target = [], []
    for k in range(offsets):
        x, y = (k + 0.5) / offsets - 0.5, ((k * 2) % offsets + 0.5) / offsets - 0.5
        terms = _basis(1.0 - ((cells[:, None] - y) ** 2 + (cells[None, :] - x) ** 2) / reach**2) / reach**2
        rows.append(np.einsum("ia,abt,jb->ijt", carry, terms, carry, optimize=True).reshape(-1, TERMS))
        distance = np.hypot(fine[:, None] - y, fine[None, :] - x)
        target.append(kernel.projected(distance / radius).ravel() / radius**2)
    inside = np.concatenate(target) + np.abs(np.concatenate(rows)).sum(axis=1) > 0
    rows_inside = np.concatenate(rows)[inside]
    return radius, rows_inside, np.concatenate(target)[inside], np.full(len(rows_inside), 1.0 / radius)


def _corrected(plain: NDArray[np.float64], parts: list[Rows]) -> NDArray[np.float64]:
    """Rows a, b, c of the polynomial: `plain` and the two corrections that serve all the radii of `parts` at once."""
    rows = np.concatenate([np.hstack([terms / radius**2, terms / radius**4]) for radius, terms, _, _ in parts])
    rest = np.concatenate([target - terms @ plain for _, terms, target, _ in parts])
    # In units of the kernel's peak and of its area, so that each radius counts alike.
    peak = np.concatenate([np.full(len(target), radius**2) for radius, _, target, _ in parts])
    area = np.concatenate([area for _, _, _, area in parts])
    scale = np.abs(rows * peak[:, None]).max(axis=0)
    solution = _least_deviation(rows * peak[:, None] / scale, rest * peak, area) / scale
    return np.stack([plain, solution[:TERMS], solution[TERMS:]])


def _with_norm(table: NDArray[np.float64], radii: tuple[float, ...]) -> NDArray[np.float64]:
    """Add the column n: stamps, which drawing clips where they dip below zero, then sum to one in the mean."""
    a, b, c = table
    u = (np.arange(1000) + 0.5) / 1000
    shrink = 1.0 / np.array([1e3, 30.0, *radii]) ** 2
    drawn = np.clip(_basis(u) @ (a[:, None] + b[:, None] * shrink + c[:, None] * shrink**2), 0.0, None)
    sums = np.pi * drawn.mean(axis=0)  # dA = pi R'^2 du
    norm = np.linalg.lstsq(shrink[:, None] ** np.arange(ORDERS), 1.0 / sums, rcond=None)[0]
    return np.hstack([table, norm[:, None]])
