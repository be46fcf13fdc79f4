"""The galaxy in every halo: a table of halos in, a table of galaxies out, from published relations and the seed."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from tilemap.demo.field import Cosmos, Floats
from tilemap.demo.halos import Halos
from tilemap.demo.matter import random_directions
from tilemap.demo.profiles import black_hole_mass, cold_gas_mass, star_formation_rate, stellar_mass

FAINTEST = 5e6  # Msun of stars, below which a halo stays dark
ELLIPTICAL_FROM = 7e12  # Msun of the halo around galaxies that have lost their discs
BLACK_HOLES_FROM = 3e10  # Msun of stars
MOST_BARYONS = 0.55  # share of a halo's baryons that may be in its galaxy


@dataclass
class Galaxies:
    """One row for every halo, zeros where it has no galaxy.

    Attributes
    ----------
    stars, bulge, cold_gas, black_hole : (k,) float64, Msun; `bulge` is part of `stars`
    star_formation : (k,) float64, Msun/yr
    disc : (k,) float64, scale length of the star disc, comoving Mpc
    gas_disc : (k,) float64, the same of the gas disc
    bulge_scale : (k,) float64, Hernquist's scale, comoving Mpc
    axis : (k, 3) float64, unit vector of the spin
    arms : (k,) int, number of spiral arms
    pitch : (k,) float64, rad
    """

    stars: Floats
    bulge: Floats
    cold_gas: Floats
    black_hole: Floats
    star_formation: Floats
    disc: Floats
    gas_disc: Floats
    bulge_scale: Floats
    axis: Floats
    arms: NDArray[np.int64]
    pitch: Floats

    @property
    def baryons(self) -> Floats:
        """Msun that the galaxy has taken from its halo's gas, (k,)."""
        return self.stars + self.cold_gas + self.black_hole


def make_galaxies(halos: Halos, redshift: float, age_gyr: float, cosmos: Cosmos, rng: np.random.Generator) -> Galaxies:
    """Draw the galaxy of every halo.

    Sizes follow Mo, Mao & White (1998, MNRAS 295, 319), equation 12: scale length = spin / sqrt(2) times the halo's
    radius. Spins are log-normal with the scatter of Bullock et al. (2001, ApJ 555, 240); their median is that of the cold
    gas, about twice the dark matter's 0.035 (Danovich et al. 2015, MNRAS 449, 2087, give more still), for the gas disc;
    the star disc is 0.55 as wide: common practice, no source.
    """
    count = len(halos)
    satellite = halos.host >= 0
    big = np.where(satellite, 0.0, halos.mass) > ELLIPTICAL_FROM

    # A satellite's stars were made in the halo it had before the tides: on average half as heavy again.
    stars = stellar_mass(halos.mass * np.where(satellite, 1.5, 1.0), redshift) * 10.0 ** (
        0.15 * rng.standard_normal(count)
    )
    bright = stars > FAINTEST
    stars = np.where(bright, stars, 0.0)
    safe = np.maximum(stars, FAINTEST)
    # The relation counts molecules; there is about as much atomic gas again: common practice, no source.
    cold = np.where(bright, 2.0 * cold_gas_mass(safe, redshift), 0.0)
    # Satellites have lost most of their gas; the heaviest galaxies have used theirs up.
    cold *= np.where(satellite, 0.25, 1.0) * np.where(big, 0.4, 1.0)
    ceiling = MOST_BARYONS * cosmos.baryon_share * halos.mass
    stars = np.minimum(stars, 0.5 * ceiling)
    cold = np.minimum(cold, 0.5 * ceiling)

    bulge_share = np.clip(0.08 + 0.22 * np.log10(safe / 1e10) + 0.08 * rng.standard_normal(count), 0.05, 0.6)
    # Dwarfs are puffy all through.
    bulge_share = np.where(big, 0.9, np.where(safe < 3e8, 1.0, bulge_share))
    bulge = stars * bulge_share
    spin = np.clip(0.072 * np.exp(0.4 * rng.standard_normal(count)), 0.035, 0.14)
    gas_disc = spin / np.sqrt(2.0) * halos.radius
    return Galaxies(
        stars=stars,
        bulge=bulge,
        cold_gas=cold,
        black_hole=np.where(stars > BLACK_HOLES_FROM, black_hole_mass(np.maximum(bulge, FAINTEST)), 0.0),
        star_formation=np.where(
            stars > 0, star_formation_rate(safe, age_gyr) * np.where(satellite, 0.3, np.where(big, 0.1, 1.0)), 0.0
        ),
        disc=0.55 * gas_disc,
        gas_disc=gas_disc,
        bulge_scale=np.where(bulge_share > 0.6, 0.35, 0.12) * gas_disc,
        axis=random_directions(count, rng),
        arms=rng.choice([2, 2, 2, 2, 3, 4], count),
        pitch=np.radians(rng.uniform(11.0, 26.0, count)),
    )
