"""Halving, against numpy's mean, and the sizes of pyramids."""

from itertools import pairwise

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from hypothesis.extra import numpy as hnp

from tilemap.errors import InputError
from tilemap.pyramid.grid import level_shapes, shard_grid, shard_shape, tile_grid
from tilemap.pyramid.reduce import halve

even = st.integers(1, 6).map(lambda n: 2 * n)


@given(hnp.arrays(np.float32, st.tuples(even, even), elements=st.floats(0, 2.0**60, width=32)))
def test_halving_keeps_the_sum_over_area(image):
    assert halve(image).sum(dtype=np.float64) * 4 == pytest.approx(image.sum(dtype=np.float64), rel=1e-6)


@given(hnp.arrays(np.float64, st.tuples(st.integers(1, 3), even, even), elements=st.floats(-1e6, 1e6)))
def test_every_pixel_is_the_mean_of_four(image):
    k, n, m = image.shape
    expected = image.reshape(k, n // 2, 2, m // 2, 2).mean(axis=(2, 4))
    np.testing.assert_allclose(halve(image), expected, rtol=1e-12, atol=1e-9)


def test_the_bits_are_those_of_one_order_of_adding():
    image = np.random.default_rng(1).lognormal(0, 5, (64, 64)).astype(np.float32)
    a, b, c, d = image[::2, ::2], image[::2, 1::2], image[1::2, ::2], image[1::2, 1::2]
    assert np.array_equal(halve(image), ((a + b) + (c + d)) * np.float32(0.25))


def test_halving_writes_into_a_quarter_of_the_next_tile():
    image = np.arange(64, dtype=np.float32).reshape(8, 8)
    coarse = np.zeros((8, 8), dtype=np.float32)
    halve(image, out=coarse[:4, 4:])
    assert np.array_equal(coarse[:4, 4:], halve(image))


def test_any_number_of_leading_axes_is_kept():
    image = np.random.default_rng(2).random((2, 3, 4, 6), dtype=np.float32)
    assert np.array_equal(halve(image)[1, 2], halve(image[1, 2]))


@pytest.mark.parametrize(
    "image", [np.zeros((3, 4), np.float32), np.zeros((4, 5), np.float32), np.zeros((4, 4), np.int32)]
)
def test_an_image_without_an_exact_half_is_refused(image):
    with pytest.raises(ValueError, match="image of"):
        halve(image)


@pytest.mark.parametrize(
    ("rows", "columns", "levels", "last"),
    [(512, 512, 1, (512, 512)), (8192, 8192, 5, (512, 512)), (1536, 1536, 3, (384, 384)), (512, 2048, 3, (128, 512))],
)
def test_levels_go_on_until_both_sides_fit_in_a_tile(rows, columns, levels, last):
    shapes = level_shapes(rows, columns)
    assert (len(shapes), shapes[-1]) == (levels, last)


@given(st.integers(1, 512), st.integers(1, 512))
def test_every_level_up_to_a_side_of_512_tiles_is_exactly_half_of_the_one_before(rows, columns):
    shapes = level_shapes(512 * rows, 512 * columns)
    assert all(a == (2 * b[0], 2 * b[1]) for a, b in pairwise(shapes))


@pytest.mark.parametrize("size", [(512, 700), (0, 512), (513 * 512, 512)])
def test_a_size_that_makes_no_pyramid_is_refused(size):
    with pytest.raises(InputError, match="multiple"):
        level_shapes(*size)


def test_the_size_that_is_advised_for_a_large_image_does_make_a_pyramid():
    with pytest.raises(InputError, match="1024"):
        level_shapes(513 * 512, 512)
    assert level_shapes(514 * 512, 1024)[-1] == (257, 1)


@pytest.mark.parametrize(
    ("shape", "tiles", "shard", "shards"),
    [
        ((512, 512), (1, 1), (512, 512), (1, 1)),
        ((768, 300), (2, 1), (1024, 512), (1, 1)),
        ((8192, 4608), (16, 9), (4096, 4096), (2, 2)),
    ],
)
def test_tiles_and_shards_cover_an_image(shape, tiles, shard, shards):
    assert (tile_grid(shape), shard_shape(shape), shard_grid(shape)) == (tiles, shard, shards)
