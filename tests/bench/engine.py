"""The projection engine: how fast it draws, and how its time grows with what it is given.

Two sides of a ratio take turns, and the best of each counts: what else the machine does then touches both alike.
"""

from __future__ import annotations

import tempfile
import time
import zlib
from collections.abc import Callable, Iterator
from dataclasses import replace
from functools import cache
from pathlib import Path

import numpy as np
from crowd import SIDE_MPC, crowd, write_crowd
from run import Figure, figure

SPLAT_RADII = (1, 2, 4, 8, 16)


def best_of(turns: int, *sides: Callable[[], object]) -> list[float]:
    """Shortest time of each side in seconds, the sides taking turns."""
    best = [float("inf")] * len(sides)
    for _ in range(turns):
        for index, side in enumerate(sides):
            start = time.perf_counter()
            side()
            best[index] = min(best[index], time.perf_counter() - start)
    return best


def whole() -> Iterator[Figure]:
    """HDF5 to published atlas, beside numpy.histogram2d of the same positions and numpy.save of its result."""
    import h5py

    from tilemap.build_atlas import build_atlas

    count, pixels = 10_000_000, 8192
    with tempfile.TemporaryDirectory(prefix="tilemap-bench-") as name:
        folder = Path(name)
        build = write_crowd(folder, count, pixels)
        with h5py.File(folder / "crowd.hdf5") as file:
            position = file["gas/position"][:]

        def plain() -> None:
            image = np.histogram2d(position[:, 0], position[:, 1], bins=pixels, range=[[0, SIDE_MPC], [0, SIDE_MPC]])[0]
            np.save(folder / "plain.npy", image)

        # numba's compiled loops come from its cache, as in every build but the first on a machine
        ours, theirs = best_of(3, lambda: build_atlas(build, folder / "crowd.atlas", workers=2), plain)
        yield figure(
            "engine/whole",
            ours / theirs,
            "ratio",
            f"numpy.histogram2d + numpy.save of the same {count} positions on {pixels} x {pixels}, in memory already",
            seconds=round(ours, 2),
            plain_seconds=round(theirs, 2),
        )


@cache
def _stamps():
    from tilemap.project.stamps import stamps_for

    return stamps_for("cubic")


def splat() -> Iterator[Figure]:
    """Drawing alone, one core, on an image in cache, beside streaming float32 adds in cache on the same core."""
    from tilemap.project.splat import MARGIN, cell_order, draw

    random = np.random.default_rng(1)
    side, count = 256, 1 << 16
    a, b = np.ones(16384, dtype=np.float32), np.ones(16384, dtype=np.float32)
    rounds, draws = 400, 10  # both sides take some 20 ms a turn

    def stream() -> None:
        for _ in range(rounds):
            np.add(a, b, out=a)

    for radius in SPLAT_RADII:
        records = np.empty((count, 4), dtype=np.float32)
        records[:, :2] = random.random((count, 2)) * side
        # A build draws radii up to 15.4 pixels at a level; what is wider goes to a coarser one, where it is half as wide.
        level = 1 if radius > 15.4 else 0
        records[:, 2], records[:, 3] = radius, 1.0
        image = np.zeros((1, (side >> level) + 2 * MARGIN, (side >> level) + 2 * MARGIN), dtype=np.float32)
        order, _ = cell_order(records, 1.0 / (1 << level), (side >> level, side >> level))

        def drawn() -> None:
            for _ in range(draws):
                draw(image, records, order, 1.0 / (1 << level), _stamps(), finest=level == 0, wide=False)  # noqa: B023

        drawn()
        ours, theirs = best_of(40, drawn, stream)
        updates = draws * count * np.pi * radius**2 / ours
        adds = rounds * len(a) / theirs
        yield figure(
            f"engine/splat/{radius}",
            updates / adds,
            "ratio",
            f"useful pixel updates (pi r^2 a particle) a second over streaming float32 adds, {adds:.2e} a second",
            particles_per_second=round(draws * count / ours),
            drawn_at_level=level,
        )


