"""Codings, against numpy's logarithm and the plain formula of the coding (tilemap/pyramid/coding.py)."""

import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from hypothesis.extra import numpy as hnp

from tilemap.errors import InputError
from tilemap.pyramid.coding import (
    CODINGS,
    LOG2_POLYNOMIAL,
    ROUNDING_STEPS,
    Coding,
    LinearCoding,
    LogCoding,
)


def exact_log_codes(values, coding):
    """The code before rounding, by numpy.log10 in float64."""
    return (np.log10(values.astype(np.float64)) - coding.low) / coding.step + 1.0


@pytest.mark.parametrize("dtype", [np.float32, np.float64])
@pytest.mark.parametrize(("low", "step"), [(-28.0, 0.002), (-36.0, 0.002), (3.0, 0.0005), (0.0, 1e-5), (-20.0, 1.0)])
def test_log_codes_lie_within_a_fiftieth_of_a_step_of_numpys_log10(dtype, low, step):
    coding = LogCoding(low, step)
    highest = min(low + step * 65000, 37.0)
    values = (10.0 ** np.random.default_rng(5).uniform(low, highest, 400_000)).astype(dtype)
    off = np.abs(coding.encode(values) - exact_log_codes(values, coding))
    assert off.max() < 0.52


def test_every_mantissa_bit_pattern_of_one_octave_is_coded_rightly():
    coding = LogCoding(-1.0, 0.002)
    values = np.arange(0x3F800000, 0x40000000, 7, dtype=np.uint32).view(np.float32)
    off = np.abs(coding.encode(values) - exact_log_codes(values, coding))
    assert off.max() < 0.52


def test_the_polynomial_is_the_chebyshev_interpolant_of_the_logarithm():
    cheb = np.polynomial.chebyshev.Chebyshev.interpolate(lambda x: np.log1p(x) / np.log(2) / x, 8, domain=[0, 1])
    np.testing.assert_allclose(LOG2_POLYNOMIAL, cheb.convert(kind=np.polynomial.Polynomial).coef, rtol=1e-9)


def test_the_polynomial_is_good_to_3e_8():
    x = np.linspace(0, 1, 100_001)
    off = x * np.polynomial.polynomial.polyval(x, LOG2_POLYNOMIAL) - np.log2(1 + x)
    assert np.abs(off).max() < 3e-8


def test_a_step_of_2_millidex_rounds_by_at_most_0_23_percent():
    coding = LogCoding(-28.0, 0.002)
    values = (10.0 ** np.random.default_rng(6).uniform(-27.0, 30.0, 300_000)).astype(np.float32)
    assert np.abs(coding.decode(coding.encode(values)) / values.astype(np.float64) - 1).max() <= 0.0023 * 1.02


@pytest.mark.parametrize("dtype", [np.float32, np.float64])
@pytest.mark.parametrize(
    ("value", "code"),
    [
        (0.0, 0),
        (-0.0, 0),
        (-5.0, 0),
        (math.nan, 0),
        (-math.nan, 0),
        (-math.inf, 0),
        (math.inf, 65535),
        (100.0, 1),
        (100 * 10**-0.049, 1),
        (100 * 10**-0.051, 0),
    ],
)
def test_log_coding_of_values_at_its_ends(dtype, value, code):
    assert LogCoding(2.0, 0.1).encode(np.array([value], dtype=dtype)).tolist() == [code]


def test_float64_values_above_the_top_are_clipped_to_the_top_code():
    assert LogCoding(0.0, 0.0001).encode(np.array([1e200])).tolist() == [65535]


def test_subnormal_float32_values_are_coded_like_any_other():
    coding = LogCoding(-45.0, 0.1)
    values = np.array([1e-40, 1e-42, 3e-39], dtype=np.float32)
    assert np.array_equal(coding.encode(values), np.floor(exact_log_codes(values, coding) + 0.5))


@given(
    hnp.arrays(np.float32, st.integers(1, 40), elements=st.floats(2.0**-90, 2.0**90, width=32)),
    st.floats(-30, 5),
    st.floats(1e-3, 0.5),
)
def test_what_log_coding_gives_back_lies_within_half_a_step(values, low, step):
    coding = LogCoding(low, step)
    codes = coding.encode(values)
    coded = (codes > 0) & (codes < 65535)
    back = np.log10(coding.decode(codes)[coded].astype(np.float64))
    assert np.all(np.abs(back - np.log10(values[coded].astype(np.float64))) <= ROUNDING_STEPS * step + 1e-7)


