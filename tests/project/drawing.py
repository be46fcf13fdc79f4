"""Particles in, the engine's own finest image out: routing, drawing and refining, without sources and without files."""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import replace

import numpy as np

from tilemap.project.camera import AXES, Camera
from tilemap.project.scatter import Buckets, Plan, make_plan
from tilemap.project.stamps import stamps_for
from tilemap.project.vcycle import Cycle
from tilemap.runners.local import LocalRunner
from tilemap.spill import Runs

KERNELS = ("cubic", "quartic", "quintic", "wendland-c2", "wendland-c4", "wendland-c6")


def camera(
    pixels: int | tuple[int, int] = 1024,
    slabs: int | Iterable[float] = 1,
    along: str = "z",
    width: float | None = None,
    corner: tuple[float, float] = (0.0, 0.0),
    period: float | tuple[float, float, float] | None = None,
) -> Camera:
    """A camera whose pixels are 1 (or width / columns) wide, with its lower left corner there.

    `pixels` is (rows, columns), `period` that of x, y and z; `slabs` cut a depth as large as the width.
    """
    rows, columns = (pixels, pixels) if isinstance(pixels, int) else pixels
    width = float(columns) if width is None else width
    pixel = width / columns
    edges = np.linspace(0.0, width, slabs + 1) if isinstance(slabs, int) else np.array(list(slabs), dtype=float)
    sides = None
    if period is not None:
        sides = np.broadcast_to(np.asarray(period, dtype=np.float64), 3)[list(AXES[along])]
    return Camera(along, corner[0], corner[1] + rows * pixel, pixel, columns, rows, edges, sides)


def turned(
    vectors: np.ndarray,
    pixels: int = 1024,
    slabs: int | Iterable[float] = 1,
    width: float | None = None,
    centre: tuple[float, float, float] = (0.0, 0.0, 0.0),
    box: float | None = None,
) -> Camera:
    """A turned camera about a centre in x, y and z, as deep as wide, or with slabs at these depths."""
    width = float(pixels) if width is None else width
    u, v, depth = vectors @ np.array(centre)
    edges = np.linspace(depth - width / 2, depth + width / 2, slabs + 1) if isinstance(slabs, int) else np.array(slabs)
    sides = None if box is None else np.full(3, box)
    return Camera(
        "",
        u - width / 2,
        v + width / 2,
        width / pixels,
        pixels,
        pixels,
        edges,
        None,
        np.array(vectors, dtype=float),
        sides,
    )


def draw(
    camera: Camera,
    position: np.ndarray,
    radius: np.ndarray | float,
    values: np.ndarray | float = 1.0,
    kernel: str = "cubic",
    local: int | None = None,
    top: int | None = None,
    chunk: int | None = None,
    workers: int = 2,
) -> np.ndarray:
    """The image, float32 (slabs, channels, rows, columns); `local`, `top`, `chunk`, `workers` override how work is cut."""
    position = np.atleast_2d(np.asarray(position, dtype=np.float64))
    count = len(position)
    radius = np.array(np.broadcast_to(np.asarray(radius, dtype=np.float64), count))
    values = np.asarray(values, dtype=np.float32)
    values = np.ascontiguousarray(np.broadcast_to(values, (count, 1)) if values.ndim < 2 else values)
    plan: Plan = make_plan(camera.columns, camera.rows, camera.slabs)
    plan = replace(plan, local=plan.local if local is None else local, top=plan.top if top is None else top)
    buckets = Buckets(camera, plan, Runs(plan.buckets, 3 + values.shape[1]))
    size = chunk or max(count, 1)
    for start in range(0, count, size):
        part = slice(start, start + size)
        buckets.runs.add(*buckets.route(*camera.see(position[part], radius[part], values[part])))
    cycle = Cycle(plan, values.shape[1], stamps_for(kernel))
    out = np.zeros((plan.slabs, values.shape[1], plan.rows, plan.columns), dtype=np.float32)
    for slab in range(plan.slabs):
        with LocalRunner(workers) as runner:
            base = cycle.base(buckets, slab, runner)
        for region in range(plan.regions[0] * plan.regions[1]):
            row, column = (index * plan.region_px for index in divmod(region, plan.regions[1]))
            (top_row, left), (high, wide) = cycle.window(region)
            window = base[:, top_row : top_row + high, left : left + wide]
            image, _ = cycle.region(buckets, window, region, slab)
            out[slab, :, row : row + image.shape[1], column : column + image.shape[2]] = image
    return out
