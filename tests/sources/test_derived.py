"""Fields that are worked out: temperature from energy, squared density, the component along the line of sight."""

from __future__ import annotations

import numpy as np
import pytest

from tilemap.errors import InputError
from tilemap.sources import open_source
from tilemap.sources.derived import ELECTRONS, HYDROGEN, molecular_weight, temperature

GAS = """
      position: PartType0/Coordinates
      mass: PartType0/Masses
      smoothing: {radius: 1 kpc}
      fields: {f: FIELD}
"""
LENGTH, MASS = (
    {"to_cgs": 3.085677581491367e24, "length_scaling": 1.0},
    {"to_cgs": 1.988409870698051e43, "mass_scaling": 1.0},
)
SPEED = {"to_cgs": 1e5, "velocity_scaling": 1.0}
ENERGY = {"to_cgs": 1e10, "velocity_scaling": 2.0}


@pytest.fixture
def values(write_part, describe):
    """The numbers of a field of three particles of mass 1, 2 and 3 times 1e10 Msun at redshift 1."""

    def values(field: str, datasets: dict, view: str = "{}") -> np.ndarray:
        given = {
            "PartType0/Coordinates": (np.ones((3, 3)), LENGTH),
            "PartType0/Masses": (np.array([1.0, 2.0, 3.0]), MASS),
        }
        write_part("part.0.hdf5", given | datasets, {"Header": {"Redshift": 1.0, "BoxSize": 10.0, "HubbleParam": 0.5}})
        source = open_source(describe(species=GAS.replace("FIELD", field), view=view))
        return next(source.chunks("gas", ["f"])).values["f"]

    return values


# The worked example of Barkana & Loeb 2001 (Physics Reports 349, 125), eqs. 25 and 26: a halo of circular velocity
# V = 23.4 km/s has the virial temperature mu m_p V^2 / (2 k) = 1.98e4 K (mu / 0.6); mu is 0.59 in fully ionised
# primordial gas, 0.61 where helium is ionised once, 1.22 in neutral gas. From memory. Gas of that temperature has the
# energy (3/2) k T / (mu m_p) = (3/4) V^2.
VIRIAL = 0.75 * 23.4**2
ONCE = 1.0 + (1.0 - HYDROGEN) / (4.0 * HYDROGEN)


@pytest.mark.parametrize(
    ("gas", "mu"), [("gas: neutral", 1.22), ("gas: ionised", 0.59), ("electrons: PartType0/ElectronAbundance", 0.61)]
)
def test_gas_has_the_temperature_of_the_published_example(values, gas, mu):
    found = values(
        f"{{temperature_from: PartType0/InternalEnergy, {gas}}}",
        {
            "PartType0/InternalEnergy": (np.full(3, VIRIAL), ENERGY),
            "PartType0/ElectronAbundance": (np.full(3, ONCE), {}),
        },
    )
    assert found == pytest.approx(np.full(3, 1.98e4 * mu / 0.6), rel=0.01)


@pytest.mark.parametrize("gas", ["neutral", "ionised"])
def test_electrons_of_neutral_and_ionised_gas_give_what_the_words_give(values, gas):
    given = {
        "PartType0/InternalEnergy": (np.array([1.0, 20.0, 3e4]), ENERGY),
        "PartType0/ElectronAbundance": (np.full(3, ELECTRONS[gas]), {}),
    }
    by_word = values(f"{{temperature_from: PartType0/InternalEnergy, gas: {gas}}}", given)
    by_number = values("{temperature_from: PartType0/InternalEnergy, electrons: PartType0/ElectronAbundance}", given)
    assert by_number == pytest.approx(by_word, rel=1e-12)


def test_the_ideal_gas_law_gives_back_the_energy():
    # P = n k T with n = rho / (mu m_p), and P = (gamma - 1) rho u; constants of CODATA 2018.
    energy, electrons = 1234.5, 0.7
    found = temperature(np.ones(1), np.array([energy]), np.array([electrons]))
    pressure_over_density = 1.380649e-23 * found / (molecular_weight(electrons) * 1.67262192369e-27)
    assert pressure_over_density == pytest.approx(2 / 3 * energy * 1e6, rel=1e-8)


def test_squared_density_is_mass_times_density_in_proper_cgs(values):
    # 1e10 Msun / Mpc^3 comoving is 8 times that at redshift 1; 1 Msun = 1.98841e33 g, 1 Mpc = 3.0856776e24 cm.
    code = 1.98841e43 / 3.0856776e24**3
    density = {"to_cgs": code, "length_scaling": -3.0, "mass_scaling": 1.0, "a_scaling": -3.0}
    found = values(
        "{density_squared_from: PartType0/Density}", {"PartType0/Density": (np.array([1.0, 1.0, 5.0]), density)}
    )
    assert found == pytest.approx(1.98841e43 * np.array([1, 2, 15]) * 8 * code, rel=1e-5)


VELOCITY = np.array([[100.0, 0.0, 0.0], [0.0, 200.0, 0.0], [30.0, -50.0, 70.0]])


@pytest.mark.parametrize(
    ("view", "expected"),
    [
        ("{}", [0, 0, 70]),
        ("{along: x}", [100, 0, 30]),
        ("{along: y}", [0, 200, -50]),
        ("{toward: [0, 3, 4]}", [0, 120, -50 * 0.6 + 70 * 0.8]),
        ("{toward: [-1, 0, 0]}", [-100, 0, -30]),
    ],
)
def test_the_line_of_sight_takes_the_component_along_which_depth_grows(values, view, expected):
    found = values("{line_of_sight: PartType0/Velocities}", {"PartType0/Velocities": (VELOCITY, SPEED)}, view)
    assert found == pytest.approx(expected, abs=1e-12)


def test_a_vector_may_lie_in_three_datasets(values):
    given = {f"PartType0/V{axis}": (VELOCITY[:, axis], SPEED) for axis in range(3)}
    found = values("{line_of_sight: [PartType0/V0, PartType0/V1, PartType0/V2]}", given, "{along: y}")
    assert found == pytest.approx(VELOCITY[:, 1])


@pytest.mark.parametrize(
    ("field", "said"),
    [
        ("{line_of_sight: PartType0/Masses}", "a vector has three columns.*PartType0/Masses has 1"),
        ("{line_of_sight: {dataset: PartType0/Coordinates, column: 1}}", "name a dataset of three columns"),
        ("{line_of_sight: PartType0/Speed}", "species.gas.fields.f.line_of_sight: .*Speed"),
        ("{density_squared_from: PartType0/Masses}", "where a density is wanted"),
        ("{temperature_from: PartType0/InternalEnergy, electrons: PartType0/Masses}", "number of free electrons"),
    ],
)
def test_what_a_field_cannot_be_worked_out_from_is_refused(values, field, said):
    with pytest.raises(InputError, match=said):
        values(field, {"PartType0/InternalEnergy": (np.ones(3), ENERGY)})


def test_a_bad_number_in_what_a_field_is_worked_out_from_is_told_with_its_dataset(values):
    velocity = VELOCITY.copy()
    velocity[1, 2] = np.nan
    with pytest.raises(InputError, match=r"PartType0/Velocities: 1 of 3 gas particles have a f that is not a finite"):
        values("{line_of_sight: PartType0/Velocities}", {"PartType0/Velocities": (velocity, SPEED)})
