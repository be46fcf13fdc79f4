"""The initial density against the published formulas, and against other people's formulas for the same thing."""

from __future__ import annotations

import numpy as np
import pytest
import scipy.fft
from astropy.cosmology import FlatLambdaCDM
from scipy.integrate import quad

from tilemap.demo.field import (
    Cosmos,
    Spectrum,
    gaussian_field,
    inverse_gradient,
    smoothed,
    top_hat,
    transfer,
    wave_numbers,
)

COSMOS = Cosmos()
BOX, N = 60.0, 64


@pytest.fixture(scope="module")
def modes() -> np.ndarray:
    return gaussian_field(N, BOX, Spectrum(COSMOS), np.random.default_rng(5))


def test_the_transfer_function_is_one_on_the_largest_scales():
    assert transfer(1e-6, COSMOS) == pytest.approx(1.0, abs=1e-4)


def test_the_transfer_function_without_baryons_is_that_of_cold_dark_matter():
    """Bardeen et al. (1986, ApJ 304, 15), equation G3: another fit to the same thing, a few per cent apart."""
    cosmos = Cosmos(omega_b=1e-4)
    k = np.geomspace(1e-3, 10.0, 50)
    q = k / (cosmos.omega_m * cosmos.h**2)
    bardeen = np.log1p(2.34 * q) / (2.34 * q)
    bardeen *= (1.0 + 3.89 * q + (16.1 * q) ** 2 + (5.46 * q) ** 3 + (6.71 * q) ** 4) ** -0.25
    np.testing.assert_allclose(transfer(k, cosmos), bardeen, rtol=0.08)


def test_baryons_lower_the_small_scales():
    """Eisenstein & Hu (1998), section 4.2: the shape parameter falls below the sound horizon."""
    assert transfer(1.0, COSMOS) < 0.9 * transfer(1.0, Cosmos(omega_b=1e-4))


def test_the_small_scales_fall_as_log_k_over_k_squared():
    """The logarithmic growth before matter domination: q^2 T / ln q tends to a constant, Eisenstein & Hu (1998), eq. 28."""
    k = np.array([1e4, 1e8])
    scaled = transfer(k, COSMOS) * k**2 / np.log(k)
    assert scaled[1] / scaled[0] == pytest.approx(1.0, abs=0.2)


def test_sigma_8_by_quadrature_is_the_one_asked_for():
    spectrum, radius = Spectrum(COSMOS), 8.0 / COSMOS.h

    def integrand(log_k: float) -> float:
        k = np.exp(log_k)
        x = k * radius
        window = 3.0 * (np.sin(x) - x * np.cos(x)) / x**3
        return float(spectrum(k) * k**3 / (2.0 * np.pi**2) * window**2)

    square = quad(integrand, np.log(1e-4), np.log(20.0), limit=500)[0]
    assert np.sqrt(square) == pytest.approx(COSMOS.sigma8, rel=2e-3)


def test_the_top_hat_is_smooth_where_its_series_takes_over():
    assert top_hat(0.9999e-3) == pytest.approx(top_hat(1.0001e-3), abs=1e-8)


def test_growth_follows_the_fit_of_carroll_press_and_turner():
    """Carroll, Press & Turner (1992, ARA&A 30, 499), equation 29; good to about 2 per cent."""
    a = np.linspace(0.1, 1.0, 10)

    def growth(a: np.ndarray) -> np.ndarray:
        square = COSMOS.expansion(a) ** 2
        matter, vacuum = COSMOS.omega_m / a**3 / square, COSMOS.omega_l / square
        return 2.5 * a * matter / (matter ** (4 / 7) - vacuum + (1 + matter / 2) * (1 + vacuum / 70))

    np.testing.assert_allclose(COSMOS.growth(a), growth(a) / growth(np.ones(1)), rtol=0.02)


def test_the_growth_rate_is_the_0_55th_power_of_the_matter_share():
    """Linder (2005, PhRvD 72, 043529): good to a fraction of a per cent in a flat universe."""
    matter = COSMOS.omega_m / 0.5**3 / COSMOS.expansion(0.5) ** 2
    assert COSMOS.growth_rate(0.5) == pytest.approx(matter**0.55, rel=0.01)


def test_the_expansion_is_that_of_astropy():
    model = FlatLambdaCDM(H0=68.0, Om0=0.31, Tcmb0=0.0)
    np.testing.assert_allclose(COSMOS.expansion([0.2, 0.5, 1.0]), model.efunc(np.array([4.0, 1.0, 0.0])), rtol=1e-12)


def test_the_mean_density_is_that_of_astropy():
    model = FlatLambdaCDM(H0=68.0, Om0=0.31, Tcmb0=0.0)
    assert COSMOS.mean_density == pytest.approx(0.31 * model.critical_density0.to_value("Msun / Mpc3"), rel=1e-4)


def test_the_realised_power_follows_the_spectrum_in_every_bin(modes):
    """A bin of m modes scatters by sqrt(2 / m) of its mean around it; nine of ten bins within two of these."""
    kx, ky, kz = wave_numbers(N, BOX)
    k = np.sqrt(kx**2 + ky**2 + kz**2)
    power = np.abs(modes) ** 2 * BOX**3 / float(N) ** 6
    # The half-complex transform holds each pair of opposite modes once, but for its first and last plane.
    weight = np.broadcast_to(np.where((kz == 0) | (kz == kz.max()), 0.5, 1.0), k.shape)
    fundamental = 2.0 * np.pi / BOX
    edges = fundamental * np.arange(1.5, N // 2, 1.5)
    which = np.digitize(k.ravel(), edges)
    bins = len(edges) + 1
    pairs = np.bincount(which, weight.ravel(), bins)[1:-1]
    ratio = power.ravel().astype(np.float64) / Spectrum(COSMOS)(np.maximum(k.ravel(), 0.1 * fundamental))
    mean = np.bincount(which, weight.ravel() * ratio, bins)[1:-1] / pairs
    assert np.mean(np.abs(mean - 1.0) < 2.0 / np.sqrt(pairs)) >= 0.9


def test_the_realised_field_has_no_mean(modes):
    assert abs(smoothed(modes, BOX, 0.0).mean()) < 1e-6


def test_the_divergence_of_the_displacement_is_minus_the_contrast(modes):
    n_smooth = smoothed(modes, BOX, 2.5 * BOX / N)
    kx, ky, kz = wave_numbers(N, BOX)
    window = np.exp(-0.5 * (2.5 * BOX / N) ** 2 * (kx**2 + ky**2 + kz**2))
    displacement = inverse_gradient((modes * window).astype(np.complex64), BOX)
    divergence = sum(
        scipy.fft.irfftn(1j * axis * scipy.fft.rfftn(field), s=field.shape)
        for axis, field in zip((kx, ky, kz), displacement, strict=True)
    )
    np.testing.assert_allclose(divergence, -n_smooth, atol=2e-3 * n_smooth.std())


def test_a_gaussian_of_no_width_changes_nothing(modes):
    np.testing.assert_allclose(
        smoothed(modes, BOX, 0.0), scipy.fft.irfftn(modes, s=(N, N, N)), atol=1e-5 * np.abs(modes).max() / N**1.5
    )
