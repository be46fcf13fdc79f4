"""The six kernels against their publication and against quadrature."""

from __future__ import annotations

import numpy as np
import pytest
from reference import SHAPES
from scipy.integrate import quad

from tilemap.errors import InputError
from tilemap.project.kernels import KERNELS, kernel_named

# Dehnen & Aly (2012), MNRAS 425, 1068, table 1, three dimensions: the constant of the kernel, and H / h.
TABLE_1 = {
    "cubic": (16 / np.pi, 1.825742),
    "quartic": (15625 / (512 * np.pi), 2.018932),
    "quintic": (2187 / (40 * np.pi), 2.195775),
    "wendland-c2": (21 / (2 * np.pi), 1.936492),
    "wendland-c4": (495 / (32 * np.pi), 2.207940),
    "wendland-c6": (1365 / (64 * np.pi), 2.449490),
}
KNOTS = [1 / 5, 1 / 3, 1 / 2, 3 / 5, 2 / 3]

each_kernel = pytest.mark.parametrize("name", TABLE_1)


def in_volume(name: str, power: int) -> float:
    """Integral of the engine's kernel times r^power over the unit ball."""
    kernel = KERNELS[name]
    return quad(lambda q: 4 * np.pi * q ** (2 + power) * float(kernel.value(q)), 0, 1, points=KNOTS, epsabs=1e-13)[0]


def test_there_are_the_six_kernels_of_the_table():
    assert set(KERNELS) == set(TABLE_1)


@each_kernel
def test_the_volume_integral_is_one(name):
    assert in_volume(name, 0) == pytest.approx(1, abs=1e-10)


@each_kernel
def test_the_constant_is_that_of_the_table(name):
    assert KERNELS[name].norm == pytest.approx(TABLE_1[name][0], rel=1e-12)


@each_kernel
def test_the_ratio_of_support_to_smoothing_length_is_that_of_the_table(name):
    assert KERNELS[name].support_over_fwhm == pytest.approx(TABLE_1[name][1], abs=5e-7)


@each_kernel
def test_the_ratio_of_support_to_smoothing_length_follows_from_h_being_twice_the_standard_deviation(name):
    sigma = np.sqrt(in_volume(name, 2) / 3)
    assert KERNELS[name].support_over_fwhm == pytest.approx(1 / (2 * sigma), rel=1e-6)


@each_kernel
def test_the_profile_is_the_published_one(name):
    q = np.linspace(0, 1.2, 400)
    published = np.where(q < 1, SHAPES[name](q), 0) / SHAPES[name](np.zeros(1))
    assert KERNELS[name].value(q) == pytest.approx(published * KERNELS[name].value(0.0), abs=1e-10)


@each_kernel
def test_the_projection_is_the_integral_along_the_line_of_sight(name):
    kernel = KERNELS[name]
    impact = np.linspace(0, 0.999, 23)
    expected = [
        2 * quad(lambda z, b=b: float(kernel.value(np.hypot(b, z))), 0, np.sqrt(1 - b * b), limit=200, epsabs=1e-12)[0]
        for b in impact
    ]
    assert kernel.projected(impact) == pytest.approx(expected, abs=1e-7 * expected[0])


@each_kernel
def test_the_projection_holds_the_whole_mass(name):
    kernel = KERNELS[name]
    assert quad(lambda q: 2 * np.pi * q * float(kernel.projected(q)), 0, 1, limit=200)[0] == pytest.approx(1, abs=1e-8)


@each_kernel
def test_outside_the_support_there_is_nothing(name):
    kernel = KERNELS[name]
    outside = np.array([1.0, 1.0001, 2.0, 1e6])
    assert not kernel.value(outside).any()
    assert not kernel.projected(outside).any()


def test_an_unknown_kernel_is_refused_with_the_names_of_those_there_are():
    with pytest.raises(InputError, match=r"'gauss' is not known.*cubic, quartic, quintic, wendland-c2"):
        kernel_named("gauss")
