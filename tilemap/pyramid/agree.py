"""Codes of the parts and of what was made of them in, the pixels that cannot be right out.

A code stands for an interval of values (`Coding.bounds`). Every check asks whether any values inside the intervals of
the parts could have given a value inside the interval of the whole. No rounding, however unlucky, makes a sound atlas
fail; what fails is wrong for certain.
"""

from __future__ import annotations

import numpy as np
from numba import njit
from numpy.typing import NDArray

from tilemap.pyramid.coding import Coding, LogCoding


@njit(nogil=True, cache=True)
def _sum_misfits(whole, parts, low, high, share):
    count = 0
    for i in range(whole.shape[0]):
        for j in range(whole.shape[1]):
            least, most = 0.0, 0.0
            for k in range(parts.shape[0]):
                least += low[parts[k, i, j]]
                most += high[parts[k, i, j]]
            code = whole[i, j]
            if low[code] > most * share or high[code] < least * share:
                count += 1
    return count


@njit(nogil=True, cache=True)
def _mean_misfits(whole, parts, weights, low, high, weight_low, weight_high, zero_is_low):
    count = 0
    for i in range(whole.shape[0]):
        for j in range(whole.shape[1]):
            code = whole[i, j]
            floor, ceiling = low[code], high[code]
            pull_up, pull_down = 0.0, 0.0
            least, most = np.inf, -np.inf
            weighed = False
            wrong = False
            for k in range(parts.shape[0]):
                part = parts[k, i, j]
                light, heavy = max(weight_low[weights[k, i, j]], 0.0), weight_high[weights[k, i, j]]
                if part == 0 and not zero_is_low:
                    # Nothing here, so nothing may weigh here.
                    wrong = wrong or light > 0.0
                    continue
                if heavy <= 0.0:
                    continue
                weighed = weighed or light > 0.0
                bottom, top = low[part], high[part]
                least, most = min(least, bottom), max(most, top)
                pull_up += (heavy if top > floor else light) * (top - floor)
                pull_down += (heavy if bottom < ceiling else light) * (bottom - ceiling)
            if code == 0 and not zero_is_low:
                wrong = wrong or weighed
            elif not (code == 0 and not weighed):
                # A mean M of parts m with weights w is where the sum of w (m - M) is zero. With every m and w at its
                # best for a high mean that sum is still negative at `floor`: then no mean reaches `floor`.
                wrong = wrong or pull_up < 0.0 or pull_down > 0.0 or floor > most or ceiling < least
            if wrong:
                count += 1
    return count


def sum_misfits(whole: NDArray[np.uint16], parts: NDArray[np.uint16], coding: Coding, share: float) -> int:
    """How many pixels of `whole` cannot be `share` times the sum of the same pixels of `parts`.

    Parameters
    ----------
    whole : uint16 (rows, columns)
    parts : uint16 (parts, rows, columns)
    coding : Coding
        Of both. Code 0 counts as zero; in log coding it may hide anything up to half a step below the lowest value.
    share : float
        1 for a sum of slabs, 1/4 for the average of four pixels.
    """
    return int(_sum_misfits(whole, parts, *coding.bounds(), share))


def mean_misfits(
    whole: NDArray[np.uint16],
    parts: NDArray[np.uint16],
    weights: NDArray[np.uint16],
    coding: Coding,
    weight_coding: Coding,
) -> int:
    """How many pixels of `whole` cannot be the weighted mean of the same pixels of `parts`.

    Parameters
    ----------
    whole : uint16 (rows, columns)
    parts, weights : uint16 (parts, rows, columns)
    coding : Coding
        Of `whole` and `parts`. In log coding code 0 says "nothing, or too low to write"; in linear coding "nothing".
    weight_coding : Coding
    """
    zero_is_low = isinstance(coding, LogCoding)
    return int(_mean_misfits(whole, parts, weights, *coding.bounds(), *weight_coding.bounds(), zero_is_low))


@njit(nogil=True, cache=True)
def _dispersion_misfits(whole, whole_mean, parts, means, weights, low, high, mean_low, mean_high, w_low, w_high, noise):
    count = 0
    for i in range(whole.shape[0]):
        for j in range(whole.shape[1]):
            centre_low, centre_high = mean_low[whole_mean[i, j]], mean_high[whole_mean[i, j]]
            if whole_mean[i, j] == 0 or not (np.isfinite(centre_low) and np.isfinite(centre_high)):
                continue  # nothing here, which the mean's own check looks into; or at an end that holds no bound
            about, off = 0.5 * (centre_low + centre_high), 0.5 * (centre_high - centre_low)
            code = whole[i, j]
            floor = max(low[code], 0.0) ** 2 - noise
            ceiling = high[code] ** 2 + off * off + noise
            pull_up, pull_down = 0.0, 0.0
            known = True
            for k in range(parts.shape[0]):
                light, heavy = max(w_low[weights[k, i, j]], 0.0), w_high[weights[k, i, j]]
                if means[k, i, j] == 0 or heavy <= 0.0:
                    continue
                near, far = mean_low[means[k, i, j]] - about, mean_high[means[k, i, j]] - about
                known = known and np.isfinite(near) and np.isfinite(far)
                least = 0.0 if near <= 0.0 <= far else min(abs(near), abs(far)) ** 2
                bottom = least + max(low[parts[k, i, j]], 0.0) ** 2 - noise
                top = max(abs(near), abs(far)) ** 2 + high[parts[k, i, j]] ** 2 + noise
                pull_up += (heavy if top > floor else light) * (top - floor)
                pull_down += (heavy if bottom < ceiling else light) * (bottom - ceiling)
            if known and (pull_up < 0.0 or pull_down > 0.0):
                count += 1
    return count


def dispersion_misfits(
    whole: NDArray[np.uint16],
    whole_mean: NDArray[np.uint16],
    parts: NDArray[np.uint16],
    means: NDArray[np.uint16],
    weights: NDArray[np.uint16],
    coding: Coding,
    mean_coding: Coding,
    weight_coding: Coding,
    floor: float,
) -> int:
    """How many pixels of `whole` cannot be the dispersion of the same pixels of `parts` taken together.

    About any number c the mean square is that of the dispersions and of (mean - c); with c the mean of the whole, it is
    the square of the whole's dispersion, but for what the codes leave open about that mean.

    Parameters
    ----------
    whole, whole_mean : uint16 (rows, columns)
        The dispersion, and the mean that it is about.
    parts, means, weights : uint16 (parts, rows, columns)
    coding, mean_coding, weight_coding : Coding
    floor : float
        Dispersions below this are not told from zero.
    """
    bounds = (*coding.bounds(), *mean_coding.bounds(), *weight_coding.bounds())
    return int(_dispersion_misfits(whole, whole_mean, parts, means, weights, *bounds, floor**2))


@njit(nogil=True, cache=True)
def _total(codes, low, high):
    least, most = 0.0, 0.0
    for i in range(codes.shape[0]):
        for j in range(codes.shape[1]):
            least += low[codes[i, j]]
            most += high[codes[i, j]]
    return least, most


def total_bounds(codes: NDArray[np.uint16], coding: Coding) -> tuple[float, float]:
    """Between which two numbers the sum of the values of these pixels lies (uint16, rows x columns)."""
    least, most = _total(codes, *coding.bounds())
    return float(least), float(most)
