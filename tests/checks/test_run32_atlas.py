"""A real snapshot from its files to an atlas: what the atlas says against the files themselves, read with h5py alone."""

from __future__ import annotations

from pathlib import Path

import h5py
import numpy as np
import pytest

import tilemap

ROOT = Path(__file__).parents[2]
DATA = ROOT / "tests" / "data" / "run32"
BOX = 10.0
# The solar mass of the code that ran it, and astropy's (IAU 2015 nominal GM over CODATA G).
CODE_MSUN, MSUN = 1.98841e33, 1.988409870698051e33


@pytest.fixture(scope="module")
def atlas(tmp_path_factory):
    out = tmp_path_factory.mktemp("run32") / "run32.atlas"
    return tilemap.open(tilemap.build(ROOT / "builds" / "run32.yaml", out))


def stored(name: str) -> np.ndarray:
    parts = []
    for part in (0, 1):
        with h5py.File(DATA / f"run.{part}.hdf5") as file:
            parts.append(file[name][:])
    return np.concatenate(parts).astype(np.float64)


@pytest.fixture(scope="module")
def groups() -> np.ndarray:
    return np.genfromtxt(DATA / "groups.csv", delimiter=",", names=True)


@pytest.mark.parametrize(("sheet", "species"), [("gas", "PartType0"), ("dark", "PartType1")])
def test_the_total_of_a_sheet_is_the_mass_in_the_files(atlas, sheet, species):
    mass = stored(f"{species}/Masses").sum() * 1e10 * CODE_MSUN / MSUN
    described = atlas.sheet(sheet)
    assert described["total_unit"] == "solMass"
    assert described["total"] == pytest.approx(mass, rel=1e-6)


@pytest.mark.parametrize(("sheet", "species"), [("gas", "PartType0"), ("dark", "PartType1")])
def test_the_totals_of_slabs_are_the_masses_at_their_depths(atlas, sheet, species):
    depth = stored(f"{species}/Coordinates")[:, 2] % BOX
    mass = stored(f"{species}/Masses") * 1e10 * CODE_MSUN / MSUN
    expected = np.histogram(depth, bins=atlas.info["slabs"], weights=mass)[0]
    assert atlas.sheet(sheet)["totals"] == pytest.approx(expected, rel=1e-6)


@pytest.mark.parametrize("sheet", ["gas", "dark"])
@pytest.mark.parametrize("pixels", [None, 512, 128])
def test_the_pixels_of_every_level_add_up_to_the_total_within_the_coding(atlas, sheet, pixels):
    piece = atlas.read(sheet, pixels=pixels)
    kpc2_of_pixel = (BOX * 1000 / piece.values.shape[0]) ** 2
    # Rounding is 0.23 % at most, and goes both ways.
    assert piece.values.sum(dtype=np.float64) * kpc2_of_pixel == pytest.approx(atlas.sheet(sheet)["total"], rel=2e-4)


def test_the_temperature_map_stays_within_the_temperatures_of_the_particles(atlas):
    # T = 2/3 (mu m_p / k) u, u = stored / a^2, ionised gas of 76 % hydrogen; constants of CODATA 2018.
    energy = stored("PartType0/InternalEnergies") * 1e6 / 0.33**2
    temperature = 2 / 3 * (4 / 6.8) * 1.67262192369e-27 * energy / 1.380649e-23
    values = atlas.read("temperature").values
    assert not np.isnan(values).any()
    rounding = 10 ** (atlas.sheet("temperature")["step"] / 2)
    allowed = 1e-3 * (temperature.max() - temperature.min())
    assert values.min() >= temperature.min() / rounding - allowed
    assert values.max() <= temperature.max() * rounding + allowed


def test_the_mean_temperature_is_that_of_the_particles(atlas):
    energy = stored("PartType0/InternalEnergies") * 1e6 / 0.33**2
    temperature = 2 / 3 * (4 / 6.8) * 1.67262192369e-27 * energy / 1.380649e-23
    mass = stored("PartType0/Masses")
    gas, mean = (atlas.read(name).values.astype(np.float64) for name in ("gas", "temperature"))
    assert (gas * mean).sum() / gas.sum() == pytest.approx((mass * temperature).sum() / mass.sum(), rel=1e-3)


def test_each_of_the_63_groups_stands_out_in_dark_matter(atlas, groups):
    # Each is denser than 95 % of the places of its slab; half of them, than 99.5 %.
    assert len(groups) == 63
    across = 128
    slabs = [atlas.read("dark", slabs=slab, pixels=across).values for slab in range(4)]
    above = []
    for group in groups:
        slab = int(np.digitize(group["z_Mpc"], atlas.info["slabs"])) - 1
        here = atlas.read("dark", (group["x_Mpc"], group["y_Mpc"]), width=BOX / across, slabs=slab)
        above.append((slabs[slab] < here.values.mean()).mean())
    assert min(above) > 0.95
    assert np.median(above) > 0.995


def test_the_heaviest_group_has_the_dark_mass_of_the_particles_around_it(atlas, groups):
    group = groups[np.argmax(groups["dark_mass_Msun"])]
    centre, width = np.array([group["x_Mpc"], group["y_Mpc"]]), 1.0
    piece = atlas.read("dark", tuple(centre), width=width)
    in_map = piece.values.sum(dtype=np.float64) * (piece.width * 1000 / piece.values.shape[0]) ** 2
    place = stored("PartType1/Coordinates")[:, :2]
    apart = (place - piece.centre + BOX / 2) % BOX - BOX / 2
    near = (np.abs(apart) < piece.width / 2).all(axis=1)
    in_files = stored("PartType1/Masses")[near].sum() * 1e10 * CODE_MSUN / MSUN
    # Kernels carry some mass across the rim of the window, both ways.
    assert in_map == pytest.approx(in_files, rel=0.05)


def test_the_catalogue_is_the_63_groups(atlas):
    described = atlas.epoch()["catalogue"]
    assert (described["count"], described["outside"]) == (63, 0)


def test_the_atlas_verifies(atlas):
    from tilemap.pyramid.verify import verify

    assert verify(atlas.path) == []
