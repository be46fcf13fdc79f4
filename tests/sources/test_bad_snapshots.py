"""What is wrong with the files is told in one sentence that names the place and what would be right."""

from __future__ import annotations

import h5py
import numpy as np
import pytest
from unit_words import KPC_CM, MSUN_G, first_words

from tilemap.errors import InputError
from tilemap.sources import open_source

LENGTH = first_words(1, 0, 1000 * KPC_CM, {"L": 1})
MASS = first_words(0, 0, MSUN_G, {"M": 1})
HEADER = {"Redshift": 0.0, "BoxSize": 10.0}


def gas(count: int = 40, **changes) -> dict:
    datasets = {
        "PartType0/Coordinates": (np.ones((count, 3)), LENGTH),
        "PartType0/Masses": (np.ones(count), MASS),
        "PartType0/SmoothingLength": (np.ones(count), LENGTH),
    }
    for name, values in changes.items():
        datasets[f"PartType0/{name}"] = (values, datasets[f"PartType0/{name}"][1])
    return datasets


def complaint(build) -> str:
    with pytest.raises(InputError) as caught:
        for _ in open_source(build).chunks("gas", size=7):
            pass
    text = str(caught.value)
    assert "\n" not in text
    return text


def with_bad_rows(values: np.ndarray, bad: float) -> np.ndarray:
    values = np.array(values, dtype=float)
    values[[3, 9, 11, 20, 31, 33, 39]] = bad
    return values


@pytest.mark.parametrize("bad", [np.nan, np.inf, -np.inf])
def test_positions_that_are_not_finite_are_counted_over_the_whole_species(write_part, describe, bad):
    positions = np.ones((40, 3))
    positions[:, 1] = with_bad_rows(positions[:, 1], bad)
    write_part("part.0.hdf5", gas(Coordinates=positions), {"Header": HEADER})
    assert "7 of 40 gas particles have a position that is not a finite number" in complaint(describe())


def test_the_first_few_bad_particles_are_named(write_part, describe):
    write_part("part.0.hdf5", gas(Masses=with_bad_rows(np.ones(40), np.nan)), {"Header": HEADER})
    assert "the first are particles 3, 9, 11, 20, 31, counted from 0" in complaint(describe())


def test_the_part_with_the_first_bad_particle_is_named(write_part, describe):
    header = {"Header": HEADER | {"NumFilesPerSnapshot": 2}}
    write_part("part.0.hdf5", gas(), header)
    write_part("part.1.hdf5", gas(Masses=with_bad_rows(np.ones(40), -1)), header)
    text = complaint(describe())
    assert text.startswith("part.1.hdf5: PartType0/Masses: 7 of 80")
    assert "particles 43, 49" in text


@pytest.mark.parametrize("bad", [0.0, -1.0, np.nan, np.inf])
def test_a_support_radius_must_be_above_zero(write_part, describe, bad):
    write_part("part.0.hdf5", gas(SmoothingLength=with_bad_rows(np.ones(40), bad)), {"Header": HEADER})
    assert "7 of 40 gas particles have a smoothing length that is not above zero" in complaint(describe())


@pytest.mark.parametrize("bad", [-1.0, np.nan, np.inf])
def test_a_mass_may_not_be_negative_or_missing(write_part, describe, bad):
    write_part("part.0.hdf5", gas(Masses=with_bad_rows(np.ones(40), bad)), {"Header": HEADER})
    assert "7 of 40 gas particles have a mass that is negative or not a finite number" in complaint(describe())


def test_a_mass_of_zero_is_allowed(write_part, describe):
    write_part("part.0.hdf5", gas(Masses=np.zeros(40)), {"Header": HEADER})
    assert sum(chunk.mass.sum() for chunk in open_source(describe()).chunks("gas")) == 0


