"""Stamps as products of rows and columns: some particles in, their weights on pixels added to flat images.

The rows and columns of a particle's products (see `stamps`) are computed sixteen pixel edges at a time; a stamp is added
line by line, a line being one or two vectors of sixteen pixels whatever the kernel covers.
"""

from __future__ import annotations

import math
from typing import Any

import numpy as np
from numba import njit

from tilemap.project.lanes import (
    add_lower,
    fma,
    follow,
    halves,
    least,
    load,
    minus,
    most,
    ramp,
    spread,
    store,
    times,
    turn,
)
from tilemap.project.stamps import ENDS, LARGE_PX, NODES, RANK, SIGNS, TERMS

MARGIN = 48
"""Pixels around an image that drawing may touch: twice LARGE_PX, a pad for refinement, and a line's spare width."""

# fastmath lets the compiler fuse multiply-adds and turn comparisons into min and max; infinities and NaN are refused by
# the sources, so their rules are not needed here.
FAST: dict[str, Any] = {"nogil": True, "cache": True, "fastmath": True, "error_model": "numpy"}
assert RANK == 4, "the loops below are written out for four products"

f32 = np.float32
_LINE = 32  # room for the column of one product in scratch
BATCH = 128
"""Particles measured at a time."""
PACKED_PX = 8
"""Widest stamp whose edges across and down are computed in one go."""


def _room():
    return (
        np.empty((4, BATCH), dtype=np.int32),
        np.empty((7, BATCH), dtype=np.float32),
        np.empty(RANK * _LINE, dtype=np.float32),
    )


room_for_drawing = njit(**FAST)(_room)


@njit(inline="always", **FAST)
def _clipped(start, inverse):
    """Sixteen pixel edges, the first at `start` pixels from the particle, in units of the stamp's half width."""
    return most(least(times(start, spread(inverse)), spread(f32(1.0))), spread(f32(-1.0)))


@njit(inline="always", **FAST)
def _v(x):
    return fma(times(x, x), spread(f32(2.0)), spread(f32(-1.0)))


@njit(inline="always", **FAST)
def _packed(scratch, table, node, k, x, v):
    """Product k of a stamp at most 8 pixels wide: x holds the edges across in its lower half, those down in its upper."""
    a = spread(table[node, k * TERMS + TERMS - 1])
    for n in range(TERMS - 2, -1, -1):
        a = fma(a, v, spread(table[node, k * TERMS + n]))
    a = times(a, x)
    end = spread(table[node, ENDS + k])
    down, across = turn(a, end), halves(a, end)
    store(scratch, k * _LINE, times(minus(follow(down, end), down), spread(table[node, SIGNS + k])))
    return minus(follow(across, end), across)


@njit(inline="always", **FAST)
def _single(scratch, table, node, k, x, v, y, w):
    """Product k of a stamp at most 16 pixels wide: its column goes to scratch, its row is returned."""
    a = spread(table[node, k * TERMS + TERMS - 1])
    b = a
    for n in range(TERMS - 2, -1, -1):
        c = spread(table[node, k * TERMS + n])
        a, b = fma(a, v, c), fma(b, w, c)
    a, b = times(a, x), times(b, y)
    end = spread(table[node, ENDS + k])
    store(scratch, k * _LINE, times(minus(follow(b, end), b), spread(table[node, SIGNS + k])))
    return minus(follow(a, end), a)


@njit(inline="always", **FAST)
def _shared(scratch, table, node, k, x, v, y, w, z, u):
    """Product k of a stamp at most 24 pixels wide: z holds the last eight edges across, then those down."""
    a = spread(table[node, k * TERMS + TERMS - 1])
    b, c = a, a
    for n in range(TERMS - 2, -1, -1):
        q = spread(table[node, k * TERMS + n])
        a, b, c = fma(a, v, q), fma(b, w, q), fma(c, u, q)
    a, b, c = times(a, x), times(b, y), times(c, z)
    end, sign = spread(table[node, ENDS + k]), spread(table[node, SIGNS + k])
    down, across = turn(c, end), halves(c, end)
    store(scratch, k * _LINE, times(minus(follow(b, down), b), sign))
    store(scratch, k * _LINE + 16, times(minus(follow(down, end), down), sign))
    return minus(follow(a, across), a), minus(follow(across, end), across)


@njit(inline="always", **FAST)
def _double(scratch, table, node, k, x, v, xx, vv, y, w, yy, ww):
    """Product k of a stamp at most 32 pixels wide."""
    a = spread(table[node, k * TERMS + TERMS - 1])
    b, c, d = a, a, a
    for n in range(TERMS - 2, -1, -1):
        q = spread(table[node, k * TERMS + n])
        a, b, c, d = fma(a, v, q), fma(b, w, q), fma(c, vv, q), fma(d, ww, q)
    a, b, c, d = times(a, x), times(b, y), times(c, xx), times(d, yy)
    end, sign = spread(table[node, ENDS + k]), spread(table[node, SIGNS + k])
    store(scratch, k * _LINE, times(minus(follow(b, d), b), sign))
    store(scratch, k * _LINE + 16, times(minus(follow(d, end), d), sign))
    return minus(follow(a, c), a), minus(follow(c, end), c)


