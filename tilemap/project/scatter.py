"""Routing: chunks of particles in, buckets of particles out, one for each (region, slab, level) that has to draw them.

A particle goes to the level at which its kernel is at most `LARGE_PX` pixels wide, and to every region whose image,
or whose pad for interpolation, the kernel touches. Periodic images are particles like any other.
"""

from __future__ import annotations

import math
from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np
from numba import njit
from numpy.typing import NDArray

from tilemap.project.camera import Camera
from tilemap.project.stamps import LARGE_PX
from tilemap.spill import Runs

TILE = 512
PAD = 2
"""Pixels around a coarse image that must be right: what the next finer one, with its own pad, is refined from."""
PLACE_BITS = 12
"""Places are kept to 2^-12 pixel of their level: exact in single precision on images up to 4000 pixels, so that the
same particle is the same in two regions and in two periodic images, and what leaves one arrives in the other."""
OPEN_PX = 0.49
"""Kernels of a smaller support radius are opened to this one, with the same share for every pixel. A place off by half
a grain would put 1e-3 of the mass of a kernel of 0.25 pixels on the wrong side of a pixel edge, and 0.02 at 0.01 pixels."""
FEWEST_PX = 16
"""The V-cycle goes down to images of this many pixels a side, where any kernel is drawn as it is."""


