"""Positions in the image plane in, their order along a space-filling curve out.

Objects stored in this order lie near each other in the file when they lie near each other in the view, so a question
about a small window reads few row groups.
"""

from __future__ import annotations

import numpy as np

BITS = 16  # cells a side: 65536, finer than any screen asks for


def hilbert_index(column: np.ndarray, row: np.ndarray, bits: int = BITS) -> np.ndarray:
    """Distance along the Hilbert curve of cells on a square grid of ``2**bits`` a side.

    Parameters
    ----------
    column, row : integer arrays (n,)
        Cell numbers, ``0 <= value < 2**bits``.

    Returns
    -------
    uint64 (n,), a permutation of ``0 .. 4**bits - 1`` over the whole grid; neighbours on the curve share an edge.

    References
    ----------
    D. Hilbert 1891, Math. Annalen 38, 459; the curve is followed quadrant by quadrant from the coarsest bit down.
    """
    x = np.asarray(column).astype(np.uint32)
    y = np.asarray(row).astype(np.uint32)
    mask = np.uint32((1 << bits) - 1)
    index = np.zeros(x.shape, dtype=np.uint64)
    for bit in range(bits - 1, -1, -1):
        right = (x >> np.uint32(bit)) & np.uint32(1)
        upper = (y >> np.uint32(bit)) & np.uint32(1)
        index = (index << np.uint64(2)) | ((np.uint32(3) * right) ^ upper).astype(np.uint64)
        # The two lower quadrants hold the curve turned: mirrored first in the right one, then axes exchanged in both.
        mirror = (upper == 0) & (right == 1)
        x = np.where(mirror, x ^ mask, x)
        y = np.where(mirror, y ^ mask, y)
        lower = upper == 0
        x, y = np.where(lower, y, x), np.where(lower, x, y)
    return index


def curve_order(u: np.ndarray, v: np.ndarray) -> np.ndarray:
    """Indices that put the points (u, v) in order along the curve over their own bounding square.

    Parameters
    ----------
    u, v : float64 (n,), any one unit; finite.

    Returns
    -------
    int64 (n,); points in the same cell keep the order they came in.
    """
    if len(u) == 0:
        return np.zeros(0, dtype=np.int64)
    side = max(np.ptp(u), np.ptp(v)) or 1.0
    cells = (1 << BITS) - 1
    column = ((u - u.min()) / side * cells).astype(np.uint32)
    row = ((v - v.min()) / side * cells).astype(np.uint32)
    return np.argsort(hilbert_index(column, row), kind="stable")
