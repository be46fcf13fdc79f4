"""How the work is cut and in which order particles come decides nothing: chunks, regions, levels worked on locally."""

from __future__ import annotations

from functools import cache

import numpy as np
import pytest
from drawing import camera, draw

from tilemap.project.scatter import make_plan

SIZE = 1024
STEP_DEX = 0.002


@cache
def particles(count: int = 4000) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    rng = np.random.default_rng(31)
    radius = 10 ** rng.uniform(-1, 2.7, count)
    return rng.random((count, 3)) * SIZE, radius, 10 ** rng.uniform(-1, 1, (count, 2)).astype(np.float32)


def image(order: np.ndarray | slice = slice(None), **how) -> np.ndarray:
    position, radius, values = particles()
    return draw(camera(SIZE, 2, period=float(SIZE)), position[order], radius[order], values[order], **how)


def codes_apart(one: np.ndarray, other: np.ndarray) -> float:
    """The largest difference in steps of the coding."""
    with np.errstate(divide="ignore"):
        return float(np.abs(np.log10(one) - np.log10(other)).max() / STEP_DEX)


@pytest.mark.parametrize("seed", [1, 2])
def test_particles_in_another_order_give_the_same_image_within_a_fraction_of_a_code(seed):
    turned = np.random.default_rng(seed).permutation(4000)
    # Half a step: two values so near to each other have codes at most one apart.
    assert codes_apart(image(), image(turned)) < 0.5


@pytest.mark.parametrize("chunk", [1, 7, 500])
def test_chunks_of_any_size_give_the_same_image_within_a_fraction_of_a_code(chunk):
    assert codes_apart(image(), image(chunk=chunk)) < 0.5


@pytest.mark.parametrize("workers", [1, 3, 8])
def test_any_number_of_workers_gives_the_same_image_bit_for_bit(workers):
    assert np.array_equal(image(chunk=500), image(chunk=500, workers=workers))


@pytest.mark.parametrize("local", [0, 2])
def test_regions_of_another_size_give_the_same_image_within_a_fraction_of_a_code(local):
    assert make_plan(SIZE, SIZE, 1).local == 1
    assert codes_apart(image(), image(local=local)) < 0.5


def test_regions_four_tiles_wide_give_the_same_image_within_a_fraction_of_a_code():
    position, radius, values = particles()
    view = camera(4096, width=float(SIZE), period=float(SIZE))
    images = [draw(view, position[:1500], radius[:1500], values[:1500, :1], local=local)[0, 0] for local in (1, 2)]
    assert codes_apart(*images) < 0.5


def test_the_same_run_twice_gives_the_same_bits():
    assert np.array_equal(image(), image())


def test_a_particle_split_in_two_is_the_same_as_before():
    position, radius, values = particles()
    twice = draw(
        camera(SIZE, 2, period=float(SIZE)),
        np.repeat(position, 2, axis=0),
        np.repeat(radius, 2),
        np.repeat(values / 2, 2, axis=0),
    )
    assert codes_apart(image(), twice) < 0.5


@pytest.mark.parametrize(
    ("columns", "rows"), [(512, 512), (1024, 512), (1536, 1024), (8192, 8192), (512, 4096), (65536, 65536)]
)
def test_plans_have_levels_down_to_one_tile_and_regions_that_end_as_one(columns, rows):
    plan = make_plan(columns, rows, 3)
    coarsest = max(columns, rows) / 2 ** (plan.levels - 1)
    assert coarsest <= 512 and (plan.levels == 1 or coarsest > 256)
    assert plan.region_px >> plan.local == 512
    assert plan.local <= min(plan.top, plan.levels - 1)
    assert plan.regions == (-(-rows // plan.region_px), -(-columns // plan.region_px))


def test_every_bucket_has_a_number_of_its_own():
    plan = make_plan(2048, 1024, 3)
    regions = range(plan.regions[0] * plan.regions[1])
    keys = [plan.key(r, slab, level) for r in regions for slab in range(3) for level in range(plan.local)]
    keys += [plan.key(-1, slab, level) for slab in range(3) for level in range(plan.local, plan.top + 1)]
    assert sorted(keys) == list(range(plan.buckets))
