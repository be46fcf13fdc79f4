"""The space-filling curve: every cell once, each next to the one before."""

import numpy as np
from hypothesis import given, settings
from hypothesis import strategies as st

from tilemap.catalogue.curve import curve_order, hilbert_index


def test_the_curve_visits_every_cell_of_the_grid_once():
    column, row = (axis.ravel() for axis in np.meshgrid(np.arange(32), np.arange(32)))
    assert np.array_equal(np.sort(hilbert_index(column, row, bits=5)), np.arange(32 * 32))


def test_each_cell_of_the_curve_shares_an_edge_with_the_next():
    # The defining property of Hilbert's curve (Math. Annalen 38, 459, 1891).
    column, row = (axis.ravel() for axis in np.meshgrid(np.arange(32), np.arange(32)))
    along = np.argsort(hilbert_index(column, row, bits=5))
    steps = np.abs(np.diff(column[along])) + np.abs(np.diff(row[along]))
    assert np.all(steps == 1)


@settings(max_examples=30, deadline=None)
@given(st.lists(st.tuples(st.floats(-1e6, 1e6), st.floats(-1e6, 1e6)), max_size=40))
def test_the_order_is_a_permutation_whatever_the_points(points):
    u, v = np.array(points, dtype=float).reshape(-1, 2).T
    assert np.array_equal(np.sort(curve_order(u, v)), np.arange(len(points)))


def test_points_in_the_file_lie_close_to_their_neighbours_in_the_view():
    rng = np.random.default_rng(7)
    u, v = rng.uniform(0, 100, (2, 10_000))
    order = curve_order(u, v)
    step = np.hypot(np.diff(u[order]), np.diff(v[order])).mean()
    assert step < 2.0  # the mean spacing is 1; in random order it is 52 (0.52 of the side, from memory)
