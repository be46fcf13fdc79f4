"""Drawing: particles in pixel units in, their pixel-averaged kernels added to an image with a margin.

Two inner loops (see `stamps`) and one for kernels wider than `LARGE_PX`, which only the coarsest level draws. Each
particle's weights are made to sum to one exactly: what rounding and the fit leave over goes to the four pixels
around its centre.
"""

from __future__ import annotations

import math

import numpy as np
from numba import njit
from numpy.typing import NDArray

from tilemap.project.stamps import CELLS, FIRST_POWER, LARGE_PX, NODES_PER_PX, REACH_PX, SMALL_PX, TERMS, WIDEST_PX, Stamps

MARGIN = 32
"""Pixels around an image that drawing may touch: twice LARGE_PX, a row's spare width, and a pad for interpolation."""
PAD = 4
"""Pixels around an image that must be right for the next finer level: its five-point interpolation reaches 4 back."""
NARROW, BROAD = 16, 24
"""Row widths of the vectorised loop, in pixels: up to radii of 7.1 and 11.1 pixels."""
UNIT_SUM_PX = 48.0
"""Support radius from which the fitted kernel, summed over pixels, needs no summing over pixels: it is its integral to 1e-7."""

_NARROW_REACH = np.float32((NARROW - 1) / 2)
_LAST_NODE = int((LARGE_PX - SMALL_PX) * NODES_PER_PX)
# fastmath lets the compiler reorder sums and fuse multiply-adds, without which rows do not vectorise; infinities
# and NaN are refused by the sources, so their rules are not needed here.
_FAST = {"nogil": True, "cache": True, "fastmath": True, "error_model": "numpy"}
assert FIRST_POWER == 3 and TERMS == 9, "the loops below are written out for this polynomial"


@njit(inline="always", **_FAST)
def _polynomial(u, c0, c1, c2, c3, c4, c5, c6, c7, c8):
    value = c0 + u * (c1 + u * (c2 + u * (c3 + u * (c4 + u * (c5 + u * (c6 + u * (c7 + u * c8)))))))
    return max(u * u * u * value, np.float32(0.0))


def _row_drawer(width: int):
    """The vectorised loop for rows of a constant width, drawing one or two channels."""

    @njit(**_FAST)
    def draw_rows(image, channels, x, y, r, first, second, coefficients):
        node = min(max(int((r - np.float32(SMALL_PX)) * np.float32(NODES_PER_PX) + np.float32(0.5)), 0), _LAST_NODE)
        reach = r + np.float32(REACH_PX)
        inverse = np.float32(1.0) / (reach * reach)
        c0 = coefficients[node, 0] * inverse
        c1 = coefficients[node, 1] * inverse
        c2 = coefficients[node, 2] * inverse
        c3 = coefficients[node, 3] * inverse
        c4 = coefficients[node, 4] * inverse
        c5 = coefficients[node, 5] * inverse
        c6 = coefficients[node, 6] * inverse
        c7 = coefficients[node, 7] * inverse
        c8 = coefficients[node, 8] * inverse
        left = int(math.floor(x - reach))
        top = int(math.floor(y - reach))
        bottom = int(math.floor(y + reach))
        dx0 = np.float32(left) + np.float32(0.5) - x
        total = np.float32(0.0)
        for row in range(top, bottom + 1):
            dy = np.float32(row) + np.float32(0.5) - y
            u0 = np.float32(1.0) - dy * dy * inverse
            if u0 <= np.float32(0.0):
                continue
            line = image[0, row + MARGIN, left + MARGIN : left + MARGIN + width]
            if channels == 1:
                for k in range(width):
                    dx = dx0 + np.float32(k)
                    u = max(u0 - dx * dx * inverse, np.float32(0.0))
                    p = _polynomial(u, c0, c1, c2, c3, c4, c5, c6, c7, c8)
                    total += p
                    line[k] += first * p
            else:
                other = image[1, row + MARGIN, left + MARGIN : left + MARGIN + width]
                for k in range(width):
                    dx = dx0 + np.float32(k)
                    u = max(u0 - dx * dx * inverse, np.float32(0.0))
                    p = _polynomial(u, c0, c1, c2, c3, c4, c5, c6, c7, c8)
                    total += p
                    line[k] += first * p
                    other[k] += second * p
        return np.float32(1.0) - total

    return draw_rows


_draw_narrow = _row_drawer(NARROW)
_draw_broad = _row_drawer(BROAD)


