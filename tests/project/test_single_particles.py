"""One particle alone, at 100 random places within its pixel, for 20 radii and all kernels, against the plain sum."""

from __future__ import annotations

import math

import numpy as np
import pytest
from drawing import KERNELS, camera, draw
from reference import project

from tilemap.project.stamps import LARGE_PX

# From kernels far below a pixel to some wider than half the view; 0.49, 4 and 15.8 are where the engine changes its ways.
RADII = (1e-5, 0.01, 0.1, 0.3, 0.6, 1, 1.6, 2.5, 3.99, 4, 5.5, 7.7, 11, 15.3, 15.5, 22, 31, 62, 124, 400)
SIZE = 1024
PLACES = 100
ALLOWED = 2e-3


def places(radius: float, seed: int) -> tuple[np.ndarray, int]:
    """Places of particles so far apart that their pixels are their own, and the side of the square that each has."""
    wander = 2 ** max(0, math.ceil(math.log2(radius / 8)))
    side = SIZE // max(1, min(10, int(SIZE / (2 * radius + 12 * wander + 4))))
    across = SIZE // side
    row, column = np.divmod(np.arange(across**2), across)
    rng = np.random.default_rng(seed)
    shift = rng.uniform(-0.5, 0.5, (2, across**2)) * max(wander, 1)
    u, v = (column + 0.5) * side + shift[0], SIZE - (row + 0.5) * side + shift[1]
    return np.stack([u, v, np.full(len(u), 1.0)], axis=1)[:PLACES], side


def plain(size: int, position: np.ndarray, radius: float, kernel: str) -> np.ndarray:
    """The plain sum of particles of mass 1 and one radius."""
    count = len(position)
    view = {"u_low": 0.0, "v_high": float(size), "pixel": 1.0, "size": (size, size), "edges": np.array([0.0, 2.0])}
    return project(position, np.full(count, radius), np.ones((count, 1)), **view, kernel=kernel)[0, 0]


def differences(kernel: str, radius: float) -> np.ndarray:
    """The L1 difference of each particle, in units of its mass."""
    position, side = places(radius, seed=int(radius * 100))
    image = draw(camera(SIZE), position, radius, kernel=kernel)[0, 0]
    expected = plain(SIZE, position, radius, kernel)
    off = np.zeros((SIZE // side * side + side, SIZE // side * side + side))
    off[:SIZE, :SIZE] = np.abs(image - expected)
    across = len(off) // side
    return off.reshape(across, side, across, side).sum(axis=(1, 3))


@pytest.mark.parametrize("radius", RADII)
@pytest.mark.parametrize("kernel", KERNELS)
def test_a_single_particle_is_drawn_as_its_kernel_averaged_over_pixels(kernel, radius):
    assert differences(kernel, radius).max() <= ALLOWED


@pytest.mark.parametrize("radius", [1e-9, 1e-4, 0.02, 0.2, 0.45, 0.7])
@pytest.mark.parametrize("kernel", KERNELS)
def test_a_kernel_below_a_pixel_is_shared_between_the_pixels_of_the_edge_or_corner_it_lies_on(kernel, radius):
    rng = np.random.default_rng(5)
    corner = 16.0 + 32.0 * np.argwhere(np.ones((16, 16)))
    offset = rng.uniform(-1.1, 1.1, (256, 2)) * radius
    offset[:80, 0], offset[80:160, 1] = rng.uniform(-0.5, 0.5, (2, 80))
    position = np.column_stack([corner + offset, np.ones(256)])
    image = draw(camera(512), position, radius, kernel=kernel)[0, 0]
    off = np.abs(image - plain(512, position, radius, kernel)).reshape(16, 32, 16, 32).sum(axis=(1, 3))
    assert off.max() <= ALLOWED


@pytest.mark.parametrize("level", [1, 2, 3])
@pytest.mark.parametrize("kernel", KERNELS)
def test_the_narrowest_kernel_of_a_coarse_image_is_right_at_every_place_in_its_pixel(kernel, level):
    # The hardest case there is: as few coarse pixels as any kernel gets.
    radius, phase = LARGE_PX * 2 ** (level - 1) * 1.0005, np.arange(5) / 4 * 2**level
    view = camera(SIZE)
    worst = 0.0
    for x in phase:
        for y in phase[phase >= x]:
            position = np.array([[SIZE / 2 + x, SIZE / 2 + y, 1.0]])
            image = draw(view, position, radius, kernel=kernel)[0, 0]
            expected = plain(SIZE, position, radius, kernel)
            worst = max(worst, np.abs(image - expected).sum())
    assert worst <= ALLOWED


@pytest.mark.parametrize("kernel", KERNELS)
def test_the_plain_sum_does_not_change_with_finer_quadrature(kernel):
    # What the engine is measured against is itself good to 1e-5, and much better where it is drawn finely.
    for radius in (0.02, 0.7, 3.0, 5.9, 6.1, 11.9, 23.9, 24.1, 59.0, 130.0):
        given = {"u_low": 0.0, "v_high": 300.0, "pixel": 1.0, "size": (300, 300), "edges": np.array([0.0, 2.0])}
        particle = np.array([[150.3, 149.9, 1.0]]), np.array([radius]), np.ones((1, 1))
        coarse, fine = (project(*particle, **given, kernel=kernel, more_points=more) for more in (0, 4))
        assert np.abs(coarse - fine).sum() < 1e-5
        assert fine.sum() == pytest.approx(1, abs=1e-6)
