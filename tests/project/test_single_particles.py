"""One particle alone, at 100 random places within its pixel, for 20 radii and all kernels, against the plain sum."""

from __future__ import annotations

import math

import numpy as np
import pytest
from drawing import KERNELS, camera, draw
from reference import project

# From kernels far below a pixel to some wider than half the view; 4 and 15.4 are where the engine changes its way of drawing.
RADII = (0.01, 0.03, 0.1, 0.25, 0.6, 1, 1.6, 2.5, 3.99, 4, 5.5, 7.7, 11, 15.3, 15.5, 22, 31, 62, 124, 400)
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


def differences(kernel: str, radius: float) -> np.ndarray:
    """The L1 difference of each particle, in units of its mass."""
    position, side = places(radius, seed=int(radius * 100))
    view = camera(SIZE)
    image = draw(view, position, radius, kernel=kernel)[0, 0]
    expected = project(
        position,
        np.full(len(position), radius),
        np.ones((len(position), 1)),
        u_low=0.0,
        v_high=float(SIZE),
        pixel=1.0,
        size=(SIZE, SIZE),
        edges=view.edges,
        kernel=kernel,
    )[0, 0]
    off = np.zeros((SIZE // side * side + side, SIZE // side * side + side))
    off[:SIZE, :SIZE] = np.abs(image - expected)
    across = len(off) // side
    return off.reshape(across, side, across, side).sum(axis=(1, 3))


@pytest.mark.parametrize("radius", RADII)
@pytest.mark.parametrize("kernel", KERNELS)
def test_a_single_particle_is_drawn_as_its_kernel_averaged_over_pixels(kernel, radius):
    assert differences(kernel, radius).max() <= ALLOWED


@pytest.mark.parametrize("level", [1, 2, 3])
@pytest.mark.parametrize("kernel", KERNELS)
def test_the_narrowest_kernel_of_a_coarse_image_is_right_at_every_place_in_its_pixel(kernel, level):
    # The hardest case there is: as few coarse pixels as any kernel gets.
    from tilemap.project.stamps import LARGE_PX

    radius, phase = LARGE_PX * 2 ** (level - 1) * 1.0005, np.arange(5) / 4 * 2**level
    view = camera(SIZE)
    worst = 0.0
    for x in phase:
        for y in phase[phase >= x]:
            position = np.array([[SIZE / 2 + x, SIZE / 2 + y, 1.0]])
            image = draw(view, position, radius, kernel=kernel)[0, 0]
            expected = project(
                position,
                np.array([radius]),
                np.ones((1, 1)),
                u_low=0.0,
                v_high=float(SIZE),
                pixel=1.0,
                size=(SIZE, SIZE),
                edges=view.edges,
                kernel=kernel,
            )[0, 0]
            worst = max(worst, np.abs(image - expected).sum())
    assert worst <= ALLOWED


@pytest.mark.parametrize("kernel", KERNELS)
def test_the_plain_sum_does_not_change_with_finer_quadrature(kernel):
    # What the engine is measured against is itself good to 1e-6 below 240 pixels.
    for radius in (0.02, 0.7, 3.0, 11.9, 59.0, 130.0):
        given = {"u_low": 0.0, "v_high": 300.0, "pixel": 1.0, "size": (300, 300), "edges": np.array([0.0, 2.0])}
        particle = np.array([[150.3, 149.9, 1.0]]), np.array([radius]), np.ones((1, 1))
        coarse, fine = (project(*particle, **given, kernel=kernel, more_points=more) for more in (0, 4))
        assert np.abs(coarse - fine).sum() < 1e-6
        assert fine.sum() == pytest.approx(1, abs=1e-7)
