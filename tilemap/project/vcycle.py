"""The V-cycle: buckets of particles in, finished images at the finest level out.

Wide kernels are drawn on coarse images, which hold the coefficients of quartic B-splines. Going down, the two-scale
relation of B-splines (de Boor 1978, A Practical Guide to Splines) gives the same spline on the next finer grid
exactly: only drawing approximates, however many levels follow. At the finest level the spline is averaged over pixels
and what is drawn there directly is added. All weights are positive and sum to one, so no sum turns negative, no
weighted mean leaves the range of its particles, and no mass is lost.
"""

from __future__ import annotations

import numpy as np
from numba import njit
from numpy.typing import NDArray

from tilemap.project.scatter import PAD, Buckets, Plan
from tilemap.project.splat import MARGIN, cell_order, draw
from tilemap.project.stamps import Stamps
from tilemap.runners.local import LocalRunner

# One row of weights gives the left (upper) child of a coefficient from those 2 before it to 2 after it; mirrored, the
# right one. Two-scale relation of the quartic B-spline between pixel grids: binomials of 5 over 16.
TWO_SCALE = np.array([0, 5, 10, 1, 0], dtype=np.float32) / np.float32(16)
# The same followed by the average over a pixel, which is the quintic B-spline at the integers (1, 26, 66, 26, 1) / 120.
TWO_SCALE_AVERAGED = np.array([31, 626, 1056, 206, 1], dtype=np.float32) / np.float32(1920)


@njit(nogil=True, cache=True, fastmath=True, error_model="numpy")
def _refine(coarse, fine, corner_row, corner_column, rows, columns, weights):
    """Add to `fine` (2 rows, 2 columns) what the coarse pixels [0, rows) x [0, columns) from the corner on become."""
    w0, w1, w2, w3, w4 = weights[0], weights[1], weights[2], weights[3], weights[4]
    line = np.empty(columns + 4, dtype=np.float32)
    # Two plain loops and one that interleaves run a third faster than one that does it all.
    left, right = np.empty(columns, dtype=np.float32), np.empty(columns, dtype=np.float32)
    for channel in range(coarse.shape[0]):
        for i in range(2 * rows):
            row = corner_row + i // 2
            a = coarse[channel, row - 2, corner_column - 2 : corner_column + columns + 2]
            b = coarse[channel, row - 1, corner_column - 2 : corner_column + columns + 2]
            c = coarse[channel, row, corner_column - 2 : corner_column + columns + 2]
            d = coarse[channel, row + 1, corner_column - 2 : corner_column + columns + 2]
            e = coarse[channel, row + 2, corner_column - 2 : corner_column + columns + 2]
            if i % 2 == 0:
                for j in range(columns + 4):
                    line[j] = w0 * a[j] + w1 * b[j] + w2 * c[j] + w3 * d[j] + w4 * e[j]
            else:
                for j in range(columns + 4):
                    line[j] = w4 * a[j] + w3 * b[j] + w2 * c[j] + w1 * d[j] + w0 * e[j]
            for j in range(columns):
                left[j] = w0 * line[j] + w1 * line[j + 1] + w2 * line[j + 2] + w3 * line[j + 3] + w4 * line[j + 4]
            for j in range(columns):
                right[j] = w4 * line[j] + w3 * line[j + 1] + w2 * line[j + 2] + w1 * line[j + 3] + w0 * line[j + 4]
            out = fine[channel, i]
            for j in range(columns):
                out[2 * j] += left[j]
                out[2 * j + 1] += right[j]


STRIP_ROWS = 128
"""Rows of a coarse image that are refined in one piece of work."""


