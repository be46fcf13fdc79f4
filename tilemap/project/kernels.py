"""The six smoothing kernels: three-dimensional profiles in, their projections along the line of sight out.

Every kernel is written in q = r / H, where H is the support radius: the kernel ends at q = 1.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from functools import cached_property

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy.interpolate import CubicSpline

from tilemap.errors import InputError

Profile = Callable[[NDArray[np.float64]], NDArray[np.float64]]

_GAUSS_X, _GAUSS_W = np.polynomial.legendre.leggauss(24)
_PROJECTION_NODES = 1025


def _spline(power: int, terms: tuple[tuple[float, float], ...]) -> Profile:
    """Truncated-power form of a B-spline: the sum of factor * (knot - q)^power where positive."""

    def profile(q: NDArray[np.float64]) -> NDArray[np.float64]:
        return sum((factor * np.clip(knot - q, 0.0, None) ** power for factor, knot in terms), np.zeros_like(q))

    return profile


def _wendland(power: int, coefficients: tuple[float, ...]) -> Profile:
    """(1 - q)^power times a polynomial in q, zero from q = 1 on."""

    def profile(q: NDArray[np.float64]) -> NDArray[np.float64]:
        return np.clip(1.0 - q, 0.0, None) ** power * np.polynomial.polynomial.polyval(q, coefficients)

    return profile


@dataclass(frozen=True, eq=False)
class Kernel:
    """One smoothing kernel in three dimensions.

    Attributes
    ----------
    name : str
    norm : float
        Constant that makes the volume integral one, in units of H^-3 (Dehnen & Aly 2012, MNRAS 425, 1068, table 1).
    support_over_fwhm : float
        H / h for the convention h = 2 sigma, sigma^2 the one-dimensional variance (same table).
    profile : callable
        The kernel without its constant, as a function of q.
    knots : tuple of float
        Where the profile changes its polynomial, besides 0 and 1.
    """

    name: str
    norm: float
    support_over_fwhm: float
    profile: Profile
    knots: tuple[float, ...] = ()

    def value(self, q: ArrayLike) -> NDArray[np.float64]:
        """W H^3 at q = r / H (any shape); zero outside the support."""
        return self.norm * self.profile(np.asarray(q, dtype=np.float64))

    def integrate_line(self, q: ArrayLike) -> NDArray[np.float64]:
        """Line-of-sight integral of the kernel, times H^2, at impact parameter q = b / H (any shape), by quadrature.

        Gauss-Legendre between the radii where the profile changes, so that each piece is smooth.
        """
        impact = np.asarray(q, dtype=np.float64)
        total = np.zeros_like(impact)
        lower = np.zeros_like(impact)
        for knot in (*sorted(self.knots), 1.0):
            upper = np.sqrt(np.clip(knot**2 - impact**2, 0.0, None))
            half = 0.5 * (upper - lower)
            z = lower[..., None] + half[..., None] * (_GAUSS_X + 1.0)
            total += 2.0 * half * (self.value(np.sqrt(impact[..., None] ** 2 + z**2)) @ _GAUSS_W)
            lower = upper
        return total

    @cached_property
    def _projection(self) -> CubicSpline:
        # In q^2 the projection has no square-root behaviour at the axis; nodes crowd where it is steep.
        q = np.linspace(0.0, 1.0, _PROJECTION_NODES)
        return CubicSpline(q, self.integrate_line(q), bc_type=((1, 0.0), (1, 0.0)))

    def projected(self, q: ArrayLike) -> NDArray[np.float64]:
        """Line-of-sight integral times H^2 at q = b / H (any shape), from a table made once; zero outside."""
        q = np.asarray(q, dtype=np.float64)
        return np.where(q < 1.0, self._projection(np.minimum(q, 1.0)), 0.0)


# Dehnen & Aly (2012), MNRAS 425, 1068, table 1, column for three dimensions.
KERNELS: dict[str, Kernel] = {
    kernel.name: kernel
    for kernel in (
        Kernel("cubic", 16 / np.pi, 1.825742, _spline(3, ((1, 1), (-4, 1 / 2))), (1 / 2,)),
        Kernel(
            "quartic", 5**6 / (512 * np.pi), 2.018932, _spline(4, ((1, 1), (-5, 3 / 5), (10, 1 / 5))), (1 / 5, 3 / 5)
        ),
        Kernel(
            "quintic", 3**7 / (40 * np.pi), 2.195775, _spline(5, ((1, 1), (-6, 2 / 3), (15, 1 / 3))), (1 / 3, 2 / 3)
        ),
        Kernel("wendland-c2", 21 / (2 * np.pi), 1.936492, _wendland(4, (1, 4))),
        Kernel("wendland-c4", 495 / (32 * np.pi), 2.207940, _wendland(6, (1, 6, 35 / 3))),
        Kernel("wendland-c6", 1365 / (64 * np.pi), 2.449490, _wendland(8, (1, 8, 25, 32))),
    )
}


def kernel_named(name: str) -> Kernel:
    """The kernel of that name; InputError naming the six where there is none."""
    if name not in KERNELS:
        raise InputError(f"kernel {name!r} is not known: choose one of {', '.join(KERNELS)}")
    return KERNELS[name]
