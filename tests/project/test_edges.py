"""Particles across every edge, corner and slab face, where the volume repeats and where it does not."""

from __future__ import annotations

import itertools

import numpy as np
import pytest
from drawing import camera, draw
from reference import project

SIZE = 1024
RADII = (0.3, 3.0, 9.0, 15.7, 20.0, 70.0, 300.0)


def at_the_edges(radius: float) -> np.ndarray:
    """Centres on, just inside and just outside each edge and corner of the view, and of its four regions."""
    steps = (-1.2, -0.6, -0.01, 0.0, 0.3, 0.9)
    places = [edge + step * radius for edge in (0.0, SIZE) for step in steps]
    middle = 400.37
    along = [(place, middle) for place in places] + [(middle, place) for place in places]
    corners = list(itertools.product(places[1:12:3], repeat=2))
    uv = np.array(along + corners)
    return np.column_stack([uv, np.full(len(uv), 3.0)])


def plain(
    position: np.ndarray, radius: float, period: float | None, size: int = SIZE, corner: float = 0.0
) -> np.ndarray:
    count = len(position)
    return project(
        position,
        np.full(count, radius),
        np.ones((count, 1)),
        u_low=corner,
        v_high=corner + size,
        pixel=1.0,
        size=(size, size),
        edges=np.array([0.0, 8.0]),
        period=None if period is None else np.full(3, period),
    )[0, 0]


def view(period: float | None, size: int = SIZE, corner: float = 0.0):
    return camera(size, slabs=[0.0, 8.0], corner=(corner, corner), period=period)


@pytest.mark.parametrize("radius", RADII)
@pytest.mark.parametrize("period", [None, float(SIZE)], ids=["alone", "periodic"])
def test_across_edges_and_corners_the_image_is_that_of_the_plain_sum(period, radius):
    position = at_the_edges(radius)
    image = draw(view(period), position, radius)[0, 0]
    expected = plain(position, radius, period)
    assert np.abs(image - expected).sum() <= 2e-3 * len(position)


@pytest.mark.parametrize("radius", RADII)
@pytest.mark.parametrize("period", [None, float(SIZE)], ids=["alone", "periodic"])
def test_along_the_outermost_rows_the_image_is_that_of_the_plain_sum(period, radius):
    # The edge alone: what a whole image would hide.
    position = at_the_edges(radius)
    image, expected = draw(view(period), position, radius)[0, 0], plain(position, radius, period)
    for rim in (np.s_[0], np.s_[-1], np.s_[:, 0], np.s_[:, -1]):
        assert np.abs(image[rim] - expected[rim]).sum() <= 5e-3 * expected[rim].sum()


@pytest.mark.parametrize("radius", RADII)
def test_across_the_edges_of_a_periodic_box_nothing_is_lost(radius):
    position = at_the_edges(radius)
    assert draw(view(float(SIZE)), position, radius).sum(dtype=np.float64) == pytest.approx(len(position), rel=1e-6)


@pytest.mark.parametrize("radius", RADII)
def test_where_nothing_repeats_the_mass_beyond_the_edge_is_left_out(radius):
    position = at_the_edges(radius)
    seen = plain(position, radius, None).sum()
    assert draw(view(None), position, radius).sum(dtype=np.float64) == pytest.approx(seen, rel=5e-4)


@pytest.mark.parametrize("radius", RADII)
def test_across_the_faces_between_regions_nothing_is_lost(radius):
    # Regions of 512 pixels meet in the middle of the image.
    shift = at_the_edges(radius) + np.array([SIZE / 2, SIZE / 2, 0])
    image = draw(view(float(SIZE)), shift, radius, local=0)
    cut = draw(view(float(SIZE)), shift, radius, local=1)
    assert cut.sum(dtype=np.float64) == pytest.approx(len(shift), rel=1e-6)
    assert np.abs(cut - image).max() <= 1e-5 * image.max()


@pytest.mark.parametrize("radius", [3.0, 20.0, 300.0])
@pytest.mark.parametrize(("size", "corner", "period"), [(512, 300.0, 700.0), (1024, -200.0, 600.5), (512, 0.0, 2000.0)])
def test_a_view_smaller_or_larger_than_the_box_or_across_its_edge_shows_every_image_of_a_particle(
    size, corner, period, radius
):
    rng = np.random.default_rng(8)
    position = rng.random((40, 3)) * [period, period, 8.0]
    image = draw(view(period, size, corner), position, radius)[0, 0]
    expected = plain(position, radius, period, size, corner)
    assert np.abs(image - expected).sum() <= 2e-3 * expected.sum() + 2e-3


@pytest.mark.parametrize("size", [(512, 1536), (1024, 512), (2560, 512)])
def test_an_image_that_is_no_square_and_no_power_of_two_is_that_of_the_plain_sum(size):
    rng = np.random.default_rng(10)
    position = rng.random((300, 3)) * [size[1], size[0], 8.0]
    radius = 10 ** rng.uniform(-1, 2.5, 300)
    period = np.array([size[1], size[0], 8.0])
    image = draw(camera(size, slabs=[0.0, 8.0], period=tuple(period)), position, radius)[0, 0]
    given = {"u_low": 0.0, "v_high": float(size[0]), "pixel": 1.0, "size": size, "edges": np.array([0.0, 8.0])}
    expected = project(position, radius, np.ones((300, 1)), period=period, **given)[0, 0]
    assert image.sum(dtype=np.float64) == pytest.approx(300, rel=1e-6)
    # Few particles, far from each other: the bound of single ones.
    assert np.abs(image - expected).sum() <= 2e-3 * 300


@pytest.mark.parametrize("shift", [-1, 1, 7])
def test_positions_outside_the_periodic_box_are_those_inside(shift):
    rng = np.random.default_rng(9)
    position = rng.integers(0, SIZE * 8, (100, 3)) / 8.0
    moved = position + shift * SIZE * np.array([1, -1, 1])
    box = camera(SIZE, 4, period=float(SIZE))
    assert np.array_equal(draw(box, position, 5.0), draw(box, moved, 5.0))


def test_a_slab_face_cuts_by_the_centre_and_not_by_the_kernel():
    box = camera(512, slabs=[0.0, 100.0, 200.0], period=(512.0, 512.0, 200.0))
    position = np.array([[50, 50, 99.999], [150, 50, 100.0], [250, 50, 199.999], [350, 50, 200.0], [450, 50, -0.001]])
    sums = draw(box, position, 20.0)[:, 0].sum(axis=(1, 2), dtype=np.float64)
    # 200.0 is 0.0 again, and -0.001 is 199.999.
    assert sums == pytest.approx([2, 3], rel=1e-6)
    alone = draw(camera(512, slabs=[0.0, 100.0, 200.0]), position, 20.0)[:, 0].sum(axis=(1, 2), dtype=np.float64)
    assert alone == pytest.approx([1, 2], rel=1e-6)


def test_a_depth_window_that_wraps_around_the_box_takes_both_of_its_ends():
    box = camera(512, slabs=[150.0, 200.0, 250.0], period=(512.0, 512.0, 200.0))
    position = np.array([[50, 50, 160.0], [150, 50, 10.0], [250, 50, 100.0]])
    sums = draw(box, position, 20.0)[:, 0].sum(axis=(1, 2), dtype=np.float64)
    assert sums == pytest.approx([1, 1], rel=1e-6)


def test_a_kernel_many_times_wider_than_a_periodic_box_is_even():
    image = draw(camera(512, period=512.0), [[100.0, 200.0, 3.0]], 5000.0)[0, 0]
    assert image == pytest.approx(np.full((512, 512), 1 / 512**2), rel=1e-3)