class _Loose:
    """The engine without files: positions in memory to finished level-0 images."""

    def __init__(self, position: np.ndarray, radius: np.ndarray, pixels: int, top: int | None = None) -> None:
        from tilemap.project.camera import Camera
        from tilemap.project.scatter import make_plan

        self.camera = Camera(
            "z", 0.0, SIDE_MPC, SIDE_MPC / pixels, pixels, pixels, np.array([0.0, SIDE_MPC]), np.full(3, SIDE_MPC)
        )
        self.plan = make_plan(pixels, pixels, 1)
        if top is not None:
            self.plan = replace(self.plan, top=top, local=min(self.plan.local, top))
        self.position, self.radius = position, radius
        self.values = np.ones((len(position), 1), dtype=np.float32)

    def project(self) -> np.ndarray:
        from tilemap.project.scatter import Buckets
        from tilemap.project.vcycle import Cycle
        from tilemap.runners.local import LocalRunner
        from tilemap.spill import Runs

        buckets = Buckets(self.camera, self.plan, Runs(self.plan.buckets, 4))
        for start in range(0, len(self.position), 1 << 19):
            part = slice(start, start + (1 << 19))
            buckets.runs.add(*buckets.route(self.position[part], self.radius[part], self.values[part]))
        cycle = Cycle(self.plan, 1, _stamps())
        with LocalRunner(1) as runner:
            base = cycle.base(buckets, 0, runner)
        if self.plan.local == 0:
            margin = (base.shape[1] - self.plan.rows) // 2
            return base[0, margin:-margin, margin:-margin]
        image = np.empty((self.plan.rows, self.plan.columns), dtype=np.float32)
        side = self.plan.region_px
        for region in range(self.plan.regions[0] * self.plan.regions[1]):
            row, column = divmod(region, self.plan.regions[1])
            (top, left), (high, wide) = cycle.window(region)
            piece, _ = cycle.region(buckets, base[:, top : top + high, left : left + wide], region, 0)
            image[row * side : (row + 1) * side, column * side : (column + 1) * side] = piece[0]
        return image


def cycle() -> Iterator[Figure]:
    """The V-cycle beside drawing every particle at level 0, on the same clustered set with the same polynomial."""
    position, radius = crowd(10_000_000)
    keep = np.random.default_rng(2).choice(len(radius), 100_000, replace=False)
    with_levels = _Loose(position[keep], radius[keep], 4096)
    at_level_0 = _Loose(position[keep], radius[keep], 4096, top=0)
    reference = at_level_0.project()
    difference = np.abs(with_levels.project() - reference).sum(dtype=np.float64) / reference.sum(dtype=np.float64)
    ours, theirs = best_of(2, with_levels.project, at_level_0.project)
    yield figure(
        "engine/cycle",
        theirs / ours,
        "ratio",
        "drawing the same 100 000 particles at level 0 of 4096 x 4096, whatever their radius",
        l1_difference=float(f"{difference:.2e}"),
    )


def growth() -> Iterator[Figure]:
    """Time over what linear growth would give: ten times the particles, sixteen times the pixels."""
    position, radius = crowd(10_000_000)
    tenth = np.random.default_rng(3).choice(len(radius), 1_000_000, replace=False)
    # the same field with a tenth of the particles: each is as wide as 48 neighbours of that sampling
    fewer = _Loose(position[tenth], radius[tenth] * 10 ** (1 / 3), 4096)
    many = _Loose(position, radius, 4096)
    small, large = best_of(2, fewer.project, many.project)
    yield figure(
        "engine/growth/particles", large / small / 10, "ratio", "ten times the time of 1 000 000 particles, 4096 x 4096"
    )
    coarse, fine = _Loose(position[tenth], radius[tenth], 2048), _Loose(position[tenth], radius[tenth], 8192)
    small, large = best_of(3, coarse.project, fine.project)
    yield figure(
        "engine/growth/pixels",
        large / small / 16,
        "ratio",
        "sixteen times the time of 2048 x 2048, 1 000 000 particles",
    )


def cores() -> Iterator[Figure]:
    """A whole build with two workers beside the same with one."""
    from tilemap.build_atlas import build_atlas

    with tempfile.TemporaryDirectory(prefix="tilemap-bench-") as name:
        folder = Path(name)
        build = write_crowd(folder, 10_000_000, 8192)
        one, two = best_of(
            8,
            lambda: build_atlas(build, folder / "one.atlas", workers=1),
            lambda: build_atlas(build, folder / "two.atlas", workers=2),
        )
        yield figure("engine/cores", one / two, "ratio", "the same build with one worker", seconds=round(two, 2))


def tiles() -> Iterator[Figure]:
    """Coding, packing and writing shards beside zlib level 1 alone on the same codes, both on one core."""
    from tilemap.pyramid.coding import LogCoding
    from tilemap.pyramid.writer import SheetWriter

    position, radius = crowd(1_000_000)
    image = _Loose(position, radius, 4096).project() * np.float32(1e6)
    coding = LogCoding(-30.0)
    codes = coding.encode(image)
    with tempfile.TemporaryDirectory(prefix="tilemap-bench-") as name:
        count = 0

        def ours() -> None:
            nonlocal count
            count += 1
            SheetWriter(Path(name) / str(count), image.shape, 1, coding).put(0, 0, (0, 0), image)

        def plain() -> None:
            for i in range(0, 4096, 512):
                for j in range(0, 4096, 512):
                    zlib.compress(np.ascontiguousarray(codes[i : i + 512, j : j + 512]), 1)

        written, packed = best_of(3, ours, plain)
    megabytes = codes.nbytes / 1e6
    yield figure(
        "engine/tiles",
        packed / written,
        "ratio",
        f"zlib level 1 alone on the same bytes, {megabytes / packed:.0f} MB/s",
        megabytes_per_second=round(megabytes / written),
    )
