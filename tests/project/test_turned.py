"""The camera turned any way: what it sees of particles and of their periodic images."""

from __future__ import annotations

import itertools

import numpy as np
import pytest
from drawing import camera, draw, turned
from reference import AXES, project
from scipy.spatial.transform import Rotation

SIZE = 512
BOX = 512.0


def particles(count: int, seed: int, widest: float = 2.2) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    rng = np.random.default_rng(seed)
    return rng.random((count, 3)) * BOX, 10 ** rng.uniform(-1, widest, count), 10 ** rng.uniform(-1, 1, (count, 1))


def random_vectors(seed: int) -> np.ndarray:
    return Rotation.random(random_state=seed).as_matrix()


@pytest.mark.parametrize("along", AXES)
@pytest.mark.parametrize("box", [None, BOX], ids=["alone", "periodic"])
def test_turned_onto_an_axis_the_image_is_that_of_the_axis(along, box):
    position, radius, values = particles(2000, 4)
    vectors = np.eye(3)[list(AXES[along])]
    straight = draw(camera(SIZE, 4, along, period=box), position, radius, values)
    middle = (BOX / 2,) * 3
    found = draw(turned(vectors, SIZE, 4, centre=middle, box=box), position, radius, values)
    # The same but for the order in which images of one particle come: a hundredth of a code of 0.002 dex.
    assert found == pytest.approx(straight, rel=5e-5, abs=1e-9)


@pytest.mark.parametrize("seed", range(3))
def test_turned_any_way_the_mass_of_all_particles_is_in_the_image(seed):
    position, radius, values = particles(3000, seed, 1.7)
    view = turned(random_vectors(seed), SIZE, 3, width=2.2 * BOX, centre=(BOX / 2,) * 3)
    found = draw(view, position, radius, values).sum(dtype=np.float64)
    assert found == pytest.approx(values.sum(), rel=1e-6)


@pytest.mark.parametrize("seed", range(3))
def test_turned_and_periodic_the_image_is_the_plain_sum_over_all_images(seed):
    position, radius, values = particles(25, 10 + seed)
    vectors = random_vectors(20 + seed)
    centre, width = (100.0, 300.0, 500.0), 1.3 * BOX
    view = turned(vectors, SIZE, 2, width=width, centre=centre, box=BOX)
    moves = np.array(list(itertools.product(range(-4, 5), repeat=3))) * BOX
    # In u, v and depth, for the plain sum along z with nothing that repeats.
    images = ((position[None] + moves[:, None]).reshape(-1, 3) - centre) @ vectors.T
    reach = np.tile(radius, len(moves))
    near = (np.abs(images[:, :2]) < width / 2 + reach[:, None]).all(axis=1) & (np.abs(images[:, 2]) < width / 2)
    expected = project(
        images[near],
        reach[near],
        np.tile(values, (len(moves), 1))[near],
        u_low=-width / 2,
        v_high=width / 2,
        pixel=width / SIZE,
        size=(SIZE, SIZE),
        edges=np.array([-width / 2, 0.0, width / 2]),
    )
    found = draw(view, position, radius, values)
    assert near.sum() > 40
    assert np.abs(found - expected).sum() <= 2e-3 * expected.sum()


def test_along_a_lattice_direction_a_square_of_the_lattice_holds_whole_boxes():
    # (3, 4) and (-4, 3) times the box are periods: a square of that side, one box deep, holds the volume of 25 boxes.
    vectors = np.array([[0.6, 0.8, 0.0], [-0.8, 0.6, 0.0], [0.0, 0.0, 1.0]])
    position, radius, values = particles(300, 7)
    view = turned(vectors, SIZE, 2, width=5 * BOX, centre=(17.0, 33.0, 99.0), box=BOX)
    view = turned(
        vectors, SIZE, [view.depth[0], view.depth[0] + BOX], width=5 * BOX, centre=(17.0, 33.0, 99.0), box=BOX
    )
    assert draw(view, position, radius, values).sum(dtype=np.float64) == pytest.approx(25 * values.sum(), rel=1e-6)


def test_turned_by_a_quarter_the_image_is_turned_by_a_quarter():
    position, radius, values = particles(500, 3)
    quarter = np.array([[0.0, 1.0, 0.0], [-1.0, 0.0, 0.0], [0.0, 0.0, 1.0]])  # u along y, v along -x
    middle = (BOX / 2,) * 3
    straight = draw(turned(np.eye(3), SIZE, centre=middle, box=BOX), position, radius, values)[0, 0]
    found = draw(turned(quarter, SIZE, centre=middle, box=BOX), position, radius, values)[0, 0]
    # np.rot90 turns against the clock; what is at u = x, v = y then is at u = y, v = -x: with the clock.
    apart = np.abs(found - np.rot90(straight, -1))
    # Places are rounded to 2^-12 pixel, up or down.
    assert apart.sum() <= 1e-3 * straight.sum()


def test_one_particle_lands_where_it_does_on_paper():
    # Seen toward (1, 1, 0) with z up: u = up x toward = (-1, 1, 0) / sqrt 2, v = z.
    root = np.sqrt(0.5)
    vectors = np.array([[-root, root, 0.0], [0.0, 0.0, 1.0], [root, root, 0.0]])
    view = turned(vectors, SIZE, [0.0, 20.0, 28.0, 29.0, 40.0])
    image = draw(view, [10.0, 30.0, -99.5], 0.1)[:, 0]
    # depth 40 / sqrt 2 = 28.28: third slab; u = 20 / sqrt 2 = 14.14, column 256 + 14; row 256 + 99.
    assert np.argwhere(image > 0).tolist() == [[2, 355, 270]]


def test_chunks_without_particles_are_no_trouble():
    view = turned(random_vectors(1), SIZE, box=BOX)
    places, radius, values = view.see(np.empty((0, 3)), np.empty(0), np.empty((0, 2), dtype=np.float32))
    assert (places.shape, radius.shape, values.shape) == ((0, 3), (0,), (0, 2))
