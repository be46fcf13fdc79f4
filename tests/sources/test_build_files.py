"""Build files: what they mean, and one sentence for each mistake."""

from __future__ import annotations

from pathlib import Path

import pytest
from hypothesis import given
from hypothesis import strategies as st

from tilemap.buildfile import load, loads
from tilemap.buildvalues import KERNEL_NAMES
from tilemap.errors import InputError
from tilemap.project.kernels import KERNELS

GOOD = """
title: T
snapshot:
  files: part.*.hdf5
  species:
    gas:
      position: G/Coordinates
      mass: G/Masses
      smoothing: {field: G/H, means: support, kernel: cubic}
      fields: {temperature: G/Temperature}
    dark: {position: D/Coordinates}
view: {pixels: 1024, slabs: 4, width: 10}
sheets:
  gas: {species: gas, sum: mass, unit: Msun/kpc2}
  temperature: {species: gas, mean: temperature, weight: gas, unit: K}
  dark: {species: dark, sum: count, unit: 1/kpc2}
catalogue: {file: objects.csv, position: [x, y, z], rank: m}
"""


def with_change(old: str, new: str) -> str:
    assert old in GOOD
    return GOOD.replace(old, new)


def test_the_real_snapshot_has_a_build_file_that_loads():
    build = load(Path(__file__).parents[2] / "builds" / "run32.yaml")
    assert list(build.sheets) == ["gas", "temperature", "dark"]


def test_the_text_and_the_folder_are_kept():
    build = loads(GOOD, "somewhere/b.yaml")
    assert (build.text, build.folder) == (GOOD, Path("somewhere"))


def test_kernel_names_are_those_that_the_engine_has():
    assert set(KERNEL_NAMES) == set(KERNELS)


@pytest.mark.parametrize(
    ("text", "expected"),
    [("10", 10.0), ("2 kpc", 0.002), ("1.5e3 kpc", 1.5), ("'7'", 7.0), ("3Mpc", 3.0), ("1e24 cm", 0.3240779)],
)
def test_lengths_are_mpc_or_say_their_unit(text, expected):
    # 1 Mpc = 3.0857e24 cm
    assert loads(with_change("width: 10", f"width: {text}")).view.width == pytest.approx(expected, rel=1e-6)


@given(st.floats(1e-6, 1e6))
def test_a_length_written_in_kpc_is_the_same_length(length):
    build = loads(with_change("width: 10", f"width: {length * 1000!r} kpc"))
    assert build.view.width == pytest.approx(length, rel=1e-12)


def test_one_box_side_stands_for_three():
    build = loads(with_change("files: part.*.hdf5", "files: part.*.hdf5\n  box: 25000 kpc"))
    assert build.snapshot.box == pytest.approx((25, 25, 25))


def test_lengths_of_a_flat_chart_are_in_its_unit():
    text = with_change(
        "view: {pixels: 1024, slabs: 4, width: 10}", "view: {unit: deg, centre: [3, 30 arcmin], width: 90 arcmin}"
    )
    view = loads(text).view
    assert (view.centre, view.width) == (pytest.approx((3, 0.5, 0)), pytest.approx(1.5))


def test_a_species_without_smoothing_takes_its_neighbours():
    smoothing = loads(GOOD).snapshot.species["dark"].smoothing
    assert (smoothing.neighbours, smoothing.kernel) == (48, "cubic")


def test_a_constant_mass_is_told_from_a_dataset():
    build = loads(with_change("mass: G/Masses", "mass: 2e36 kg"))
    # 1 Msun = 1.98841e30 kg
    assert build.snapshot.species["gas"].mass.constant == pytest.approx(2e36 / 1.98841e30, rel=1e-5)


