"""From sheets to the planes that are drawn, and back from planes to coded values."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
import yaml
from build_maker import changed, description

from tilemap.buildfile import BuildFile, loads
from tilemap.channels import Plane, SpeciesPlan
from tilemap.errors import InputError
from tilemap.pyramid.coding import LinearCoding, LogCoding
from tilemap.sheets import describe_sheet, plan_species
from tilemap.sources import Chunk, open_source

PIXEL_MPC = 0.5


def plans(tmp_path: Path, pixel: float = PIXEL_MPC, **values: object) -> list[SpeciesPlan]:
    from build_maker import particles

    np.savez(tmp_path / "small.npz", **particles(20))
    build = spec(tmp_path, **values)
    return plan_species(build, open_source(build), pixel)


def spec(tmp_path: Path, **values: object) -> BuildFile:
    return loads(yaml.safe_dump(changed(description(), **values), sort_keys=False), tmp_path / "small.yaml")


def chunk(count: int = 5, **values: np.ndarray) -> Chunk:
    mass = np.arange(1.0, count + 1)
    given = {"temperature": 10.0 * mass, "velocity": mass - 3}
    return Chunk(0, np.zeros((count, 3)), np.ones(count), mass, given | values)


def test_sheets_that_need_the_same_plane_share_it(tmp_path):
    (plan,) = plans(tmp_path)
    assert plan.quantities == [Plane("mass"), Plane("mass", "temperature"), Plane("mass", "velocity")]
    assert [(sheet.plane, sheet.weight) for sheet in plan.sheets] == [(0, None), (1, 0), (2, 0)]


def test_only_the_fields_that_are_drawn_are_read(tmp_path):
    (plan,) = plans(tmp_path, sheets__velocity=None)
    assert plan.fields == ["temperature"]


def test_planes_hold_masses_and_masses_times_values(tmp_path):
    (plan,) = plans(tmp_path)
    plan.settle(chunk())
    planes, _ = plan.planes(chunk())
    mass = np.arange(1.0, 6)
    assert planes * plan.scales == pytest.approx(np.column_stack([mass, 10 * mass**2, mass * (mass - 3)]))


def test_scales_are_powers_of_two_that_bring_the_largest_near_2_to_the_30(tmp_path):
    (plan,) = plans(tmp_path)
    plan.settle(chunk(temperature=np.full(5, 3e300)))
    planes, _ = plan.planes(chunk(temperature=np.full(5, 3e300)))
    assert np.all(np.log2(plan.scales) % 1 == 0)
    assert np.all((np.abs(planes).max(axis=0) >= 2.0**29) & (np.abs(planes).max(axis=0) < 2.0**30))


def test_scales_wait_for_the_first_particles_that_are_not_zero(tmp_path):
    (plan,) = plans(tmp_path)
    plan.settle(chunk(temperature=np.zeros(5)))
    assert plan.scales[1] == 1
    plan.settle(chunk())
    assert plan.scales[1] == 2.0 ** (8 - 30)  # 250 is just below 2^8
    plan.settle(chunk(temperature=np.full(5, 1e9)))
    assert plan.scales[1] == 2.0 ** (8 - 30)


def test_ranges_are_those_of_particles_that_weigh_something(tmp_path):
    (plan,) = plans(tmp_path)
    some = chunk()
    some.mass[0] = 0
    plan.widen(plan.planes(some)[1])
    assert plan.ranges[1:].tolist() == [[20, 50], [-1, 2]]


def test_a_sum_is_mass_per_area_in_the_unit_of_the_sheet(tmp_path):
    (plan,) = plans(tmp_path)
    assert plan.sheets[0].factor == pytest.approx(1 / 500**2)


def test_a_proper_area_is_smaller(tmp_path):
    (plan,) = plans(tmp_path, sheets__gas__area="proper")
    assert plan.sheets[0].factor == pytest.approx(4 / 500**2)


def test_a_mean_in_another_unit_is_converted(tmp_path):
    (plan,) = plans(tmp_path, sheets__velocity__unit="m/s")
    assert plan.sheets[2].factor == pytest.approx(1000)


def test_a_mean_is_divided_and_nothing_where_there_is_no_weight(tmp_path):
    (plan,) = plans(tmp_path)
    planes = np.array([[[2.0, 0.0]], [[6.0, 0.0]], [[-1.0, 0.0]]], dtype=np.float32)
    assert plan.sheets[1].values(planes)[0] == pytest.approx([3, np.nan], nan_ok=True)
    assert plan.sheets[2].values(planes)[0] == pytest.approx([-0.5, np.nan], nan_ok=True)


@pytest.mark.parametrize("sheet", range(3))
def test_codes_of_planes_are_those_of_values_in_the_sheets_unit(tmp_path, sheet):
    (plan,) = plans(tmp_path, sheets__velocity__unit="m/s")
    plan.settle(chunk())
    planes, ranges = plan.planes(chunk())
    plan.widen(ranges)
    which = plan.sheets[sheet]
    coding = plan.coding(which, 3.0)
    drawn = which.values(planes.T[:, None, :])
    values = drawn.astype(np.float64) * which.factor * plan.scale(which)
    expected = [np.arange(1.0, 6) / 500**2, 10 * np.arange(1.0, 6), 1000 * (np.arange(1.0, 6) - 3)][sheet]
    assert values[0] == pytest.approx(expected, rel=1e-6)
    assert np.array_equal(which.of_planes(coding, plan.scale(which)).encode(drawn), coding.encode(values))


def test_a_sum_in_log_coding_has_40_dex_below_its_mean_and_more_above(tmp_path):
    (plan,) = plans(tmp_path)
    coding = plan.coding(plan.sheets[0], 3.0)
    assert isinstance(coding, LogCoding)
    mean = 3.0 / 500**2
    assert np.log10(mean) - coding.low >= 40
    assert coding.low + 0.002 * 65534 - np.log10(mean) >= 80


def test_a_mean_in_log_coding_begins_below_its_smallest_value(tmp_path):
    (plan,) = plans(tmp_path)
    plan.ranges[1] = [2.5e3, 8e7]
    coding = plan.coding(plan.sheets[1], 3.0)
    assert isinstance(coding, LogCoding)
    assert coding.low == 3.0
    assert np.isnan(coding.nothing)


def test_a_mean_in_linear_coding_spans_its_range(tmp_path):
    (plan,) = plans(tmp_path)
    plan.ranges[2] = [-500.0, 300.0]
    coding = plan.coding(plan.sheets[2], 3.0)
    assert isinstance(coding, LinearCoding)
    assert coding.low == -500
    assert 60000 < 800 / coding.step < 65534


def test_a_step_that_is_given_is_kept(tmp_path):
    (plan,) = plans(tmp_path, sheets__velocity__step=0.5, sheets__gas__step=0.01)
    plan.ranges[2] = [-500.0, 300.0]
    assert (plan.coding(plan.sheets[0], 3.0).step, plan.coding(plan.sheets[2], 3.0).step) == (0.01, 0.5)


@pytest.mark.parametrize(
    ("values", "ranges", "said"),
    [
        ({"sheets__velocity__coding": "log"}, [-7.5, 3.0], r"sheet velocity: velocity goes down to -7\.5 km / s"),
        (
            {"sheets__velocity": {"species": "gas", "sum": "velocity", "unit": "km/(s kpc2)"}},
            [-7.5, 3.0],
            r"velocity goes down to -7\.5 km / s.*coding: linear, and a step",
        ),
        (
            {"sheets__velocity": {"species": "gas", "sum": "velocity", "unit": "km/(s kpc2)", "coding": "linear"}},
            [-7.5, 3.0],
            r"a sum in linear coding needs step, in km/\(s kpc2\)",
        ),
    ],
)
def test_values_that_a_coding_cannot_hold_are_refused(tmp_path, values, ranges, said):
    (plan,) = plans(tmp_path, **values)
    plan.ranges[2] = ranges
    with pytest.raises(InputError, match=said):
        plan.coding(plan.sheets[2], 3.0)


@pytest.mark.parametrize(
    ("values", "said"),
    [
        ({"sheets__gas__unit": "Msun"}, r"sheets\.gas\.unit is Msun.*such as solMass / kpc2"),
        ({"sheets__temperature__unit": "Msun"}, r"sheets\.temperature\.unit is Msun.*has K"),
    ],
)
def test_a_unit_that_does_not_fit_is_refused_with_one_that_does(tmp_path, values, said):
    with pytest.raises(InputError, match=said):
        plans(tmp_path, **values)


def test_the_description_of_a_sum_has_totals_and_that_of_a_mean_has_none(tmp_path):
    (plan,) = plans(tmp_path)
    gas = describe_sheet(spec(tmp_path), plan.sheets[0], LogCoding(-30.0), [1.0, 2.0])
    mean = describe_sheet(spec(tmp_path), plan.sheets[1], LogCoding(3.0), [1.0, 2.0])
    assert (gas["kind"], gas["total"], gas["total_unit"], gas["totals"]) == ("sum", 3.0, "solMass", [1.0, 2.0])
    assert (mean["kind"], mean["weight"], mean["total"], mean["totals"]) == ("mean", "gas", None, None)


def test_a_sheet_without_a_title_is_called_by_its_name(tmp_path):
    (plan,) = plans(tmp_path)
    assert describe_sheet(spec(tmp_path), plan.sheets[1], LogCoding(3.0), [])["title"] == "Temperature"


SPREAD = {"sheets__spread": {"species": "gas", "dispersion": "velocity", "unit": "km/s", "coding": "linear"}}


def test_a_dispersion_draws_the_squares_besides_its_mean(tmp_path):
    (plan,) = plans(tmp_path, **SPREAD)
    assert plan.quantities[2:] == [Plane("mass", "velocity"), Plane("mass", "velocity", squared=True)]
    spread = plan.sheets[3]
    assert (spread.plane, spread.mean, spread.weight) == (3, 2, 0)


def settled(tmp_path: Path, velocity: np.ndarray, **values: object) -> tuple[SpeciesPlan, np.ndarray]:
    """A plan that has seen particles of these velocities and masses 1, 2, ...; the planes of all of them in one pixel."""
    (plan,) = plans(tmp_path, **SPREAD | values)
    some = chunk(len(velocity), velocity=velocity)
    plan.settle(some)
    planes, ranges = plan.planes(some)
    plan.widen(ranges)
    return plan, planes.sum(axis=0, dtype=np.float64).astype(np.float32)[:, None, None]


def shown(plan: SpeciesPlan, sheet: int, planes: np.ndarray) -> float:
    which = plan.sheets[sheet]
    return float(plan.values(which, planes)[0, 0]) * plan.scale(which) * which.factor


@pytest.mark.parametrize("bulk", [0.0, 300.0, -1e6])
def test_mean_and_dispersion_are_those_that_numpy_gives_however_fast_all_move(tmp_path, bulk):
    velocity = bulk + np.array([-30.0, 10.0, 25.0, -4.0, 7.0])
    plan, planes = settled(tmp_path, velocity)
    mean = np.average(velocity, weights=np.arange(1.0, 6))
    spread = np.sqrt(np.average((velocity - mean) ** 2, weights=np.arange(1.0, 6)))
    assert shown(plan, 2, planes) == pytest.approx(mean, rel=1e-6, abs=1e-4)
    assert shown(plan, 3, planes) == pytest.approx(spread, rel=1e-5)


def test_particles_of_one_velocity_have_no_dispersion_but_rounding(tmp_path):
    plan, _ = settled(tmp_path, np.array([-300.0, 300.0]))
    one = chunk(1, velocity=np.array([250.0]))
    planes = plan.planes(one)[0].sum(axis=0)[:, None, None]
    assert 0 <= shown(plan, 3, planes) <= plan.floor(plan.sheets[3]) < 1


def test_a_dispersion_is_nothing_where_there_is_no_weight(tmp_path):
    plan, planes = settled(tmp_path, np.array([-300.0, 300.0]))
    assert np.isnan(plan.values(plan.sheets[3], np.zeros_like(planes))).all()


def test_a_dispersion_in_another_unit_is_converted(tmp_path):
    plan, planes = settled(tmp_path, np.array([-10.0, 10.0]), sheets__spread__unit="m/s", sheets__velocity__unit="m/s")
    assert shown(plan, 3, planes) == pytest.approx(1000 * np.sqrt(100 - (10 / 3) ** 2), rel=1e-5)


def test_the_description_of_a_dispersion_names_its_mean_its_weight_and_its_floor(tmp_path):
    plan, _ = settled(tmp_path, np.array([-300.0, 300.0]))
    build = spec(tmp_path, **SPREAD)
    described = describe_sheet(build, plan.sheets[3], LinearCoding(0.0, 1.0), [], plan.floor(plan.sheets[3]))
    assert (described["kind"], described["mean"], described["weight"]) == ("dispersion", "velocity", "gas")
    assert described["floor"] == plan.floor(plan.sheets[3]) > 0
    assert described["total"] is None


@pytest.mark.parametrize(
    ("values", "said"),
    [
        ({"dispersion": "speed"}, r"sheets\.spread\.dispersion: 'speed' is no sheet: .*velocity"),
        ({"dispersion": "gas"}, r"sheets\.spread\.dispersion: 'gas' is not a mean of species 'gas'"),
        ({"unit": "m/s"}, r"sheets\.spread\.unit is m/s: a dispersion has the unit of its mean sheet, km/s"),
        ({"weight": "gas"}, "weight goes with mean; a dispersion has none of its own"),
        ({"mean": "velocity"}, "dispersion: and that of a mean sheet, and no more than one"),
    ],
)
def test_a_dispersion_that_is_about_nothing_is_refused(tmp_path, values, said):
    with pytest.raises(InputError, match=said):
        spec(tmp_path, sheets__spread=SPREAD["sheets__spread"] | values)