@njit(inline="always", **FAST)
def _sum(scratch, row, x0, x1, x2, x3):
    """Sixteen weights of a row of pixels. What rounding and the fit leave below zero (1e-7 of the mass) is cut off."""
    a = times(spread(scratch[row]), x0)
    a = fma(spread(scratch[row + _LINE]), x1, a)
    a = fma(spread(scratch[row + 2 * _LINE]), x2, a)
    a = fma(spread(scratch[row + 3 * _LINE]), x3, a)
    return most(a, spread(f32(0.0)))


@njit(**FAST)
def _measure(records, order, scale, corner, value, channels, stride, reach, squeeze, density, places, sizes):
    """Where the stamps of some particles lie: whole numbers into places, others into sizes.

    Apart from drawing, as the compiler makes vectors of it, and as the lengths of loops over rows are guessed wrong by
    the machine for every second particle, which costs little where the right ones are at hand (a third of all time
    for small kernels).
    """
    share = scale * scale
    for i in range(len(order)):
        index = order[i]
        # From the corner of the margin, so that cutting off decimals rounds down.
        x = records[index, 0] * scale - f32(corner[1] - MARGIN)
        y = records[index, 1] * scale - f32(corner[0] - MARGIN)
        r = records[index, 2] * scale
        half = reach * math.sqrt(r * r - squeeze)
        inverse = f32(1.0) / half
        left, top = np.int32(x - half), np.int32(y - half)
        places[0, i] = top * stride + left
        places[1, i] = np.int32(y + half) - top + 1
        places[2, i] = np.int32(x + half) - left + 1
        places[3, i] = min(np.int32(inverse * inverse * density + f32(0.5)), np.int32(NODES - 1))
        sizes[0, i] = f32(left) - x
        sizes[1, i] = f32(top) - y
        sizes[2, i] = inverse
        sizes[3, i] = records[index, 3 + value] * share
        sizes[4, i] = records[index, 2 + value + channels] * share
        sizes[5, i] = r
        sizes[6, i] = half