MISTAKES = [
    (
        "fields: {temp",
        "feilds: {temp",
        "snapshot.species.gas.feilds: unknown key 'feilds': the nearest known is 'fields'",
    ),
    ("title: T", "titel: T", "titel: unknown key 'titel': the nearest known is 'title'"),
    ("weight: gas", "wieght: gas", "sheets.temperature.wieght: unknown key 'wieght': the nearest known is 'weight'"),
    ("slabs: 4", "slices: 4", "view.slices: unknown key 'slices': known here: along, toward, up, centre"),
    ("rank: m", "order: m", "catalogue.order: unknown key 'order': known here: file, position"),
    ("title: T\n", "", "title: this key is missing"),
    ("rank: m", "id: m", "catalogue.rank: this key is missing"),
    (
        "kernel: cubic",
        "kernel: cubik",
        "unknown kernel 'cubik': the nearest is 'cubic'; the kernels are cubic, quartic",
    ),
    ("means: support", "means: radius", "smoothing.means: 'radius' is not one of support, half or fwhm"),
    ("means: support, ", "", "smoothing: say what the field means: support"),
    (
        "{field: G/H, means: support, kernel: cubic}",
        "{kernel: cubic}",
        "give exactly one of field (with means), neighbours",
    ),
    ("{field: G/H, means: support,", "{neighbours: 0,", "snapshot.species.gas.smoothing.neighbours: found 0"),
    ("{field: G/H, means: support,", "{radius: -1 kpc,", "smoothing.radius: '-1 kpc': it must be above zero"),
    (
        "{field: G/H, means: support,",
        "{radius: 5 K,",
        "smoothing.radius: unit 'K' is not a length: write a unit of length",
    ),
    ("unit: K}", "unit: Kelvins}", "sheets.temperature.unit: unknown unit 'Kelvins'"),
    ("Msun/kpc2", "Msun/kpx2", "sheets.gas.unit: unknown unit 'Msun/kpx2': the nearest known to 'kpx' is 'kpc'"),
    ("width: 10", "width: 10 ckpc", "view.width: unknown unit 'ckpc': write kpc; comoving or proper is said by a: 1"),
    ("width: 10", "width: 10 kpc/h", "view.width: unit 'kpc/h': h would be read as hours"),
    ("width: 10", "width: wide", "view.width: 'wide' is not a length: write a number, or a number and a unit"),
    ("width: 10", "width: 0", "view.width: 0: it must be above zero"),
    ("width: 10", "depth: 0 kpc", "view.depth: '0 kpc': it must be above zero"),
    ("width: 10", "width: .nan", "view.width: nan is not a finite number"),
    ("pixels: 1024", "pixels: 1000", "view.pixels: 1000 is not a multiple of 512: the nearest is 1024"),
    ("pixels: 1024", "pixels: 100", "view.pixels: 100 is not a multiple of 512: the nearest is 512"),
    ("width: 10", "width: 10, height: 7", "view.height: 7 makes 716.8 rows, not a multiple of 512: the nearest is 5"),
    ("slabs: 4", "slabs: [0, 2, 2]", "view.slabs: slab edges must increase, but 2 follows 2"),
    ("slabs: 4", "slabs: [0]", "view.slabs: a list of slab edges needs at least two"),
    ("slabs: 4", "slabs: 0", "view.slabs: 0: write a count of slabs"),
    ("slabs: 4", "slabs: [0, 1], depth: 1", "view.depth: the slab edges already say the depth"),
    ("slabs: 4", "along: w", "view.along: 'w' is not one of x, y or z"),
    ("slabs: 4", "centre: [1]", "view.centre: [1]: write three lengths"),
    ("slabs: 4", "unit: kpc", "view.unit: unit 'kpc' is not an angle"),
    (
        "dark: {species: dark,",
        "dark: {species: drak,",
        "sheets.dark.species: no species 'drak' in snapshot.species: the nearest known is 'dark'",
    ),
    (
        "mean: temperature",
        "mean: temprature",
        "species 'gas' has no field 'temprature': the nearest known is 'temperature'",
    ),
    ("sum: count", "sum: mass", "sheets.dark.sum: species 'dark' has no mass: give snapshot.species.dark.mass"),
    (
        "weight: gas",
        "weight: dark",
        "sheets.temperature.weight: 'dark' is not a sum sheet of species 'gas': known here: gas",
    ),
    ("weight: gas", "weight: temperature", "'temperature' is not a sum sheet of species 'gas'"),
    ("weight: gas", "weight: gass", "sheets.temperature.weight: 'gass' is no sheet: the nearest known is 'gas'"),
    ("weight: gas, ", "", "sheets.temperature: a mean needs weight: the name of a sum sheet"),
    ("sum: count", "sum: count, weight: gas", "sheets.dark: weight goes with mean"),
    ("sum: count", "title: D", "sheets.dark: give sum:, mean: or peak:"),
    ("mean: temperature", "mean: count", "the mean of a count is always one"),
    ("fields: {temperature: G/T", "fields: {count: G/C, temperature: G/T", "'count' is there without being listed"),
    ("mass: G/Masses", "mass: -2 Msun", "a mass may not be negative"),
    ("mass: G/Masses", "mass: {dataset: G/Masses, table: 1}", "a mass is one dataset, or one constant"),
    (
        "mass: G/Masses",
        "mass: {dataset: G/Masses, unit: 1e10 Mssun}",
        "unknown unit '1e10 Mssun': the nearest known to 'Mssun' is 'Msun'",
    ),
    (
        "temperature: G/Temperature",
        "temperature: {temperature_from: G/U, gas: cold}",
        "'cold' is not one of ionised or neutral",
    ),
    ("temperature: G/Temperature", "temperature: {unit: K}", "name a dataset, or one of temperature_from"),
    ("temperature: G/Temperature", "t: {temperature_from: G/U, line_of_sight: G/V}", "and no more than one"),
    ("temperature: G/Temperature", "t: {line_of_sight: G/V, gas: ionised}", "gas goes with temperature_from only"),
    (
        "temperature: G/Temperature",
        "t: {temperature_from: G/U, gas: neutral, electrons: G/E}",
        "electrons already say how far the gas is ionised: leave gas out",
    ),
    ("slabs: 4", "toward: [0, 0]", "view.toward: [0, 0]: write a direction as three numbers, [x, y, z]"),
    ("slabs: 4", "toward: [0, 0, 0]", "view.toward: [0, 0, 0] is no direction"),
    ("slabs: 4", "up: [0, 0, 1]", "view: up goes with toward: say both"),
    ("slabs: 4", "along: z, toward: [0, 0, 1]", "view: along and toward both say the line of sight"),
    ("slabs: 4", "toward: [0, 1, 1], up: [0, 2, 2]", "view: up lies along the line of sight"),
    ("dark: {species: dark,", "da/rk: {species: dark,", "'da/rk' cannot be a name"),
    ("view: {pixels: 1024, slabs: 4, width: 10}", "view: 7", "view: found 7 where keys are wanted: along, toward, up"),
    ("position: [x, y, z]", "position: x", "catalogue.position: found 'x' where a list is wanted"),
    ("files: part.*.hdf5", "files: []", "snapshot.files: nothing is listed here"),
    ("files: part.*.hdf5", "files: a\n  box: [1, 2]", "snapshot.box: 2 sides are given"),
    (
        "files: part.*.hdf5",
        "files: a\n  periodic: maybe",
        "snapshot.periodic: found 'maybe' where true or false is wanted",
    ),
    ("files: part.*.hdf5", "files: a\n  redshift: -1", "snapshot.redshift: found -1"),
    (
        "files: part.*.hdf5",
        "files: a\n  cosmology: {H0: x, Om0: 1, Ode0: 0}",
        "cosmology.H0: found 'x' where a number is wanted",
    ),
    ("title: T", "title: [", "line 4, column 8: not YAML as it should be"),
    ("title: T", "title: T\ntitle: U", "line 3, column 1: not YAML as it should be: key 'title' is written twice"),
]


