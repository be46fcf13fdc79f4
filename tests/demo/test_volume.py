"""The volume as a whole, and its files as another program reads them."""

from __future__ import annotations

import hashlib
from pathlib import Path

import h5py
import numpy as np
import pytest
from astropy.table import QTable
from small_volume import SCALE, SEED

from tilemap import buildfile
from tilemap.demo import build_file, make
from tilemap.demo.gas import smoothing_radius
from tilemap.demo.halos import wrap
from tilemap.demo.marram import BOX, REDSHIFT, Volume, invent
from tilemap.demo.profiles import circular_speed, virial_temperature
from tilemap.demo.write import invented_names
from tilemap.errors import InputError
from tilemap.sources import open_source

SNAPSHOT = [f"marram.{part}.hdf5" for part in range(4)]


def _digests(folder: Path) -> dict[str, str]:
    return {
        str(path.relative_to(folder)): hashlib.sha256(path.read_bytes()).hexdigest()
        for path in sorted(folder.rglob("*"))
        if path.is_file()
    }


@pytest.fixture(scope="module")
def files(folder: Path):
    opened = [h5py.File(folder / "snapshot" / name, "r", locking=False) for name in SNAPSHOT]
    yield opened
    for file in opened:
        file.close()


@pytest.fixture(scope="module")
def objects(folder: Path) -> QTable:
    return QTable.read(folder / "objects.ecsv", format="ascii.ecsv")


def test_all_particles_together_weigh_what_the_box_holds(volume: Volume):
    """Omega_m times the critical density times the volume, by astropy's constants: see the test of the mean density."""
    total = sum(particles.mass.sum() for particles in volume.species.values())
    assert total == pytest.approx(volume.cosmos.mean_density * BOX**3, rel=1e-12)


def test_gas_stars_and_black_holes_together_are_the_baryons(volume: Volume):
    baryons = sum(volume.species[kind].mass.sum() for kind in (0, 4, 5))
    assert baryons / (baryons + volume.species[1].mass.sum()) == pytest.approx(volume.cosmos.baryon_share, rel=1e-9)


def test_every_particle_weighs_something(volume: Volume):
    assert all(np.all(particles.mass > 0) for particles in volume.species.values())


def test_the_same_seed_gives_the_same_bytes(folder: Path, tmp_path: Path):
    make(tmp_path, SEED, scale=SCALE)
    assert _digests(tmp_path) == _digests(folder)


def test_another_seed_gives_another_volume():
    one, other = (invent(seed, SCALE / 10).species[1].position[:100] for seed in (SEED, SEED + 1))
    assert not np.allclose(one, other)


def test_a_whole_volume_is_not_made_again(folder: Path):
    before = (folder / "snapshot" / SNAPSHOT[0]).stat().st_mtime_ns
    make(folder, SEED, scale=SCALE)
    assert (folder / "snapshot" / SNAPSHOT[0]).stat().st_mtime_ns == before


def test_a_volume_with_a_shortened_file_is_made_again(tmp_path: Path):
    make(tmp_path, SEED, scale=SCALE / 10)
    before = _digests(tmp_path)
    damaged = tmp_path / "snapshot" / SNAPSHOT[2]
    damaged.write_bytes(damaged.read_bytes()[:1000])
    make(tmp_path, SEED, scale=SCALE / 10)
    assert _digests(tmp_path) == before


@pytest.mark.parametrize("scale", [0.0, -1.0, 1.5, float("nan")])
def test_a_scale_out_of_range_is_refused(tmp_path: Path, scale: float):
    with pytest.raises(InputError, match="scale is"):
        make(tmp_path, scale=scale)


def test_a_folder_that_is_a_file_is_refused(tmp_path: Path):
    (tmp_path / "taken").write_text("")
    with pytest.raises(InputError, match="name another folder"):
        make(tmp_path / "taken", scale=SCALE)


def test_progress_is_told_to_the_end(tmp_path: Path):
    told = []
    make(tmp_path, SEED, lambda phase, done, total: told.append((phase, done, total)), SCALE / 4)
    ends = {phase: (done, total) for phase, done, total in told}
    assert all(done == total for done, total in ends.values()) and len(ends) == 2


def test_the_headers_count_what_the_files_hold(files):
    for file in files:
        here = file["Header"].attrs["NumPart_ThisFile"]
        assert [len(file[f"PartType{kind}/Masses"]) for kind in (0, 1, 4, 5)] == list(here[[0, 1, 4, 5]])


def test_the_headers_totals_are_the_sums_over_the_files(files):
    parts = sum(file["Header"].attrs["NumPart_ThisFile"].astype(int) for file in files)
    assert all(list(file["Header"].attrs["NumPart_Total"]) == list(parts) for file in files)


def test_the_headers_tell_how_many_files_there_are(files):
    assert {int(file["Header"].attrs["NumFilesPerSnapshot"]) for file in files} == {len(SNAPSHOT)}


def test_particle_numbers_are_unique_over_species_and_files(files):
    numbers = np.concatenate([file[f"PartType{kind}/ParticleIDs"][:] for file in files for kind in (0, 1, 4, 5)])
    assert len(np.unique(numbers)) == len(numbers)


def test_stored_positions_lie_inside_the_box(files):
    for file in files:
        for kind in (0, 1, 4, 5):
            at = file[f"PartType{kind}/Coordinates"][:]
            assert np.all((at >= 0) & (at < np.float32(file["Header"].attrs["BoxSize"])))


