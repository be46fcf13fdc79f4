"""Drawing: particles in pixel units in, their pixel-averaged kernels added to an image with a margin.

Two inner loops (see `stamps`), and one for kernels wider than `LARGE_PX`, which only the coarsest level draws. Each
particle's weights are made to sum to one exactly: what rounding and the fit leave over goes to the four pixels
around its centre.
"""

from __future__ import annotations

import math
from typing import Any

import numpy as np
from numba import njit
from numpy.typing import NDArray

from tilemap.project.stamps import CELLS, FIRST_POWER, LARGE_PX, REACH, SMALL_PX, TERMS, Stamps

MARGIN = 48
"""Pixels around an image that drawing may touch: twice LARGE_PX, a row's spare width, and a pad for refinement."""
CELL_PX = 48
"""Particles are drawn cell by cell of this size, so that the pixels they touch stay in cache. It is also the height of
the bands that workers share out: a stamp reaches at most 17 pixels out of its band, so two bands of the same parity
touch no pixel together."""
FEW = 64
"""Particles of one cell in a row that are drawn on the image itself; more are piled up first."""
RUN = 1024
"""Particles after which a single-precision pile goes to the double-precision one."""
UNIT_SUM_PX = 256.0
"""Support radius from which a stamp is summed as an integral, not pixel by pixel."""

# fastmath lets the compiler reorder sums and fuse multiply-adds, without which rows do not vectorise; infinities
# and NaN are refused by the sources, so their rules are not needed here.
_FAST: dict[str, Any] = {"nogil": True, "cache": True, "fastmath": True, "error_model": "numpy"}
assert FIRST_POWER == 3 and TERMS == 9, "the loops below are written out for this polynomial"


@njit(inline="always", **_FAST)
def _polynomial(u, q0, q1, q2, q3, q4, q5, q6, q7, q8):
    t = u + u - np.float32(1.0)
    value = q0 + t * (q1 + t * (q2 + t * (q3 + t * (q4 + t * (q5 + t * (q6 + t * (q7 + t * q8)))))))
    return max(u * u * u * value, np.float32(0.0))


@njit(inline="always", **_FAST)
def _term(table, k, shrink):
    return table[0, k] + shrink * (table[1, k] + shrink * table[2, k])


def _row_drawer(width: int):
    """The vectorised loop for rows of a constant width, drawing one or two channels; returns what is left of one."""

    @njit(**_FAST)
    def draw_rows(image, channels, x, y, r, first, second, table):
        shrink = np.float32(1.0) / (r * r)
        inverse = np.float32(1.0) / (r * r + np.float32(REACH))
        reach = math.sqrt(r * r + np.float32(REACH))
        peak = _term(table, TERMS, shrink) * inverse
        q0 = _term(table, 0, shrink) * peak
        q1 = _term(table, 1, shrink) * peak
        q2 = _term(table, 2, shrink) * peak
        q3 = _term(table, 3, shrink) * peak
        q4 = _term(table, 4, shrink) * peak
        q5 = _term(table, 5, shrink) * peak
        q6 = _term(table, 6, shrink) * peak
        q7 = _term(table, 7, shrink) * peak
        q8 = _term(table, 8, shrink) * peak
        left = int(math.floor(x - reach))
        top = int(math.floor(y - reach))
        bottom = int(math.floor(y + reach))
        dx0 = np.float32(left) + np.float32(0.5) - x
        total = np.float64(0.0)
        for row in range(top, bottom + 1):
            dy = np.float32(row) + np.float32(0.5) - y
            u0 = np.float32(1.0) - dy * dy * inverse
            if u0 <= np.float32(0.0):
                continue
            part = np.float32(0.0)
            line = image[0, row + MARGIN, left + MARGIN : left + MARGIN + width]
            if channels == 1:
                for k in range(width):
                    dx = dx0 + np.float32(k)
                    u = max(u0 - dx * dx * inverse, np.float32(0.0))
                    p = _polynomial(u, q0, q1, q2, q3, q4, q5, q6, q7, q8)
                    part += p
                    line[k] += first * p
            else:
                other = image[1, row + MARGIN, left + MARGIN : left + MARGIN + width]
                for k in range(width):
                    dx = dx0 + np.float32(k)
                    u = max(u0 - dx * dx * inverse, np.float32(0.0))
                    p = _polynomial(u, q0, q1, q2, q3, q4, q5, q6, q7, q8)
                    part += p
                    line[k] += first * p
                    other[k] += second * p
            total += part
        return np.float32(1.0 - total)

    return draw_rows


