"""Formulas of fields that no file holds: plain numbers of each particle in, those of the field out, with their source."""

from __future__ import annotations

from collections.abc import Callable

import astropy.units as u
import numpy as np
from astropy import constants
from numpy.typing import NDArray

Numbers = NDArray[np.float64]
Formula = Callable[..., Numbers]
"""Called with the masses (Msun) and the columns of the field, each float64 (n,) or (n, 3), in plain units."""

HYDROGEN = 0.76
"""Share of hydrogen in the mass of gas, helium making up the rest (e.g. Planck 2018 VI, A&A 641, A6: helium 0.24)."""
SQUARED_DENSITY = u.g**2 / u.cm**3


def molecular_weight(electrons: Numbers | float) -> Numbers | float:
    """Mean mass of a particle of gas in proton masses, where there are so many free electrons to a hydrogen nucleus.

    A nucleus of hydrogen weighs 1, one of helium 4; counted for one proton mass of gas there are X of the first,
    (1 - X) / 4 of the second and X x_e electrons: mu = 4 / (1 + 3 X + 4 X x_e). Without electrons that is 1.22, and
    fully ionised 4 / (3 + 5 X) = 0.59 (Mo, van den Bosch & White 2010, Galaxy Formation and Evolution, appendix B; from
    memory).
    """
    return 4.0 / (1.0 + 3.0 * HYDROGEN + 4.0 * HYDROGEN * electrons)


ELECTRONS = {"neutral": 0.0, "ionised": 1.0 + (1.0 - HYDROGEN) / (2.0 * HYDROGEN)}
"""Free electrons to a hydrogen nucleus: none, or one of each hydrogen and two of each helium."""

_KELVIN = float(((5.0 / 3.0 - 1.0) * constants.m_p / constants.k_B).to_value(u.K / (u.km / u.s) ** 2))


def temperature_factor(gas: str) -> float:
    """Kelvin per (km/s)^2 of specific internal energy, of ionised or neutral gas; see `temperature`."""
    return _KELVIN * float(molecular_weight(ELECTRONS[gas]))


def temperature(mass: Numbers, energy: Numbers, electrons: Numbers) -> Numbers:
    """T = (gamma - 1) mu m_p u / k_B with gamma = 5/3: energy in (km/s)^2, electrons to a hydrogen nucleus, T in K."""
    return _KELVIN * molecular_weight(electrons) * energy


def density_squared(mass: Numbers, density: Numbers) -> Numbers:
    """The integral of the squared density over a particle: its mass, in Msun, times its density.

    With the volume m / rho that a particle stands for, the sum over particles of (m / rho) rho^2 W is the field
    rho^2 (Price 2012, J. Comp. Phys. 231, 759, eq. 9, with A = rho^2). Emission from collisions goes with it.
    """
    return mass * density


def line_of_sight(sight: NDArray[np.float64]) -> Formula:
    """The formula that takes a vector's component along `sight`, a unit vector (3,) in x, y and z.

    It is positive where it points the way in which depth grows.
    """

    def component(mass: Numbers, *columns: Numbers) -> Numbers:
        vectors = columns[0] if len(columns) == 1 else np.column_stack(columns)
        return vectors @ sight

    return component
