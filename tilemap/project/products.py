"""Stamps as products of rows and columns: some particles in, their weights on pixels added to flat images.

The rows and columns of a particle's products (see `stamps`) are computed sixteen pixel edges at a time; a stamp is added
line by line, a line being half a vector of sixteen pixels, one or two, whatever the kernel covers.
"""

from __future__ import annotations

import math
from typing import Any

import numpy as np
from numba import njit

from tilemap.project.lanes import (
    add_product,
    fma,
    follow,
    follow_each,
    halves,
    least,
    lower,
    minus,
    most,
    ramp,
    spread,
    spread_like,
    store,
    times,
    turn,
)
from tilemap.project.stamps import (
    ENDS,
    LARGE_PX,
    NODES,
    RANK,
    SIGNS,
    SMALL_ENDS,
    SMALL_SIGNS,
    SMALL_TERMS,
    TERMS,
)

MARGIN = 48
"""Pixels around an image that drawing may touch: twice LARGE_PX, a pad for refinement, and a line's spare width."""

# fastmath lets the compiler fuse multiply-adds and turn comparisons into min and max; infinities and NaN are refused by
# the sources, so their rules are not needed here.
FAST: dict[str, Any] = {"nogil": True, "cache": True, "fastmath": True, "error_model": "numpy"}
assert RANK == 4, "the loops below are written out for four products"

f32 = np.float32
_LINE = 32  # room for the column of one product in scratch
BATCH = 256
"""Particles measured at a time."""
TINY_PX = 4
"""Pixels each way that the smallest stamps touch at most: those of which most fall on one pixel."""
_TINY, _SMALL, _SINGLE, _SHARED, _DOUBLE, _WIDE = range(6)
"""Ways of drawing, by the pixels that a stamp touches each way: at most 4, 8, 16, 24, 32, and more."""
SOME_TINY = 1 << _TINY