@pytest.mark.parametrize(("old", "new", "expected"), MISTAKES, ids=[new.strip() or old for old, new, _ in MISTAKES])
def test_a_mistake_is_told_in_one_line_with_its_place(old, new, expected):
    with pytest.raises(InputError) as caught:
        loads(with_change(old, new), "b.yaml")
    text = str(caught.value)
    assert text.startswith("b.yaml: ") and "\n" not in text
    assert expected in text


@pytest.mark.parametrize(
    ("view", "more", "expected"),
    [
        ("{unit: deg, width: 2}", "", "view.centre: a chart in deg has no box to take it from"),
        ("{unit: deg, centre: [1, 2]}", "", "view.width: a chart in deg has no box"),
        ("{unit: deg, centre: [1, 2], width: 2}", "\n  redshift: 1", "has no redshift and no cosmology"),
    ],
)
def test_a_flat_chart_says_what_it_lacks(view, more, expected):
    text = with_change("view: {pixels: 1024, slabs: 4, width: 10}", f"view: {view}")
    with pytest.raises(InputError, match=expected):
        loads(text.replace("files: part.*.hdf5", f"files: part.*.hdf5{more}"))


def test_further_mistakes_are_counted():
    with pytest.raises(InputError, match=r"\(and 1 more like this\)"):
        loads(with_change("title: T", "titel: T"))


def test_a_missing_build_file_is_named(tmp_path):
    with pytest.raises(InputError, match=r"nowhere.yaml is not there"):
        load(tmp_path / "nowhere.yaml")


def test_a_file_that_is_not_text_is_refused(tmp_path):
    (tmp_path / "b.yaml").write_bytes(b"\xff\xfe\x00")
    with pytest.raises(InputError, match="cannot be read as text"):
        load(tmp_path / "b.yaml")


@pytest.mark.parametrize("text", ["", "7", "- a"])
def test_a_file_without_keys_is_refused(text):
    with pytest.raises(InputError, match="a build file is a set of keys"):
        loads(text)
