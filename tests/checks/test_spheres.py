"""Particles sampled from spheres whose projection is published, built into an atlas and read back: the profile is that."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest

import tilemap

COUNT = 300_000
MASS = 1e12
SCALE = 0.5
WIDTH = 20.0
PIXELS = 1024
RINGS = np.geomspace(0.06, 9.5, 25)

BUILD = """
title: Sphere
snapshot:
  files: [sphere.npz]
  species:
    stars: {{position: position, mass: {mass} Msun, smoothing: {{radius: 5 kpc, kernel: {kernel}}}}}
view: {{along: {along}, centre: [1, 2, 3], width: {width}, depth: 100000, pixels: {pixels}}}
sheets:
  stars: {{species: stars, sum: mass, unit: Msun/kpc2}}
"""


def plummer_radii(u: np.ndarray) -> np.ndarray:
    """Radii that hold the shares u of the mass: M(r) = M r^3 / (r^2 + a^2)^(3/2), Plummer (1911), MNRAS 71, 460."""
    return SCALE / np.sqrt(u ** (-2 / 3) - 1)


def hernquist_radii(u: np.ndarray) -> np.ndarray:
    """The same for M(r) = M r^2 / (r + a)^2, Hernquist (1990), ApJ 356, 359, eq. 3."""
    return SCALE * np.sqrt(u) / (1 - np.sqrt(u))


def plummer_density(R: np.ndarray) -> np.ndarray:
    """Surface density M a^2 / (pi (a^2 + R^2)^2), Plummer (1911)."""
    return MASS * SCALE**2 / (np.pi * (SCALE**2 + R**2) ** 2)


def hernquist_density(R: np.ndarray) -> np.ndarray:
    """Surface density of Hernquist (1990), eqs. 32 to 34, with mass for light."""
    s = R / SCALE
    s = np.where(np.abs(s - 1) < 1e-6, 1 + 1e-6, s)
    near, far = np.minimum(s, 1 - 1e-7), np.maximum(s, 1 + 1e-7)
    x = np.where(
        s < 1,
        np.log((1 + np.sqrt(1 - near**2)) / near) / np.sqrt(1 - near**2),
        np.arccos(1 / far) / np.sqrt(far**2 - 1),
    )
    return MASS / (2 * np.pi * SCALE**2 * (1 - s**2) ** 2) * ((2 + s**2) * x - 3)


SPHERES = {"plummer": (plummer_radii, plummer_density), "hernquist": (hernquist_radii, hernquist_density)}


def in_rings(name: str, along: str, kernel: str, folder: Path) -> tuple[np.ndarray, np.ndarray]:
    """Numbers of particles in rings: as the atlas has them, and as the published profile does."""
    radii, density = SPHERES[name]
    rng = np.random.default_rng(sum(map(ord, name + along)))
    towards = rng.normal(size=(COUNT, 3))
    towards /= np.linalg.norm(towards, axis=1)[:, None]
    position = np.array([1.0, 2.0, 3.0]) + towards * radii(rng.random(COUNT))[:, None]
    np.savez(folder / "sphere.npz", position=position)
    text = BUILD.format(mass=MASS / COUNT, kernel=kernel, along=along, width=WIDTH, pixels=PIXELS)
    (folder / "sphere.yaml").write_text(text)
    piece = tilemap.open(tilemap.build(folder / "sphere.yaml", folder / "sphere.atlas")).read("stars")
    assert piece.unit == "Msun / kpc2"
    pixel = WIDTH / PIXELS
    place = (np.arange(PIXELS) + 0.5) * pixel - WIDTH / 2
    # The profile averaged over 4 x 4 points of each pixel: its curvature within one is then no matter.
    fine = (np.arange(PIXELS * 4) + 0.5) * pixel / 4 - WIDTH / 2
    expected = density(np.hypot(fine[:, None], fine)).reshape(PIXELS, 4, PIXELS, 4).mean(axis=(1, 3))
    ring = np.digitize(np.hypot(place[:, None], place).ravel(), RINGS)
    each = pixel**2 / (MASS / COUNT)
    found = np.bincount(ring, piece.values.astype(np.float64).ravel() * 1e6, len(RINGS) + 1)[1:-1] * each
    return found, np.bincount(ring, expected.ravel(), len(RINGS) + 1)[1:-1] * each


@pytest.mark.parametrize(
    ("name", "along", "kernel"),
    [("plummer", "z", "cubic"), ("hernquist", "z", "wendland-c2"), ("hernquist", "x", "quintic")],
)
def test_the_projected_profile_is_the_published_one_within_poisson_errors(name, along, kernel, tmp_path):
    found, expected = in_rings(name, along, kernel, tmp_path)
    assert expected.min() > 50
    deviation = (found - expected) / np.sqrt(expected)
    # 24 rings: the furthest of as many normal deviates lies below 4 with 99.8 %, their mean square below 2 with 99.7 %.
    assert np.abs(deviation).max() < 4
    assert (deviation**2).mean() < 2
