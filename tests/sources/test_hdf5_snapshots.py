"""HDF5 snapshots: the unit vocabularies, headers and parts that simulation codes write."""

from __future__ import annotations

import numpy as np
import pytest
from unit_words import KPC_CM, MSUN_G, first_words, second_words, third_words

from tilemap.errors import InputError
from tilemap.sources import open_source
from tilemap.sources.units import Conversion, tidy

A, H = 0.25, 0.5  # a scale factor and an h whose powers are exact
HEADER = {"Header": {"Redshift": 3.0, "BoxSize": 4000.0, "HubbleParam": H, "Omega0": 0.3, "OmegaLambda": 0.7}}
POSITIONS = np.array([[1000.0, 2000.0, 3000.0], [0.0, 500.0, 3999.0]])  # comoving kpc / h
MASSES = np.array([1.0, 3.0], dtype="f4")  # 1e10 Msun / h

VOCABULARIES = {
    "first": [
        first_words(1, -1, KPC_CM, {"L": 1}),
        first_words(0, -1, 1e10 * MSUN_G, {"M": 1}),
        first_words(1, -1, KPC_CM, {"L": 1}),
    ],
    "second": [
        second_words(1, -1, KPC_CM, length=1),
        second_words(0, -1, 1e10 * MSUN_G, mass=1),
        second_words(1, -1, KPC_CM, length=1),
    ],
    "third": [third_words(1, -1, KPC_CM), third_words(0, -1, 1e10 * MSUN_G), third_words(1, -1, KPC_CM)],
}
GIVEN = """
      position: {dataset: PartType0/Coordinates, unit: kpc, a: 1, h: -1}
      mass: {dataset: PartType0/Masses, unit: 1e10 Msun, h: -1}
      smoothing: {field: {dataset: PartType0/SmoothingLength, unit: kpc, h: -1}, means: support}
"""


def gas_datasets(words: list[dict], rows: slice = slice(None)) -> dict:
    return {
        "PartType0/Coordinates": (POSITIONS[rows], words[0]),
        "PartType0/Masses": (MASSES[rows], words[1]),
        "PartType0/SmoothingLength": (np.array([10.0, 20.0])[rows], words[2]),
    }


def one_chunk(build, fields=()):
    (chunk,) = open_source(build).chunks("gas", fields)
    return chunk


@pytest.fixture(params=[*VOCABULARIES, "given in the build file"])
def snapshot(request, write_part, describe):
    words = VOCABULARIES.get(request.param, [{}, {}, {}])
    write_part("part.0.hdf5", gas_datasets(words), HEADER)
    return describe() if request.param in VOCABULARIES else describe(species=GIVEN)


def test_positions_come_out_in_comoving_mpc_without_h(snapshot):
    assert one_chunk(snapshot).position == pytest.approx(POSITIONS / 1000 / H)


def test_masses_come_out_in_solar_masses_without_h(snapshot):
    assert one_chunk(snapshot).mass == pytest.approx(MASSES * 1e10 / H)


def test_radii_come_out_in_comoving_mpc_without_h(snapshot):
    assert one_chunk(snapshot).radius == pytest.approx([0.02, 0.04])


def test_the_box_has_the_unit_of_the_positions(snapshot):
    assert open_source(snapshot).facts.box == pytest.approx([8.0, 8.0, 8.0])


def one_field(write_part, describe, name, attributes, values=(2.0, 3.0)):
    datasets = gas_datasets(VOCABULARIES["first"]) | {f"PartType0/{name}": (np.array(values), attributes)}
    write_part("part.0.hdf5", datasets, HEADER)
    source = open_source(describe(species=GIVEN + f"      fields: {{f: PartType0/{name}}}"))
    (chunk,) = source.chunks("gas", ["f"])
    return chunk.values["f"], source.unit("gas", "f").to_string()


