"""Tables by astropy as snapshots, and flat charts in degrees."""

from __future__ import annotations

import astropy.units as u
import numpy as np
import pytest
from astropy.io import fits
from astropy.table import MaskedColumn, Table

from tilemap.errors import InputError
from tilemap.sources import open_source

GENERATOR = np.random.default_rng(2)
TABLE = Table(
    {
        "x": GENERATOR.random(50) * u.kpc,
        "y": GENERATOR.random(50) * u.kpc,
        "z": GENERATOR.random(50) * u.kpc,
        "m": np.arange(50.0) * u.Msun,
        "teff": np.arange(50, dtype="i4") * u.K,
        "name": [f"star {i}" for i in range(50)],
    }
)
SPECIES = "position: [x, y, z]\n      mass: m\n      smoothing: {radius: 1 kpc}\n      fields: {t: teff}"


def read(build, fields=("t",)):
    chunks = list(open_source(build).chunks("gas", fields, size=7))
    assert max(map(len, chunks)) == 7
    return (np.concatenate([getattr(chunk, name) for chunk in chunks]) for name in ("position", "mass"))


@pytest.mark.parametrize(
    ("name", "format_name"), [("a.fits", "fits"), ("a.fits.gz", "fits"), ("a.vot", "votable"), ("a.ecsv", "ascii.ecsv")]
)
def test_columns_come_out_in_plain_units(tmp_path, describe, name, format_name):
    TABLE.write(tmp_path / name, format=format_name)
    position, mass = read(describe(name, SPECIES))
    assert position == pytest.approx(np.column_stack([TABLE[axis] for axis in "xyz"]) / 1000)
    assert mass == pytest.approx(TABLE["m"].value)


def test_csv_has_no_units_so_they_are_given_or_mpc(tmp_path, describe):
    TABLE.write(tmp_path / "a.csv", format="ascii.csv")
    species = SPECIES.replace("mass: m", "mass: {dataset: m, unit: 1e3 Msun}")
    position, mass = read(describe("a.csv", species))
    assert position == pytest.approx(np.column_stack([TABLE[axis] for axis in "xyz"]))
    assert mass == pytest.approx(TABLE["m"].value * 1000)


def test_a_field_keeps_the_unit_of_its_column(tmp_path, describe):
    TABLE.write(tmp_path / "a.fits")
    assert open_source(describe("a.fits", SPECIES)).unit("gas", "t") == u.K


def test_scaled_fits_columns_are_unscaled(tmp_path, describe):
    columns = [fits.Column(name=axis, format="D", array=np.ones(50)) for axis in "xyz"]
    columns += [fits.Column(name=name, format="I", array=np.arange(50)) for name in ("m", "teff")]
    hdu = fits.BinTableHDU.from_columns(columns)
    hdu.header.update({"TSCAL4": 0.5, "TZERO4": 100.0})
    hdu.writeto(tmp_path / "a.fits")
    _, mass = read(describe("a.fits", SPECIES))
    assert mass == pytest.approx(np.arange(50) * 0.5 + 100)


def test_a_vector_column_is_a_position(tmp_path, describe):
    vectors = GENERATOR.random((50, 3))
    Table({"pos": vectors, "m": np.ones(50)}).write(tmp_path / "a.fits")
    position, _ = read(describe("a.fits", "position: pos\n      mass: m"), ())
    assert np.array_equal(position, vectors)


def test_a_column_of_another_extension_is_named_with_it(tmp_path, describe):
    first, second = (fits.table_to_hdu(Table({"x": np.full(50, value)})) for value in (1.0, 2.0))
    second.name = "STARS"
    fits.HDUList([fits.PrimaryHDU(), first, second]).writeto(tmp_path / "a.fits")
    position, _ = read(describe("a.fits", "position: [x, STARS/x, x]"), ())
    assert position[0].tolist() == [1.0, 2.0, 1.0]