@njit(**_FAST)
def _give(image, channels, x, y, first, second):
    """Share a value between the four pixels whose centres surround (x, y)."""
    fx, fy = x - np.float32(0.5), y - np.float32(0.5)
    column, row = int(math.floor(fx)), int(math.floor(fy))
    fx -= np.float32(column)
    fy -= np.float32(row)
    column += MARGIN
    row += MARGIN
    one = np.float32(1.0)
    for channel in range(channels):
        value = first if channel == 0 else second
        image[channel, row, column] += value * (one - fx) * (one - fy)
        image[channel, row, column + 1] += value * fx * (one - fy)
        image[channel, row + 1, column] += value * (one - fx) * fy
        image[channel, row + 1, column + 1] += value * fx * fy


@njit(**_FAST)
def _draw_small(image, channels, x, y, r, first, second, cumulative, above):
    """Pixel masses from the cumulative table; `above` (2, 16) is scratch for one line of corners."""
    left, top = int(math.floor(x - r)), int(math.floor(y - r))
    right, bottom = int(math.floor(x + r)), int(math.floor(y + r))
    if left == right and top == bottom:
        image[0, top + MARGIN, left + MARGIN] += first
        if channels == 2:
            image[1, top + MARGIN, left + MARGIN] += second
        return
    scale = np.float32(0.5 * CELLS) / r
    columns = right - left + 1
    middle = np.float32(0.5 * CELLS)
    last = np.float32(CELLS)
    for j in range(columns + 1):
        above[0, j] = np.float32(0.0)
    for i in range(1, bottom - top + 2):
        ty = min((np.float32(top + i) - y) * scale + middle, last)
        iy = min(int(ty), CELLS - 1)
        fy = ty - np.float32(iy)
        before = np.float32(0.0)
        for j in range(1, columns + 1):
            tx = min((np.float32(left + j) - x) * scale + middle, last)
            ix = min(int(tx), CELLS - 1)
            fx = tx - np.float32(ix)
            a = cumulative[iy, ix] + fx * (cumulative[iy, ix + 1] - cumulative[iy, ix])
            b = cumulative[iy + 1, ix] + fx * (cumulative[iy + 1, ix + 1] - cumulative[iy + 1, ix])
            corner = a + fy * (b - a)
            share = max(corner - above[0, j] - before + above[0, j - 1], np.float32(0.0))
            above[0, j - 1] = before
            before = corner
            image[0, top + MARGIN + i - 1, left + MARGIN + j - 1] += first * share
            if channels == 2:
                image[1, top + MARGIN + i - 1, left + MARGIN + j - 1] += second * share
        above[0, columns] = before


@njit(**_FAST)
def _wide_rows(image, channels, x, y, reach, first, second, c, draw):
    """One pass over a kernel of any size, clipped to the array: draw it, or sum its weights over the whole plane."""
    inverse = np.float32(1.0) / (reach * reach)
    top, bottom = int(math.floor(y - reach)), int(math.floor(y + reach))
    left, right = int(math.floor(x - reach)), int(math.floor(x + reach))
    if draw:
        top, bottom = max(top, -MARGIN), min(bottom, image.shape[1] - MARGIN - 1)
        left, right = max(left, -MARGIN), min(right, image.shape[2] - MARGIN - 1)
    total = 0.0
    for row in range(top, bottom + 1):
        dy = np.float32(row) + np.float32(0.5) - y
        u0 = np.float32(1.0) - dy * dy * inverse
        if u0 <= np.float32(0.0):
            continue
        line = np.float32(0.0)
        for column in range(left, right + 1):
            dx = np.float32(column) + np.float32(0.5) - x
            u = max(u0 - dx * dx * inverse, np.float32(0.0))
            p = inverse * _polynomial(u, c[0], c[1], c[2], c[3], c[4], c[5], c[6], c[7], c[8])
            if draw:
                image[0, row + MARGIN, column + MARGIN] += first * p
                if channels == 2:
                    image[1, row + MARGIN, column + MARGIN] += second * p
            else:
                line += p
        total += line
    return total


@njit(**_FAST)
def _draw_wide(image, channels, x, y, r, first, second, coefficients):
    if r < np.float32(WIDEST_PX):
        node = _LAST_NODE + int(r - np.float32(LARGE_PX))
        share = r - np.floor(r)
        c = coefficients[node] + share * (coefficients[node + 1] - coefficients[node])
        reach = r + np.float32(REACH_PX)
    else:
        c = coefficients[-1]
        reach = r
    if r < UNIT_SUM_PX:
        total = _wide_rows(image, channels, x, y, reach, first, second, c, False)
    else:  # so many pixels that their sum is the integral
        total = 0.0
        for k in range(TERMS):
            total += math.pi * c[k] / (FIRST_POWER + 1 + k)
    _wide_rows(image, channels, x, y, reach, np.float32(first / total), np.float32(second / total), c, True)


