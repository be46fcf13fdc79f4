"""What has to hold for any particles: mass is kept, and shifts, mirrors and turns of the particles are those of the image."""

from __future__ import annotations

import numpy as np
from drawing import KERNELS, camera, draw
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

SIZE = 512
GRAIN = 2.0**-12
quick = settings(max_examples=25, deadline=None, suppress_health_check=list(HealthCheck), derandomize=True)


@st.composite
def sets(draw_from, largest: float = 600.0):
    """A few to a hundred particles: places on a fine lattice, radii over five decades, masses over six."""
    count = draw_from(st.integers(1, 100))
    rng = np.random.default_rng(draw_from(st.integers(0, 2**32)))
    span = draw_from(st.sampled_from([1.0, 40.0, float(SIZE)]))
    corner = draw_from(st.sampled_from([0.0, 100.5, 511.0]))
    position = (corner + np.floor(rng.random((count, 3)) * span / GRAIN) * GRAIN) % SIZE
    top = draw_from(st.floats(0.011, largest))
    radius = np.exp(rng.uniform(np.log(0.01), np.log(top), count))
    return position, radius, 10 ** rng.uniform(-3, 3, (count, 1)).astype(np.float32)


box = camera(SIZE, period=float(SIZE))
kernels = st.sampled_from(KERNELS)


def rounding(radius: np.ndarray) -> float:
    """What an image may differ by: places are rounded to 2^-12 pixel of the level on which a kernel is drawn."""
    return 1e-4 if radius.min() >= 0.49 else 1e-3


def near(one: np.ndarray, other: np.ndarray, share: float) -> bool:
    return float(np.abs(one.astype(np.float64) - other).sum()) <= share * float(other.sum(dtype=np.float64))


@quick
@given(sets(1500.0), kernels)
def test_mass_is_kept(particles, kernel):
    position, radius, mass = particles
    total = mass.sum(dtype=np.float64)
    assert abs(draw(box, position, radius, mass, kernel).sum(dtype=np.float64) - total) <= 1e-6 * total


@quick
@given(sets(), kernels, st.integers(-600, 600), st.integers(-600, 600))
def test_a_shift_by_whole_pixels_shifts_the_image(particles, kernel, right, up):
    position, radius, mass = particles
    one = draw(box, position, radius, mass, kernel)[0, 0]
    other = draw(box, position + np.array([right, up, 0.0]), radius, mass, kernel)[0, 0]
    # Kernels drawn on coarse images may lie differently on them: twice the 2e-3 that each may be off.
    allowed = 1e-5 if radius.max() <= 15 else 4e-3
    assert near(np.roll(one, (-up, right), axis=(0, 1)), other, allowed)


@quick
@given(sets(), kernels, st.integers(-600, 600), st.integers(-600, 600))
def test_a_shift_by_whole_pixels_of_the_coarsest_image_shifts_the_image_to_rounding(particles, kernel, right, up):
    position, radius, mass = particles
    one = draw(box, position, radius, mass, kernel)[0, 0]
    other = draw(box, position + np.array([right, up, 0.0]) * 32, radius, mass, kernel)[0, 0]
    assert near(np.roll(one, (-up * 32, right * 32), axis=(0, 1)), other, 1e-5)


@quick
@given(sets(), kernels)
def test_the_mirror_image_of_the_particles_is_the_mirror_image(particles, kernel):
    position, radius, mass = particles
    one = draw(box, position, radius, mass, kernel)[0, 0]
    assert near(draw(box, position * [-1, 1, 1], radius, mass, kernel)[0, 0, :, ::-1], one, rounding(radius))
    assert near(draw(box, position * [1, -1, 1], radius, mass, kernel)[0, 0, ::-1], one, rounding(radius))


@quick
@given(sets(), kernels)
def test_u_and_v_exchanged_exchange_rows_and_columns(particles, kernel):
    position, radius, mass = particles
    one = draw(box, position, radius, mass, kernel)[0, 0]
    other = draw(box, position[:, [1, 0, 2]], radius, mass, kernel)[0, 0]
    # v grows upwards and rows downwards: the other diagonal.
    assert near(other[::-1, ::-1].T, one, rounding(radius))


@quick
@given(sets(), kernels, st.integers(-3, 3), st.integers(-3, 3), st.integers(-3, 3))
def test_a_shift_by_whole_boxes_changes_nothing(particles, kernel, a, b, c):
    position, radius, mass = particles
    one = draw(box, position, radius, mass, kernel)
    assert np.array_equal(one, draw(box, position + np.array([a, b, c]) * SIZE, radius, mass, kernel))


@quick
@given(sets(), kernels, st.sampled_from([2.0**-20, 0.5, 2.0**30]))
def test_twice_the_mass_is_twice_the_image(particles, kernel, factor):
    position, radius, mass = particles
    one = draw(box, position, radius, mass, kernel)
    assert np.array_equal(one * np.float32(factor), draw(box, position, radius, mass * np.float32(factor), kernel))


@quick
@given(sets(), kernels, st.sampled_from(["x", "y", "z"]), st.integers(2, 9))
def test_each_line_of_sight_and_number_of_slabs_shows_the_same_mass(particles, kernel, along, slabs):
    position, radius, mass = particles
    total = mass.sum(dtype=np.float64)
    image = draw(camera(SIZE, slabs, along, period=float(SIZE)), position, radius, mass, kernel)
    assert abs(image.sum(dtype=np.float64) - total) <= 1e-6 * total