@pytest.mark.parametrize(
    ("name", "attributes", "factor", "unit"),
    [
        # velocities stored as v / sqrt(a)
        ("Velocity", second_words(0.5, 0, 1e5, velocity=1), 0.5, "km / s"),
        ("InternalEnergies", first_words(-2, 0, 1e10, {"L": 2, "t": -2}), 16.0, "km2 / s2"),
        ("Energy", second_words(0, 0, 1e10, velocity=2), 1.0, "km2 / s2"),
        ("Temperature", third_words(0, 0, 1.0), 1.0, "K"),
        ("SFR", second_words(0, 0, MSUN_G / 31557600.0, length=-1, mass=1, velocity=1), 1.0, "solMass / yr"),
        ("StarFormationRate", third_words(0, 0, MSUN_G / 31557600.0), 1.0, "solMass / yr"),
        ("Metallicity", second_words(0, 0, 0.0), 1.0, ""),
        ("Density", first_words(-3, 2, 1e-20, {"M": 1, "L": -3}), 64 * 0.25 * 1e-20, "g / cm3"),
        # stored as physical: the exponent beside has been applied already
        ("Energies", first_words(-2, 0, 1e10, {"L": 2, "t": -2}, physical=1), 1.0, "km2 / s2"),
    ],
)
def test_a_field_comes_out_physical_in_plain_units(write_part, describe, name, attributes, factor, unit):
    values, found = one_field(write_part, describe, name, attributes)
    assert (values.tolist(), found) == (pytest.approx([2 * factor, 3 * factor]), unit)


def test_a_factor_to_cgs_of_something_unnamed_asks_for_the_unit(write_part, describe):
    with pytest.raises(InputError, match="PartType0/Speed has a factor to cgs but not of what"):
        one_field(write_part, describe, "Speed", third_words(0.5, 0, 1e5))


def test_positions_stored_as_physical_become_comoving(write_part, describe):
    words = [first_words(1, 0, 1000 * KPC_CM, {"L": 1}, physical=1), *VOCABULARIES["first"][1:]]
    write_part("part.0.hdf5", gas_datasets(words), HEADER)
    assert one_chunk(describe()).position == pytest.approx(POSITIONS / A)


def test_what_the_build_file_gives_stands_above_the_attributes(write_part, describe):
    write_part("part.0.hdf5", gas_datasets(VOCABULARIES["second"]), HEADER)
    species = GIVEN.replace("unit: kpc, a: 1, h: -1", "unit: Mpc, h: 0")
    assert one_chunk(describe(species=species)).position == pytest.approx(POSITIONS)


def test_one_column_of_a_vector_is_a_field(write_part, describe):
    velocities = np.array([[1.0, 2.0, 3.0], [4.0, 5.0, 6.0]])
    datasets = gas_datasets(VOCABULARIES["second"]) | {"PartType0/V": (velocities, second_words(0, 0, 1e5, velocity=1))}
    write_part("part.0.hdf5", datasets, HEADER)
    build = describe(species=GIVEN + "      fields: {vz: {dataset: PartType0/V, column: 2}}")
    assert one_chunk(build, ["vz"]).values["vz"].tolist() == [3.0, 6.0]


def test_half_means_that_the_support_is_twice_as_wide(write_part, describe):
    write_part("part.0.hdf5", gas_datasets(VOCABULARIES["first"]), HEADER)
    assert one_chunk(describe(species=GIVEN.replace("support", "half"))).radius == pytest.approx([0.04, 0.08])


def test_a_constant_mass_and_radius_are_given_to_every_particle(write_part, describe):
    write_part("part.0.hdf5", gas_datasets(VOCABULARIES["first"]), HEADER)
    build = describe(
        species="position: PartType0/Coordinates\n      mass: 1.5e6 Msun\n      smoothing: {radius: 5 kpc}"
    )
    chunk = one_chunk(build)
    assert (chunk.mass.tolist(), chunk.radius.tolist()) == ([1.5e6, 1.5e6], [0.005, 0.005])


