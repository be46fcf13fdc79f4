"""What probe tells about files, and drafts that build without an edit where the files say enough."""

from __future__ import annotations

from pathlib import Path

import astropy.units as u
import h5py
import numpy as np
import pytest
from astropy.table import Table
from unit_words import KPC_CM, MSUN_G, first_words, third_words

from tilemap.buildfile import loads
from tilemap.errors import InputError
from tilemap.sources import open_source
from tilemap.sources.probe import draft, probe

RUN32 = Path(__file__).parents[1] / "data" / "run32"
POSITION = np.random.default_rng(3).random((64, 3)) * 10


def drafted(files, folder):
    build = loads(draft(files, folder), Path(folder) / "build.yaml")
    return build, open_source(build)


@pytest.fixture(scope="module")
def page():
    return probe([RUN32 / "run.*.hdf5"])


@pytest.fixture(scope="module")
def run32_draft(tmp_path_factory):
    return drafted([RUN32 / "run.*.hdf5"], tmp_path_factory.mktemp("draft"))


@pytest.mark.parametrize(
    "line",
    [
        "2 files, HDF5, 2.52 MB: run.0.hdf5 to run.1.hdf5",
        "box: 10 x 10 x 10 Mpc a",
        "moment: redshift 2.0303, scale factor 0.33, 3.22 Gyr after the beginning",
        "cosmology: H0 68, Om0 0.31, Ode0 0.69, Tcmb0 0",
        "PartType0: 32,768 particles",
        "PartType1: 32,768 particles",
    ],
)
def test_the_page_tells_what_the_data_notes_tell(page, line):
    assert line in page.splitlines()


def test_every_dataset_has_a_line_with_shape_type_unit_and_range(page):
    line = next(line for line in page.splitlines() if "InternalEnergies" in line)
    assert line.split("  ")[1:] and [cell.strip() for cell in line.split("  ") if cell.strip()][:5] == [
        "InternalEnergies",
        "32768",
        "float32",
        "km2/s2 a^-2",
        "0.1098 to 1.554e+04",
    ]


def test_one_part_finds_the_others(page):
    assert probe([RUN32 / "run.1.hdf5"]) == page


def test_the_draft_of_run32_builds_as_it_is(run32_draft):
    assert run32_draft[1].count("gas") == 32768


def test_the_draft_of_run32_finds_the_smoothing_convention_from_its_densities(run32_draft):
    # the data notes say: FWHM convention, quartic spline
    smoothing = run32_draft[0].snapshot.species["gas"].smoothing
    assert (smoothing.means, smoothing.kernel) == ("fwhm", "quartic")


def test_the_draft_of_run32_has_sums_of_both_species_and_the_temperature(run32_draft):
    sheets = run32_draft[0].sheets
    assert {name: sheet.sum or sheet.mean for name, sheet in sheets.items()} == {
        "gas": "mass",
        "gas-temperature": "temperature",
        "dark": "mass",
    }


def test_the_draft_of_run32_lets_dark_matter_find_its_neighbours(run32_draft):
    assert run32_draft[0].snapshot.species["dark"].smoothing.neighbours == 48


def test_file_names_in_a_draft_are_relative_to_where_it_will_stand():
    text = draft([RUN32 / "run.0.hdf5", RUN32 / "run.1.hdf5"], RUN32.parent / "builds")
    assert 'files: ["../run32/run.*.hdf5"]' in text


def test_fwhm_is_read_from_the_description_where_there_are_no_densities(write_part, tmp_path):
    length = first_words(1, 0, 1000 * KPC_CM, {"L": 1})
    datasets = {
        "PartType0/Coordinates": (POSITION, length),
        "PartType0/SmoothingLengths": (
            np.ones(64),
            length | {"Description": b"smoothing lengths (FWHM of the kernel)"},
        ),
    }
    header = {"Header": {"Redshift": 1.0, "BoxSize": 10.0}, "HydroScheme": {"Kernel function": b"Wendland C4"}}
    write_part("a.hdf5", datasets, header)
    smoothing = drafted([tmp_path / "a.hdf5"], tmp_path)[0].snapshot.species["gas"].smoothing
    assert (smoothing.means, smoothing.kernel) == ("fwhm", "wendland-c4")


def test_a_kernel_that_nothing_tells_is_drafted_with_a_word_to_check_it(write_part, tmp_path):
    length = third_words(1, -1, KPC_CM)
    datasets = {"PartType0/Coordinates": (POSITION, length), "PartType0/SmoothingLength": (np.ones(64), length)}
    header = {"Redshift": 1.0, "BoxSize": 10.0, "HubbleParam": 0.7, "Omega0": 0.3, "OmegaLambda": 0.7}
    write_part("a.hdf5", datasets, {"Header": header})
    assert "means: support, kernel: cubic}   # check what it means and the kernel" in draft(
        [tmp_path / "a.hdf5"], tmp_path
    )


def test_a_snapshot_without_units_is_drafted_with_the_usual_ones_to_check(write_part, tmp_path):
    datasets = {
        "PartType0/Coordinates": (POSITION, {}),
        "PartType0/Masses": (np.ones(64), {}),
        "PartType0/InternalEnergy": (np.ones(64), {}),
        "PartType1/Coordinates": (POSITION, {}),
    }
    header = {"Header": {"Redshift": 1.0, "BoxSize": 10.0, "HubbleParam": 0.5, "Omega0": 0.3, "OmegaLambda": 0.7}}
    header["Header"]["MassTable"] = [0.0, 2.0]
    write_part("a.hdf5", datasets, header)
    _, source = drafted([tmp_path / "a.hdf5"], tmp_path)
    assert source.facts.box == pytest.approx([0.02] * 3)
    assert next(source.chunks("dark")).mass[0] == pytest.approx(4e10)
    assert source.unit("gas", "temperature") == u.K


