"""The initial density of the Marram volume: a power spectrum in, a Gaussian field and its displacements out.

Lengths are comoving Mpc, wave numbers 1/Mpc; fields are periodic cubes of n cells a side.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import scipy.fft
from numpy.typing import ArrayLike, NDArray

CRITICAL_DENSITY = 2.77536627e11  # Msun h^2 / Mpc^3 today, 3 H0^2 / (8 pi G); from memory

Floats = NDArray[np.float64]
Field = NDArray[np.float32]


@dataclass(frozen=True)
class Cosmos:
    """The numbers of the invented universe: flat, with a cosmological constant and no radiation."""

    h: float = 0.68
    omega_m: float = 0.31
    omega_b: float = 0.049
    sigma8: float = 0.81
    tilt: float = 0.967
    cmb_temperature: float = 2.7255

    @property
    def omega_l(self) -> float:
        """Share of the cosmological constant today."""
        return 1.0 - self.omega_m

    @property
    def mean_density(self) -> float:
        """Matter in Msun per comoving Mpc^3."""
        return self.omega_m * CRITICAL_DENSITY * self.h**2

    @property
    def baryon_share(self) -> float:
        """Share of the baryons in all matter."""
        return self.omega_b / self.omega_m

    def expansion(self, a: ArrayLike) -> Floats:
        """H(a) / H0 at scale factor `a` (any shape)."""
        a = np.asarray(a, dtype=np.float64)
        return np.sqrt(self.omega_m / a**3 + self.omega_l)

    def growth(self, a: ArrayLike) -> Floats:
        """Linear growth factor at scale factor `a` (any shape), 1 today: the integral of Heath (1977, MNRAS 179, 351)."""
        return self._growth_integral(a) / self._growth_integral(1.0)

    def growth_rate(self, a: ArrayLike) -> Floats:
        """d ln D / d ln a, by central difference of :meth:`growth`."""
        a = np.asarray(a, dtype=np.float64)
        step = 1e-4
        return (np.log(self.growth(a * (1 + step))) - np.log(self.growth(a * (1 - step)))) / (
            np.log1p(step) - np.log1p(-step)
        )

    def _growth_integral(self, a: ArrayLike) -> Floats:
        a = np.asarray(a, dtype=np.float64)
        nodes, weights = np.polynomial.legendre.leggauss(48)
        x = a[..., None] * 0.5 * (nodes + 1.0)
        return self.expansion(a) * 0.5 * a * ((x * self.expansion(x)) ** -3.0 @ weights)


def transfer(k: ArrayLike, cosmos: Cosmos) -> Floats:
    """Transfer function without wiggles: Eisenstein & Hu (1998, ApJ 496, 605), equations 26 and 28 to 31.

    Parameters
    ----------
    k : array, any shape
        Wave number in 1/Mpc.
    """
    k = np.asarray(k, dtype=np.float64)
    om, share = cosmos.omega_m * cosmos.h**2, cosmos.baryon_share
    sound = 44.5 * np.log(9.83 / om) / np.sqrt(1.0 + 10.0 * (cosmos.omega_b * cosmos.h**2) ** 0.75)
    alpha = 1.0 - 0.328 * np.log(431.0 * om) * share + 0.38 * np.log(22.3 * om) * share**2
    shape = cosmos.omega_m * cosmos.h * (alpha + (1.0 - alpha) / (1.0 + (0.43 * k * sound) ** 4))
    q = k / cosmos.h * (cosmos.cmb_temperature / 2.7) ** 2 / shape
    low = np.log(2.0 * np.e + 1.8 * q)
    return low / (low + (14.2 + 731.0 / (1.0 + 62.5 * q)) * q**2)


def top_hat(x: ArrayLike) -> Floats:
    """Fourier transform of a uniform ball at x = k R; 1 at x = 0."""
    x = np.asarray(x, dtype=np.float64)
    safe = np.where(x < 1e-3, 1.0, x)
    return np.where(x < 1e-3, 1.0 - x**2 / 10.0, 3.0 * (np.sin(safe) - safe * np.cos(safe)) / safe**3)


class Spectrum:
    """Linear power spectrum today, P(k) in Mpc^3 at k in 1/Mpc, normalised to sigma8."""

    def __init__(self, cosmos: Cosmos) -> None:
        self.cosmos = cosmos
        self._amplitude = 1.0
        self._amplitude = (cosmos.sigma8 / self.sigma(8.0 / cosmos.h)) ** 2

    def __call__(self, k: ArrayLike) -> Floats:
        k = np.asarray(k, dtype=np.float64)
        return self._amplitude * k**self.cosmos.tilt * transfer(k, self.cosmos) ** 2

    def sigma(self, radius: float) -> float:
        """Linear rms contrast today in a top-hat sphere of `radius` Mpc, by quadrature over ln k."""
        k = np.geomspace(1e-5, 1e3, 20_001) / radius
        power = self(k) * k**3 / (2.0 * np.pi**2) * top_hat(k * radius) ** 2
        return float(np.sqrt(np.trapezoid(power, np.log(k))))


def wave_numbers(n: int, box: float) -> tuple[Field, Field, Field]:
    """Wave vector along each axis in 1/Mpc, shaped to broadcast over a half-complex transform of n^3 cells."""
    k = 2.0 * np.pi / box * scipy.fft.fftfreq(n, 1.0 / n)
    half = 2.0 * np.pi / box * scipy.fft.rfftfreq(n, 1.0 / n)
    return (
        k.astype(np.float32)[:, None, None],
        k.astype(np.float32)[None, :, None],
        half.astype(np.float32)[None, None, :],
    )


def gaussian_field(n: int, box: float, spectrum: Spectrum, rng: np.random.Generator) -> NDArray[np.complex64]:
    """Transform of a Gaussian contrast field today: shape (n, n, n // 2 + 1), scipy's unnormalised convention.

    White noise drawn in real space and coloured by the square root of the spectrum, so that every mode is Gaussian.
    """
    modes = scipy.fft.rfftn(rng.standard_normal((n, n, n), dtype=np.float32), workers=-1)
    kx, ky, kz = wave_numbers(n, box)
    k = np.sqrt(kx**2 + ky**2 + kz**2)
    table = np.geomspace(0.5 * 2.0 * np.pi / box, 2.0 * np.pi / box * n, 4096)
    colour = np.exp(np.interp(np.log(np.maximum(k, table[0])), np.log(table), 0.5 * np.log(spectrum(table))))
    colour[0, 0, 0] = 0.0
    modes *= (colour * np.sqrt(n**3 / box**3)).astype(np.float32)
    return modes


def smoothed(modes: NDArray[np.complex64], box: float, radius: float) -> Field:
    """The field of `modes` in real space, shape (n, n, n), smoothed by a Gaussian of `radius` Mpc."""
    n = modes.shape[0]
    kx, ky, kz = wave_numbers(n, box)
    window = np.exp(-0.5 * radius**2 * kx**2) * np.exp(-0.5 * radius**2 * ky**2) * np.exp(-0.5 * radius**2 * kz**2)
    return scipy.fft.irfftn(modes * window, s=(n, n, n), workers=-1, overwrite_x=True)


def inverse_gradient(modes: NDArray[np.complex64], box: float, on_mesh: bool = False) -> list[Field]:
    """Three fields (n, n, n) in Mpc whose divergence is minus the contrast of `modes`: i k / k^2 times the modes.

    Of the initial contrast this is the displacement of Zel'dovich (1970, A&A 5, 84); of any contrast it is the
    gravitational pull in units of 3/2 Omega_m H0^2 / a. `on_mesh` takes the slope over four and the curvature over three
    neighbouring cells instead (Hockney & Eastwood 1981), which does not ring around single particles.
    """
    n = modes.shape[0]
    cell = box / n
    axes = wave_numbers(n, box)
    if on_mesh:
        slopes = [(8.0 * np.sin(k * cell) - np.sin(2.0 * k * cell)) / (6.0 * cell) for k in axes]
        squares = [(2.0 / cell * np.sin(0.5 * k * cell)) ** 2 for k in axes]
    else:
        # The Nyquist plane has no sign, hence no slope.
        slopes = [np.where(np.abs(k) >= np.pi / cell * (1 - 1e-6), 0.0, k) for k in axes]
        squares = [k**2 for k in axes]
    inverse = squares[0] + squares[1] + squares[2]
    inverse[0, 0, 0] = 1.0
    np.reciprocal(inverse, out=inverse)
    scaled = modes * inverse
    return [
        scipy.fft.irfftn(scaled * (1j * slope).astype(np.complex64), s=(n, n, n), workers=-1, overwrite_x=True)
        for slope in slopes
    ]
