"""Drawing: particles in pixel units in, their pixel-averaged kernels added to an image with a margin.

How a particle looks and is added is `products`; here, particles are put in order, and where many fall on the same pixels
they are piled up aside in double precision.
"""

from __future__ import annotations

import numpy as np
from numba import njit
from numpy.typing import NDArray

from tilemap.project.products import FAST, MARGIN, SOME_TINY, draw_some, reach_of, room_for_drawing
from tilemap.project.stamps import SMALL_PX, Stamps

CELL_PX = 48
"""Particles are drawn cell by cell of this size, so that the pixels they touch stay in cache. It is also the height of
the bands that workers share out: a stamp reaches at most 16 pixels out of its band, so two bands of the same parity
touch no pixel together."""
FEW = 64
"""Particles of one cell in a row that are all drawn on the image itself; of more, the tiny ones are piled up first."""
RUN = 4096
"""Particles of one cell that are drawn on the image itself, but for tiny ones; of more, each so many are piled up first."""


@njit(**FAST)
def _move(source, target, channels, box, down, across):
    """Add what is in the box to another image, so far down and across, and clear it."""
    for channel in range(channels):
        for row in range(box[0], min(box[1], target.shape[1] - down)):
            here = source[channel, row, box[2] : min(box[3], target.shape[2] - across)]
            there = target[channel, row + down, box[2] + across :]
            for k in range(len(here)):
                there[k] += here[k]
                here[k] = 0


@njit(inline="always", **FAST)
def _cell_of(records, index, scale, cells_y, cells_x):
    # Cut off rather than rounded down, which is a call; what is below zero belongs to the first cell either way.
    row = min(max(int(records[index, 1] * scale / np.float32(CELL_PX)), 0), cells_y - 1)
    column = min(max(int(records[index, 0] * scale / np.float32(CELL_PX)), 0), cells_x - 1)
    return row * cells_x + column


@njit(**FAST)
def _end_of_cell(records, order, start, scale, cells_y, cells_x):
    """Where in `order`, sorted by cell, the cell of its element `start` ends."""
    cell = _cell_of(records, order[start], scale, cells_y, cells_x)
    low, step = start, FEW
    while low + step < len(order) and _cell_of(records, order[low + step], scale, cells_y, cells_x) == cell:
        low += step
        step *= 2
    high = min(low + step, len(order))  # the first of another cell lies in (low, high]
    while high - low > 1:
        middle = (low + high) // 2
        if _cell_of(records, order[middle], scale, cells_y, cells_x) == cell:
            low = middle
        else:
            high = middle
    return high


@njit(**FAST)
def _draw(image, wide, channels, records, order, scale, value, stamp):
    """Draw particles sorted by cell; where many of one cell follow each other, pile them up aside first.

    A single-precision pixel that a million particles are added to one by one loses 1e-4 of them, and of a million
    equal ones 1e-3. Piles are in double precision; stamps wider than TINY_PX get there every `RUN` particles.
    """
    side = CELL_PX + 2 * MARGIN
    pile = np.zeros((channels, side, side), dtype=np.float64)
    lines = np.zeros((channels, side, side), dtype=np.float32)
    on_image = image[0].reshape(-1), image[channels - 1].reshape(-1)
    on_pile = pile[0].reshape(-1), pile[channels - 1].reshape(-1)
    on_lines = lines[0].reshape(-1), lines[channels - 1].reshape(-1)
    room = room_for_drawing()
    stride, pile_stride = np.int32(image.shape[2]), np.int32(side)
    cells_y = max(1, -(-(image.shape[1] - 2 * MARGIN) // CELL_PX))
    cells_x = max(1, -(-(image.shape[2] - 2 * MARGIN) // CELL_PX))
    box = np.zeros(4, dtype=np.int64)
    start, count = 0, len(order)
    while start < count:
        cell = _cell_of(records, order[start], scale, cells_y, cells_x)
        few = min(start + FEW, count)
        if few == count or _cell_of(records, order[few], scale, cells_y, cells_x) != cell:
            some, strides, corners = order[start:few], (stride, stride), ((0, 0), (0, 0))
            draw_some(on_image, on_image, wide, channels, strides, records, some, scale, corners, value, stamp, room)
            start = few
            continue
        stop = _end_of_cell(records, order, start, scale, cells_y, cells_x)
        crowded = stop - start > RUN
        row, column = cell // cells_x, cell % cells_x
        here = row * CELL_PX, column * CELL_PX
        flat, strides = on_lines if crowded else on_image, (pile_stride if crowded else stride, pile_stride)
        corners = (here if crowded else (0, 0), here)
        ways = 0
        for first in range(start, stop, RUN):
            some = order[first : min(first + RUN, stop)]
            ways |= draw_some(flat, on_pile, wide, channels, strides, records, some, scale, corners, value, stamp, room)
            touched = reach_of(ways if crowded else 0) + 1
            box[0] = MARGIN - touched if row > 0 else 0  # cells at the rim also hold what lies outside
            box[1] = MARGIN + CELL_PX + touched if row < cells_y - 1 else side
            box[2] = MARGIN - touched if column > 0 else 0
            box[3] = MARGIN + CELL_PX + touched if column < cells_x - 1 else side
            if crowded and ways != SOME_TINY:
                _move(lines, pile, channels, box, 0, 0)
        if crowded or ways & SOME_TINY:
            _move(pile, image, channels, box, *here)
        start = stop


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
    image : float32 (channels, rows + 2 MARGIN, columns + 2 MARGIN), contiguous
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
        Whether the image holds averages over pixels (the finest level) or spline coefficients (coarser ones, on which
        no radius is below COARSE_PX).
    wide : bool
        Whether any particle may be wider than LARGE_PX here: those need another image, in double precision.
    """
    channels = image.shape[0]
    f32 = np.float32
    small = stamps.small, f32(stamps.small_reach), f32(SMALL_PX / stamps.small_reach if finest else 0.0)
    if finest:
        stamp = stamps.averaged, f32(stamps.reach), f32(0.0), f32(0.0), *small
    else:
        stamp = stamps.spline, f32(stamps.reach), f32(stamps.squeeze), f32(stamps.density), *small
    for start in range(0, channels, 2):
        pair = image[start : start + 2]
        exact = np.zeros(pair.shape if wide else (1, 1, 1), dtype=np.float64)
        _draw(pair, exact, pair.shape[0], records, order, np.float32(scale), start, stamp)
        if wide:
            pair += exact


@njit(**FAST)
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