class Cycle:
    """One species' way from buckets to images.

    Parameters
    ----------
    plan : Plan
    channels : int
    stamps : Stamps
    """

    def __init__(self, plan: Plan, channels: int, stamps: Stamps) -> None:
        self.plan = plan
        self.channels = channels
        self.stamps = stamps

    def _empty(self, size: tuple[int, int]) -> NDArray[np.float32]:
        return np.zeros((self.channels, size[0] + 2 * MARGIN, size[1] + 2 * MARGIN), dtype=np.float32)

    def _refine_into(
        self, coarse: NDArray[np.float32], fine: NDArray[np.float32], level: int, runner: LocalRunner | None = None
    ) -> None:
        """Carry a coarse image to the next finer `level`, with its pad where that is coarse too; both with margins."""
        pad = PAD if level else 0
        reach = pad // 2
        rows, columns = coarse.shape[1] - 2 * MARGIN + 2 * reach, coarse.shape[2] - 2 * MARGIN + 2 * reach
        inside = fine[:, MARGIN - pad : MARGIN - pad + 2 * rows, MARGIN - pad : MARGIN - pad + 2 * columns]
        corner = MARGIN - reach
        weights = TWO_SCALE if level else TWO_SCALE_AVERAGED

        def strip(start: int) -> None:
            stop = min(start + STRIP_ROWS, rows)
            _refine(coarse, inside[:, 2 * start : 2 * stop], corner + start, corner, stop - start, columns, weights)

        starts = range(0, rows, STRIP_ROWS)
        for _ in runner.map(strip, starts, ahead=len(starts)) if runner else map(strip, starts):
            pass

    def _draw_into(self, image: NDArray[np.float32], parts: list[NDArray[np.float32]], level: int) -> None:
        records = parts[0] if len(parts) == 1 else np.concatenate(parts)
        scale = 1.0 / (1 << level)
        order, _ = cell_order(records, scale, (image.shape[1] - 2 * MARGIN, image.shape[2] - 2 * MARGIN))
        draw(image, records, order, scale, self.stamps, finest=level == 0, wide=level == self.plan.top)

    def _draw_shared(
        self, image: NDArray[np.float32], parts: list[NDArray[np.float32]], level: int, runner: LocalRunner
    ) -> None:
        """The same with all workers on one image: bands of even number, then those of odd, whoever draws them."""
        scale = 1.0 / (1 << level)
        size = image.shape[1] - 2 * MARGIN, image.shape[2] - 2 * MARGIN
        sorted_parts = list(runner.map(lambda records: cell_order(records, scale, size), parts))

        def draw_bands(bands: range) -> None:
            for band in bands:
                for records, (order, starts) in zip(parts, sorted_parts, strict=True):
                    ours = order[starts[band] : starts[band + 1]]
                    draw(image, records, ours, scale, self.stamps, finest=level == 0, wide=level == self.plan.top)

        count = len(sorted_parts[0][1]) - 1
        if level == self.plan.top:  # where kernels may be wider than a band
            draw_bands(range(count))
            return
        for parity in (0, 1):
            for _ in runner.map(draw_bands, [range(band, band + 1) for band in range(parity, count, 2)], ahead=count):
                pass

    def base(self, buckets: Buckets, slab: int, runner: LocalRunner) -> NDArray[np.float32]:
        """The image of a slab at level `plan.local`, from everything drawn at that level and coarser ones.

        Returns
        -------
        float32 (channels, rows + 2 MARGIN, columns + 2 MARGIN), right up to PAD pixels around the picture.
        """
        image = None
        for level in range(self.plan.top, self.plan.local - 1, -1):
            finer = self._empty(self.plan.size(level))
            if image is not None:
                self._refine_into(image, finer, level, runner)
            for parts in buckets.groups(-1, slab, level):
                self._draw_shared(finer, parts, level, runner)
            image = finer
        assert image is not None
        return image

    def window(self, region: int) -> tuple[tuple[int, int], tuple[int, int]]:
        """The part of `base` that a region is made from: its first row and column, and its rows and columns."""
        tile = self.plan.region_px >> self.plan.local
        corner = tuple(place * tile for place in divmod(region, self.plan.regions[1]))
        sides = (
            min(tile, side - start) + 2 * MARGIN
            for side, start in zip(self.plan.size(self.plan.local), corner, strict=True)
        )
        return corner, tuple(sides)  # type: ignore[return-value]

    def region(
        self, buckets: Buckets, base: NDArray[np.float32], region: int, slab: int
    ) -> tuple[NDArray[np.float32], bool]:
        """The finest image of one region of a slab.

        Parameters
        ----------
        buckets : Buckets
        base : float32 (channels, rows, columns), the region's `window` of what `base` returned for the slab
        region : int, row-major
        slab : int

        Returns
        -------
        image : float32 (channels, rows, columns) at level 0
        drawn : bool, whether there is anything in it
        """
        plan, image = self.plan, base
        rows, columns = image.shape[1] - 2 * MARGIN, image.shape[2] - 2 * MARGIN
        if not image.any() and not any(buckets.count(region, slab, level) for level in range(plan.local)):
            return np.zeros((self.channels, rows << plan.local, columns << plan.local), dtype=np.float32), False
        for level in range(plan.local - 1, -1, -1):
            rows, columns = rows * 2, columns * 2
            finer = self._empty((rows, columns))
            self._refine_into(image, finer, level)
            for parts in buckets.groups(region, slab, level):
                self._draw_into(finer, parts, level)
            image = finer
        return image[:, MARGIN:-MARGIN, MARGIN:-MARGIN], True
