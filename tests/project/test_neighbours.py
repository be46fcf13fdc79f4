"""Support radii from neighbours: those of one tree over everything (scipy), to the last bit."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.spatial import cKDTree

from tilemap.errors import InputError
from tilemap.project import smoothing
from tilemap.project.smoothing import neighbour_radii
from tilemap.runners.local import LocalRunner

BOX = np.array([10.0, 14.0, 6.0])


def even(count: int = 4000) -> np.ndarray:
    return np.random.default_rng(1).random((count, 3)) * BOX


def clustered(count: int = 4000) -> np.ndarray:
    """Most in a few tight clumps, some of them across a face of the box, the others far and wide."""
    rng = np.random.default_rng(2)
    centre = np.array([[0.01, 7, 3], [5, 13.99, 0.02], [9.7, 0.1, 5.9], [3, 3, 3]])
    clumps = centre[rng.integers(0, 4, count * 9 // 10)] + rng.normal(0, 0.05, (count * 9 // 10, 3))
    return np.vstack([clumps, rng.random((count - len(clumps), 3)) * BOX]) % BOX


def with_duplicates() -> np.ndarray:
    """Every place four times over."""
    return np.repeat(even(1000), 4, axis=0)


def on_a_lattice() -> np.ndarray:
    """Many distances that are exactly alike."""
    return np.stack(np.meshgrid(*(np.arange(16) + 0.5,) * 3), axis=-1).reshape(-1, 3) * (BOX / 16)


SETS = {make.__name__: make for make in (even, clustered, with_duplicates, on_a_lattice)}


def one_tree(position: np.ndarray, k: int, box: np.ndarray | None) -> np.ndarray:
    radii = cKDTree(position, boxsize=box).query(position, k=[k + 1])[0][:, 0]
    return np.maximum(radii, radii[radii > 0].min())


def regional(position: np.ndarray, k: int, box: np.ndarray | None, workers: int = 2) -> np.ndarray:
    with LocalRunner(workers) as runner:
        return neighbour_radii(position, k, box, runner)


@pytest.mark.parametrize("k", [4, 8, 32])
@pytest.mark.parametrize("per_cell", [10**6, 1000, 130, 40])
@pytest.mark.parametrize("box", [None, BOX], ids=["alone", "periodic"])
@pytest.mark.parametrize("name", SETS)
def test_radii_are_those_of_one_tree_over_everything(monkeypatch, name, box, per_cell, k):
    monkeypatch.setattr(smoothing, "PER_CELL", per_cell)
    position = SETS[name]()
    found, expected = regional(position, k, box), one_tree(position, k, box)
    if box is None:
        assert np.array_equal(found, expected)
    else:  # a neighbour across the face is a box further or nearer, which rounds in the last place
        assert found == pytest.approx(expected, rel=1e-13, abs=1e-14)


def test_positions_outside_a_periodic_box_are_those_inside(monkeypatch):
    monkeypatch.setattr(smoothing, "PER_CELL", 200)
    position = np.random.default_rng(3).integers(0, 1024, (3000, 3)) / 128.0
    box = np.full(3, 8.0)
    moved = position + box * np.random.default_rng(4).integers(-2, 3, (3000, 3))
    assert np.array_equal(regional(position, 12, box), regional(moved, 12, box))


def test_particles_in_another_order_have_the_same_radii(monkeypatch):
    monkeypatch.setattr(smoothing, "PER_CELL", 100)
    position = clustered()
    turned = np.random.default_rng(6).permutation(len(position))
    assert np.array_equal(regional(position, 16, BOX)[turned], regional(position[turned], 16, BOX))


def test_a_particle_on_the_upper_face_of_the_box_lies_on_the_lower_one():
    position = np.vstack([even(500), BOX, [0.0, 0.0, 0.0]])
    radii = regional(position, 1, BOX)
    assert radii[-1] == radii[-2] == radii.min()


def test_all_particles_in_a_plane_have_radii():
    position = even(2000)
    position[:, 2] = 3.0
    assert np.array_equal(regional(position, 8, None), one_tree(position, 8, None))


def test_of_a_single_pair_each_is_the_neighbour_of_the_other():
    assert regional(np.array([[0.0, 0.0, 0.0], [3.0, 4.0, 0.0]]), 1, None).tolist() == [5.0, 5.0]


@pytest.mark.parametrize("count", [0, 1, 31, 32])
def test_too_few_particles_are_refused_with_both_numbers(count):
    with pytest.raises(InputError, match=rf"neighbours is 32.*only {count} particles"):
        regional(even(count) if count else np.empty((0, 3)), 32, BOX)


def test_particles_all_at_one_place_are_refused():
    with pytest.raises(InputError, match=r"neighbours is 8.*each of the 50 particles.*its very place.*radius"):
        regional(np.full((50, 3), 2.5), 8, BOX)


def test_a_particle_on_top_of_its_neighbours_gets_the_smallest_radius_there_is():
    position = np.vstack([even(300), np.full((9, 3), 2.0)])
    radii = regional(position, 8, BOX)
    assert (radii[-9:] == radii[:-9].min()).all()