def test_a_field_that_is_not_finite_is_refused(write_part, describe):
    datasets = gas() | {"PartType0/Temperature": (with_bad_rows(np.ones(40), np.nan), {})}
    write_part("part.0.hdf5", datasets, {"Header": HEADER})
    species = "position: PartType0/Coordinates\n      fields: {temperature: PartType0/Temperature}"
    with pytest.raises(InputError, match="7 of 40 gas particles have a temperature that is not a finite number"):
        list(open_source(describe(species=species)).chunks("gas", ["temperature"]))


def test_a_missing_dataset_lists_those_that_are_there(write_part, describe):
    datasets = gas()
    datasets["PartType0/SmoothingLengths"] = datasets.pop("PartType0/SmoothingLength")
    write_part("part.0.hdf5", datasets, {"Header": HEADER})
    text = complaint(describe())
    assert "snapshot.species.gas.smoothing.field: dataset PartType0/SmoothingLength is not in part.0.hdf5" in text
    assert "the nearest known is 'SmoothingLengths' (there are Coordinates, Masses, SmoothingLengths)" in text


def test_a_missing_group_lists_those_that_are_there(write_part, describe):
    write_part("part.0.hdf5", {"PartType1/Coordinates": (np.ones((2, 3)), LENGTH)}, {"Header": HEADER})
    assert "groups with datasets are PartType1" in complaint(describe())


def test_a_dataset_missing_from_one_part_is_told_as_a_difference_in_length(write_part, describe):
    header = {"Header": HEADER | {"NumFilesPerSnapshot": 2}}
    write_part("part.0.hdf5", gas(), header)
    datasets = gas()
    del datasets["PartType0/Masses"]
    write_part("part.1.hdf5", datasets, header)
    assert "part.1.hdf5: PartType0/Masses has 0 rows and PartType0/Coordinates 40" in complaint(describe())


def test_datasets_of_different_lengths_are_refused(write_part, describe):
    write_part("part.0.hdf5", gas(Masses=np.ones(39)), {"Header": HEADER})
    assert "PartType0/Masses has 39 rows and PartType0/Coordinates 40" in complaint(describe())


def test_a_truncated_file_is_named_as_such(write_part, describe):
    path = write_part("part.0.hdf5", gas(), {"Header": HEADER})
    path.write_bytes(path.read_bytes()[:-500])
    assert complaint(describe()).endswith("this HDF5 file is truncated: copy it again from where it was written")


def test_rows_that_cannot_be_read_are_named(write_part, describe):
    path = write_part("part.0.hdf5", gas(), {"Header": HEADER})
    with h5py.File(path, "r+") as file:
        del file["PartType0/Masses"]
        masses = file.create_dataset("PartType0/Masses", data=np.ones(40), chunks=(10,), compression="gzip")
        masses.attrs.update(MASS)
        place = masses.id.get_chunk_info(2).byte_offset
    data = bytearray(path.read_bytes())
    data[place : place + 8] = b"\xff" * 8
    path.write_bytes(data)
    assert "rows 14 to 20 of PartType0/Masses cannot be read: the file is truncated or damaged" in complaint(describe())


def test_a_file_that_is_not_hdf5_is_named_as_such(tmp_path, describe):
    (tmp_path / "part.0.hdf5").write_text("not at all")
    assert "part.0.hdf5: not an HDF5 file" in complaint(describe())


def test_a_file_that_is_not_there_names_the_nearest(write_part, describe):
    write_part("part.0.hdf5", gas())
    assert "file prat.0.hdf5 is not there: did you mean part.0.hdf5?" in complaint(describe("prat.0.hdf5"))


def test_a_glob_without_match_is_told_with_its_folder(tmp_path, describe):
    assert complaint(describe("snap.*.hdf5")) == f"no file matches snap.*.hdf5 in {tmp_path}"


@pytest.mark.parametrize(
    ("said", "expected"), [(5, "it is in 5 files, but only 1 found: 4 are missing"), (2, "1 is missing")]
)
def test_missing_parts_are_counted(write_part, describe, said, expected):
    write_part("part.0.hdf5", gas(), {"Header": HEADER | {"NumFilesPerSnapshot": said}})
    assert expected in complaint(describe())


