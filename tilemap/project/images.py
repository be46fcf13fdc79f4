"""Positions in x, y and z in, the places (u, v, depth) of all their periodic images that a turned camera sees out.

Along a box axis images repeat along u, v and depth, and routing finds them. Seen from anywhere else they do not.
"""

from __future__ import annotations

import itertools

import numpy as np
from numba import njit
from numpy.typing import NDArray

Sides = tuple[tuple[float, float], tuple[float, float], tuple[float, float]]
"""What is seen of u, v and depth: (lowest, highest) of each."""


def steps_seen(
    vectors: NDArray[np.float64], sides: Sides, margin: float, box: NDArray[np.float64]
) -> NDArray[np.float64]:
    """By how much the box has to be moved to touch what is seen, in u, v and depth.

    Parameters
    ----------
    vectors : float64 (3, 3)
        Unit vectors of u, v and depth in x, y and z, one in each row.
    sides : Sides
    margin : float
        What is seen is so much larger, in u and v.
    box : float64 (3,)
        Sides of the periodic box.

    Returns
    -------
    float64 (moves, 3)
    """
    low, high = (np.array(each) for each in zip(*sides, strict=True))
    middle, half = (low + high) / 2, (high - low) / 2 + [margin, margin, 0.0]
    in_box = np.abs(vectors).T @ half  # half of what is seen, in x, y and z
    first = np.floor((vectors.T @ middle - in_box) / box).astype(int)
    last = np.floor((vectors.T @ middle + in_box) / box).astype(int)
    ranges = [range(a, b + 1) for a, b in zip(first, last, strict=True)]
    moves = np.array(list(itertools.product(*ranges)), dtype=np.float64) * box
    reach = np.abs(vectors) @ box / 2  # half of the box, in u, v and depth
    apart = np.abs((moves + box / 2) @ vectors.T - middle)
    return moves[(apart <= half + reach).all(axis=1)] @ vectors.T


@njit(nogil=True, cache=True, error_model="numpy")
def _images(position, radius, pixel, vectors, box, moves, low, high, places, which):
    """Count the images seen (places empty), or write them down."""
    fill = len(places) > 0
    count = 0
    wrapped = np.empty(3)
    for index in range(len(position)):
        for axis in range(3):
            wrapped[axis] = position[index, axis]
            if box[axis] > 0.0:
                wrapped[axis] -= box[axis] * np.floor(wrapped[axis] / box[axis])
        u0 = wrapped[0] * vectors[0, 0] + wrapped[1] * vectors[0, 1] + wrapped[2] * vectors[0, 2]
        v0 = wrapped[0] * vectors[1, 0] + wrapped[1] * vectors[1, 1] + wrapped[2] * vectors[1, 2]
        depth0 = wrapped[0] * vectors[2, 0] + wrapped[1] * vectors[2, 1] + wrapped[2] * vectors[2, 2]
        # What routing calls a halo is never more: the kernel, and at most three pixels of the level it is drawn at.
        margin = 1.5 * radius[index] + 4.0 * pixel
        for k in range(len(moves)):
            depth = depth0 + moves[k, 2]
            if depth < low[2] or depth >= high[2]:
                continue
            u, v = u0 + moves[k, 0], v0 + moves[k, 1]
            if u < low[0] - margin or u > high[0] + margin or v < low[1] - margin or v > high[1] + margin:
                continue
            if fill:
                places[count, 0], places[count, 1], places[count, 2] = u, v, depth
                which[count] = index
            count += 1
    return count


def images_seen(
    position: NDArray[np.float64],
    radius: NDArray[np.float64],
    vectors: NDArray[np.float64],
    sides: Sides,
    pixel: float,
    box: NDArray[np.float64] | None,
) -> tuple[NDArray[np.float64], NDArray[np.int64]]:
    """Where particles are for a turned camera: every image whose centre lies between the depths and whose kernel touches
    the picture.

    Parameters
    ----------
    position : float64 (n, 3)
        x, y and z.
    radius : float64 (n,)
        Support radii, same unit.
    vectors, sides : as in `steps_seen`
    pixel : float
        Side of a pixel of the finest level, same unit.
    box : float64 (3,) or None
        Sides of the periodic box; None where nothing repeats.

    Returns
    -------
    places : float64 (m, 3)
        u, v and depth of the images, those of one particle after each other.
    which : int64 (m,)
        The particle that each is an image of.
    """
    moves = np.zeros((1, 3))
    if box is not None and len(radius):
        moves = steps_seen(vectors, sides, 1.5 * float(radius.max()) + 4.0 * pixel, box)
    low, high = (np.array(each) for each in zip(*sides, strict=True))
    given = position, radius, pixel, vectors, np.zeros(3) if box is None else box, moves, low, high
    count = _images(*given, np.empty((0, 3)), np.empty(0, dtype=np.int64))
    places, which = np.empty((count, 3)), np.empty(count, dtype=np.int64)
    if count:
        _images(*given, places, which)
    return places, which