@given(st.lists(st.integers(1, 65535), min_size=1, max_size=50), st.floats(-1e6, 1e6), st.floats(1e-3, 1e3))
def test_decoded_linear_values_are_encoded_to_the_same_codes(codes, low, step):
    coding = LinearCoding(low, step)
    exact = low + step * (np.array(codes) - 1.0)
    assert coding.encode(exact).tolist() == codes


@given(st.lists(st.integers(0, 38000), min_size=1, max_size=50))
def test_decoded_log_values_are_encoded_to_the_same_codes(codes):
    coding = LogCoding(-36.0, 0.0019)
    assert coding.encode(coding.decode(np.array(codes, dtype=np.uint16))).tolist() == codes


@given(hnp.arrays(np.float64, st.integers(1, 40), elements=st.floats(-1e5, 1e5)))
def test_what_linear_coding_gives_back_lies_within_half_a_step(values):
    coding = LinearCoding(-1e5, 4.0)
    assert np.all(np.abs(coding.decode(coding.encode(values)) - values) <= 2.0 + 0.02)


def test_linear_coding_keeps_nan_as_nothing_and_clips_the_rest():
    values = np.array([math.nan, -math.inf, -1e9, -10.0, 0.0, 1e9, math.inf], dtype=np.float32)
    assert LinearCoding(-10.0, 0.5).encode(values).tolist() == [0, 1, 1, 1, 21, 65535, 65535]


def test_nothing_is_zero_in_a_log_sum():
    assert Coding.from_attributes({"kind": "sum", "coding": "log", "low": -3, "step": 0.01}).decode([0])[0] == 0.0


@pytest.mark.parametrize(
    "attributes",
    [
        {"kind": "mean", "coding": "log", "low": -3, "step": 0.01},
        {"kind": "mean", "coding": "linear", "low": -3, "step": 0.01},
        {"kind": "sum", "coding": "linear", "low": -3, "step": 0.01},
    ],
)
def test_nothing_is_nan_in_means_and_in_linear_coding(attributes):
    assert np.isnan(Coding.from_attributes(attributes).decode([0])[0])


@pytest.mark.parametrize("coding", [LogCoding(-28.0, 0.002), LinearCoding(-500.0, 0.25)])
def test_a_coding_comes_back_from_its_attributes(coding):
    assert Coding.from_attributes({**coding.attributes(), "kind": "sum"}) == coding


@pytest.mark.parametrize("name", list(CODINGS))
def test_the_table_holds_what_decode_gives(name):
    coding = CODINGS[name](-2.0, 0.0005)
    codes = np.arange(65536, dtype=np.uint16)
    assert np.array_equal(coding.table(), coding.decode(codes), equal_nan=True)


def test_the_log_table_is_the_formula_of_the_design():
    expected = 10.0 ** (-28 + 0.002 * (np.arange(1, 32000) - 1))
    np.testing.assert_allclose(LogCoding(-28.0, 0.002).table()[1:32000], expected, rtol=1e-6)


@pytest.mark.parametrize("coding", [LogCoding(-3.0, 0.01), LinearCoding(-40.0, 0.3)])
def test_what_was_encoded_lies_within_the_bounds_of_its_code(coding):
    rng = np.random.default_rng(8)
    values = np.concatenate([rng.normal(0, 1e4, 20_000), 10.0 ** rng.uniform(-6, 5, 20_000)])
    values = np.clip(values, 0, None) if isinstance(coding, LogCoding) else values
    low, high = coding.bounds()
    codes = coding.encode(values)
    assert np.all((low[codes] <= values) & (values <= high[codes]))


def test_codes_keep_the_shape_and_the_order_of_an_array_that_lies_askew_in_memory():
    values = np.random.default_rng(9).uniform(1, 100, (6, 8)).astype(np.float32)
    coding = LogCoding(-3.0, 0.01)
    assert np.array_equal(coding.encode(values.T[::2]), coding.encode(values).T[::2])


@pytest.mark.parametrize(
    ("attributes", "word"),
    [
        ({"coding": "cubic", "low": 0, "step": 1}, "cubic"),
        ({"coding": "log", "low": 0}, "step"),
        ({"coding": "log", "low": 0, "step": -0.002}, "step"),
        ({"coding": "log", "low": 4000, "step": 0.002}, "low"),
        ({"coding": "linear", "low": 0, "step": 0}, "step"),
        ({"coding": "linear", "low": "much", "step": 1}, "low"),
    ],
)
def test_a_coding_that_makes_no_sense_is_refused_naming_what_is_wrong(attributes, word):
    with pytest.raises(InputError, match=word):
        Coding.from_attributes(attributes)