_draw_rows_16 = _row_drawer(16)
_draw_rows_24 = _row_drawer(24)
_draw_rows_32 = _row_drawer(32)
_draw_rows_40 = _row_drawer(40)


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
    """Pixel masses from the cumulative table; `above` is scratch for one line of corners."""
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
    rest = np.float32(1.0)  # rounding leaves shares of -1e-8 at corners; what clipping them adds goes off the middle
    for j in range(columns + 1):
        above[j] = np.float32(0.0)
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
            share = max(corner - above[j] - before + above[j - 1], np.float32(0.0))
            rest -= share
            above[j - 1] = before
            before = corner
            image[0, top + MARGIN + i - 1, left + MARGIN + j - 1] += first * share
            if channels == 2:
                image[1, top + MARGIN + i - 1, left + MARGIN + j - 1] += second * share
        above[columns] = before
    row, column = int(math.floor(y)) + MARGIN, int(math.floor(x)) + MARGIN
    image[0, row, column] += first * rest
    if channels == 2:
        image[1, row, column] += second * rest


@njit(**_FAST)
def _wide_rows(image, channels, x, y, r, first, second, q, draw):
    """One pass over a stamp of any size, clipped to the array: draw it, or sum its weights over the whole plane."""
    inverse = np.float32(1.0) / (r * r + np.float32(REACH))
    reach = math.sqrt(r * r + np.float32(REACH))
    top, bottom = int(math.floor(y - reach)), int(math.floor(y + reach))
    left, right = int(math.floor(x - reach)), int(math.floor(x + reach))
    if draw:
        top, bottom = max(top, -MARGIN), min(bottom, image.shape[1] - MARGIN - 1)
        left, right = max(left, -MARGIN), min(right, image.shape[2] - MARGIN - 1)
    total = np.float64(0.0)
    for row in range(top, bottom + 1):
        dy = np.float32(row) + np.float32(0.5) - y
        u0 = np.float32(1.0) - dy * dy * inverse
        if u0 <= np.float32(0.0):
            continue
        line = np.float32(0.0)
        for column in range(left, right + 1):
            dx = np.float32(column) + np.float32(0.5) - x
            u = max(u0 - dx * dx * inverse, np.float32(0.0))
            p = _polynomial(u, q[0], q[1], q[2], q[3], q[4], q[5], q[6], q[7], q[8])
            if draw:
                image[0, row + MARGIN, column + MARGIN] += first * p
                if channels == 2:
                    image[1, row + MARGIN, column + MARGIN] += second * p
            else:
                line += p
        total += line
    return total


@njit(**_FAST)
def _draw_wide(image, channels, x, y, r, first, second, table):
    shrink = np.float32(1.0) / (r * r)
    inverse = np.float32(1.0) / (r * r + np.float32(REACH))
    peak = _term(table, TERMS, shrink) * inverse
    q = np.empty(TERMS, dtype=np.float32)
    for k in range(TERMS):
        q[k] = _term(table, k, shrink) * peak
    if r < UNIT_SUM_PX:
        total = _wide_rows(image, channels, x, y, r, first, second, q, False)
    else:  # so many pixels that their sum is the integral: dA = pi R'^2 du
        total = 0.0
        for k in range(2048):
            u = np.float32((k + 0.5) / 2048)
            total += math.pi / 2048 / inverse * _polynomial(u, q[0], q[1], q[2], q[3], q[4], q[5], q[6], q[7], q[8])
    _wide_rows(image, channels, x, y, r, np.float32(first / total), np.float32(second / total), q, True)