@njit(**FAST)
def draw_some(flat, wide, in_deep, channels, stride, records, order, scale, corner, value, stamp, room):
    """Draw particles in this order, and return the largest half width of their stamps in pixels.

    Parameters
    ----------
    flat : two float32 (n,), two float64 (n,)
        Flat images of the first and the second channel (the same where there is but one); and those that take stamps of
        at most PACKED_PX where `in_deep`, as more of them fall on one pixel.
    wide : float64 (channels, rows, columns), whole image with its margin, for kernels wider than LARGE_PX
    channels : int, 1 or 2
    stride : int32, elements from row to row
    records, order, scale : as in `splat.draw`
    corner : int, int
        Row and column of the picture at which the images begin, less their margin.
    value : int, the first channel among those of the records
    stamp : table, reach, squeeze, density of `Stamps`
    room : tuple of arrays made by `room_for_drawing`
    """
    pixels, others, deep, deep_others = flat
    table, reach, squeeze, density = stamp
    places, sizes, scratch = room
    largest = f32(0.0)
    for number in range(len(order)):
        i = number % BATCH
        if i == 0:
            some = order[number : number + BATCH]
            _measure(records, some, scale, corner, value, channels, stride, reach, squeeze, density, places, sizes)
        if sizes[5, i] > f32(LARGE_PX):
            index = order[number]
            x, y = records[index, 0] * scale + f32(MARGIN), records[index, 1] * scale + f32(MARGIN)
            draw_wide(wide, channels, x, y, sizes[5, i], sizes[3, i], sizes[4, i], stamp)
            continue
        largest = max(largest, sizes[6, i])
        at, rows, columns, node = np.int64(places[0, i]), places[1, i], places[2, i], places[3, i]
        first_x, first_y, inverse = sizes[0, i], sizes[1, i], sizes[2, i]
        m, n = spread(sizes[3, i]), spread(sizes[4, i])
        # The loops over rows test at their end: with a test before, the compiler moves rows of stamps behind it and
        # keeps all coefficients in memory until then (a third slower).
        row = 0
        if columns <= PACKED_PX and rows <= PACKED_PX:
            p = _clipped(halves(ramp(first_x), ramp(first_y - f32(8.0))), inverse)
            v = _v(p)
            x0 = _packed(scratch, table, node, 0, p, v)
            x1 = _packed(scratch, table, node, 1, p, v)
            x2 = _packed(scratch, table, node, 2, p, v)
            x3 = _packed(scratch, table, node, 3, p, v)
            while True:
                a = _sum(scratch, row, x0, x1, x2, x3)
                if in_deep:
                    add_lower(deep, at, times(m, a))
                    if channels == 2:
                        add_lower(deep_others, at, times(n, a))
                else:
                    store(pixels, at, fma(m, a, load(pixels, at)))
                    if channels == 2:
                        store(others, at, fma(n, a, load(others, at)))
                at += stride
                row += 1
                if row >= rows:
                    break
        elif columns <= 16 and rows <= 16:
            p, q = _clipped(ramp(first_x), inverse), _clipped(ramp(first_y), inverse)
            v, w = _v(p), _v(q)
            x0 = _single(scratch, table, node, 0, p, v, q, w)
            x1 = _single(scratch, table, node, 1, p, v, q, w)
            x2 = _single(scratch, table, node, 2, p, v, q, w)
            x3 = _single(scratch, table, node, 3, p, v, q, w)
            while True:
                a = _sum(scratch, row, x0, x1, x2, x3)
                store(pixels, at, fma(m, a, load(pixels, at)))
                if channels == 2:
                    store(others, at, fma(n, a, load(others, at)))
                at += stride
                row += 1
                if row >= rows:
                    break
        else:
            p, q = _clipped(ramp(first_x), inverse), _clipped(ramp(first_y), inverse)
            v, w = _v(p), _v(q)
            if columns <= 24 and rows <= 24:
                z = _clipped(halves(ramp(first_x + f32(16.0)), ramp(first_y + f32(8.0))), inverse)
                u = _v(z)
                x0, z0 = _shared(scratch, table, node, 0, p, v, q, w, z, u)
                x1, z1 = _shared(scratch, table, node, 1, p, v, q, w, z, u)
                x2, z2 = _shared(scratch, table, node, 2, p, v, q, w, z, u)
                x3, z3 = _shared(scratch, table, node, 3, p, v, q, w, z, u)
            else:
                s, t = _clipped(ramp(first_x + f32(16.0)), inverse), _clipped(ramp(first_y + f32(16.0)), inverse)
                g, h = _v(s), _v(t)
                x0, z0 = _double(scratch, table, node, 0, p, v, s, g, q, w, t, h)
                x1, z1 = _double(scratch, table, node, 1, p, v, s, g, q, w, t, h)
                x2, z2 = _double(scratch, table, node, 2, p, v, s, g, q, w, t, h)
                x3, z3 = _double(scratch, table, node, 3, p, v, s, g, q, w, t, h)
            while True:
                a, b = _sum(scratch, row, x0, x1, x2, x3), _sum(scratch, row, z0, z1, z2, z3)
                store(pixels, at, fma(m, a, load(pixels, at)))
                store(pixels, at + 16, fma(m, b, load(pixels, at + 16)))
                if channels == 2:
                    store(others, at, fma(n, a, load(others, at)))
                    store(others, at + 16, fma(n, b, load(others, at + 16)))
                at += stride
                row += 1
                if row >= rows:
                    break
    return largest


@njit(**FAST)
def _shares(table, node, centre, half, start, stop, out):
    """The rows of a stamp's products (RANK, stop - start) on pixels start to stop; in double, as edges may lie close."""
    for k in range(RANK):
        before = 0.0
        for i in range(stop - start + 1):
            x = min(max((start + i - centre) / half, -1.0), 1.0)
            v = 2.0 * x * x - 1.0
            a = np.float64(table[node, k * TERMS + TERMS - 1])
            for n in range(TERMS - 2, -1, -1):
                a = a * v + table[node, k * TERMS + n]
            a *= x
            if i > 0:
                out[k, i - 1] = a - before
            before = a


@njit(**FAST)
def draw_wide(image, channels, x, y, r, first, second, stamp):
    """A stamp of any size, clipped to the array (float64, channels first), whose corner is where x and y start."""
    table, reach, squeeze, density = stamp
    half = reach * math.sqrt(np.float64(r) * np.float64(r) - squeeze)
    node = int(density / (half * half) + 0.5)
    left, right = max(int(math.floor(x - half)), 0), min(int(math.floor(x + half)) + 1, image.shape[2])
    top, bottom = max(int(math.floor(y - half)), 0), min(int(math.floor(y + half)) + 1, image.shape[1])
    if left >= right or top >= bottom:
        return
    across, down = np.empty((RANK, right - left), dtype=np.float32), np.empty((RANK, bottom - top), dtype=np.float32)
    _shares(table, node, np.float64(x), half, left, right, across)
    _shares(table, node, np.float64(y), half, top, bottom, down)
    x0, x1, x2, x3 = across[0], across[1], across[2], across[3]
    for row in range(bottom - top):
        s0, s1 = table[node, SIGNS] * down[0, row], table[node, SIGNS + 1] * down[1, row]
        s2, s3 = table[node, SIGNS + 2] * down[2, row], table[node, SIGNS + 3] * down[3, row]
        for channel in range(channels):
            value = first if channel == 0 else second
            line = image[channel, top + row, left:right]
            for j in range(right - left):
                line[j] += value * max(s0 * x0[j] + s1 * x1[j] + s2 * x2[j] + s3 * x3[j], f32(0.0))