def test_several_tables_follow_each_other(tmp_path, describe):
    for part in range(2):
        TABLE.write(tmp_path / f"a.{part}.fits")
    assert open_source(describe("a.*.fits", SPECIES)).count("gas") == 100


def test_blank_cells_are_counted_as_bad(tmp_path, describe):
    table = TABLE.copy()
    table["x"] = MaskedColumn(table["x"], mask=np.arange(50) < 3)
    table.write(tmp_path / "a.ecsv")
    with pytest.raises(InputError, match="3 of 50 gas particles have a position that is not a finite number"):
        read(describe("a.ecsv", SPECIES))


@pytest.mark.parametrize(
    ("species", "expected"),
    [
        ("position: [x, y, zz]", "column zz is not in a.fits: the nearest known is 'z'"),
        ("position: [x, y, name]", "name does not hold numbers"),
        ("position: [x, y, m]", "m is solMass, where a length is wanted"),
        ("position: x", "x has one column, where a position has three"),
    ],
)
def test_columns_that_do_not_fit_say_why(tmp_path, describe, species, expected):
    TABLE.write(tmp_path / "a.fits")
    with pytest.raises(InputError) as caught:
        open_source(describe("a.fits", species))
    assert expected in str(caught.value)


def test_a_unit_that_astropy_does_not_know_is_named(tmp_path, describe):
    hdu = fits.table_to_hdu(TABLE)
    hdu.columns["x"].unit = "furlongs"
    hdu.writeto(tmp_path / "a.fits")
    with pytest.raises(InputError, match="x carries the unknown unit 'furlongs'"):
        open_source(describe("a.fits", SPECIES))


@pytest.mark.parametrize(
    ("name", "format_name", "kept", "expected"),
    [
        ("a.fits", "fits", -1000, "this FITS file is truncated"),
        ("a.fits", "fits", 4000, "no whole table: it may be truncated"),
        ("a.vot", "votable", 2000, "not VOTable that can be read"),
        ("a.ecsv", "ascii.ecsv", 100, "not ECSV that can be read"),
    ],
)
def test_a_truncated_table_is_refused(tmp_path, describe, name, format_name, kept, expected):
    path = tmp_path / name
    TABLE.write(path, format=format_name)
    path.write_bytes(path.read_bytes()[:kept])
    with pytest.raises(InputError, match=expected):
        read(describe(name, SPECIES))


def test_a_flat_chart_keeps_positions_in_its_unit(tmp_path, describe):
    Table({"ra": [1.0, 2.0] * u.deg, "dec": [60.0, 120.0] * u.arcmin}).write(tmp_path / "a.fits")
    species = "position: [ra, dec]\n      smoothing: {radius: 36 arcsec}"
    source = open_source(describe("a.fits", species, view="{unit: deg, centre: [1, 1], width: 2}"))
    (chunk,) = source.chunks("gas")
    assert chunk.position == pytest.approx(np.array([[1, 1, 0], [2, 2, 0]]))
    assert chunk.radius == pytest.approx([0.01, 0.01])


def test_a_flat_chart_has_neither_box_nor_cosmology(tmp_path, describe):
    Table({"ra": [1.0], "dec": [2.0]}).write(tmp_path / "a.csv")
    facts = open_source(describe("a.csv", "position: [ra, dec]", view="{unit: deg, centre: [1, 1], width: 2}")).facts
    assert (facts.box, facts.redshift, facts.cosmology, facts.periodic) == (None, None, None, False)


def test_a_file_of_unknown_kind_asks_for_it(tmp_path, describe):
    (tmp_path / "a.dat").write_text("x")
    with pytest.raises(InputError, match=r"a.dat: no kind of file is known for this suffix"):
        open_source(describe("a.dat", SPECIES))


def test_files_of_different_kinds_are_refused(tmp_path, describe):
    TABLE.write(tmp_path / "a.fits")
    np.savez(tmp_path / "a.npz", x=np.ones(3))
    with pytest.raises(InputError, match="different kinds"):
        open_source(describe("a.*", SPECIES))
