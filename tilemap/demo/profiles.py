"""How matter lies inside halos and galaxies: published profiles as shares of mass within a radius, and their inverses.

Shares run from 0 to 1; radii are in units of the halo's radius unless a line says otherwise.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike

from tilemap.demo.field import Cosmos, Floats

OVERDENSITY = 200.0  # of a halo, against the mean matter density
GRAVITY = 4.30091e-9  # G in Mpc (km/s)^2 / Msun; CODATA 2018 with the IAU's nominal Sun
PROTON_OVER_BOLTZMANN = 121.147  # m_p / k_B in K / (km/s)^2; CODATA 2018
IONISED_WEIGHT = 0.588  # mean mass of a particle of ionised primordial gas in m_p, 4 / (3 + 5 X) at X = 0.76
HOT_CORE = 0.15  # core of the hot gas over the halo's radius: of the order of 0.1 in clusters, common practice
HOT_REACH = 1.4  # where the hot gas ends over the halo's radius: winds have puffed it up


def halo_radius(mass: ArrayLike, cosmos: Cosmos) -> Floats:
    """Comoving radius in Mpc of the sphere that holds `mass` Msun at 200 times the mean matter density."""
    return np.cbrt(3.0 * np.asarray(mass, dtype=np.float64) / (4.0 * np.pi * OVERDENSITY * cosmos.mean_density))


def circular_speed(mass: ArrayLike, radius: ArrayLike, a: float) -> Floats:
    """Speed in km/s on a circle that encloses `mass` Msun at `radius` comoving Mpc, scale factor `a`."""
    return np.sqrt(GRAVITY * np.asarray(mass, dtype=np.float64) / (np.asarray(radius) * a))


def virial_temperature(speed: ArrayLike) -> Floats:
    """Temperature in K of ionised gas in a halo of circular speed `speed` km/s: mu m_p V^2 / (2 k_B).

    Barkana & Loeb (2001, Physics Reports 349, 125), equation 26.
    """
    return 0.5 * IONISED_WEIGHT * PROTON_OVER_BOLTZMANN * np.asarray(speed, dtype=np.float64) ** 2


def concentration(mass: ArrayLike, redshift: float, cosmos: Cosmos) -> Floats:
    """Concentration of a halo of `mass` Msun against the mean density: Duffy et al. (2008, MNRAS 390, L64), table 1.

    The row for all halos, 200 times the mean, redshifts 0 to 2; from memory.
    """
    return 10.14 * (np.asarray(mass, dtype=np.float64) * cosmos.h / 2e12) ** -0.081 * (1.0 + redshift) ** -1.01


def nfw_share(x: ArrayLike, c: ArrayLike) -> Floats:
    """Share of the mass within radius `x`: Navarro, Frenk & White (1997, ApJ 490, 493), concentration `c`."""
    x, c = np.asarray(x, dtype=np.float64), np.asarray(c, dtype=np.float64)
    return _nfw_mass(c * x) / _nfw_mass(c)


def nfw_radius(share: ArrayLike, c: ArrayLike) -> Floats:
    """Radius within which `share` of the mass lies, concentration `c`: the inverse of :func:`nfw_share`, good to 1e-5."""
    c = np.asarray(c, dtype=np.float64)
    x = np.concatenate([[0.0], np.geomspace(1e-5, 1e3, 6000)])
    # The mass grows as x^2 / 2 at first: in its root the table is nearly straight there.
    return np.interp(np.sqrt(np.asarray(share) * _nfw_mass(c)), np.sqrt(_nfw_mass(x)), x) / c


def nfw_peak_speed(speed: ArrayLike, c: ArrayLike) -> Floats:
    """Highest circular speed of a halo whose speed at its radius is `speed`: the maximum lies at x = 2.1626 / c."""
    return np.asarray(speed) * np.sqrt(nfw_share(2.1626 / np.asarray(c), c) * np.asarray(c) / 2.1626)


def hot_radius(share: ArrayLike) -> Floats:
    """Radius within which `share` of the hot gas lies: density 1 / (1 + (x / core)^2), cut at HOT_REACH.

    The beta model of Cavaliere & Fusco-Femiano (1976, A&A 49, 137) with beta = 2/3.
    """
    x = np.concatenate([[0.0], np.geomspace(1e-3, HOT_REACH, 2000)])
    mass = x / HOT_CORE - np.arctan(x / HOT_CORE)
    return np.interp(np.cbrt(np.asarray(share) * mass[-1]), np.cbrt(np.maximum(mass, 0.0)), x)


def hernquist_radius(share: ArrayLike) -> Floats:
    """Radius, in scale lengths, within which `share` of the mass lies: Hernquist (1990, ApJ 356, 359), equation 3."""
    root = np.sqrt(np.asarray(share, dtype=np.float64))
    return root / (1.0 - root)


def disc_share(x: ArrayLike) -> Floats:
    """Share of an exponential disc within cylinder radius `x` in scale lengths: 1 - (1 + x) exp(-x)."""
    x = np.asarray(x, dtype=np.float64)
    return 1.0 - (1.0 + x) * np.exp(-x)


def disc_radius(share: ArrayLike) -> Floats:
    """Radius in scale lengths within which `share` of an exponential disc lies: the inverse of :func:`disc_share`."""
    x = np.concatenate([[0.0], np.geomspace(1e-4, 30.0, 4000)])
    return np.interp(np.sqrt(np.asarray(share, dtype=np.float64)), np.sqrt(disc_share(x)), x)


def stellar_mass(halo_mass: ArrayLike, redshift: float) -> Floats:
    """Stellar mass in Msun at the centre of a halo of `halo_mass` Msun: Moster, Naab & White (2013, MNRAS 428, 3121).

    Equations 2 and 11 to 14 with table 1; from memory.
    """
    turn = redshift / (1.0 + redshift)
    pivot = 10.0 ** (11.590 + 1.195 * turn)
    height, low, high = 0.0351 - 0.0247 * turn, 1.376 - 0.826 * turn, 0.608 + 0.329 * turn
    ratio = np.asarray(halo_mass, dtype=np.float64) / pivot
    return 2.0 * height * ratio * pivot / (ratio**-low + ratio**high)


def star_formation_rate(stars: ArrayLike, age_gyr: float) -> Floats:
    """Msun/yr of a star-forming galaxy of `stars` Msun when the universe is `age_gyr` old.

    Speagle et al. (2014, ApJS 214, 15), equation 28; from memory.
    """
    slope, height = 0.84 - 0.026 * age_gyr, 6.51 - 0.11 * age_gyr
    return 10.0 ** (slope * np.log10(np.asarray(stars, dtype=np.float64)) - height)


def cold_gas_mass(stars: ArrayLike, redshift: float) -> Floats:
    """Msun of cold gas beside `stars` Msun: Tacconi et al. (2018, ApJ 853, 179), table 3, on the main sequence; from memory."""
    log_stars = np.log10(np.asarray(stars, dtype=np.float64))
    return 10.0 ** (log_stars + 0.12 - 3.62 * (np.log10(1.0 + redshift) - 0.66) ** 2 - 0.35 * (log_stars - 10.7))


def black_hole_mass(bulge: ArrayLike) -> Floats:
    """Msun of the black hole in a bulge of `bulge` Msun: Haering & Rix (2004, ApJ 604, L89), equation 1."""
    return 10.0 ** (8.20 + 1.12 * (np.log10(np.asarray(bulge, dtype=np.float64)) - 11.0))


def _nfw_mass(x: ArrayLike) -> Floats:
    x = np.asarray(x, dtype=np.float64)
    # Below 1e-3 the two terms cancel; their series there is x^2 / 2 - 2 x^3 / 3.
    return np.where(x < 1e-3, x**2 * (0.5 - 2.0 / 3.0 * x), np.log1p(x) - x / (1.0 + x))
