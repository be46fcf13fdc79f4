"""Every particle counts in full: totals for each radius class alone, and at every level of the pyramid."""

from __future__ import annotations

import numpy as np
import pytest
from drawing import KERNELS, camera, draw

from tilemap.pyramid.reduce import halve

SIZE = 512
# Classes meet at the radii where the engine changes its way of drawing (0.49, 4, 7.4, 11.4, 15.4, 15.8, twice this ...),
# and end with kernels twice as wide as the view.
CLASSES = [
    (1e-6, 1e-3), (0.001, 0.05), (0.05, 0.48), (0.48, 0.5), (0.5, 1), (1, 2), (2, 3.9), (3.9, 4.1), (4.1, 7.3), (7.3, 7.5),
    (7.5, 11.3), (11.3, 11.5), (11.5, 15.3), (15.3, 15.9), (16, 31), (31, 32), (32, 63), (63, 127), (127, 400), (400, 1100),
]  # fmt: skip


def scattered(low: float, high: float, count: int = 300) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    rng = np.random.default_rng(int(high * 1e4))
    radius = np.exp(rng.uniform(np.log(low), np.log(high), count))
    mass = 10 ** rng.uniform(-3, 3, (count, 1)).astype(np.float32)
    return rng.random((count, 3)) * SIZE, radius, mass


@pytest.mark.parametrize(("low", "high"), CLASSES)
def test_the_image_of_a_periodic_box_holds_the_mass_of_each_radius_class(low, high):
    position, radius, mass = scattered(low, high)
    image = draw(camera(SIZE, period=float(SIZE)), position, radius, mass)
    assert image.sum(dtype=np.float64) == pytest.approx(mass.sum(dtype=np.float64), rel=1e-6)


@pytest.mark.parametrize("kernel", KERNELS)
def test_the_image_holds_the_mass_whatever_the_kernel(kernel):
    position, radius, mass = scattered(0.01, 500.0, 1000)
    image = draw(camera(SIZE, period=float(SIZE)), position, radius, mass, kernel)
    assert image.sum(dtype=np.float64) == pytest.approx(mass.sum(dtype=np.float64), rel=1e-6)


@pytest.mark.parametrize(("low", "high"), [pair for pair in CLASSES if pair[1] <= 127])
def test_particles_wholly_inside_a_view_that_does_not_repeat_count_in_full(low, high):
    position, radius, mass = scattered(low, high)
    # Coarse stamps reach three of their pixels further than the kernel.
    inside = high * 1.5 + 4
    position[:, :2] = inside + position[:, :2] / SIZE * (SIZE - 2 * inside)
    image = draw(camera(SIZE), position, radius, mass)
    assert image.sum(dtype=np.float64) == pytest.approx(mass.sum(dtype=np.float64), rel=1e-6)


def test_each_of_a_thousand_radii_alone_keeps_its_mass():
    # One particle at a time would be slow; one a slab is not.
    radius = np.geomspace(0.005, 900, 1000)
    rng = np.random.default_rng(4)
    position = np.column_stack([rng.random((1000, 2)) * SIZE, np.arange(1000) % 40 + 0.5])
    for first in range(0, 1000, 40):
        part = slice(first, first + 40)
        view = camera(SIZE, slabs=np.arange(41.0), period=(float(SIZE), float(SIZE), 40.0))
        sums = draw(view, position[part], radius[part])[:, 0].sum(axis=(1, 2), dtype=np.float64)
        assert sums == pytest.approx(np.ones(40), rel=1e-6)


def piled(name: str, count: int = 200_000) -> tuple[np.ndarray, np.ndarray | float]:
    """Very many particles on few pixels, and their radii."""
    rng = np.random.default_rng(7)
    middle = np.column_stack([rng.normal(200, {"galaxy": 3, "cluster": 25}.get(name, 0), (count, 2)), np.ones(count)])
    if name == "everywhere":
        middle = rng.random((count // 4, 3)) * SIZE
    radius = {
        "pixel": 0.1,
        "galaxy": rng.uniform(0.3, 3, count),
        "cluster": rng.uniform(4, 14, count),
        "everywhere": 60.0,
    }
    return middle, radius[name]


@pytest.mark.parametrize("name", ["pixel", "galaxy", "cluster", "everywhere"])
def test_nothing_is_lost_where_very_many_equal_particles_fall_on_few_pixels(name):
    # Single precision alone loses 1e-3 of them in one pixel, 1e-4 in a galaxy, 5e-6 in a cluster.
    position, radius = piled(name)
    image = draw(camera(SIZE, period=float(SIZE)), position, radius, np.float32(1 / 3))
    assert image.sum(dtype=np.float64) == pytest.approx(len(position) * float(np.float32(1 / 3)), rel=1e-6)


def test_slabs_together_hold_what_one_slab_does():
    position, radius, mass = scattered(0.05, 300.0, 1000)
    one = draw(camera(SIZE, 1, period=float(SIZE)), position, radius, mass)
    many = draw(camera(SIZE, 7, period=float(SIZE)), position, radius, mass)
    assert many.sum(axis=0) == pytest.approx(one[0], rel=1e-4, abs=1e-6 * float(one.max()))


def test_channels_do_not_touch_each_other():
    position, radius, mass = scattered(0.05, 300.0, 500)
    three = np.hstack([mass, 2 * mass[::-1], np.zeros_like(mass)])
    image = draw(camera(SIZE, period=float(SIZE)), position, radius, three)[0]
    alone = draw(camera(SIZE, period=float(SIZE)), position, radius, three[:, 1:2])[0, 0]
    assert np.abs(image[1] - alone).max() <= 1e-5 * alone.max()
    assert not image[2].any()


@pytest.mark.parametrize("seed", range(3))
def test_every_level_of_the_pyramid_keeps_the_total(seed):
    rng = np.random.default_rng(seed)
    image = (10 ** rng.uniform(-8, 8, (2, 1024, 512))).astype(np.float32)
    totals = image.sum(axis=(1, 2), dtype=np.float64)
    level = image
    while min(level.shape[1:]) > 1:
        level = halve(level)
        area = image[0].size / level[0].size
        assert level.sum(axis=(1, 2), dtype=np.float64) * area == pytest.approx(totals, rel=1e-6)
