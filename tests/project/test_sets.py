"""Many particles at once, against the plain sum: uniform noise, and clusters with radii from 0.01 to 1000 pixels."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cache

import numpy as np
import pytest
from drawing import camera, draw
from reference import project

from tilemap.pyramid.reduce import halve

SIZE = 512


@dataclass(frozen=True)
class Drawn:
    """A set drawn twice, float64 (rows, columns), and the mass there is."""

    image: np.ndarray
    plain: np.ndarray
    mass: float


def uniform() -> tuple[np.ndarray, np.ndarray]:
    """Uniform noise with the radii that 48 neighbours would have, give or take a quarter: 50 to 80 pixels."""
    rng = np.random.default_rng(11)
    count = 6_000
    radius = SIZE * (48 * 3 / (4 * np.pi * count)) ** (1 / 3)
    return rng.random((count, 3)) * SIZE, radius * rng.uniform(0.8, 1.25, count)


def thin() -> tuple[np.ndarray, np.ndarray]:
    """Uniform noise in a slab no deeper than its kernels are wide, 4 to 12 pixels: each place is covered some 36 times."""
    rng = np.random.default_rng(12)
    return rng.random((42_000, 3)) * SIZE, rng.uniform(4, 12, 42_000)


def clustered() -> tuple[np.ndarray, np.ndarray]:
    """Cusps around seven centres: as many particles at each scale from 0.01 to 1000 pixels, as wide as they are far."""
    rng = np.random.default_rng(13)
    count = 2_500
    centre = rng.random((7, 3)) * SIZE
    distance = 10 ** rng.uniform(-2, 3, count)
    towards = rng.normal(size=(count, 3))
    towards /= np.linalg.norm(towards, axis=1)[:, None]
    position = (centre[rng.integers(0, 7, count)] + towards * distance[:, None]) % SIZE
    return position, np.clip(distance * rng.uniform(0.4, 1.6, count), 0.01, 1000)


SETS = {make.__name__: make for make in (uniform, thin, clustered)}


@cache
def drawn(name: str, kernel: str) -> Drawn:
    position, radius = SETS[name]()
    mass = np.random.default_rng(3).uniform(0.5, 2, (len(position), 1)).astype(np.float32)
    view = camera(SIZE, period=float(SIZE))
    plain = project(
        position,
        radius,
        mass,
        u_low=0.0,
        v_high=float(SIZE),
        pixel=1.0,
        size=(SIZE, SIZE),
        edges=view.edges,
        period=np.full(3, float(SIZE)),
        kernel=kernel,
    )[0, 0]
    image = draw(view, position, radius, mass, kernel)[0, 0]
    return Drawn(image.astype(np.float64), plain, float(mass.sum(dtype=np.float64)))


# The cubic kernel is the hardest of the six for coarse images, and wendland-c2 for the finest; see the single particles.
CASES = [
    ("uniform", "cubic"),
    ("uniform", "wendland-c2"),
    ("thin", "cubic"),
    ("thin", "wendland-c6"),
    ("clustered", "cubic"),
]
each_set = pytest.mark.parametrize(("name", "kernel"), CASES)


@each_set
def test_the_l1_difference_of_a_set_is_at_most_3e_4_of_its_total(name, kernel):
    it = drawn(name, kernel)
    assert np.abs(it.image - it.plain).sum() <= 3e-4 * it.plain.sum()


@each_set
def test_of_the_pixels_above_a_thousandth_of_the_mean_999_in_1000_are_right_to_a_hundredth(name, kernel):
    it = drawn(name, kernel)
    bright = it.plain > 1e-3 * it.plain.mean()
    right = np.abs(it.image - it.plain)[bright] <= 1e-2 * it.plain[bright]
    assert right.mean() >= 0.999


@each_set
def test_the_total_of_a_set_is_its_mass(name, kernel):
    it = drawn(name, kernel)
    assert it.image.sum() == pytest.approx(it.mass, rel=1e-6)


@each_set
def test_no_pixel_of_a_sum_is_negative(name, kernel):
    assert drawn(name, kernel).image.min() >= 0


@each_set
def test_every_coarser_level_keeps_the_total(name, kernel):
    image = drawn(name, kernel).image.astype(np.float32)
    total = image.sum(dtype=np.float64)
    while image.shape[0] > 1:
        image = halve(image)
        area = SIZE**2 / image.size
        assert image.sum(dtype=np.float64) * area == pytest.approx(total, rel=1e-6)
