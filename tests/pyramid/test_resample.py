"""Area-weighted averages, against sums over the overlapping parts."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from tilemap.pyramid.resample import Canvas, overlaps, tiles_used


@given(st.integers(1, 40), st.integers(1, 60))
def test_averaging_onto_any_number_of_pixels_keeps_the_mean(size, count):
    old = np.random.default_rng(size).lognormal(0, 3, size)
    weights, inside = overlaps(0.0, size / count, count, size, wrap=False)
    assert inside.all()
    assert (weights @ old).mean() == pytest.approx(old.mean(), rel=1e-9)


@given(st.floats(-30, 30), st.floats(0.1, 5), st.integers(1, 30))
def test_every_new_pixel_within_the_image_counts_in_full(start, step, count):
    weights, inside = overlaps(start, step, count, 20, wrap=False)
    np.testing.assert_allclose(np.asarray(weights.sum(axis=1)).ravel()[inside], 1.0, rtol=1e-5)


def test_a_pixel_is_the_average_of_what_it_covers():
    weights, _ = overlaps(0.5, 2.0, 1, 4, wrap=False)
    assert weights.toarray().tolist() == [[0.25, 0.5, 0.25, 0.0]]


def test_pixels_partly_or_wholly_beyond_the_edge_are_not_inside():
    _, inside = overlaps(-1.5, 1.0, 6, 3, wrap=False)
    assert inside.tolist() == [False, False, True, True, False, False]


def test_a_wrapped_axis_goes_on_at_its_other_end():
    weights, inside = overlaps(-1.0, 1.0, 5, 3, wrap=True)
    assert inside.all()
    assert (weights @ np.array([10.0, 20.0, 30.0])).tolist() == [30.0, 10.0, 20.0, 30.0, 10.0]


def test_one_pixel_wider_than_a_wrapped_axis_takes_every_old_one_as_often_as_it_meets_it():
    weights, _ = overlaps(0.0, 4.0, 1, 3, wrap=True)
    assert weights.toarray().tolist() == [[0.5, 0.25, 0.25]]


def test_an_edge_that_rounding_has_moved_takes_no_sliver():
    weights, _ = overlaps(1e-9, 1.0, 3, 3, wrap=False)
    assert weights.nnz == 3


def test_only_tiles_with_a_used_pixel_are_asked_for():
    weights, _ = overlaps(510.0, 1.0, 4, 2048, wrap=False)
    assert tiles_used(weights, 512) == [0, 1]


def test_tiles_put_together_give_the_average_of_the_whole_image():
    image = np.random.default_rng(5).random((6, 8))
    rows, _ = overlaps(0.3, 1.1, 4, 6, wrap=True)
    columns, _ = overlaps(-2.7, 1.9, 3, 8, wrap=True)
    canvas = Canvas(rows, columns)
    for row in (0, 4):
        for column in (0, 4):
            tile = np.zeros((4, 4))
            part = image[row : row + 4, column : column + 4]
            tile[: part.shape[0], : part.shape[1]] = part
            canvas.add(tile, row, column)
    np.testing.assert_allclose(canvas.values, rows @ image @ columns.T.toarray(), rtol=1e-12)
