"""Support radii for particles that have none: the distance to the k-th neighbour in three dimensions.

The volume is cut into cells; each cell is searched in a tree of its own particles and those of a margin around it.
Where the k-th neighbour lies further than the margin reaches, the search is repeated with a wider one, so that the
answer is that of one tree over everything.
"""

from __future__ import annotations

import itertools

import numpy as np
from numpy.typing import NDArray
from scipy.spatial import cKDTree

from tilemap.errors import InputError
from tilemap.runners.local import LocalRunner

PER_CELL = 100_000
"""Particles per cell, about."""
FIRST_MARGIN = 0.15
"""First margin in sides of a cell: 32 neighbours of 100 000 lie within 0.1 where they are even."""


def neighbour_radii(
    position: NDArray[np.float64], neighbours: int, box: NDArray[np.float64] | None, runner: LocalRunner
) -> NDArray[np.float64]:
    """Distance from each particle to its k-th neighbour, itself not counted.

    Parameters
    ----------
    position : float64 (n, 3)
    neighbours : int
        k.
    box : float64 (3,) or None
        Sides of the periodic box from 0 on; None where nothing repeats.
    runner : LocalRunner

    Returns
    -------
    float64 (n,), in the unit of the positions; particles on top of each other get the smallest positive distance.

    Raises
    ------
    InputError
        Where there are not more than k particles, or every particle has k others at its own place.
    """
    if len(position) <= neighbours:
        raise InputError(
            f"smoothing.neighbours is {neighbours}, but there are only {len(position)} particles: ask for fewer"
        )
    if box is not None:
        position = np.mod(position, box)
        position = np.where(position >= box, 0.0, position)
        low, size = np.zeros(3), np.asarray(box, dtype=np.float64)
    else:
        low = position.min(axis=0)
        size = np.maximum(position.max(axis=0) - low, 1e-300)
    cells = _Cells(position, low, size, periodic=box is not None)
    radii = np.empty(len(position))
    for own, distance in runner.map(lambda cell: cells.search(int(cell), neighbours), cells.occupied):
        radii[own] = distance
    smallest = radii[radii > 0].min(initial=np.inf)
    if not np.isfinite(smallest):
        raise InputError(
            f"smoothing.neighbours is {neighbours}, and each of the {len(position)} particles has as many at its very "
            "place: ask for more, or give smoothing.radius"
        )
    return np.maximum(radii, smallest)


class _Cells:
    """Particles sorted by the cells of a regular grid."""

    def __init__(
        self, position: NDArray[np.float64], low: NDArray[np.float64], size: NDArray[np.float64], periodic: bool
    ) -> None:
        across = max(1, round((len(position) / PER_CELL) ** (1 / 3)))
        self.counts = np.maximum(1, np.round(across * size / size.max())).astype(int)
        self.low, self.size, self.periodic = low, size, periodic
        index = np.minimum(((position - low) / size * self.counts).astype(int), self.counts - 1)
        flat = np.ravel_multi_index(tuple(index.T), tuple(self.counts))
        self.order = np.argsort(flat, kind="stable")
        self.position = position[self.order]
        self.starts = np.searchsorted(flat[self.order], np.arange(self.counts.prod() + 1))
        self.occupied = np.flatnonzero(np.diff(self.starts))

    def search(self, cell: int, neighbours: int) -> tuple[NDArray[np.int64], NDArray[np.float64]]:
        own = slice(self.starts[cell], self.starts[cell + 1])
        asked = self.position[own]
        distance = np.full(len(asked), np.inf)
        open_ = np.arange(len(asked))
        for margin in itertools.chain((FIRST_MARGIN, 0.5), itertools.count(1.0)):
            around, whole = self._gather(cell, margin)
            if len(around) > neighbours:
                box = self.size if whole and self.periodic else None
                tree = cKDTree(around, balanced_tree=False, compact_nodes=False, boxsize=box)
                distance[open_] = tree.query(asked[open_], k=[neighbours + 1])[0][:, 0]
            if whole:
                break
            open_ = np.flatnonzero(distance > self._certain(cell, asked, margin))
            if len(open_) == 0:
                break
        return self.order[own], distance

    def _limits(self, cell: int, margin: float) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
        side = self.size / self.counts
        index = np.array(np.unravel_index(cell, tuple(self.counts)))
        return self.low + (index - margin) * side, self.low + (index + 1 + margin) * side

    def _certain(self, cell: int, asked: NDArray[np.float64], margin: float) -> NDArray[np.float64]:
        """How far around each particle everything has been gathered."""
        lower, upper = self._limits(cell, margin)
        below, above = asked - lower, upper - asked
        if not self.periodic:  # beyond the outermost particles there is nothing to miss
            below[:, lower <= self.low] = np.inf
            above[:, upper >= self.low + self.size] = np.inf
        return np.minimum(below, above).min(axis=1)

    def _gather(self, cell: int, margin: float) -> tuple[NDArray[np.float64], bool]:
        """Particles within the margin of a cell, moved to the nearest image; or all there are, and True."""
        if np.all(2 * margin + 1 >= self.counts):
            return self.position, True
        index = np.array(np.unravel_index(cell, tuple(self.counts)))
        lower, upper = self._limits(cell, margin)
        ring = int(np.ceil(margin))
        parts = []
        for step in itertools.product(range(-ring, ring + 1), repeat=3):
            place = index + step
            turn = np.floor_divide(place, self.counts)
            if not self.periodic and turn.any():
                continue
            other = np.ravel_multi_index(tuple(place - turn * self.counts), tuple(self.counts))
            part = self.position[self.starts[other] : self.starts[other + 1]] + turn * self.size
            parts.append(part[np.all((part >= lower) & (part <= upper), axis=1)] if any(step) else part)
        return np.concatenate(parts), False
