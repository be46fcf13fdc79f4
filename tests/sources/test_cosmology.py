"""Ages, distances and angles against astropy, closed forms, and published worked numbers."""

from __future__ import annotations

import pytest
from astropy.constants import c
from astropy.cosmology import FlatLambdaCDM, LambdaCDM

from tilemap.cosmology import Cosmology, scale_factor
from tilemap.errors import InputError

COSMOLOGIES = [(67.7, 0.31, 0.69, 0.0), (70.0, 0.3, 0.6, 2.725), (69.6, 0.286, 0.714, 0.0)]


@pytest.mark.parametrize("z", [0.1, 2.03, 9.5])
@pytest.mark.parametrize(("H0", "Om0", "Ode0", "Tcmb0"), COSMOLOGIES)
def test_numbers_are_those_of_astropy(H0, Om0, Ode0, Tcmb0, z):
    ours = Cosmology(H0, Om0, Ode0, Tcmb0)
    model = LambdaCDM(H0=H0, Om0=Om0, Ode0=Ode0, Tcmb0=Tcmb0)
    kpc_proper = model.angular_diameter_distance(z).to_value("kpc") / 206264.80624709636  # arcsec in a radian
    assert ours.age_gyr(z) == pytest.approx(model.age(z).to_value("Gyr"))
    assert ours.kpc_per_arcsec_proper(z) == pytest.approx(kpc_proper)
    assert ours.kpc_per_arcsec_comoving(z) == pytest.approx(kpc_proper * (1 + z))
    assert ours.comoving_distance_mpc(z) == pytest.approx(model.comoving_distance(z).to_value("Mpc"))
    assert ours.luminosity_distance_mpc(z) == pytest.approx(model.luminosity_distance(z).to_value("Mpc"))


def test_a_universe_of_matter_alone_follows_the_closed_forms():
    # Einstein-de Sitter: t = 2 / (3 H0) (1 + z)^-3/2 and D = 2 c / H0 (1 - (1 + z)^-1/2); 1 / (70 km/s/Mpc) = 13.968 Gyr
    flat = Cosmology(70, 1, 0)
    assert flat.age_gyr(3) == pytest.approx(2 / 3 * 13.968 / 8, rel=1e-4)
    assert flat.comoving_distance_mpc(3) == pytest.approx(c.to_value("km/s") / 70, rel=1e-9)


def test_the_worked_example_of_a_published_calculator():
    # Wright (2006), PASP 118, 1711, the example of its web page at z = 3 with H0 = 69.6, Om0 = 0.286, flat: age 2.171 Gyr,
    # comoving distance 6481 Mpc, 7.855 kpc per arcsec (from memory); it counts radiation, hence the tolerance
    example = Cosmology(69.6, 0.286, 0.714)
    assert example.age_gyr(3) == pytest.approx(2.171, rel=3e-3)
    assert example.comoving_distance_mpc(3) == pytest.approx(6481, rel=2e-3)
    assert example.kpc_per_arcsec_proper(3) == pytest.approx(7.855, rel=2e-3)


def test_the_universe_is_about_500_million_years_old_at_redshift_nine_and_a_half():
    # common practice, no source
    assert Cosmology(67.7, 0.31, 0.69).age_gyr(9.5) == pytest.approx(0.5, rel=0.1)


def test_radiation_is_left_out_unless_a_temperature_is_given():
    ours = Cosmology(67.7, 0.31, 0.69)
    assert ours.age_gyr(9.5) == pytest.approx(FlatLambdaCDM(H0=67.7, Om0=0.31, Tcmb0=0).age(9.5).to_value("Gyr"))


def test_the_dictionary_leads_back_to_the_same_cosmology():
    ours = Cosmology(70, 0.3, 0.6, 2.7)
    assert Cosmology.from_dict(ours.as_dict()) == ours


def test_scale_factor_is_one_over_one_plus_redshift():
    assert scale_factor(3.0) == 0.25


@pytest.mark.parametrize("values", [{"H0": 70, "Om0": 0.3}, {"H0": 70, "Om0": 0.3, "Ode0": 0.7, "w": -1}])
def test_a_dictionary_that_does_not_fit_is_refused(values):
    with pytest.raises(InputError, match="give H0, Om0, Ode0"):
        Cosmology.from_dict(values)


@pytest.mark.parametrize("values", [(0, 0.3, 0.7), (70, -0.3, 0.7), (float("nan"), 0.3, 0.7)])
def test_impossible_parameters_are_refused(values):
    with pytest.raises(InputError, match="cosmology: "):
        Cosmology(*values)