def test_the_snapshot_reads_back_as_a_box_of_that_side(folder: Path):
    np.testing.assert_allclose(open_source(buildfile.load(folder / "marram.yaml")).facts.box, BOX, rtol=1e-9)


def test_the_snapshot_reads_back_at_its_redshift(folder: Path):
    assert open_source(buildfile.load(folder / "marram.yaml")).facts.redshift == pytest.approx(REDSHIFT)


@pytest.mark.parametrize(("species", "kind"), [("gas", 0), ("dark", 1), ("stars", 4)])
def test_masses_read_back_in_solar_masses(folder: Path, volume: Volume, species: str, kind: int):
    source = open_source(buildfile.load(folder / "marram.yaml"))
    total = sum(chunk.mass.sum() for chunk in source.chunks(species, []))
    assert total == pytest.approx(volume.species[kind].mass.sum(), rel=1e-6)


def test_positions_read_back_in_comoving_mpc(folder: Path, volume: Volume):
    source = open_source(buildfile.load(folder / "marram.yaml"))
    read = np.concatenate([chunk.position for chunk in source.chunks("dark", [])])
    assert np.abs(wrap(read - volume.species[1].position, BOX)).max() < 3e-6


def test_smoothing_lengths_read_back_as_support_radii_in_mpc(folder: Path, volume: Volume):
    source = open_source(buildfile.load(folder / "marram.yaml"))
    read = np.concatenate([chunk.radius for chunk in source.chunks("gas", [])])
    np.testing.assert_allclose(read, volume.species[0].extra["smoothing"], rtol=1e-5)


def test_temperatures_read_back_in_kelvin(folder: Path, volume: Volume):
    source = open_source(buildfile.load(folder / "marram.yaml"))
    read = np.concatenate([chunk.values["temperature"] for chunk in source.chunks("gas", ["temperature"])])
    np.testing.assert_allclose(read, volume.species[0].extra["temperature"], rtol=1e-6)


def test_the_build_file_is_found_in_a_checkout():
    assert build_file().name == "marram.yaml"


def test_the_default_image_is_as_large_as_promised():
    view = buildfile.load(build_file()).view
    assert view.pixels >= 8192 and view.slabs >= 8


def test_objects_lie_inside_the_box(objects: QTable):
    for axis in "xyz":
        assert np.all((objects[axis].to_value("Mpc") >= 0) & (objects[axis].to_value("Mpc") < BOX))


def test_objects_are_at_the_centres_of_their_halos(objects: QTable, volume: Volume):
    centre = np.stack([objects[axis].to_value("Mpc") for axis in "xyz"], axis=-1)
    assert np.abs(wrap(centre - volume.halos.centre[: len(centre)], BOX)).max() < 1e-5


def test_object_masses_read_back_in_solar_masses(objects: QTable, volume: Volume):
    np.testing.assert_allclose(objects["halo_mass"].to_value("Msun"), volume.halos.mass[: len(objects)], rtol=1e-6)


def test_the_host_of_an_object_is_a_heavier_object(objects: QTable):
    inside = np.flatnonzero(objects["host"] > 0)
    assert np.all(objects["host"][inside] < objects["id"][inside])


def test_no_two_objects_have_the_same_name(objects: QTable):
    assert len(set(objects["name"])) == len(objects)


def test_every_region_has_a_name_of_its_own():
    corner = (np.stack(np.meshgrid(*[np.arange(4)] * 3), -1).reshape(-1, 3) + 0.5) * (BOX / 4)
    assert len(set(invented_names(corner, BOX))) == 64


def test_gas_in_voids_is_as_warm_as_photo_ionised_gas(volume: Volume):
    """Hui & Gnedin (1997, MNRAS 292, 27): about 1e4 K at the mean density, cooler where it is thinner."""
    gas = volume.species[0]
    emptiest = gas.extra["smoothing"] > np.quantile(gas.extra["smoothing"], 0.9)
    assert 2e3 < np.average(gas.extra["temperature"][emptiest], weights=gas.mass[emptiest]) < 1.5e4


def test_gas_in_the_heaviest_halos_is_at_about_their_virial_temperature(volume: Volume):
    halos, gas = volume.halos, volume.species[0]
    for halo in np.flatnonzero(halos.host < 0)[:3]:
        near = np.linalg.norm(wrap(gas.position - halos.centre[halo], BOX), axis=1) < halos.radius[halo]
        virial = virial_temperature(circular_speed(halos.mass[halo], halos.radius[halo], 1.0 / (1.0 + REDSHIFT)))
        hot = near & (gas.extra["star_formation"] == 0)
        assert np.average(gas.extra["temperature"][hot], weights=gas.mass[hot]) == pytest.approx(virial, rel=0.5)


def test_gas_that_forms_stars_is_cold(volume: Volume):
    gas = volume.species[0]
    assert np.median(gas.extra["temperature"][gas.extra["star_formation"] > 0]) == pytest.approx(1e4, rel=0.05)


def test_a_support_radius_holds_the_wanted_number_of_neighbours():
    """In even gas: number = density times the ball; by counting in a random box of 20 000."""
    position = 10.0 * np.random.default_rng(9).random((20_000, 3))
    radius = smoothing_radius(position, 10.0, wanted=56)
    assert np.mean(20.0 * 4.0 / 3.0 * np.pi * radius**3) == pytest.approx(56, rel=0.1)
