"""What one particle looks like on pixels: tables of pixel-averaged projected kernels, made once for each kernel.

A projected kernel of support radius R pixels is averaged over pixels, not sampled at their centres. Two forms serve:

- below `SMALL_PX` pixels, the kernel's mass left of x and above y is tabulated; four look-ups give the mass inside a
  pixel, and the sum over pixels is exact because it telescopes;
- from there on, the average is a polynomial in u = 1 - (r / R')^2, fitted for each radius to averages by quadrature.
  It has no branch and no look-up, so rows of it vectorise. R' = R + `REACH_PX` because the average reaches further
  than the kernel.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache

import numpy as np
from numpy.typing import NDArray

from tilemap.project.kernels import Kernel, kernel_named

SMALL_PX = 4.0
"""Support radius in pixels below which the cumulative table is used: the fit's error passes 1e-3 below it."""
LARGE_PX = 8.0
"""Largest support radius in pixels drawn at a level that has a coarser one above it."""
REACH_PX = 0.35
"""How far the fitted pixel average reaches beyond the support (best L1 of 0.3, 0.35, 0.45, 0.6 over the six kernels)."""
CELLS = 256
"""Cells across the cumulative table: L1 error at most 2.2e-4 for a particle (64 cells 4e-3, 128 cells 8e-4)."""
FIRST_POWER = 3
TERMS = 9
"""The polynomial is u^3 (c0 + ... + c8 u^8). L1 error at 4 / 8 pixels: 3e-4 / 2e-4 cubic, 9e-4 / 3e-4 Wendland C6."""
NODES_PER_PX = 16
"""Radii per pixel at which the polynomial is fitted; between them the nearest is used, rescaled to the radius."""
WIDEST_PX = 32
"""Above LARGE_PX a fit for every whole pixel up to here, then one without any averaging: it would change 4e-4."""

_FIT_ANGLES = (np.arange(5) + 0.5) / 5 * np.pi / 4
_FIT_RADII = 96


@dataclass(frozen=True)
class Stamps:
    """Tables of one kernel.

    Attributes
    ----------
    cumulative : float32 (CELLS + 1, CELLS + 1)
        Mass share of the quadrant below (x, y), both from -1 to 1 in units of the support radius.
    coefficients : float32 (nodes, TERMS)
        Polynomial times R'^2 at the radii SMALL_PX + node / NODES_PER_PX up to LARGE_PX, at every whole pixel up to
        WIDEST_PX, and last for a kernel so wide that R' = R; its integral over the plane is one.
    """

    cumulative: NDArray[np.float32]
    coefficients: NDArray[np.float32]


@lru_cache(maxsize=8)
def stamps_for(kernel_name: str) -> Stamps:
    """The tables of a kernel by name; InputError where there is no such kernel."""
    kernel = kernel_named(kernel_name)
    return Stamps(_cumulative(kernel), _coefficients(kernel))


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


def _coefficients(kernel: Kernel) -> NDArray[np.float32]:
    fine = SMALL_PX + np.arange(int((LARGE_PX - SMALL_PX) * NODES_PER_PX) + 1) / NODES_PER_PX
    radii = (*fine, *np.arange(LARGE_PX + 1, WIDEST_PX + 1))
    fits = [_fit(kernel, float(radius), REACH_PX) for radius in radii]
    return np.stack([*fits, _fit(kernel, 1.0, 0.0)]).astype(np.float32)


def _fit(kernel: Kernel, radius_px: float, reach_px: float) -> NDArray[np.float64]:
    reach = radius_px + reach_px
    r = np.linspace(0.0, reach, _FIT_RADII)
    if reach_px:
        average = pixel_average(kernel, radius_px, np.outer(np.cos(_FIT_ANGLES), r), np.outer(np.sin(_FIT_ANGLES), r))
        target = average.mean(axis=0) * reach**2
    else:
        target = kernel.projected(r)
    u = 1.0 - (r / reach) ** 2
    powers = u[:, None] ** np.arange(FIRST_POWER, FIRST_POWER + TERMS)
    area = np.sqrt(r / reach + 0.01)
    solution = np.linalg.lstsq(powers * area[:, None], target * area, rcond=None)[0]
    for _ in range(6):  # reweighting turns least squares into least absolute deviation, the L1 that is promised
        weight = area / np.sqrt(np.abs(powers @ solution - target) + 1e-6)
        solution = np.linalg.lstsq(powers * weight[:, None], target * weight, rcond=None)[0]
    integral = np.pi * np.sum(solution / np.arange(FIRST_POWER + 1, FIRST_POWER + TERMS + 1))
    return solution / integral
