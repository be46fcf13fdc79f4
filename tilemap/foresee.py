"""What a build will take, told before it starts: particles, pixels, memory, scratch disk, and the time on this machine."""

from __future__ import annotations

import time
from collections.abc import Callable, Sequence
from dataclasses import dataclass

import numpy as np

from tilemap.budget import PACKED_BYTES, Budget
from tilemap.project.camera import Camera
from tilemap.project.scatter import Buckets, Plan, make_plan
from tilemap.project.stamps import stamps_for
from tilemap.project.vcycle import Cycle
from tilemap.pyramid.coding import LogCoding
from tilemap.pyramid.reduce import halve
from tilemap.pyramid.store import pack_tile
from tilemap.runners.local import LocalRunner
from tilemap.spill import Runs

FILE_NS = 60.0
"""What reading and converting a particle takes besides, from a file that is in the system's cache already."""
SHARED = 0.9
"""How much of each further core is gained: two workers were measured 1.8 times as fast as one."""


@dataclass(frozen=True)
class Species:
    """Of one species: its name, particles, planes, sheets and what it needs."""

    name: str
    particles: int
    planes: int
    sheets: int
    neighbours: bool
    budget: Budget


def machine_speed() -> tuple[float, float]:
    """Nanoseconds of one core for a particle, routed and drawn, and for a pixel of a plane, refined, coded and packed.

    Measured on particles of every size up to an eighth of a picture, as those of simulations are, twice: the first time
    may be that of the compiler.
    """
    pixels, count = 1024, 100_000
    camera = Camera("z", 0.0, pixels, 1.0, pixels, pixels, np.array([0.0, pixels]), np.full(3, float(pixels)))
    plan = make_plan(pixels, pixels, 1)
    random = np.random.default_rng(1)
    position, radius = random.random((count, 3)) * pixels, 10 ** random.uniform(0.0, 2.1, count)
    coding = LogCoding(-10.0)

    def draw(particles: int) -> None:
        buckets = Buckets(camera, plan, Runs(plan.buckets, 4))
        values = np.ones((particles, 1), dtype=np.float32)
        buckets.runs.add(*buckets.route(position[:particles], radius[:particles], values))
        cycle = Cycle(plan, 1, stamps_for("cubic"))
        with LocalRunner(1) as runner:
            base = cycle.base(buckets, 0, runner)
        for region in range(plan.regions[0] * plan.regions[1]):
            (row, column), (rows, columns) = cycle.window(region)
            image, _ = cycle.region(buckets, base[:, row : row + rows, column : column + columns], region, 0)
            codes = coding.encode(image[0])
            for i in range(0, codes.shape[0], plan.region_px // 2):
                for j in range(0, codes.shape[1], plan.region_px // 2):
                    pack_tile(codes[i : i + plan.region_px // 2, j : j + plan.region_px // 2])
            halve(image)

    few = count // 10
    slow, quick = (min(_seconds(lambda n=n: draw(n)) for _ in range(2)) for n in (count, few))  # type: ignore[misc]
    per_particle = max(0.0, slow - quick) / (count - few)
    return 1e9 * per_particle, 1e9 * max(0.0, quick - few * per_particle) / pixels**2 * 4 / 3


def _seconds(work: Callable[[], None]) -> float:
    start = time.thread_time()
    work()
    return time.thread_time() - start


def expected_seconds(plan: Plan, species: Sequence[Species], workers: int, speed: tuple[float, float]) -> float:
    """How long a build of these takes, publishing included, about."""
    stacks = plan.slabs + (plan.slabs > 1)
    work = 0.0
    for each in species:
        neighbours = 12_000.0 if each.neighbours else 0.0  # a search for 32 neighbours in a tree, measured
        work += each.particles * (speed[0] + FILE_NS + neighbours)
        work += plan.rows * plan.columns * stacks * speed[1] * max(each.planes, each.sheets)
    return 1e-9 * work / (1 + SHARED * (workers - 1))


def told(plan: Plan, species: Sequence[Species], epochs: int, workers: int, seconds: float) -> list[str]:
    """The plan of a build, a line for each thing."""
    gib = 2**30
    stacks = plan.slabs + (plan.slabs > 1)
    sheets = sum(each.sheets for each in species)
    atlas = plan.rows * plan.columns * stacks * sheets * PACKED_BYTES * 4 / 3
    spilled = sorted({each.name for each in species if not each.budget.held})
    lines = [f"particles  {each.particles:,} of {each.name}" for each in species]
    return [
        *lines,
        f"pixels     {plan.columns:,} x {plan.rows:,}, {_many(plan.slabs, 'slab')}, {_many(plan.levels, 'level')}",
        f"sheets     {sheets}" + (f" in {epochs} epochs" if epochs > 1 else ""),
        f"memory     {max(each.budget.peak for each in species) / gib:.2f} GiB at most"
        + (f"; {', '.join(spilled)} on scratch disk" if spilled else ""),
        f"scratch    {max(each.budget.scratch for each in species) / gib:.2f} GiB at most",
        f"atlas      up to {atlas / gib:.2f} GiB",
        f"time       about {_duration(seconds)} with {_many(workers, 'worker')}, particles in the system's cache",
    ]


def _duration(seconds: float) -> str:
    if seconds < 90:
        return f"{max(1, round(seconds))} s"
    return f"{seconds / 60:.0f} min" if seconds < 5400 else f"{seconds / 3600:.1f} h"


def _many(count: int, what: str) -> str:
    return f"{count} {what}" if count == 1 else f"{count} {what}s"
