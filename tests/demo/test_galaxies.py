"""Galaxies against the published profiles and relations that they are drawn from."""

from __future__ import annotations

import itertools
from dataclasses import replace

import numpy as np
import pytest

from tilemap.demo import discs
from tilemap.demo.galaxies import Galaxies
from tilemap.demo.halos import Halos
from tilemap.demo.marram import Volume
from tilemap.demo.profiles import (
    black_hole_mass,
    disc_radius,
    disc_share,
    hernquist_radius,
    star_formation_rate,
    stellar_mass,
)

A = 0.5
PITCH = np.radians(20.0)
COUNT = 60_000


def _one_halo() -> Halos:
    none = np.full((2, 2, 2), -1)
    one = np.ones(1)
    return Halos(
        np.zeros((1, 3)), 1e12 * one, 0.3 * one, 5.0 * one, -np.ones(1, int), np.zeros((1, 3)), none, none, none
    )


def _one_galaxy() -> Galaxies:
    one = np.ones(1)
    return Galaxies(
        stars=2e10 * one,
        bulge=0.0 * one,
        cold_gas=1e10 * one,
        black_hole=0.0 * one,
        star_formation=7.0 * one,
        disc=0.01 * one,
        gas_disc=0.02 * one,
        bulge_scale=0.002 * one,
        axis=np.array([[0.0, 0.0, 1.0]]),
        arms=np.array([2]),
        pitch=PITCH * one,
    )


