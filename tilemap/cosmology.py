"""A redshift in, ages, distances and angles out: a thin face over astropy's Lambda cold dark matter model."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import asdict, dataclass
from functools import cached_property
from typing import Any

from tilemap.errors import InputError


@dataclass(frozen=True)
class Cosmology:
    """The parameters that set distances and times (astropy.cosmology.LambdaCDM; curvature is what is left over).

    Parameters
    ----------
    H0 : float
        Hubble constant in km / s / Mpc.
    Om0, Ode0 : float
        Density of matter and of dark energy today, in critical densities.
    Tcmb0 : float
        Temperature of the background radiation today in K; 0 leaves radiation out, as many simulations do.

    Raises
    ------
    InputError
        Where H0 is not positive or a density is negative.
    """

    H0: float
    Om0: float
    Ode0: float
    Tcmb0: float = 0.0

    def __post_init__(self) -> None:
        if not self.H0 > 0:
            raise InputError(f"cosmology: H0 is {self.H0}: it must be positive, in km/s/Mpc")
        if not (self.Om0 >= 0 and self.Ode0 >= 0 and self.Tcmb0 >= 0):
            raise InputError(f"cosmology: Om0 {self.Om0}, Ode0 {self.Ode0}, Tcmb0 {self.Tcmb0}: none may be negative")

    @property
    def h(self) -> float:
        """H0 in units of 100 km / s / Mpc."""
        return self.H0 / 100.0

    @cached_property
    def model(self) -> Any:
        """The astropy model with these parameters."""
        from astropy.cosmology import LambdaCDM

        return LambdaCDM(H0=self.H0, Om0=self.Om0, Ode0=self.Ode0, Tcmb0=self.Tcmb0)

    def age_gyr(self, z: float) -> float:
        """Age of the universe at redshift `z`, in Gyr."""
        return float(self.model.age(z).to_value("Gyr"))

    def kpc_per_arcsec_comoving(self, z: float) -> float:
        """Comoving kpc that span one arcsecond on the sky at redshift `z`."""
        return float(self.model.kpc_comoving_per_arcmin(z).to_value("kpc / arcsec"))

    def kpc_per_arcsec_proper(self, z: float) -> float:
        """Proper kpc that span one arcsecond on the sky at redshift `z`."""
        return float(self.model.kpc_proper_per_arcmin(z).to_value("kpc / arcsec"))

    def comoving_distance_mpc(self, z: float) -> float:
        """Comoving distance along the line of sight to redshift `z`, in Mpc."""
        return float(self.model.comoving_distance(z).to_value("Mpc"))

    def luminosity_distance_mpc(self, z: float) -> float:
        """Luminosity distance to redshift `z`, in Mpc."""
        return float(self.model.luminosity_distance(z).to_value("Mpc"))

    def as_dict(self) -> dict[str, float]:
        """The parameters by name, as they go into atlas.json."""
        return asdict(self)

    @classmethod
    def from_dict(cls, values: Mapping[str, float]) -> Cosmology:
        """The inverse of :meth:`as_dict`; InputError naming the parameter that is missing or unknown."""
        try:
            return cls(**{name: float(value) for name, value in values.items()})
        except TypeError as error:
            raise InputError(f"cosmology: {error}: give H0, Om0, Ode0 and perhaps Tcmb0") from error


def scale_factor(redshift: float) -> float:
    """a = 1 / (1 + z)."""
    return 1.0 / (1.0 + redshift)
