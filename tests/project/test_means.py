"""Weighted means: numerator over weight stays within what the particles have, and sums stay positive."""

from __future__ import annotations

import numpy as np
import pytest
from drawing import KERNELS, camera, draw

from tilemap.pyramid.reduce import halve

SIZE = 512


def particles(count: int = 3000) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Clusters around a few centres with radii from 0.01 to 1000 pixels, and masses over three decades."""
    rng = np.random.default_rng(21)
    distance = 10 ** rng.uniform(-2, 3, count)
    towards = rng.normal(size=(count, 3))
    towards /= np.linalg.norm(towards, axis=1)[:, None]
    position = (rng.random((5, 3))[rng.integers(0, 5, count)] * SIZE + towards * distance[:, None]) % SIZE
    return position, np.clip(distance * rng.uniform(0.4, 1.6, count), 0.01, 1000), 10 ** rng.uniform(-1, 2, count)


def mean_images(
    kernel: str, values: np.ndarray, weight: np.ndarray, position: np.ndarray, radius: np.ndarray
) -> list[np.ndarray]:
    """The mean at every level, over the whole, where there is weight."""
    planes = np.column_stack([weight * values, weight]).astype(np.float32)
    image = draw(camera(SIZE, period=float(SIZE)), position, radius, planes, kernel)[0]
    out = []
    while True:
        seen = image[1] > 0
        out.append(image[0][seen].astype(np.float64) / image[1][seen])
        if image.shape[1] == 1:
            return out
        image = halve(image)


def furthest(images: list[np.ndarray], values: np.ndarray) -> float:
    """How far means leave the range of the values, in units of the range."""
    low, high = values.min(), values.max()
    return max(max(low - image.min(), image.max() - high) for image in images) / (high - low)


# Temperatures over seven decades; velocities of both signs; a fifth of a dex; a metallicity step.
VALUES = {
    "temperatures": lambda rng, n: 10 ** rng.uniform(1, 8, n),
    "velocities": lambda rng, n: rng.normal(0, 300, n),
    "nearly alike": lambda rng, n: rng.uniform(10_000, 16_000, n),
    "two kinds": lambda rng, n: rng.integers(0, 2, n).astype(float),
}


@pytest.mark.parametrize("name", VALUES)
@pytest.mark.parametrize("kernel", KERNELS)
def test_a_mean_stays_in_the_range_of_the_particles_at_every_level(kernel, name):
    position, radius, weight = particles()
    values = VALUES[name](np.random.default_rng(4), len(weight))
    assert furthest(mean_images(kernel, values, weight, position, radius), values) <= 1e-3


@pytest.mark.parametrize("radius", [0.3, 3.0, 6.0, 14.0, 20.0, 40.0, 100.0])
@pytest.mark.parametrize("kernel", KERNELS)
def test_at_a_sharp_front_a_mean_does_not_overshoot(kernel, radius):
    # Hot on the left, cold on the right, few particles: where overshoot would show.
    rng = np.random.default_rng(int(radius * 10))
    position = rng.random((400, 3)) * SIZE
    values = np.where(position[:, 0] < SIZE / 2, 1e8, 1e2)
    images = mean_images(kernel, values, 10 ** rng.uniform(-3, 3, 400), position, np.full(400, radius))
    assert furthest(images, values) <= 1e-3


@pytest.mark.parametrize("kernel", KERNELS)
def test_a_mean_of_equal_values_is_that_value(kernel):
    position, radius, weight = particles()
    images = mean_images(kernel, np.full(len(weight), 7.3e6), weight, position, radius)
    assert max(np.abs(image / 7.3e6 - 1).max() for image in images) <= 1e-4


def test_a_mean_over_very_many_particles_stays_in_their_range():
    rng = np.random.default_rng(6)
    position = np.column_stack([rng.normal(200, 4, (200_000, 2)), np.ones(200_000)])
    values = rng.uniform(1.000e6, 1.001e6, 200_000)
    images = mean_images("cubic", values, np.full(200_000, 1 / 3), position, rng.uniform(0.3, 9, 200_000))
    # Where one particle alone is seen, single precision rounds at 1e-7 of the value, 1e-4 of this range.
    assert furthest(images, values) <= 1e-3


@pytest.mark.parametrize("kernel", KERNELS)
def test_no_sum_is_negative_anywhere_whatever_the_radius(kernel):
    rng = np.random.default_rng(5)
    radius = np.geomspace(0.01, 1000, 400)
    image = draw(camera(SIZE, 40), rng.random((400, 3)) * SIZE, radius, kernel=kernel)
    assert image.min() >= 0
