"""Where particles land, worked out by hand: a view of 512 x 1024 pixels with three particles that no symmetry confuses."""

from __future__ import annotations

import numpy as np
import pytest
from drawing import camera, draw
from reference import AXES

from tilemap.project.camera import AXES as ENGINE_AXES

ROWS, COLUMNS, SLABS = 512, 1024, 4
# (x, y, z) in a box of 1024: by hand, along z (u, v, depth) = (x, y, z), along x (y, z, x), along y (z, x, y).
PARTICLES = np.array([[100.5, 40.5, 700.5], [900.25, 500.75, 10.5], [3.5, 511.5, 300.5]])
# slab, row, column of each; row 0 ends at v = 512, so row = floor(512 - v); slabs are 256 deep.
EXPECTED = {
    "z": [(2, 471, 100), (0, 11, 900), (1, 0, 3)],
    "x": [(0, None, None), (3, 501, 500), (0, 211, 511)],
    "y": [(0, 411, 700), (1, None, None), (1, 508, 300)],
}


def landed(along: str, particle: int) -> list[tuple[int, int, int]]:
    image = draw(camera((ROWS, COLUMNS), SLABS, along), PARTICLES[particle], 0.1)[:, 0]
    return [tuple(int(i) for i in place) for place in np.argwhere(image > 0)]


@pytest.mark.parametrize("particle", range(3))
@pytest.mark.parametrize("along", EXPECTED)
def test_a_particle_lands_where_it_does_on_paper(along, particle):
    slab, row, column = EXPECTED[along][particle]
    # None: v is above the view's 512, so there is nothing to see.
    assert landed(along, particle) == ([] if row is None else [(slab, row, column)])


@pytest.mark.parametrize("along", EXPECTED)
def test_u_v_and_the_line_of_sight_are_right_handed(along):
    u, v, depth = (np.eye(3)[axis] for axis in ENGINE_AXES[along])
    assert np.array_equal(np.cross(u, v), depth)


@pytest.mark.parametrize("along", EXPECTED)
def test_the_line_of_sight_is_the_axis_named(along):
    assert "xyz"[ENGINE_AXES[along][2]] == along
    assert ENGINE_AXES[along] == AXES[along]


def test_the_top_row_is_that_of_the_largest_v():
    image = draw(camera(512), [[10.5, 511.9, 1.0], [10.5, 0.1, 1.0]], 0.05, np.array([[1.0], [2.0]]))[0, 0]
    assert (image[0, 10], image[511, 10]) == (1, 2)


def test_u_grows_to_the_right():
    image = draw(camera(512), [[0.5, 7.5, 1.0], [511.5, 7.5, 1.0]], 0.05, np.array([[1.0], [2.0]]))[0, 0]
    assert (image[504, 0], image[504, 511]) == (1, 2)


def test_a_pixel_is_centred_where_the_formula_says():
    view = camera((512, 1024), width=100.0, corner=(-20.0, 5.0))
    row, column = 37, 801
    u = view.u_low + (column + 0.5) * view.pixel
    v = view.v_high - (row + 0.5) * view.pixel
    image = draw(view, [u, v, 50.0], 0.49 * view.pixel)[0, 0]
    assert np.argwhere(image > 0).tolist() == [[row, column]]


def test_the_camera_says_what_it_covers():
    view = camera((512, 1024), 4, width=100.0, corner=(-20.0, 5.0))
    assert (view.u, view.v, view.depth, view.slabs) == ((-20, 80), (5, 55), (0, 100), 4)


@pytest.mark.parametrize(("depth", "slab"), [(0.0, 0), (255.999, 0), (256.0, 1), (511.99, 1), (512.0, 2), (1023.9, 3)])
def test_a_particle_on_the_face_between_slabs_belongs_to_the_one_behind(depth, slab):
    image = draw(camera((ROWS, COLUMNS), SLABS), [5.5, 5.5, depth], 3.0)
    assert np.flatnonzero(image.any(axis=(1, 2, 3))).tolist() == [slab]


@pytest.mark.parametrize("depth", [-0.001, 1024.0, 5000.0])
def test_outside_the_slabs_nothing_is_drawn(depth):
    assert not draw(camera((ROWS, COLUMNS), SLABS), [5.5, 5.5, depth], 3.0).any()


def test_slabs_may_be_of_any_depth():
    view = camera(512, slabs=[10.0, 11.0, 400.0])
    image = draw(view, [[5, 5, 9.9], [5, 5, 10.5], [5, 5, 12.0], [5, 5, 399.0]], 3.0)
    assert image.sum(axis=(1, 2, 3)) == pytest.approx([1, 2])