@njit(**_FAST)
def _draw_some(fine, image, wide, channels, records, order, scale, corner, value, cumulative, table, above):
    """Draw particles one by one: small ones on `fine`, those of a row's width on `image`, both from `corner` on.

    Returns the largest radius of those.
    """
    share = scale * scale
    largest = np.float32(0.0)
    for index in order:
        x = records[index, 0] * scale - corner[0]
        y = records[index, 1] * scale - corner[1]
        r = records[index, 2] * scale
        first = records[index, 3 + value] * share
        second = records[index, 4 + value] * share if channels == 2 else np.float32(0.0)
        if r > np.float32(LARGE_PX):
            _draw_wide(wide, channels, x + corner[0], y + corner[1], r, first, second, table)
            continue
        largest = max(largest, r)
        if r < np.float32(SMALL_PX):
            _draw_small(fine, channels, x, y, r, first, second, cumulative, above)
            continue
        # A row of `width` pixels from floor(x - R') on covers 2 R' + 1; R'^2 = r^2 + REACH.
        if r * r <= np.float32(7.5 * 7.5 - REACH):
            rest = _draw_rows_16(image, channels, x, y, r, first, second, table)
        elif r * r <= np.float32(11.5 * 11.5 - REACH):
            rest = _draw_rows_24(image, channels, x, y, r, first, second, table)
        elif r * r <= np.float32(15.5 * 15.5 - REACH):
            rest = _draw_rows_32(image, channels, x, y, r, first, second, table)
        else:
            rest = _draw_rows_40(image, channels, x, y, r, first, second, table)
        _give(image, channels, x, y, first * rest, second * rest)
    return largest


@njit(**_FAST)
def _move(source, target, channels, box, down, across):
    """Add what is in the box to another image, so far down and across, and clear it."""
    for channel in range(channels):
        for row in range(box[0], min(box[1], target.shape[1] - down)):
            here = source[channel, row, box[2] : min(box[3], target.shape[2] - across)]
            there = target[channel, row + down, box[2] + across :]
            for k in range(len(here)):
                there[k] += here[k]
                here[k] = 0


@njit(**_FAST)
def _cell_of(records, index, scale, cells_y, cells_x):
    row = min(max(int(math.floor(records[index, 1] * scale / np.float32(CELL_PX))), 0), cells_y - 1)
    column = min(max(int(math.floor(records[index, 0] * scale / np.float32(CELL_PX))), 0), cells_x - 1)
    return row * cells_x + column


