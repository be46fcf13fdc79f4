"""Particles in, the image they ought to give out: a plain sum in double precision, slow, and written apart from the engine.

Kernels are written down again from their publications and normalised by quadrature; the line-of-sight integral is a
quadrature; the share of every pixel is a quadrature over that pixel. Nothing here imports the engine.
"""

from __future__ import annotations

import math
from functools import lru_cache

import numpy as np
from numba import njit
from scipy.integrate import quad
from scipy.interpolate import CubicSpline

NODES = 65537

# Monaghan & Lattanzio (1985), A&A 149, 135 for the cubic; Price (2012), J. Comp. Phys. 231, 759, eqs. 7 and 8, for the
# quartic and quintic; Wendland (1995), Adv. Comput. Math. 4, 389 for the others. All in q = r / (support radius).
SHAPES = {
    "cubic": lambda q: np.where(q < 0.5, 1 - 6 * q**2 + 6 * q**3, 2 * np.maximum(1 - q, 0) ** 3),
    "quartic": lambda q: (
        np.maximum(2.5 - 2.5 * q, 0) ** 4
        - 5 * np.maximum(1.5 - 2.5 * q, 0) ** 4
        + 10 * np.maximum(0.5 - 2.5 * q, 0) ** 4
    ),
    "quintic": lambda q: (
        np.maximum(3 - 3 * q, 0) ** 5 - 6 * np.maximum(2 - 3 * q, 0) ** 5 + 15 * np.maximum(1 - 3 * q, 0) ** 5
    ),
    "wendland-c2": lambda q: np.maximum(1 - q, 0) ** 4 * (1 + 4 * q),
    "wendland-c4": lambda q: np.maximum(1 - q, 0) ** 6 * (1 + 6 * q + 35 / 3 * q**2),
    "wendland-c6": lambda q: np.maximum(1 - q, 0) ** 8 * (1 + 8 * q + 25 * q**2 + 32 * q**3),
}
AXES = {"z": (0, 1, 2), "x": (1, 2, 0), "y": (2, 0, 1)}


@lru_cache(maxsize=8)
def column(kernel: str) -> np.ndarray:
    """The kernel's integral along the line of sight, times the square of its radius, at q = 0 to 1 in equal steps."""
    shape = SHAPES[kernel]
    volume = quad(lambda q: 4 * np.pi * q * q * float(shape(np.float64(q))), 0, 1, limit=200, epsabs=1e-14)[0]
    x, w = np.polynomial.legendre.leggauss(160)
    q = np.linspace(0, 1, 4097)
    half = np.sqrt(1 - q**2) / 2
    z = half[:, None] * (x + 1)
    values = 2 * half * (shape(np.sqrt(q[:, None] ** 2 + z**2)) @ w) / volume
    return CubicSpline(q, values)(np.linspace(0, 1, NODES))


@njit(cache=True, error_model="numpy")
def _nodes(first, last, centre, radius, points, weights, where, share, pixel):
    """Quadrature nodes along one axis over pixels first to last: offsets from the centre, weights, and whose they are."""
    count = 0
    for i in range(first, last + 1):
        low, high = max(float(i), centre - radius), min(i + 1.0, centre + radius)
        if high <= low:
            continue
        panels = int(math.ceil((high - low) * 4.0 / radius))
        width = (high - low) / panels
        for panel in range(panels):
            for k in range(len(points)):
                where[count] = low + (panel + 0.5 * (points[k] + 1.0)) * width - centre
                share[count] = 0.5 * width * weights[k]
                pixel[count] = i
                count += 1
    return count


@njit(cache=True, error_model="numpy")
def _add(image, x, y, radius, values, table, points, weights):
    """Add one particle, its place and radius in pixels, to image (channels, rows, columns)."""
    rows, columns = image.shape[1], image.shape[2]
    top, bottom = max(int(math.floor(y - radius)), 0), min(int(math.floor(y + radius)), rows - 1)
    left, right = max(int(math.floor(x - radius)), 0), min(int(math.floor(x + radius)), columns - 1)
    if top > bottom or left > right:
        return
    room = (max(bottom - top, right - left) + 12) * len(points) * 2 + 64
    xs, wx, ix = np.empty(room), np.empty(room), np.empty(room, dtype=np.int64)
    ys, wy, iy = np.empty(room), np.empty(room), np.empty(room, dtype=np.int64)
    across = _nodes(left, right, x, radius, points, weights, xs, wx, ix)
    down = _nodes(top, bottom, y, radius, points, weights, ys, wy, iy)
    last = len(table) - 1
    for b in range(down):
        for a in range(across):
            q = math.sqrt(xs[a] * xs[a] + ys[b] * ys[b]) / radius
            if q >= 1.0:
                continue
            place = q * last
            k = int(place)
            column = table[k] + (place - k) * (table[k + 1] - table[k])
            share = column * wx[a] * wy[b] / (radius * radius)
            for channel in range(image.shape[0]):
                image[channel, iy[b], ix[a]] += values[channel] * share


def points_for(radius_px: float) -> int:
    """Quadrature points along a pixel (along a quarter of the radius where that is less): enough for 1e-5."""
    return 5 if radius_px < 6 else 3 if radius_px < 24 else 2 if radius_px < 240 else 1


def project(
    position: np.ndarray,
    radius: np.ndarray,
    values: np.ndarray,
    *,
    along: str = "z",
    u_low: float,
    v_high: float,
    pixel: float,
    size: tuple[int, int],
    edges: np.ndarray,
    period: np.ndarray | None = None,
    kernel: str = "cubic",
    more_points: int = 0,
) -> np.ndarray:
    """The image, float64 (slabs, channels, rows, columns), of values (n, channels): what falls on each pixel.

    `period` is that of x, y and z. A particle belongs to the slab in which its centre, or a periodic image of it, lies.
    """
    table = column(kernel)
    image = np.zeros((len(edges) - 1, values.shape[1], *size))
    axis_u, axis_v, axis_depth = AXES[along]
    rules = {n: np.polynomial.legendre.leggauss(n + more_points) for n in (1, 2, 3, 5)}
    steps = [0.0] * 3 if period is None else [float(period[axis]) for axis in (axis_u, axis_v, axis_depth)]
    for p, h, value in zip(position, radius, np.asarray(values, dtype=np.float64), strict=True):
        r = h / pixel
        for depth in _images(p[axis_depth], steps[2], edges[0], edges[-1], 0.0):
            if not edges[0] <= depth < edges[-1]:
                continue
            slab = int(np.searchsorted(edges, depth, side="right")) - 1
            u_high, v_low = u_low + size[1] * pixel, v_high - size[0] * pixel
            for v in _images(p[axis_v], steps[1], v_low, v_high, h):
                for u in _images(p[axis_u], steps[0], u_low, u_high, h):
                    _add(image[slab], (u - u_low) / pixel, (v_high - v) / pixel, r, value, table, *rules[points_for(r)])
    return image


def _images(place: float, step: float, low: float, high: float, reach: float) -> list[float]:
    """Every periodic image of a place that lies within `reach` of low to high; the place alone where nothing repeats."""
    if step == 0.0:
        return [place]
    first, last = math.ceil((low - reach - place) / step), math.floor((high + reach - place) / step)
    return [place + k * step for k in range(first, last + 1)]
