"""Where new pixels lie among old ones in, how much of each old pixel they take out: exact, so that totals are kept."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray
from scipy import sparse

SNAP_PX = 1e-6
"""An edge as near as this to the edge of an old pixel is that edge: no sliver of the pixel beyond is taken for rounding."""


def overlaps(
    start: float, step: float, count: int, size: int, wrap: bool
) -> tuple[sparse.csc_matrix, NDArray[np.bool_]]:
    """Area weights along one axis: the mean over a new pixel of an image that is constant within each old one.

    Parameters
    ----------
    start, step : float
        Where the first new pixel begins, and how wide each is, in old pixels.
    count : int
        New pixels.
    size : int
        Old pixels.
    wrap : bool
        Whether old pixel `size` is pixel 0 again; as often as need be.

    Returns
    -------
    weights : sparse float64 (count, size)
        Each row adds up to one where the new pixel lies within the old image.
    inside : bool (count,)
        Where it does.
    """
    edges = start + step * np.arange(count + 1)
    nearest = np.rint(edges)
    edges = np.where(np.abs(edges - nearest) < SNAP_PX, nearest, edges)
    low, high = edges[:-1], edges[1:]
    first = np.floor(low).astype(np.int64)
    touched = np.arange(int((np.ceil(high) - first).max()))
    old = first[:, None] + touched
    share = (
        np.clip(np.minimum(high[:, None], old + 1) - np.maximum(low[:, None], old), 0.0, None) / (high - low)[:, None]
    )
    new = np.broadcast_to(np.arange(count)[:, None], old.shape)
    if wrap:
        inside = np.ones(count, dtype=bool)
        old = old % size
    else:
        inside = (low >= 0) & (high <= size)
    used = (share > 0) & (old >= 0) & (old < size)
    # Where a new pixel takes the same old one twice, around the edge, the entries add up.
    weights = sparse.coo_matrix((share[used], (new[used], old[used])), shape=(count, size)).tocsc()
    return weights, inside


class Canvas:
    """New pixels being filled from tiles of old ones, of which each is given once.

    Parameters
    ----------
    rows, columns : sparse float64 (new, old)
        As `overlaps` gives them.
    """

    def __init__(self, rows: sparse.csc_matrix, columns: sparse.csc_matrix) -> None:
        self._rows = rows
        self._columns = columns
        self.values = np.zeros((rows.shape[0], columns.shape[0]))

    def add(self, tile: NDArray[np.floating], row: int, column: int) -> None:
        """Add a tile whose top left pixel is old pixel (row, column); what lies beyond the old image is left out."""
        height = min(tile.shape[0], self._rows.shape[1] - row)
        width = min(tile.shape[1], self._columns.shape[1] - column)
        rows, at_rows = _used(self._rows[:, row : row + height])
        columns, at_columns = _used(self._columns[:, column : column + width])
        part = rows @ (columns @ tile[:height, :width].T.astype(np.float64)).T
        self.values[np.ix_(at_rows, at_columns)] += part


def tiles_used(weights: sparse.csc_matrix, tile: int) -> list[int]:
    """Which tiles along an axis hold an old pixel that is used."""
    used = np.flatnonzero(np.diff(weights.indptr))
    return np.unique(used // tile).tolist()


def _used(weights: sparse.csc_matrix) -> tuple[sparse.csr_matrix, NDArray[np.intp]]:
    """The rows of a matrix that are not all zero, and which they are."""
    by_row = weights.tocsr()
    at = np.flatnonzero(np.diff(by_row.indptr))
    return by_row[at], at