@njit(**_FAST)
def _draw(image, wide, channels, records, order, scale, value, cumulative, table):
    """Draw particles sorted by cell; where many of one cell follow each other, pile them up aside first.

    A single-precision pixel that a million particles are added to one by one loses 1e-4 of them, and of a million
    equal ones 1e-3. Piles are in double precision, and wide rows get there every `RUN` particles.
    """
    above = np.zeros(32, dtype=np.float32)
    side = CELL_PX + 2 * MARGIN
    pile = np.zeros((channels, side, side), dtype=np.float64)
    rows = np.zeros((channels, side, side), dtype=np.float32)
    cells_y = max(1, -(-(image.shape[1] - 2 * MARGIN) // CELL_PX))
    cells_x = max(1, -(-(image.shape[2] - 2 * MARGIN) // CELL_PX))
    box = np.zeros(4, dtype=np.int64)
    corner, nowhere = np.zeros(2, dtype=np.float32), np.zeros(2, dtype=np.float32)
    start, count = 0, len(order)
    while start < count:
        cell = _cell_of(records, order[start], scale, cells_y, cells_x)
        if start + FEW > count or _cell_of(records, order[start + FEW - 1], scale, cells_y, cells_x) != cell:
            some = order[start : start + FEW]
            _draw_some(image, image, wide, channels, records, some, scale, nowhere, value, cumulative, table, above)
            start += FEW
            continue
        row, column = cell // cells_x, cell % cells_x
        corner[0], corner[1] = column * CELL_PX, row * CELL_PX
        largest = np.float32(0.0)
        inside = True
        while inside and start < count:
            stop = min(start + RUN, count)
            if _cell_of(records, order[stop - 1], scale, cells_y, cells_x) != cell:
                inside = False
                low = start
                while stop - low > 1:  # the first of another cell lies in (low, stop)
                    middle = (low + stop) // 2
                    if _cell_of(records, order[middle], scale, cells_y, cells_x) == cell:
                        low = middle
                    else:
                        stop = middle
            some = order[start:stop]
            reach = _draw_some(
                pile, rows, wide, channels, records, some, scale, corner, value, cumulative, table, above
            )
            largest = max(largest, reach)
            # A stamp reaches less than two pixels beyond its kernel; cells at the rim also hold what lies outside.
            touched = int(largest) + 4
            box[0] = MARGIN - touched if row > 0 else 0
            box[1] = MARGIN + CELL_PX + touched if row < cells_y - 1 else side
            box[2] = MARGIN - touched if column > 0 else 0
            box[3] = MARGIN + CELL_PX + touched if column < cells_x - 1 else side
            if reach >= np.float32(SMALL_PX):
                _move(rows, pile, channels, box, 0, 0)
            start = stop
            inside = inside and start < count and _cell_of(records, order[start], scale, cells_y, cells_x) == cell
        _move(pile, image, channels, box, row * CELL_PX, column * CELL_PX)


def draw(
    image: NDArray[np.float32],
    records: NDArray[np.float32],
    order: NDArray[np.int64],
    scale: float,
    stamps: Stamps,
    finest: bool,
    wide: bool = True,
) -> None:
    """Add particles to an image, every channel.

    Parameters
    ----------
    image : float32 (channels, rows + 2 MARGIN, columns + 2 MARGIN)
        Changed in place; pixel (0, 0) of the picture is element (MARGIN, MARGIN).
    records : float32 (n, 3 + channels)
        x, y, support radius, then the value of each channel, in pixels of the finest level. On this image all lengths
        are times `scale`, and what is added is the value times scale^2: on images of every level a pixel holds the
        value per pixel of the finest. Particles whose radius here is at most LARGE_PX must keep their stamp
        inside the margin; wider ones are clipped.
    order : int64 (m,)
        Which records to draw, in this order: what `cell_order` gave for cells of CELL_PX, or rows of cells of it.
    scale : float
        2^-level.
    stamps : Stamps
    finest : bool
        Whether the image holds averages over pixels (the finest level) or spline coefficients (coarser ones).
    wide : bool
        Whether any particle may be wider than LARGE_PX here: those need another image, in double precision.
    """
    channels = image.shape[0]
    table = stamps.averaged if finest else stamps.spline
    for start in range(0, channels, 2):
        pair = image[start : start + 2]
        exact = np.zeros(pair.shape if wide else (1, 1, 1), dtype=np.float64)
        _draw(pair, exact, pair.shape[0], records, order, np.float32(scale), start, stamps.cumulative, table)
        if wide:
            pair += exact


@njit(**_FAST)
def _cell_order(records, scale, cells_x, cells_y):
    """Counting sort by cell, row of cells by row: the order, and where each row of cells starts."""
    count = np.zeros(cells_x * cells_y + 1, dtype=np.int64)
    cell = np.empty(len(records), dtype=np.int32)
    for index in range(len(records)):
        cell[index] = _cell_of(records, index, scale, cells_y, cells_x)
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
    records: NDArray[np.float32], scale: float, size: tuple[int, int]
) -> tuple[NDArray[np.int64], NDArray[np.int64]]:
    """Order in which drawing stays in cache: particles sorted by cells of CELL_PX, row of cells by row.

    Parameters
    ----------
    records, scale : as in `draw`
    size : (rows, columns) of the image without its margin

    Returns
    -------
    order : int64 (n,)
    bands : int64 (rows of cells + 1,), where each row of cells starts in `order`
    """
    cells_y, cells_x = (max(1, -(-side // CELL_PX)) for side in size)
    return _cell_order(records, np.float32(scale), cells_x, cells_y)