@njit(**_FAST)
def _draw(image, channels, records, order, shift_x, shift_y, scale, value, cumulative, coefficients):
    above = np.zeros((2, 32), dtype=np.float32)
    for index in order:
        x = (records[index, 0] - shift_x) * scale
        y = (records[index, 1] - shift_y) * scale
        r = records[index, 2] * scale
        first = records[index, 3 + value]
        second = records[index, 4 + value] if channels == 2 else np.float32(0.0)
        if r < np.float32(SMALL_PX):
            _draw_small(image, channels, x, y, r, first, second, cumulative, above)
        elif r <= np.float32(LARGE_PX):
            if r + np.float32(REACH_PX) <= _NARROW_REACH:
                rest = _draw_narrow(image, channels, x, y, r, first, second, coefficients)
            else:
                rest = _draw_broad(image, channels, x, y, r, first, second, coefficients)
            _give(image, channels, x, y, first * rest, second * rest)
        else:
            _draw_wide(image, channels, x, y, r, first, second, coefficients)


def draw(
    image: NDArray[np.float32],
    records: NDArray[np.float32],
    order: NDArray[np.int64],
    shift: tuple[float, float],
    scale: float,
    stamps: Stamps,
) -> None:
    """Add particles to an image, every channel.

    Parameters
    ----------
    image : float32 (channels, rows + 2 MARGIN, columns + 2 MARGIN)
        Changed in place; pixel (0, 0) of the picture is element (MARGIN, MARGIN).
    records : float32 (n, 3 + channels)
        x, y, support radius, then the value of each channel. Pixel units of some grid; the particle's place on this
        image is ((x, y) - shift) * scale and its radius is radius * scale. Particles whose radius here is at most
        LARGE_PX must keep their kernel inside the margin; wider ones are clipped.
    order : int64 (m,)
        Which records to draw, in this order.
    shift, scale : see `records`
    stamps : Stamps
    """
    channels = image.shape[0]
    for start in range(0, channels, 2):
        pair = image[start : start + 2]
        _draw(
            pair,
            pair.shape[0],
            records,
            order,
            np.float32(shift[0]),
            np.float32(shift[1]),
            np.float32(scale),
            start,
            stamps.cumulative,
            stamps.coefficients,
        )


@njit(**_FAST)
def _cell_order(records, shift_x, shift_y, scale, cell_px, cells_x, cells_y):
    """Counting sort by cell, row of cells by row: the order, and where each row of cells starts."""
    count = np.zeros(cells_x * cells_y + 1, dtype=np.int64)
    cell = np.empty(len(records), dtype=np.int32)
    for index in range(len(records)):
        x = (records[index, 0] - shift_x) * scale
        y = (records[index, 1] - shift_y) * scale
        cx = min(max(int(math.floor(x / cell_px)), 0), cells_x - 1)
        cy = min(max(int(math.floor(y / cell_px)), 0), cells_y - 1)
        cell[index] = cy * cells_x + cx
        count[cell[index] + 1] += 1
    for k in range(cells_x * cells_y):
        count[k + 1] += count[k]
    bands = np.empty(cells_y + 1, dtype=np.int64)
    for row in range(cells_y + 1):
        bands[row] = count[row * cells_x]
    order = np.empty(len(records), dtype=np.int64)
    for index in range(len(records)):
        order[count[cell[index]]] = index
        count[cell[index]] += 1
    return order, bands


def cell_order(
    records: NDArray[np.float32], shift: tuple[float, float], scale: float, cell_px: int, size: tuple[int, int]
) -> tuple[NDArray[np.int64], NDArray[np.int64]]:
    """Order in which drawing stays in cache: particles sorted by cells of `cell_px` pixels, row of cells by row.

    Parameters
    ----------
    records, shift, scale : as in `draw`
    cell_px : int
    size : (rows, columns) of the image without its margin

    Returns
    -------
    order : int64 (n,)
    bands : int64 (rows of cells + 1,), where each row of cells starts in `order`
    """
    cells_y, cells_x = (max(1, -(-side // cell_px)) for side in size)
    return _cell_order(
        records, np.float32(shift[0]), np.float32(shift[1]), np.float32(scale), np.float32(cell_px), cells_x, cells_y
    )
