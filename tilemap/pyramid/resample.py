"""Where new pixels lie among old ones in, how much of each old pixel they take out: exact, so that totals are kept."""

from __future__ import annotations

from dataclasses import dataclass

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


@dataclass(frozen=True)
class _Part:
    """The old pixels of one tile along one axis: the new ones that they touch, and by how much; None where one to one."""

    at: NDArray[np.intp]
    weights: sparse.csr_matrix | None

    def apply(self, old: NDArray[np.float64]) -> NDArray[np.float64]:
        """New pixels from old ones, along the first axis."""
        return old if self.weights is None else self.weights @ old

    def highest(self, old: NDArray[np.float64]) -> NDArray[np.float64]:
        """The highest of the old pixels that each new one touches, along the first axis; NaN counts for nothing."""
        if self.weights is None:
            return old
        # No row is empty: `at` are those that are not.
        return np.fmax.reduceat(old[self.weights.indices], self.weights.indptr[:-1], axis=0)


class Canvas:
    """New pixels being filled from tiles of old ones, of which each is given once.

    Parameters
    ----------
    rows, columns : sparse float64 (new, old)
        As `overlaps` gives them.
    """

    def __init__(self, rows: sparse.csc_matrix, columns: sparse.csc_matrix) -> None:
        self._axes = (rows, columns)
        self._parts: dict[tuple[int, int, int], _Part] = {}
        self.values = np.zeros((rows.shape[0], columns.shape[0]))

    def add(self, tile: NDArray[np.floating], row: int, column: int) -> None:
        """Add a tile whose top left pixel is old pixel (row, column); what lies beyond the old image is left out."""
        height = min(tile.shape[0], self._axes[0].shape[1] - row)
        width = min(tile.shape[1], self._axes[1].shape[1] - column)
        rows, columns = self._part(0, row, height), self._part(1, column, width)
        part = rows.apply(columns.apply(tile[:height, :width].T.astype(np.float64)).T)
        if _in_a_row(rows.at) and _in_a_row(columns.at):
            self.values[rows.at[0] : rows.at[-1] + 1, columns.at[0] : columns.at[-1] + 1] += part
        else:
            self.values[np.ix_(rows.at, columns.at)] += part

    def _part(self, axis: int, start: int, count: int) -> _Part:
        key = (axis, start, count)
        if key not in self._parts:
            self._parts[key] = _used(self._axes[axis][:, start : start + count])
        return self._parts[key]


class Peaks(Canvas):
    """The same, but for the highest of the old pixels that a new one touches, whatever the part; NaN where none is."""

    def __init__(self, rows: sparse.csc_matrix, columns: sparse.csc_matrix) -> None:
        super().__init__(rows, columns)
        self.values.fill(np.nan)

    def add(self, tile: NDArray[np.floating], row: int, column: int) -> None:
        height = min(tile.shape[0], self._axes[0].shape[1] - row)
        width = min(tile.shape[1], self._axes[1].shape[1] - column)
        rows, columns = self._part(0, row, height), self._part(1, column, width)
        part = rows.highest(columns.highest(tile[:height, :width].T.astype(np.float64)).T)
        at = np.ix_(rows.at, columns.at)
        self.values[at] = np.fmax(self.values[at], part)


def tiles_used(weights: sparse.csc_matrix, tile: int) -> list[int]:
    """Which tiles along an axis hold an old pixel that is used."""
    used = np.flatnonzero(np.diff(weights.indptr))
    return np.unique(used // tile).tolist()


def _used(weights: sparse.csc_matrix) -> _Part:
    by_row = weights.tocsr()
    by_row.sum_duplicates()
    at = np.flatnonzero(np.diff(by_row.indptr))
    by_row = by_row[at]
    one_to_one = (
        by_row.shape[0] == by_row.shape[1] == by_row.nnz
        and np.array_equal(by_row.indices, np.arange(by_row.nnz))
        and bool((by_row.data == 1.0).all())
    )
    return _Part(at, None if one_to_one else by_row)


def _in_a_row(at: NDArray[np.intp]) -> bool:
    return bool(at.size and at[-1] - at[0] + 1 == at.size)
