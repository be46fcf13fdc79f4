"""Support radii for particles that have none: the distance to the k-th neighbour in three dimensions.

The volume is cut into cells; each cell is searched in a tree of its own particles and those of a margin around it.
Where the k-th neighbour lies further than the margin reaches, the search is repeated with a wider one, so that the
answer is that of one tree over everything. Only the cells at work are in memory as they are; all others wait where the
caller says.
"""

from __future__ import annotations

import itertools
from collections.abc import Callable, Iterable

import numpy as np
from numpy.typing import NDArray
from scipy.spatial import cKDTree

from tilemap.errors import InputError
from tilemap.runners.local import LocalRunner
from tilemap.spill import Runs

PER_CELL = 100_000
"""Particles per cell, about."""
FIRST_MARGIN = 0.15
"""First margin in sides of a cell: 32 neighbours of 100 000 lie within 0.1 where they are even."""

Positions = Callable[[], Iterable[NDArray[np.float64]]]
"""Gives all positions, chunk by chunk, (n, 3) each, as often as it is called."""


def neighbour_radii(
    position: NDArray[np.float64], neighbours: int, box: NDArray[np.float64] | None, runner: LocalRunner
) -> NDArray[np.float64]:
    """The distances of `Neighbours`, float64 (n,), for positions (n, 3) that are in memory."""
    held = lambda name, keys, width: Runs(keys, width, dtype=np.float64)  # noqa: E731
    search = Neighbours(len(position), neighbours, box, max(1, len(position)), held)
    search.find(lambda: [position], runner, lambda done: None)
    return search.radii(0, len(position))


class Neighbours:
    """The search for one species.

    Parameters
    ----------
    count : int
        Particles.
    neighbours : int
        k.
    box : float64 (3,) or None
        Sides of the periodic box from 0 on; None where nothing repeats.
    chunk : int
        Radii wait in runs of so many particles.
    runs : callable
        Makes the place where rows of float64 wait, from a name, the number of keys and the width of a row.
    """

    def __init__(
        self,
        count: int,
        neighbours: int,
        box: NDArray[np.float64] | None,
        chunk: int,
        runs: Callable[[str, int, int], Runs],
    ) -> None:
        self.count, self.neighbours, self.box, self.chunk, self._runs = count, neighbours, box, chunk, runs
        self.smallest = np.inf

    def find(self, positions: Positions, runner: LocalRunner, report: Callable[[int], None]) -> None:
        """Find the distance from each particle to its k-th neighbour, itself not counted.

        Parameters
        ----------
        positions : Positions
        runner : LocalRunner
        report : callable
            Told how many particles have been searched.

        Raises
        ------
        InputError
            Where there are not more than k particles, or every particle has k others at its own place.
        """
        if self.count <= self.neighbours:
            raise InputError(
                f"smoothing.neighbours is {self.neighbours}, but there are only {self.count} particles: ask for fewer"
            )
        report(0)
        cells = _Cells(self.count, *self._bounds(positions), self.box is not None, self._runs)
        start = 0
        for position in positions():
            cells.add(start, self._wrapped(position))
            start += len(position)
        found, done = self._runs("radii", -(-self.count // self.chunk), 2), 0
        for own, distance in runner.map(lambda cell: cells.search(int(cell), self.neighbours), cells.occupied):
            self.smallest = min(self.smallest, distance[distance > 0].min(initial=np.inf))
            order = np.argsort(own)
            starts = np.searchsorted(own[order], np.arange(len(found.counts) + 1) * self.chunk)
            found.add(starts, np.column_stack([own[order].astype(np.float64), distance[order]]))
            done += len(own)
            report(done)
        self.take_up(found, float(self.smallest))
        if not np.isfinite(self.smallest):
            raise InputError(
                f"smoothing.neighbours is {self.neighbours}, and each of the {self.count} particles has as many at its "
                "very place: ask for more, or give smoothing.radius"
            )

    def take_up(self, found: Runs, smallest: float) -> None:
        """Take in what a search has found: its runs of "radii", and the smallest distance above zero."""
        self._found, self.smallest = found, smallest

    def radii(self, start: int, count: int) -> NDArray[np.float64]:
        """The distances of particles start to start + count - 1, float64, in the unit of the positions; particles on
        top of each other get the smallest positive distance."""
        radii = np.empty(count)
        for key in range(start // self.chunk, (start + count - 1) // self.chunk + 1):
            for rows in self._found.pieces(key):
                place = rows[:, 0].astype(np.int64) - start
                here = (place >= 0) & (place < count)
                radii[place[here]] = rows[here, 1]
        return np.maximum(radii, self.smallest)

    def _wrapped(self, position: NDArray[np.float64]) -> NDArray[np.float64]:
        if self.box is None:
            return position
        position = np.mod(position, self.box)
        return np.where(position >= self.box, 0.0, position)

    def _bounds(self, positions: Positions) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
        """The lower corner of all there is, and its sides."""
        if self.box is not None:
            return np.zeros(3), np.asarray(self.box, dtype=np.float64)
        low, high = np.full(3, np.inf), np.full(3, -np.inf)
        for position in positions():
            low, high = np.minimum(low, position.min(axis=0)), np.maximum(high, position.max(axis=0))
        return low, np.maximum(high - low, 1e-300)


class _Cells:
    """Particles sorted by the cells of a regular grid: rows of place and number."""

    def __init__(
        self,
        count: int,
        low: NDArray[np.float64],
        size: NDArray[np.float64],
        periodic: bool,
        runs: Callable[[str, int, int], Runs],
    ) -> None:
        across = max(1, round((count / PER_CELL) ** (1 / 3)))
        self.counts = np.maximum(1, np.round(across * size / size.max())).astype(int)
        self.low, self.size, self.periodic = low, size, periodic
        self._rows = runs("cells", int(self.counts.prod()), 4)

    @property
    def occupied(self) -> NDArray[np.int64]:
        return np.flatnonzero(self._rows.counts)

    def add(self, start: int, position: NDArray[np.float64]) -> None:
        index = np.minimum(((position - self.low) / self.size * self.counts).astype(int), self.counts - 1)
        flat = np.ravel_multi_index(tuple(index.T), tuple(self.counts))
        order = np.argsort(flat, kind="stable")
        starts = np.searchsorted(flat[order], np.arange(self.counts.prod() + 1))
        self._rows.add(starts, np.column_stack([position[order], start + order.astype(np.float64)]))

    def _of(self, cells: Iterable[int]) -> NDArray[np.float64]:
        return np.concatenate([np.empty((0, 4)), *(rows for cell in cells for rows in self._rows.pieces(cell))])

    def search(self, cell: int, neighbours: int) -> tuple[NDArray[np.int64], NDArray[np.float64]]:
        own = self._of([cell])
        asked, distance = own[:, :3], np.full(len(own), np.inf)
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
        return own[:, 3].astype(np.int64), distance

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
            return self._of(range(int(self.counts.prod())))[:, :3], True
        index = np.array(np.unravel_index(cell, tuple(self.counts)))
        lower, upper = self._limits(cell, margin)
        ring = int(np.ceil(margin))
        parts = []
        for step in itertools.product(range(-ring, ring + 1), repeat=3):
            place = index + step
            turn = np.floor_divide(place, self.counts)
            if not self.periodic and turn.any():
                continue
            other = int(np.ravel_multi_index(tuple(place - turn * self.counts), tuple(self.counts)))
            part = self._of([other])[:, :3] + turn * self.size
            parts.append(part[np.all((part >= lower) & (part <= upper), axis=1)] if any(step) else part)
        return np.concatenate(parts), False