def test_species_without_mass_are_drafted_as_counts(write_part, tmp_path):
    write_part(
        "a.hdf5",
        {"PartType4/Coordinates": (POSITION, third_words(1, 0, KPC_CM))},
        {"Header": {"Redshift": 0.0, "BoxSize": 10.0}},
    )
    build, _ = drafted([tmp_path / "a.hdf5"], tmp_path)
    assert build.sheets["stars"].sum == "count"


def test_a_run_that_says_no_redshift_is_drafted_with_one_to_check(write_part, tmp_path):
    words = third_words(1, -1, KPC_CM), third_words(0, -1, 1e10 * MSUN_G)
    write_part("a.hdf5", {"PartType0/Coordinates": (POSITION, words[0]), "PartType0/Masses": (np.ones(64), words[1])})
    build, source = drafted([tmp_path / "a.hdf5"], tmp_path)
    assert build.snapshot.redshift == 0
    assert source.count("gas") == 64


def test_a_table_in_three_dimensions_is_drafted_around_its_rows(tmp_path):
    columns = dict(zip("xyz", POSITION.T * u.kpc, strict=True))
    Table(columns | {"mass": np.ones(64) * u.Msun}).write(tmp_path / "halo stars.fits")
    build, source = drafted([tmp_path / "halo stars.fits"], tmp_path)
    chunk = next(source.chunks("halo-stars"))
    assert np.all(np.abs(chunk.position - build.view.centre) <= build.view.width / 2)
    assert build.sheets["halo-stars"].sum == "mass"


@pytest.mark.parametrize("name", ["stars.fits", "stars.vot", "stars.ecsv", "stars.csv", "stars.npz"])
def test_a_list_of_places_on_the_sky_is_drafted_as_a_flat_chart(tmp_path, name):
    sky = {"ra": np.linspace(10, 20, 64) * u.deg, "dec": np.linspace(-3, 3, 64) * u.deg}
    if name.endswith(".npz"):
        np.savez(tmp_path / name, **{key: values.value for key, values in sky.items()})
    else:
        Table(sky).write(tmp_path / name, **({"format": "votable"} if name.endswith("vot") else {}))
    build, source = drafted([tmp_path / name], tmp_path)
    chunk = next(source.chunks("stars"))
    assert (build.view.unit, build.view.centre) == ("deg", pytest.approx((15, 0, 0), abs=1e-5))
    assert np.all(np.abs(chunk.position[:, 0] - 15) < build.view.width / 2)


@pytest.mark.parametrize("name", ["stars.fits", "stars.vot", "stars.ecsv", "stars.csv", "stars.npz"])
def test_columns_of_tables_and_arrays_are_listed(tmp_path, name):
    columns = {"ra": np.array([1.0, 2.5]), "kind": np.array(["star", "not"])}
    if name.endswith(".npz"):
        np.savez(tmp_path / name, **columns)
    else:
        Table(columns).write(tmp_path / name, **({"format": "votable"} if name.endswith("vot") else {}))
    lines = [line.split() for line in probe([tmp_path / name]).splitlines()]
    assert ["2", "rows"] in lines
    assert ["ra", "2", "float64", "unit", "not", "said", "1", "to", "2.5"] in lines
    assert ["kind", "2", "text", "unit", "not", "said"] in lines


def test_a_file_without_positions_is_drafted_with_what_is_there(tmp_path):
    np.savez(tmp_path / "a.npz", weight=np.ones(3))
    assert "no positions were found" in draft([tmp_path / "a.npz"], tmp_path)


@pytest.mark.parametrize(("names", "expected"), [([], "no file is named"), (["nowhere.hdf5"], "is not there")])
def test_files_that_are_not_there_are_refused(names, expected):
    with pytest.raises(InputError, match=expected):
        probe(names)


def test_files_of_different_kinds_are_refused(tmp_path):
    np.savez(tmp_path / "a.npz", x=np.ones(3))
    h5py.File(tmp_path / "a.hdf5", "w").close()
    with pytest.raises(InputError, match="of different kinds"):
        probe([tmp_path / "a.npz", tmp_path / "a.hdf5"])


def test_the_draft_works_temperature_out_with_the_electrons_that_the_file_has(tmp_path, write_part):
    datasets = {
        "PartType0/Coordinates": (POSITION, {}),
        "PartType0/Masses": (np.ones(64), {}),
        "PartType0/InternalEnergy": (np.ones(64), {}),
        "PartType0/ElectronAbundance": (np.zeros(64), {}),
    }
    write_part("a.hdf5", datasets, {"Header": {"Redshift": 1.0, "BoxSize": 10.0, "HubbleParam": 0.5}})
    build, source = drafted([tmp_path / "a.hdf5"], tmp_path)
    assert build.snapshot.species["gas"].fields["temperature"].electrons.dataset == ["PartType0/ElectronAbundance"]
    # neutral gas, 1 (km/s)^2: 2/3 mu m_p / k_B with mu = 1.22, as in test_derived
    assert next(source.chunks("gas", ["temperature"])).values["temperature"] == pytest.approx(98.5, rel=5e-3)
