"""The real snapshot: reader, units and kernel conventions against what the code that ran it wrote down."""

from __future__ import annotations

from pathlib import Path

import h5py
import numpy as np
import pytest
from scipy.spatial import cKDTree

from tilemap.project.kernels import KERNELS
from tilemap.sources import Chunk, open_source

DATA = Path(__file__).parents[1] / "data" / "run32"


@pytest.fixture(scope="module")
def source(run32):
    return open_source(run32)


@pytest.fixture(scope="module")
def gas(source) -> Chunk:
    chunks = list(source.chunks("gas", ["temperature"]))
    joined = {
        name: np.concatenate([getattr(chunk, name) for chunk in chunks]) for name in ("position", "radius", "mass")
    }
    values = {"temperature": np.concatenate([chunk.values["temperature"] for chunk in chunks])}
    return Chunk(0, joined["position"], joined["radius"], joined["mass"], values)


def read_raw(name: str) -> np.ndarray:
    parts = []
    for part in (0, 1):
        with h5py.File(DATA / f"run.{part}.hdf5") as file:
            parts.append(file[name][:])
    return np.concatenate(parts)


def test_densities_recomputed_from_positions_masses_and_smoothing_lengths_are_those_in_the_file(gas, source):
    box = source.facts.box
    tree = cKDTree(gas.position % box, boxsize=box)
    kernel = KERNELS["quartic"]
    chosen = np.random.default_rng(5).choice(len(gas), 2000, replace=False)
    near = tree.query_ball_point(tree.data[chosen], gas.radius[chosen])
    centre = np.repeat(chosen, [len(each) for each in near])
    other = np.concatenate(near).astype(int)
    offset = tree.data[other] - tree.data[centre]
    offset -= box * np.round(offset / box)
    q = np.sqrt((offset**2).sum(axis=1)) / gas.radius[centre]
    weight = gas.mass[other] * kernel.value(q) / gas.radius[centre] ** 3
    density = np.bincount(centre, weight, minlength=len(gas))[chosen]
    # comoving density in code units: 1e10 of the code's own solar masses (1.98841e33 g) per cubic Mpc
    stored = read_raw("PartType0/Densities")[chosen] * 1e10 * (1.98841e33 / 1.988409870698051e33)
    assert np.max(np.abs(density / stored - 1)) < 5e-6


def test_box_redshift_and_cosmology_are_those_of_the_data_notes(source):
    facts = source.facts
    assert facts.box.tolist() == [10.0, 10.0, 10.0]
    assert facts.redshift == pytest.approx(2.03, abs=0.005)
    assert (facts.cosmology.H0, facts.cosmology.Om0, facts.cosmology.Ode0) == pytest.approx((68, 0.31, 0.69))
    assert facts.periodic


def test_each_species_has_32_cubed_particles(source):
    assert source.count("gas") == source.count("dark") == 32768


def test_age_of_the_universe_is_that_in_the_file(source):
    with h5py.File(DATA / "run.0.hdf5") as file:
        age = file["Cosmology"].attrs["Universe age [internal units]"][0]
        unit_s = file["Units"].attrs["Unit time in cgs (U_t)"][0]
    age_gyr = age * unit_s / (1e9 * 365.25 * 86400)
    assert source.facts.cosmology.age_gyr(source.facts.redshift) == pytest.approx(age_gyr, rel=1e-5)


def test_total_mass_is_mean_density_times_volume(source):
    # critical density 2.77536627e11 h^2 Msun / Mpc^3 (Peebles 1993 and others; from memory), times Omega_m and the box
    total = sum(chunk.mass.sum() for species in ("gas", "dark") for chunk in source.chunks(species))
    assert total == pytest.approx(2.77536627e11 * 0.68**2 * 0.31 * 1000, rel=1e-3)


def test_support_radius_is_the_published_multiple_of_the_stored_length(gas):
    # Dehnen & Aly (2012), MNRAS 425, 1068, table 1: quartic spline, H / h = 2.018932
    assert gas.radius == pytest.approx(2.018932 * read_raw("PartType0/SmoothingLengths").astype(float), rel=1e-7)


def test_dark_matter_has_no_radius_because_neighbours_give_it(source):
    assert next(source.chunks("dark")).radius is None


def test_temperature_is_that_of_physical_not_comoving_energy(gas):
    # stored energies are comoving, physical = stored * a^-2; constants of CODATA 2018; mu of ionised gas with X = 0.76
    energy = read_raw("PartType0/InternalEnergies").astype(float) * 1e6 / 0.33**2  # J / kg
    expected = 2 / 3 * (4 / 6.8) * 1.67262192369e-27 * energy / 1.380649e-23
    assert gas.values["temperature"] == pytest.approx(expected, rel=1e-6)


@pytest.mark.parametrize("size", [7, 999, 16384])
def test_the_size_of_chunks_changes_nothing(source, gas, size):
    chunks = list(source.chunks("gas", size=size))
    assert max(map(len, chunks)) <= size
    assert np.array_equal(np.concatenate([chunk.position for chunk in chunks]), gas.position)


def test_starts_number_the_particles_over_all_parts(source):
    chunks = list(source.chunks("gas", size=10000))
    assert [chunk.start for chunk in chunks] == [0, 10000, 16384, 26384]