def test_more_files_than_one_snapshot_are_refused(write_part, describe):
    for part in range(2):
        write_part(f"part.{part}.hdf5", gas(), {"Header": HEADER | {"NumFilesPerSnapshot": 1}})
    assert "it is in 1 file, but 2 are named" in complaint(describe())


def test_parts_at_different_redshifts_are_refused(write_part, describe):
    for part in range(2):
        header = HEADER | {"NumFilesPerSnapshot": 2, "Redshift": float(part)}
        write_part(f"part.{part}.hdf5", gas(), {"Header": header})
    assert "part.1.hdf5 is at redshift 1.0, part.0.hdf5 at 0.0" in complaint(describe())


@pytest.mark.parametrize(
    ("species", "expected"),
    [
        ("position: PartType0/Masses", "PartType0/Masses has one column, where a position has three"),
        ("position: {dataset: PartType0/Coordinates, column: 0}", "two or three datasets of one"),
        ("position: PartType0/Coordinates\n      mass: PartType0/Coordinates", "has 3 columns: say which"),
        (
            "position: PartType0/Coordinates\n      mass: {dataset: PartType0/Coordinates, column: 5}",
            "has 3 columns, 0 to 2: 5 is not there",
        ),
        (
            "position: PartType0/Coordinates\n      mass: PartType0/SmoothingLength",
            "PartType0/SmoothingLength is cm, where a mass is wanted",
        ),
        ("position: PartType0/Coordinates\n      mass: {table: 1}", "has no table of masses"),
        (
            "position: PartType0/Coordinates\n      mass: {dataset: PartType0/Masses, h: -1}",
            "PartType0/Masses has to be scaled by h, which no file says: give snapshot.cosmology",
        ),
        (
            "position: PartType0/Coordinates\n      mass: {dataset: PartType0/Masses, unit: kpc}",
            "PartType0/Masses is kpc, where a mass is wanted",
        ),
    ],
)
def test_a_field_that_cannot_be_used_says_why(write_part, describe, species, expected):
    write_part("part.0.hdf5", gas(), {"Header": HEADER})
    assert expected in complaint(describe(species=species))


def test_a_dataset_without_unit_asks_for_one(write_part, describe):
    datasets = gas()
    datasets["PartType0/Coordinates"] = (np.ones((40, 3)), {})
    write_part("part.0.hdf5", datasets, {"Header": HEADER})
    expected = "says no unit: give one, such as {dataset: PartType0/Coordinates, unit: kpc, a: 1, h: -1}"
    assert expected in complaint(describe())


def test_a_scaling_without_a_redshift_asks_for_it(write_part, describe):
    datasets = gas() | {"PartType0/Masses": (np.ones(40), first_words(1, 0, MSUN_G, {"M": 1}))}
    write_part("part.0.hdf5", datasets, {"Header": {"BoxSize": 10.0}})
    assert "PartType0/Masses has to be scaled by the scale factor, which no file says" in complaint(describe())


def test_periodic_without_a_box_is_refused(write_part, describe):
    write_part("part.0.hdf5", gas(), {"Header": {"Redshift": 0.0}})
    assert "snapshot.periodic: no box is known to repeat" in complaint(describe(more="  periodic: true"))


@pytest.mark.parametrize(
    ("table", "expected"), [([0.0], "entries 0 to 0: 1 is not there"), ([0.0, 0.0], "entry 1 of MassTable is 0")]
)
def test_a_mass_table_entry_that_holds_nothing_is_refused(write_part, describe, table, expected):
    write_part("part.0.hdf5", gas(), {"Header": HEADER | {"MassTable": table}})
    assert expected in complaint(describe(species="position: PartType0/Coordinates\n      mass: {table: 1}"))


def test_an_unknown_species_names_the_nearest(write_part, describe):
    write_part("part.0.hdf5", gas(), {"Header": HEADER})
    with pytest.raises(InputError, match="no species 'gsa': the nearest known is 'gas'"):
        open_source(describe()).count("gsa")
