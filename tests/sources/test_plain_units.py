"""Which plain unit numbers of a dimension come in, and temperature from energy."""

from __future__ import annotations

import astropy.units as u
import numpy as np
import pytest

from tilemap.errors import InputError
from tilemap.quantities import number_in, span, split_quantity, unit_named
from tilemap.sources.derived import temperature_factor
from tilemap.sources.units import plain_unit, stated_by_attributes


@pytest.mark.parametrize(
    ("unit", "plain"),
    [
        ("cm", "Mpc"),
        ("kg", "solMass"),
        ("cm/s", "km / s"),
        ("K", "K"),
        ("erg/g", "km2 / s2"),
        ("g/s", "solMass / yr"),
        ("percent", ""),
        ("kg/m3", "g / cm3"),
        ("arcsec", "deg"),
        ("Gyr", "s"),
        ("erg/s", "erg / s"),
    ],
)
def test_each_dimension_has_its_plain_unit(unit, plain):
    assert plain_unit(u.Unit(unit)) == u.Unit(plain)


def test_ionised_gas_is_warmed_by_energy_as_textbooks_say():
    # (2/3) mu m_p / k_B per (km/s)^2 with mu = 0.59 (common practice for ionised primordial gas); CODATA 2018 constants
    assert temperature_factor("ionised") == pytest.approx(2 / 3 * 0.59 * 1.67262e-27 * 1e6 / 1.380649e-23, rel=5e-3)


def test_neutral_gas_is_warmed_by_energy_as_textbooks_say():
    # mu = 1.22 for neutral primordial gas (common practice)
    assert temperature_factor("neutral") == pytest.approx(2 / 3 * 1.22 * 1.67262e-27 * 1e6 / 1.380649e-23, rel=5e-3)


@pytest.mark.parametrize("value", [np.array([2.0]), np.array(2.0), np.float32(2), 2])
def test_attributes_may_be_numbers_or_arrays_of_one(value):
    assert stated_by_attributes({"to_cgs": value}).factor == 2.0


def test_attributes_that_say_nothing_give_nothing():
    assert stated_by_attributes({"Description": b"a dataset"}).factor is None


@pytest.mark.parametrize(
    ("text", "parts"),
    [("1.5e6 Msun", (1.5e6, "Msun")), ("5kpc", (5, "kpc")), ("3", (3, "")), ("Masses", None), ("-.5 K", (-0.5, "K"))],
)
def test_a_quantity_splits_into_number_and_unit(text, parts):
    assert split_quantity(text) == parts


def test_a_scaled_unit_holds_its_number():
    assert unit_named("1e10 Msun").to(u.Msun) == pytest.approx(1e10)


@pytest.mark.parametrize("text", ["kpc/h", "Msun h-1", "Mpc littleh"])
def test_an_h_in_a_unit_is_refused_because_it_means_hours(text):
    with pytest.raises(InputError, match="h would be read as hours"):
        unit_named(text)


@pytest.mark.parametrize("value", [None, True, [1], "far"])
def test_what_is_no_length_is_refused(value):
    with pytest.raises(InputError, match="is not a length"):
        number_in(value, u.Mpc, "length")


@pytest.mark.parametrize(
    ("low", "high", "said"),
    [
        (0, 8, "0 to 8"),
        (5, 5.0000003, "5 to 5.0000003"),
        (-1e-9, 1e-9, "-1e-09 to 1e-09"),
        (12345.678901, 12345.678904, "12345.678901 to 12345.678904"),
    ],
)
def test_a_range_is_said_to_enough_digits_to_tell_its_ends_apart(low, high, said):
    assert span(low, high) == said
