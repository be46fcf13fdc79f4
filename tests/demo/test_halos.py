"""Halos and their profiles against published formulas, integrated by others where they can be."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy.integrate import quad
from scipy.ndimage import maximum_filter

from tilemap.demo.field import Cosmos, Spectrum
from tilemap.demo.halos import local_maxima, wrap
from tilemap.demo.marram import BOX, REDSHIFT, Volume
from tilemap.demo.matter import rank_share
from tilemap.demo.profiles import (
    circular_speed,
    halo_radius,
    nfw_peak_speed,
    nfw_radius,
    nfw_share,
    virial_temperature,
)

COSMOS = Cosmos()


@pytest.mark.parametrize("c", [3.0, 5.0, 15.0])
@pytest.mark.parametrize("x", [0.01, 0.1, 0.5, 1.0])
def test_the_enclosed_mass_is_the_integral_of_the_density(x, c):
    """Density 1 / (cx (1 + cx)^2): Navarro, Frenk & White (1997, ApJ 490, 493), equation 1; quadrature by scipy."""

    def shell(r: float) -> float:
        return r**2 / (c * r * (1.0 + c * r) ** 2)

    assert nfw_share(x, c) == pytest.approx(quad(shell, 0.0, x)[0] / quad(shell, 0.0, 1.0)[0], rel=1e-7)


@given(st.floats(1e-4, 1.0), st.floats(2.0, 30.0))
def test_the_radius_of_a_share_holds_that_share(share, c):
    assert nfw_share(nfw_radius(share, c), c) == pytest.approx(share, rel=1e-4)


def test_the_highest_speed_is_the_highest_on_a_fine_grid():
    x = np.geomspace(1e-3, 1.0, 20_000)
    speeds = 100.0 * np.sqrt(nfw_share(x, 8.0) / x)
    assert nfw_peak_speed(100.0, 8.0) == pytest.approx(speeds.max(), rel=1e-6)


def test_a_halo_holds_two_hundred_times_the_mean_density():
    mass = 3e12
    density = mass / (4.0 / 3.0 * np.pi * halo_radius(mass, COSMOS) ** 3)
    assert density == pytest.approx(200.0 * COSMOS.mean_density, rel=1e-12)


def test_the_sun_goes_round_the_galaxy_at_about_its_speed():
    """1e11 Msun within 8 kpc give 232 km/s: G = 4.30091e-6 kpc (km/s)^2 / Msun (CODATA 2018, nominal Sun)."""
    assert circular_speed(1e11, 8e-3, 1.0) == pytest.approx(np.sqrt(4.30091e-6 * 1e11 / 8.0), rel=1e-5)


def test_ten_thousand_kelvin_go_with_seventeen_km_per_s():
    """The rule of thumb for halos whose gas cools by atomic lines: about 17 km/s; common practice, no source."""
    assert virial_temperature(17.0) == pytest.approx(1e4, rel=0.06)


def test_local_maxima_are_those_of_a_maximum_filter():
    field = np.random.default_rng(8).random((12, 12, 12)).astype(np.float32)
    expected = np.flatnonzero((field == maximum_filter(field, 3, mode="wrap")) & (field > 0.9))
    np.testing.assert_array_equal(np.sort(local_maxima(field, 0.9)), expected)


def test_ranks_are_shared_out_within_each_group():
    share = rank_share(np.array([1, 0, 1, 1]), np.array([5.0, 9.0, 2.0, 3.0]))
    np.testing.assert_allclose(share, [5 / 6, 1 / 2, 1 / 6, 1 / 2])


def test_halos_are_as_frequent_as_sheth_and_tormen_say(volume: Volume):
    """Sheth & Tormen (1999, MNRAS 308, 119), equation 10, at the redshift of the volume: within a factor of 1.6."""
    spectrum, growth = Spectrum(COSMOS), float(COSMOS.growth(1.0 / (1.0 + REDSHIFT)))
    mass = np.geomspace(3e11, 1e15, 80)
    sigma = growth * np.array([spectrum.sigma(r) for r in np.cbrt(3.0 * mass / (4.0 * np.pi * COSMOS.mean_density))])
    nu = 1.686 / sigma
    share = 0.3222 * np.sqrt(2 * 0.707 / np.pi) * (1 + (0.707 * nu**2) ** -0.3) * nu * np.exp(-0.707 * nu**2 / 2)
    per_log_mass = share * COSMOS.mean_density / mass * -np.gradient(np.log(sigma), np.log(mass))
    expected = np.trapezoid(per_log_mass, np.log(mass)) * BOX**3
    outer = volume.halos.mass[volume.halos.host < 0]
    assert expected / 1.6 < np.count_nonzero(outer > 3e11) < 1.6 * expected


def test_a_halo_weighs_what_its_lattice_points_weigh(volume: Volume):
    halos = volume.halos
    point = volume.cosmos.mean_density * BOX**3 / halos.owner.size
    outer = np.flatnonzero(halos.host < 0)
    counts = np.bincount(halos.owner[halos.owner >= 0], minlength=len(halos))
    np.testing.assert_allclose(halos.mass[outer], counts[outer] * point, rtol=1e-12)


def test_halos_inside_others_lie_inside_them(volume: Volume):
    halos = volume.halos
    inner = np.flatnonzero(halos.host >= 0)
    distance = np.linalg.norm(wrap(halos.centre[inner] - halos.centre[halos.host[inner]], BOX), axis=1)
    # The host's radius is taken again after its halos inside have been found; it may have shrunk a little.
    assert np.all(distance < 1.1 * halos.radius[halos.host[inner]])


def test_the_table_of_halos_is_in_order_of_mass(volume: Volume):
    assert np.all(np.diff(volume.halos.mass) <= 0)


def test_the_dark_matter_of_a_heavy_halo_has_the_published_profile(volume: Volume):
    """Inside half the radius, the mass is that of the profile: what filaments and halos inside add is under a quarter."""
    halos, dark = volume.halos, volume.species[1]
    heavy = np.flatnonzero(halos.host < 0)[:5]
    ratios = []
    for halo in heavy:
        distance = np.linalg.norm(wrap(dark.position - halos.centre[halo], BOX), axis=1)
        within = dark.mass[distance < 0.5 * halos.radius[halo]].sum() / (1.0 - volume.cosmos.baryon_share)
        ratios.append(within / halos.mass[halo] / nfw_share(0.5, halos.concentration[halo]))
    assert np.median(ratios) == pytest.approx(1.0, abs=0.25)
