"""Gravity on a mesh against cases whose answer is known."""

from __future__ import annotations

import numpy as np
import pytest
import scipy.fft
from hypothesis import given, settings
from hypothesis import strategies as st

from tilemap.demo.field import Cosmos, Spectrum, gaussian_field, inverse_gradient
from tilemap.demo.mesh import deposit, evolve, gather, lattice

COSMOS = Cosmos()


@settings(max_examples=20)
@given(st.integers(0, 2**32 - 1), st.integers(1, 500))
def test_depositing_keeps_the_sum_of_the_weights(seed, count):
    rng = np.random.default_rng(seed)
    position = (40.0 * rng.random((count, 3)) - 10.0).astype(np.float32)
    weight = rng.random(count).astype(np.float32)
    assert deposit(position, 16, weight).sum(dtype=np.float64) == pytest.approx(weight.sum(dtype=np.float64), rel=1e-5)


def test_a_particle_on_a_cell_centre_lies_in_that_cell_alone():
    mesh = deposit(np.array([[3.0, 5.0, 7.0]], np.float32), 8)
    assert mesh[3, 5, 7] == 1.0 and mesh.sum() == 1.0


def test_the_far_wall_is_joined_to_the_near_one():
    mesh = deposit(np.array([[7.5, 0.0, 0.0]], np.float32), 8)
    assert mesh[7, 0, 0] == 0.5 and mesh[0, 0, 0] == 0.5


def test_gathering_at_cell_centres_gives_the_cells():
    mesh = np.random.default_rng(2).random((8, 8, 8)).astype(np.float32)
    np.testing.assert_array_equal(gather(mesh, lattice(8)), mesh.ravel())


def test_gathering_is_straight_between_cell_centres():
    mesh = np.random.default_rng(3).random((8, 8, 8)).astype(np.float32)
    value = gather(mesh, np.array([[2.25, 4.0, 6.0]], np.float32))[0]
    assert value == pytest.approx(0.75 * mesh[2, 4, 6] + 0.25 * mesh[3, 4, 6], rel=1e-6)


def test_small_waves_grow_as_linear_theory_says():
    """Displacements a hundredth of the real ones stay straight: D times those of Zel'dovich (1970)."""
    n, box = 32, 120.0
    modes = (0.01 * gaussian_field(n, box, Spectrum(COSMOS), np.random.default_rng(1))).astype(np.complex64)
    displacement, _ = evolve(modes, box, COSMOS, a_end=0.5)
    expected = float(COSMOS.growth(0.5)) * np.stack([f.ravel() for f in inverse_gradient(modes, box)], axis=-1)
    slope = np.sum(displacement * expected) / np.sum(expected**2)
    assert slope == pytest.approx(1.0, abs=0.02)


def _plane_wave(n: int, amplitude: float) -> np.ndarray:
    wave = np.cos(2.0 * np.pi * np.arange(n) / n).astype(np.float32) * np.float32(amplitude)
    return scipy.fft.rfftn(np.broadcast_to(wave[:, None, None], (n, n, n)).copy())


def test_a_plane_wave_moves_as_zeldovich_says_until_it_breaks():
    """In one dimension the solution of Zel'dovich (1970) is exact before the first crossing, here at 80 % of it."""
    n, box, a = 32, 10.0, 0.5
    amplitude = 0.8 / float(COSMOS.growth(a))
    displacement, _ = evolve(_plane_wave(n, amplitude), box, COSMOS, a_end=a, steps=20)
    k = 2.0 * np.pi / box
    expected = -float(COSMOS.growth(a)) * amplitude / k * np.sin(2.0 * np.pi * np.arange(n) / n)
    np.testing.assert_allclose(
        displacement.reshape(n, n, n, 3)[:, 3, 5, 0], expected, atol=0.02 * np.abs(expected).max()
    )


def test_a_plane_wave_has_the_speed_that_zeldovich_says():
    n, box, a = 32, 10.0, 0.5
    amplitude = 0.5 / float(COSMOS.growth(a))
    _, speed = evolve(_plane_wave(n, amplitude), box, COSMOS, a_end=a, steps=20)
    expected = -amplitude / (2.0 * np.pi / box) * np.sin(2.0 * np.pi * np.arange(n) / n)
    np.testing.assert_allclose(speed.reshape(n, n, n, 3)[:, 3, 5, 0], expected, atol=0.03 * np.abs(expected).max())


def test_the_particles_keep_no_motion_as_a_whole():
    n, box = 16, 30.0
    modes = gaussian_field(n, box, Spectrum(COSMOS), np.random.default_rng(4))
    _, speed = evolve(modes, box, COSMOS, a_end=0.5, steps=4)
    assert np.all(np.abs(speed.mean(axis=0, dtype=np.float64)) < 1e-3 * speed.std())
