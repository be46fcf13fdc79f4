"""How a build uses memory and scratch disk: the plan of the work in, sizes out, settled before anything is read."""

from __future__ import annotations

import shutil
from dataclasses import dataclass
from pathlib import Path

from tilemap.errors import InputError
from tilemap.project.scatter import Plan
from tilemap.pyramid.grid import SHARD
from tilemap.spill import GROUP

LARGEST_CHUNK, SMALLEST_CHUNK = 1 << 20, 1 << 16
"""Particles read at a time."""
PROCESS = 420 << 20
"""What the process takes by itself, its libraries and the compiler among it: measured 330 to 400 MiB."""
ROW_BYTES, FIELD_BYTES = 150, 40
"""What a particle takes on its way from file to bucket, and each field besides, copies included: common practice would be
to count the arrays, and half as much again was measured."""
PACKED_BYTES = 0.8
"""Bytes of a packed pixel: 180 KiB a tile of 512 x 512 on a projected map that is full (see pyramid/store.py)."""
SPREAD = 1.25
"""Records for each particle: what touches several regions is in the bucket of each."""
NEIGHBOUR_BYTES = 32 + 16
"""Scratch for each particle whose neighbours are looked for: place, number, distance."""


@dataclass(frozen=True)
class Budget:
    """What one species needs.

    Attributes
    ----------
    chunk : int
        Particles read at a time.
    held : bool
        Whether its particles wait in memory, or on scratch disk.
    peak : int
        Most memory of the process, in bytes.
    scratch : int
        Most scratch disk, in bytes.
    """

    chunk: int
    held: bool
    peak: int
    scratch: int


def chunk_size(limit: int | None) -> int:
    """Particles to read at a time under a limit of memory in bytes; the largest for the rest."""
    chunk = LARGEST_CHUNK
    while limit is not None and chunk > SMALLEST_CHUNK and PROCESS + 5 * chunk * 2 * ROW_BYTES > limit:
        chunk //= 2
    return chunk


def make_budget(
    plan: Plan,
    particles: int,
    channels: int,
    fields: int,
    sheets: int,
    workers: int,
    limit: int | None,
    chunk: int,
    neighbours: bool,
    copies: float = 1.0,
) -> Budget:
    """Settle how one species is worked on.

    Parameters
    ----------
    plan : Plan
    particles, channels, fields, sheets : int
        Of the species: how many particles, planes, fields to read and sheets.
    workers : int
    limit : int or None
        Most memory, in bytes; None where there is no limit.
    chunk : int
        Particles to read at a time.
    neighbours : bool
        Whether support radii have to be found.
    copies : float
        Images of a particle that are seen, where a view is larger than the box.
    """
    chunk = min(chunk, max(particles, 1))
    row = 4 * (3 + channels)
    copies = max(1.0, copies)
    records = int(particles * SPREAD * copies) * row
    reading = int((workers + 2) * chunk * (ROW_BYTES + FIELD_BYTES * fields + row) * copies)
    image = 4 * channels * plan.size(plan.local)[0] * plan.size(plan.local)[1]
    group = min(records, GROUP * row)
    sorting = group * (2 + 12 / row)
    bases = 1.3 * image + sorting
    stacks = plan.slabs + (plan.slabs > 1)
    # Tiles of coarser levels wait until their shards are full, in memory, and all in the notes of what is done.
    packed = plan.rows * plan.columns * stacks * sheets * PACKED_BYTES
    waiting = packed * sum(min(1.0, (SHARD << level) / plan.rows) / 4**level for level in range(1, plan.local))
    region = 4 * channels * min(plan.region_px, plan.rows) * min(plan.region_px, plan.columns)
    drawing = waiting + workers * (3.3 * region + (region if plan.slabs > 1 else 0) + sorting)
    coarser = 2.5 * image
    working = int(max(reading, bases, drawing, coarser))
    held = limit is None or PROCESS + working + records + (NEIGHBOUR_BYTES * particles if neighbours else 0) <= limit
    scratch = (plan.slabs + stacks) * image + int(packed / 3)
    if not held:
        scratch += records + (NEIGHBOUR_BYTES * particles if neighbours else 0)
    return Budget(chunk, held, PROCESS + working + (records if held else 0), scratch)


def check_memory(budgets: list[Budget], limit: int | None) -> None:
    """InputError where even with particles on scratch disk a species would pass the limit."""
    needed = max((budget.peak for budget in budgets), default=0)
    if limit is not None and needed > limit:
        raise InputError(
            f"--memory is {limit / 2**30:.3g} GiB, and this build needs about {needed / 2**30:.3g} GiB: allow that much, "
            "or ask for fewer workers or pixels"
        )


def check_scratch(budgets: list[Budget], folder: Path) -> None:
    """InputError where the disk cannot hold what the build writes down in between, in a folder that may be there already."""
    free = shutil.disk_usage(folder.absolute().parent).free
    there = sum(path.stat().st_blocks * 512 for path in folder.glob("work/**/*") if path.is_file())
    needed = max((budget.scratch for budget in budgets), default=0) - there
    if needed > free:
        raise InputError(
            f"{folder}: the build needs about {needed / 2**30:.3g} GiB of scratch disk, and {free / 2**30:.3g} GiB are free: "
            "make room, allow more memory, or ask for fewer pixels"
        )