@dataclass(frozen=True)
class Plan:
    """How the work is cut.

    Attributes
    ----------
    columns, rows : int
        Image size at level 0.
    slabs : int
    levels : int
        Levels of the pyramid.
    top : int
        Coarsest level of the V-cycle (may be coarser than the pyramid's).
    local : int
        Levels below this one are worked on region by region; this one and coarser ones on the whole image.
    region_px : int
        Side of a region at level 0: TILE * 2^local, so that a region is a tile at level `local`.
    """

    columns: int
    rows: int
    slabs: int
    levels: int
    top: int
    local: int

    @property
    def region_px(self) -> int:
        return TILE << self.local

    @property
    def regions(self) -> tuple[int, int]:
        """Rows and columns of regions."""
        return -(-self.rows // self.region_px), -(-self.columns // self.region_px)

    def size(self, level: int) -> tuple[int, int]:
        """Rows and columns of the image at a level."""
        return self.rows >> level, self.columns >> level

    def key(self, region: int, slab: int, level: int) -> int:
        """Number of the bucket of a region (row-major; -1 for the whole image), a slab and a level."""
        return int(_key(region, slab, level, self.slabs, self.local, self.regions[0] * self.regions[1], self.top))

    @property
    def buckets(self) -> int:
        count = self.regions[0] * self.regions[1]
        return count * self.slabs * self.local + self.slabs * (self.top - self.local + 1)


def make_plan(columns: int, rows: int, slabs: int) -> Plan:
    """Cut an image whose sides are multiples of TILE."""
    levels = 1 + max(0, math.ceil(math.log2(max(columns, rows) / TILE)))
    top = 0
    while all(side % 2 == 0 and side // 2 >= FEWEST_PX for side in (columns >> top, rows >> top)):
        top += 1
    # Large regions waste less on their margins; small ones keep every core busy and fit its cache. Images of level
    # `local` are in memory whole: 64 MiB at 32768 pixels.
    local = min(1 + sum(max(columns, rows) > side for side in (4096, 16384, 65536)), levels - 1, top)
    return Plan(columns, rows, slabs, levels, top, local)


@njit(inline="always")
def _key(region, slab, level, slabs, local, regions, top):
    if level < local:
        return (region * slabs + slab) * local + level
    return regions * slabs * local + slab * (top - local + 1) + (level - local)


@njit(inline="always")
def _snap(place, grain):
    return math.floor(place / grain + 0.5) * grain


@njit(inline="always")
def _opened(x, y, r):
    """Where a kernel below half a pixel has the same shares when it is stretched to OPEN_PX.

    About each pixel edge that it crosses it is stretched; between edges it moves to the middle of its pixel.
    """
    edge_x, edge_y = math.floor(x + 0.5), math.floor(y + 0.5)
    dx, dy = (x - edge_x) / r, (y - edge_y) / r
    return (
        edge_x + dx * OPEN_PX if abs(dx) < 1.0 else math.floor(x) + 0.5,
        edge_y + dy * OPEN_PX if abs(dy) < 1.0 else math.floor(y) + 0.5,
    )


@njit(nogil=True, cache=True, error_model="numpy")
def _locate(
    position,
    radius,
    axes,
    u_low,
    v_high,
    pixel,
    period,
    edges,
    columns,
    rows,
    local,
    top,
    place_bits,
    whole,
    found,
    counts,
):
    """Where each particle is drawn: a row of `whole` (bucket, particle) and of `found` (x, y, radius in pixels) for each
    bucket that takes it, one more in `counts` of the bucket. Returns the rows, or -1 where there are too few of them.
    """
    slabs = len(edges) - 1
    region_px = TILE << local
    region_rows, region_columns = -(-rows // region_px), -(-columns // region_px)
    regions = region_rows * region_columns
    per_u, per_v, per_depth = period[0] / pixel, period[1] / pixel, period[2]
    limits = LARGE_PX * 2.0 ** np.arange(top)
    number = 0
    for index in range(len(position)):
        depth = position[index, axes[2]]
        if per_depth > 0.0:
            depth -= per_depth * np.floor((depth - edges[0]) / per_depth)
        if depth < edges[0] or depth >= edges[slabs]:
            continue
        slab = 0 if slabs == 1 else np.searchsorted(edges, depth, side="right") - 1
        r = radius[index] / pixel
        level = 0
        for limit in limits:
            level += r > limit
        # One pixel more than the kernel reaches, and the pad that the next finer level interpolates from.
        halo = r + (1 << level) * (1.0 if level == 0 else 1.0 + PAD)
        grain = 2.0 ** (level - place_bits)
        x = (position[index, axes[0]] - u_low) / pixel
        y = (v_high - position[index, axes[1]]) / pixel
        # Of most, one image lies in the view, well inside of one region.
        first_x = last_x = -np.floor(x / per_u) if per_u > 0.0 else 0.0
        first_y = last_y = -np.floor(y / per_v) if per_v > 0.0 else 0.0
        xx, yy = x + first_x * per_u, y + first_y * per_v
        if per_u > 0.0 and not (halo < xx < columns - halo and columns + halo - per_u < xx < per_u - halo):
            first_x, last_x = np.ceil((-halo - x) / per_u), np.floor((columns + halo - x) / per_u)
        if per_v > 0.0 and not (halo < yy < rows - halo and rows + halo - per_v < yy < per_v - halo):
            first_y, last_y = np.ceil((-halo - y) / per_v), np.floor((rows + halo - y) / per_v)
        for image_y in range(int(first_y), int(last_y) + 1):
            yy = y + image_y * per_v
            if yy + halo < 0.0 or yy - halo > rows:
                continue
            for image_x in range(int(first_x), int(last_x) + 1):
                xx = x + image_x * per_u
                if xx + halo < 0.0 or xx - halo > columns:
                    continue
                drawn_x, drawn_y = _opened(xx, yy, r) if r < OPEN_PX else (xx, yy)
                drawn_x, drawn_y = _snap(drawn_x, grain), _snap(drawn_y, grain)
                top_row, bottom_row, left, right = 0, 0, 0, 0
                if level < local:
                    top_row = max(0, int(math.floor((yy - halo) / region_px)))
                    bottom_row = min(region_rows - 1, int(math.floor((yy + halo) / region_px)))
                    left = max(0, int(math.floor((xx - halo) / region_px)))
                    right = min(region_columns - 1, int(math.floor((xx + halo) / region_px)))
                if number + (bottom_row - top_row + 1) * (right - left + 1) > len(whole):
                    return -1
                for row in range(top_row, bottom_row + 1):
                    for column in range(left, right + 1):
                        key = _key(row * region_columns + column, slab, level, slabs, local, regions, top)
                        whole[number, 0], whole[number, 1] = key, index
                        found[number, 0] = drawn_x - column * region_px
                        found[number, 1] = drawn_y - row * region_px
                        found[number, 2] = max(r, OPEN_PX)
                        counts[key] += 1
                        number += 1
    return number


@njit(nogil=True, cache=True)
def _sort(whole, found, values, starts, records):
    """Records of what was found, bucket by bucket from `starts` on, which end at the next bucket's."""
    for number in range(len(whole)):
        place = starts[whole[number, 0]]
        starts[whole[number, 0]] += 1
        records[place, 0], records[place, 1], records[place, 2] = found[number, 0], found[number, 1], found[number, 2]
        for channel in range(values.shape[1]):
            records[place, 3 + channel] = values[whole[number, 1], channel]


class Buckets:
    """Particles waiting to be drawn, bucket by bucket, in the order in which they came.

    Parameters
    ----------
    camera : Camera
    plan : Plan
    runs : Runs
        Where they wait: rows of x, y, radius and the channels, with a key for each bucket.
    """

    def __init__(self, camera: Camera, plan: Plan, runs: Runs) -> None:
        self.plan, self.runs = plan, runs
        period = np.zeros(3) if camera.period is None else np.asarray(camera.period, dtype=np.float64)
        self._fixed = (
            np.array(camera.axes),
            float(camera.u_low),
            float(camera.v_high),
            float(camera.pixel),
            period,
            np.asarray(camera.edges, dtype=np.float64),
            plan.columns,
            plan.rows,
            plan.local,
            plan.top,
            PLACE_BITS - max(0, math.ceil(math.log2((max(plan.columns, plan.rows) >> plan.local) / 3840))),
        )

    def route(
        self, position: NDArray[np.float64], radius: NDArray[np.float64], values: NDArray[np.float32]
    ) -> tuple[NDArray[np.int64], NDArray[np.float32]]:
        """Sort one chunk by bucket; safe to call from several threads.

        Parameters
        ----------
        position : float64 (n, 3), length unit of the camera
        radius : float64 (n,), support radius, same unit
        values : float32 (n, channels), what each particle adds to each channel

        Returns
        -------
        starts : int64 (buckets + 1,)
        records : float32 (m, 3 + channels), x, y and radius in level-0 pixels from the region's corner, then values
        """
        room, number = len(position) + len(position) // 4 + 64, -1
        while number < 0:
            whole, found = np.empty((room, 2), dtype=np.int32), np.empty((room, 3), dtype=np.float32)
            counts = np.zeros(self.plan.buckets, dtype=np.int64)
            number = _locate(position, radius, *self._fixed, whole, found, counts)
            room *= 2
        starts = np.zeros(self.plan.buckets + 1, dtype=np.int64)
        np.cumsum(counts, out=starts[1:])
        records = np.empty((number, 3 + values.shape[1]), dtype=np.float32)
        _sort(whole[:number], found[:number], values, starts[:-1].copy(), records)
        return starts, records

    def count(self, region: int, slab: int, level: int) -> int:
        """Records in a bucket."""
        return int(self.runs.counts[self.plan.key(region, slab, level)])

    def groups(self, region: int, slab: int, level: int) -> Iterator[list[NDArray[np.float32]]]:
        """The records of a bucket, in lists of pieces (n, 3 + channels) to be drawn together."""
        return self.runs.groups(self.plan.key(region, slab, level))
