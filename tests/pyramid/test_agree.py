"""The certain bounds of verify: what was averaged in floats never fails, what was not does."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from tilemap.pyramid.agree import mean_misfits, sum_misfits, total_bounds
from tilemap.pyramid.coding import LinearCoding, LogCoding
from tilemap.pyramid.reduce import halve

# Low is near the values, so that many fall below it.
LOG = LogCoding(1.0, 0.002)
WEIGHT = LogCoding(0.0, 0.01)
LINEAR = LinearCoding(-400.0, 0.02)
SIDE = 32


def four(codes):
    """The four pixels below each pixel of the next level."""
    return np.stack([codes[i::2, j::2] for i in range(2) for j in range(2)])


def wild(rng, sparse):
    """Values over six decades, some of them zero."""
    values = 10.0 ** rng.uniform(-1, 5, (SIDE, SIDE)) * (rng.random((SIDE, SIDE)) > sparse)
    return values.astype(np.float32)


seeds = st.integers(0, 2**32 - 1)
sparseness = st.sampled_from([0.0, 0.3, 0.95])


@settings(max_examples=60)
@given(seeds, sparseness)
def test_a_level_that_is_the_average_fits(seed, sparse):
    fine = wild(np.random.default_rng(seed), sparse)
    assert sum_misfits(LOG.encode(halve(fine)), four(LOG.encode(fine)), LOG, 0.25) == 0


@settings(max_examples=60)
@given(seeds, sparseness)
def test_a_signed_level_that_is_the_average_fits(seed, sparse):
    rng = np.random.default_rng(seed)
    # Beyond the ends of the coding too, where codes are clipped.
    fine = (rng.normal(0, 500, (SIDE, SIDE)) * (rng.random((SIDE, SIDE)) > sparse)).astype(np.float32)
    assert sum_misfits(LINEAR.encode(halve(fine)), four(LINEAR.encode(fine)), LINEAR, 0.25) == 0


def mean_codes(upper, lower, coding):
    """Codes of a mean; nothing where no weight is."""
    mean = np.divide(upper, lower, out=np.full_like(upper, np.nan), where=lower > 0)
    return coding.encode(mean)


@settings(max_examples=60)
@given(seeds, sparseness, st.sampled_from([LOG, LINEAR]))
def test_a_weighted_level_that_is_the_average_fits(seed, sparse, coding):
    rng = np.random.default_rng(seed)
    weights = wild(rng, sparse)
    values = wild(rng, 0.1) if coding is LOG else rng.normal(0, 300, (SIDE, SIDE)).astype(np.float32)
    upper = weights * values
    fine, coarse = mean_codes(upper, weights, coding), mean_codes(halve(upper), halve(weights), coding)
    assert mean_misfits(coarse, four(fine), four(WEIGHT.encode(weights)), coding, WEIGHT) == 0


@settings(max_examples=30)
@given(seeds, sparseness, st.integers(2, 6))
def test_a_whole_that_is_the_sum_of_its_slabs_fits(seed, sparse, slabs):
    rng = np.random.default_rng(seed)
    parts = np.stack([wild(rng, sparse) for _ in range(slabs)])
    assert sum_misfits(LOG.encode(parts.sum(axis=0)), LOG.encode(parts), LOG, 1.0) == 0


@pytest.mark.parametrize("steps", [-3, 3])
def test_a_sum_that_is_three_steps_off_does_not_fit(steps):
    fine = np.full((2, 2), 1000.0, dtype=np.float32)
    coarse = (LOG.encode(halve(fine)).astype(int) + steps).astype(np.uint16)
    assert sum_misfits(coarse, four(LOG.encode(fine)), LOG, 0.25) == 1


@pytest.mark.parametrize("coding", [LOG, LINEAR])
@pytest.mark.parametrize("steps", [-3, 3])
def test_a_mean_that_is_three_steps_off_does_not_fit(coding, steps):
    codes = np.full((4, 1, 1), 5000, dtype=np.uint16)
    weights = np.array([200, 300, 0, 400], dtype=np.uint16).reshape(4, 1, 1)
    coarse = np.full((1, 1), 5000 + steps, dtype=np.uint16)
    assert mean_misfits(coarse, codes, weights, coding, WEIGHT) == 1


def test_a_mean_over_unequal_weights_that_forgot_them_does_not_fit():
    parts = LOG.encode(np.array([1e2, 1e4, 1e2, 1e4], dtype=np.float32)).reshape(4, 1, 1)
    weights = WEIGHT.encode(np.array([1000.0, 10.0, 1000.0, 10.0], dtype=np.float32)).reshape(4, 1, 1)
    unweighted = LOG.encode(np.array([[5050.0]], dtype=np.float32))
    assert mean_misfits(unweighted, parts, weights, LOG, WEIGHT) == 1


@pytest.mark.parametrize("coding", [LOG, LINEAR])
def test_a_mean_over_pixels_that_were_lost_does_not_fit(coding):
    lost = np.zeros((4, 1, 1), dtype=np.uint16)
    weights = np.full((4, 1, 1), 300, dtype=np.uint16)
    assert mean_misfits(np.full((1, 1), 5000, np.uint16), lost, weights, coding, WEIGHT) == 1


@pytest.mark.parametrize("coding", [LOG, LINEAR])
def test_a_mean_that_was_lost_does_not_fit(coding):
    parts = np.full((4, 1, 1), 5000, dtype=np.uint16)
    weights = np.full((4, 1, 1), 300, dtype=np.uint16)
    assert mean_misfits(np.zeros((1, 1), np.uint16), parts, weights, coding, WEIGHT) == 1


@pytest.mark.parametrize("coding", [LOG, LINEAR])
def test_a_mean_where_nothing_weighs_anything_does_not_fit(coding):
    nothing = np.zeros((4, 1, 1), dtype=np.uint16)
    assert mean_misfits(np.full((1, 1), 5000, np.uint16), nothing, nothing, coding, WEIGHT) == 1


def test_a_mean_whose_weights_were_too_low_to_write_lies_between_its_parts():
    parts = np.array([5000, 5010, 5020, 5030], dtype=np.uint16).reshape(4, 1, 1)
    unknown = np.zeros((4, 1, 1), dtype=np.uint16)
    misfits = [
        mean_misfits(np.full((1, 1), code, np.uint16), parts, unknown, LOG, WEIGHT) for code in (4995, 5000, 5015, 5035)
    ]
    assert misfits == [1, 0, 0, 1]


@given(seeds, sparseness)
def test_the_sum_of_what_was_encoded_lies_within_its_bounds(seed, sparse):
    values = wild(np.random.default_rng(seed), sparse)
    least, most = total_bounds(LOG.encode(values), LOG)
    assert least <= values.sum(dtype=np.float64) <= most