@pytest.mark.parametrize(
    ("spec", "groups", "expected"),
    [
        ("{table: 1, unit: 1e10 Msun, h: -1}", {}, 0.25e10 / H),
        ("{table: 1}", {"Units": {"Unit mass in cgs (U_M)": [1e10 * MSUN_G]}}, 0.25e10),
        ("{table: 1}", {"Parameters": {"UnitMass_in_g": 1e10 * MSUN_G}}, 0.25e10 / H),
    ],
)
def test_mass_from_the_table_in_the_header(write_part, describe, spec, groups, expected):
    header = {"Header": HEADER["Header"] | {"MassTable": [0.0, 0.25]}} | groups
    write_part("part.0.hdf5", {"PartType0/Coordinates": (POSITIONS, VOCABULARIES["first"][0])}, header)
    build = describe(species=f"position: PartType0/Coordinates\n      mass: {spec}")
    assert one_chunk(build).mass == pytest.approx([expected] * 2)


def test_parts_follow_each_other_by_number_not_by_letter(write_part, describe):
    for part in range(11):
        datasets = gas_datasets(VOCABULARIES["first"], slice(0, 1))
        datasets["PartType0/Masses"] = (np.array([part + 1.0]), VOCABULARIES["first"][1])
        write_part(f"part.{part}.hdf5", datasets, {"Header": HEADER["Header"] | {"NumFilesPerSnapshot": 11}})
    masses = [chunk.mass[0] * H / 1e10 for chunk in open_source(describe()).chunks("gas")]
    assert masses == pytest.approx(list(range(1, 12)))


def test_a_part_without_the_species_has_no_particles_of_it(write_part, describe):
    header = {"Header": HEADER["Header"] | {"NumFilesPerSnapshot": 2}}
    write_part("part.0.hdf5", {}, header)
    write_part("part.1.hdf5", gas_datasets(VOCABULARIES["first"]), header)
    source = open_source(describe())
    assert [(chunk.start, len(chunk)) for chunk in source.chunks("gas")] == [(0, 2)]


@pytest.mark.parametrize(
    ("groups", "redshift", "matter"),
    [
        ({"Header": {"Redshift": 1.0, "Omega0": 0.3, "OmegaLambda": 0.7, "HubbleParam": 0.7}}, 1.0, 0.3),
        ({"Header": {"Time": 0.5, "Omega0": 0.3, "OmegaLambda": 0.7, "HubbleParam": 0.7}}, 1.0, 0.3),
        (
            {"Header": {"Redshift": [1.0]}, "Parameters": {"Omega0": 0.3, "OmegaLambda": 0.7, "HubbleParam": 0.7}},
            1.0,
            0.3,
        ),
        ({"Cosmology": {"Scale-factor": [0.5], "Omega_m": [0.3], "Omega_lambda": [0.7], "h": [0.7]}}, 1.0, 0.3),
        ({"Cosmology": {"Cosmological run": [0], "h": [0.7]}, "Header": {"Time": 3.0}}, 0.0, None),
    ],
)
def test_redshift_and_cosmology_are_found_where_codes_write_them(write_part, describe, groups, redshift, matter):
    write_part("part.0.hdf5", gas_datasets(VOCABULARIES["first"]), groups)
    facts = open_source(describe()).facts
    assert facts.redshift == pytest.approx(redshift)
    assert (facts.cosmology.Om0 if facts.cosmology else None) == matter


def test_facts_in_the_build_file_stand_above_the_header(write_part, describe):
    write_part("part.0.hdf5", gas_datasets(VOCABULARIES["first"]), HEADER)
    facts = open_source(
        describe(more="  box: [1, 2, 3]\n  redshift: 7\n  cosmology: {H0: 70, Om0: 0.2, Ode0: 0.8}\n  periodic: false")
    ).facts
    assert (facts.box.tolist(), facts.redshift, facts.cosmology.Om0, facts.periodic) == ([1, 2, 3], 7, 0.2, False)


def test_conversion_that_changes_nothing_makes_no_copy():
    values = np.arange(3.0)
    assert Conversion(tidy(1 + 1e-9), None)(values) is values