def _disc(contrast: float, clumped: float = 0.0) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Radius in scale lengths, angle and velocity of the particles of one disc seen from above."""
    _, position, velocity, scaled = discs.draw_disc(
        _one_galaxy(),
        _one_halo(),
        np.array([COUNT]),
        np.array([0.01]),
        contrast=contrast,
        thickness=0.05,
        clumped=clumped,
        a=A,
        rng=np.random.default_rng(6),
    )
    return scaled, np.arctan2(position[:, 1], position[:, 0]), velocity


def test_the_share_of_an_exponential_disc_is_the_integral_of_its_density():
    x = np.linspace(0.0, 2.5, 200_001)
    assert disc_share(2.5) == pytest.approx(np.trapezoid(x * np.exp(-x), x), rel=1e-8)


def test_half_of_an_exponential_disc_lies_within_1_678_scale_lengths():
    """Common practice: the half-light radius of a disc is 1.678 scale lengths."""
    assert disc_radius(0.5) == pytest.approx(1.678, abs=1e-3)


def test_half_of_a_hernquist_ball_lies_within_1_plus_root_2_scales():
    """Hernquist (1990, ApJ 356, 359), equation 4."""
    assert hernquist_radius(0.5) == pytest.approx(1.0 + np.sqrt(2.0), rel=1e-12)


def test_discs_are_exponential():
    """The slope of the logarithm of the surface density, by rings, is one scale length."""
    scaled, _, _ = _disc(contrast=0.7)
    edges = np.linspace(0.5, 4.5, 17)
    rings = np.histogram(scaled, edges)[0] / (edges[1:] ** 2 - edges[:-1] ** 2)
    slope = np.polyfit(0.5 * (edges[1:] + edges[:-1]), np.log(rings), 1)[0]
    assert slope == pytest.approx(-1.0, abs=0.02)


def test_clumps_leave_the_disc_exponential():
    scaled, _, _ = _disc(contrast=0.7, clumped=0.15)
    edges = np.linspace(0.5, 4.5, 9)
    rings = np.histogram(scaled, edges)[0] / (edges[1:] ** 2 - edges[:-1] ** 2)
    slope = np.polyfit(0.5 * (edges[1:] + edges[:-1]), np.log(rings), 1)[0]
    assert slope == pytest.approx(-1.0, abs=0.1)


def test_arms_are_logarithmic_spirals():
    """The angle of the two-fold pattern falls with ln R by the cotangent of the pitch, which opens by 6 % a scale length."""
    scaled, angle, _ = _disc(contrast=0.7)
    edges = np.geomspace(1.0, 4.0, 13)
    middle = np.sqrt(edges[1:] * edges[:-1])
    turns = [
        np.angle(np.exp(2j * angle[(scaled >= low) & (scaled < high)]).sum()) / 2
        for low, high in itertools.pairwise(edges)
    ]
    turns = np.unwrap(np.array(turns), period=np.pi)
    expected = -np.log(middle / 0.8) / np.tan(PITCH * (1.0 + 0.06 * middle))
    np.testing.assert_allclose(turns - turns[0], expected - expected[0], atol=0.2)


def test_a_disc_without_contrast_has_no_arms():
    _, angle, _ = _disc(contrast=0.0)
    assert abs(np.exp(2j * angle).mean()) < 4.0 / np.sqrt(COUNT)


def test_discs_turn_about_their_axis():
    scaled, angle, velocity = _disc(contrast=0.0)
    ring = (scaled > 2.0) & (scaled < 3.0)
    tangential = -np.sin(angle) * velocity[:, 0] + np.cos(angle) * velocity[:, 1]
    speed = discs.rotation_speed(_one_galaxy(), _one_halo(), np.zeros(1, int), np.array([0.025]), A)[0]
    assert tangential[ring].mean() == pytest.approx(speed, rel=0.05)


def test_balls_have_the_half_mass_radius_of_hernquist():
    """Within the share of the mass that is drawn: Hernquist (1990), equation 3."""
    _, position, _ = discs.draw_ball(
        _one_galaxy(), _one_halo(), np.array([20_000]), np.array([0.002]), 1.0, A, np.random.default_rng(2)
    )
    root = np.sqrt(0.5 * discs.BULGE_CUT)
    assert np.median(np.linalg.norm(position, axis=1)) == pytest.approx(0.002 * root / (1.0 - root), rel=0.01)


def test_cold_gas_forms_as_many_stars_as_its_galaxy():
    gas = discs.cold_gas(_one_galaxy(), _one_halo(), 5000, A, np.random.default_rng(3))
    assert gas.extra["star_formation"].sum(dtype=np.float64) == pytest.approx(7.0, rel=1e-5)


def test_star_particles_weigh_what_their_galaxies_weigh(volume: Volume):
    assert volume.species[4].mass.sum() == pytest.approx(volume.galaxies.stars.sum(), rel=1e-9)


def test_a_galaxy_of_stars_alone_has_no_disc_left_over():
    galaxies = replace(_one_galaxy(), bulge=2e10 * np.ones(1))
    drawn = discs.stars(galaxies, _one_halo(), 4000, A, 30.0, np.random.default_rng(4))
    assert drawn.mass.sum() == pytest.approx(2e10, rel=1e-9)


def test_stars_are_most_efficient_in_halos_of_about_1e12_today():
    """Moster, Naab & White (2013, MNRAS 428, 3121), abstract: a peak of about 4 % near 1e12 Msun at redshift 0."""
    mass = np.geomspace(1e10, 1e15, 500)
    efficiency = stellar_mass(mass, 0.0) / mass
    assert (3e11 < mass[efficiency.argmax()] < 1.5e12) and efficiency.max() == pytest.approx(0.036, abs=0.004)


def test_galaxies_formed_stars_faster_when_the_universe_was_younger():
    """Speagle et al. (2014, ApJS 214, 15): about 10 Msun/yr at 10^10.5 Msun and an age of 5.9 Gyr, under 3 today."""
    assert star_formation_rate(10**10.5, 5.9) > 4.0 * star_formation_rate(10**10.5, 13.7)


def test_black_holes_weigh_a_thousandth_or_two_of_their_bulges():
    """Haering & Rix (2004, ApJ 604, L89), abstract: 0.14 % at 5e10 Msun."""
    assert black_hole_mass(5e10) / 5e10 == pytest.approx(0.0014, abs=0.0002)


def test_galaxies_leave_gas_in_their_halos(volume: Volume):
    halos = volume.halos
    outer = np.where(halos.host >= 0, halos.host, np.arange(len(halos)))
    taken = np.bincount(outer, volume.galaxies.baryons, len(halos))
    assert np.all(taken <= 0.95 * volume.cosmos.baryon_share * halos.mass)