def _room():
    return (
        np.empty((4, BATCH), dtype=np.int32),
        np.empty((6, BATCH), dtype=np.float32),
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
def _small(scratch, small, k, x, v):
    """Product k of a small stamp: x holds the left edges of eight pixels across in its lower half, upper ones down in its upper."""
    a = spread(small[k * SMALL_TERMS + SMALL_TERMS - 1])
    for n in range(SMALL_TERMS - 2, -1, -1):
        a = fma(a, v, spread(small[k * SMALL_TERMS + n]))
    a = times(a, x)
    a = minus(follow_each(a, spread(small[SMALL_ENDS + k])), a)
    store(scratch, k * _LINE, times(a, spread(small[SMALL_SIGNS + k])))
    return lower(a)


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
    """The weights of a row of pixels. What rounding and the fit leave below zero (1e-7 of the mass) is cut off."""
    a = times(spread_like(scratch[row], x0), x0)
    a = fma(spread_like(scratch[row + _LINE], x1), x1, a)
    a = fma(spread_like(scratch[row + 2 * _LINE], x2), x2, a)
    a = fma(spread_like(scratch[row + 3 * _LINE], x3), x3, a)
    return most(a, spread_like(f32(0.0), a))


@njit(**FAST)
def _measure(records, order, scale, corners, value, channels, strides, stamp, room):
    """Where the stamps of some particles lie: whole numbers into places, others into sizes. Returns the ways that occur, a
    bit for each.

    Apart from drawing, as the compiler makes vectors of it, and as the lengths of loops over rows are guessed wrong by
    the machine for every second particle, which costs little where the right ones are at hand (a third of all time
    for small kernels).
    """
    _, reach, squeeze, density, _, small_reach, small_px = stamp
    places, sizes, _ = room
    corner, aside = corners
    one, share = np.int32(1), scale * scale
    ways = np.int32(0)
    for i in range(len(order)):
        index = order[i]
        sizes[0, i], sizes[1, i], sizes[5, i] = records[index, 0], records[index, 1], records[index, 2]
        sizes[3, i], sizes[4, i] = records[index, 3 + value], records[index, 2 + value + channels]
    for i in range(len(order)):
        # From the corner of the margin, so that cutting off decimals rounds down.
        x, y = sizes[0, i] * scale - f32(corner[1] - MARGIN), sizes[1, i] * scale - f32(corner[0] - MARGIN)
        r = sizes[5, i] * scale
        half = small_reach * r if r <= small_px else reach * math.sqrt(r * r - squeeze)
        inverse = f32(1.0) / half
        left, top = np.int32(x - half), np.int32(y - half)
        rows, columns = np.int32(y + half) - top + one, np.int32(x + half) - left + one
        most = max(rows, columns)
        way = np.int32(_DOUBLE)
        way = np.int32(_SHARED) if most <= 24 else way
        way = np.int32(_SINGLE) if most <= 16 else way
        way = np.int32(_SMALL) if r <= small_px else way
        way = np.int32(_TINY) if most <= TINY_PX else way
        way = np.int32(_WIDE) if r > f32(LARGE_PX) else way
        # There, coordinates begin at another corner, and rows have another length.
        tiny = (top - np.int32(aside[0] - corner[0])) * strides[1] + left - np.int32(aside[1] - corner[1])
        places[0, i] = tiny if most <= TINY_PX else top * strides[0] + left
        places[1, i] = rows
        places[2, i] = min(np.int32(inverse * inverse * density + f32(0.5)), np.int32(NODES - 1))
        places[3, i] = way
        ways |= one << way
        sizes[0, i] = f32(left) - x
        sizes[1, i] = f32(top) - y
        sizes[2, i] = inverse
        sizes[3, i] *= share
        sizes[4, i] *= share
        sizes[5, i] = r
    return ways


@njit(**FAST)
def draw_some(flat, tiny, wide, channels, strides, records, order, scale, corners, value, stamp, room):
    """Draw particles in this order.

    Parameters
    ----------
    flat : two float32 (n,)
        Flat images of the first and the second channel (the same where there is but one).
    tiny : two float64 or float32 (n,)
        Those that stamps of at most TINY_PX pixels each way are added to.
    wide : float64 (channels, rows, columns), whole image with its margin, for kernels wider than LARGE_PX
    channels : int, 1 or 2
    strides : two int32, elements from row to row of flat and of tiny
    records, order, scale : as in `splat.draw`
    corners : two of (int, int)
        Row and column of the picture at which flat and tiny begin, less their margin.
    value : int, the first channel among those of the records
    stamp : table, reach, squeeze, density, and of small stamps table, reach and largest radius
    room : tuple of arrays made by `room_for_drawing`

    Returns
    -------
    int
        The ways that their stamps were drawn, as `reach_of` takes them; SOME_TINY among them.
    """
    all_ways = 0
    for start in range(0, len(order), BATCH):
        some = order[start : start + BATCH]
        ways = _measure(records, some, scale, corners, value, channels, strides, stamp, room)
        all_ways |= ways
        _add(flat, tiny, channels, strides, len(some), stamp, room)
        if ways >> _WIDE == 0:
            continue
        places, sizes, _ = room
        for i in range(len(some)):
            if places[3, i] == _WIDE:
                x, y = records[some[i], 0] * scale + f32(MARGIN), records[some[i], 1] * scale + f32(MARGIN)
                draw_wide(wide, channels, x, y, sizes[5, i], sizes[3, i], sizes[4, i], stamp)
    return all_ways


@njit(**FAST)
def reach_of(ways):
    """Pixels that stamps drawn in these ways touch at most beyond that of the particle."""
    for way, pixels in ((_DOUBLE, 32), (_SHARED, 24), (_SINGLE, 16), (_SMALL, 8)):
        if ways >> way & 1:
            return pixels // 2
    return TINY_PX // 2


@njit(**FAST)
def _add(flat, tiny, channels, strides, count, stamp, room):
    """Add the stamps of particles that are measured, but the wide ones."""
    pixels, others = flat
    table, small = stamp[0], stamp[4]
    places, sizes, scratch = room
    for i in range(count):
        at, rows, node, way = np.int64(places[0, i]), places[1, i], places[2, i], places[3, i]
        stride = strides[0]
        first_x, first_y, inverse, m, n = sizes[0, i], sizes[1, i], sizes[2, i], sizes[3, i], sizes[4, i]
        # The loops over rows test at their end: with a test before, the compiler moves rows of stamps behind it and
        # keeps all coefficients in memory until then (a third slower).
        row = 0
        if way < _SINGLE:
            p = _clipped(halves(ramp(first_x), ramp(first_y - f32(8.0))), inverse)
            v = _v(p)
            x0 = _small(scratch, small, 0, p, v)
            x1 = _small(scratch, small, 1, p, v)
            x2 = _small(scratch, small, 2, p, v)
            x3 = _small(scratch, small, 3, p, v)
            if way < _SMALL:
                while True:
                    a = _sum(scratch, 8 + row, x0, x1, x2, x3)
                    add_product(tiny[0], at, m, a)
                    if channels == 2:
                        add_product(tiny[1], at, n, a)
                    at += strides[1]
                    row += 1
                    if row >= rows:
                        break
            else:
                while True:
                    a = _sum(scratch, 8 + row, x0, x1, x2, x3)
                    add_product(pixels, at, m, a)
                    if channels == 2:
                        add_product(others, at, n, a)
                    at += stride
                    row += 1
                    if row >= rows:
                        break
        elif way < _SHARED:
            p, q = _clipped(ramp(first_x), inverse), _clipped(ramp(first_y), inverse)
            v, w = _v(p), _v(q)
            x0 = _single(scratch, table, node, 0, p, v, q, w)
            x1 = _single(scratch, table, node, 1, p, v, q, w)
            x2 = _single(scratch, table, node, 2, p, v, q, w)
            x3 = _single(scratch, table, node, 3, p, v, q, w)
            while True:
                a = _sum(scratch, row, x0, x1, x2, x3)
                add_product(pixels, at, m, a)
                if channels == 2:
                    add_product(others, at, n, a)
                at += stride
                row += 1
                if row >= rows:
                    break
        elif way < _WIDE:
            p, q = _clipped(ramp(first_x), inverse), _clipped(ramp(first_y), inverse)
            v, w = _v(p), _v(q)
            if way < _DOUBLE:
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
                add_product(pixels, at, m, a)
                add_product(pixels, at + 16, m, b)
                if channels == 2:
                    add_product(others, at, n, a)
                    add_product(others, at + 16, n, b)
                at += stride
                row += 1
                if row >= rows:
                    break


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
    table, reach, squeeze, density = stamp[0], stamp[1], stamp[2], stamp[3]
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
