"""Several species in one sheet: their particles are drawn into one image."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from build_maker import changed, description, particles, write_build

import tilemap
from tilemap import budget
from tilemap import build_atlas as building
from tilemap.build_atlas import build_atlas
from tilemap.errors import InputError
from tilemap.pyramid.verify import verify

STARS = {"position": "star_position", "mass": "star_mass", "smoothing": {"neighbours": 12}}
SHEETS = {
    "sheets__stars": {"species": "stars", "sum": "mass", "unit": "Msun/kpc2"},
    "sheets__all": {"species": ["gas", "stars"], "sum": "mass", "unit": "Msun/kpc2"},
}
MOVING = {
    "snapshot__species__stars__fields": {"velocity": {"dataset": "star_velocity", "unit": "km/s"}},
    "sheets__flow": {
        "species": ["gas", "stars"],
        "mean": "velocity",
        "weight": "all",
        "unit": "km/s",
        "coding": "linear",
    },
    "sheets__star-flow": {
        "species": "stars",
        "mean": "velocity",
        "weight": "stars",
        "unit": "km/s",
        "coding": "linear",
    },
}


def arrays() -> dict[str, np.ndarray]:
    stars = particles(400, 7)
    return particles() | {f"star_{name}": stars[name] for name in ("position", "mass", "velocity")}


def built(folder, **values: object):
    build = changed(description(), snapshot__species__stars=STARS, **SHEETS)
    return tilemap.open(build_atlas(write_build(folder, changed(build, **values), arrays()), folder / "small.atlas"))


@pytest.fixture(scope="module")
def atlas(tmp_path_factory):
    return built(tmp_path_factory.mktemp("together"), **MOVING)


def test_what_is_built_verifies(atlas):
    assert verify(atlas.path) == []


@pytest.mark.parametrize("slabs", [0, 1, None])
def test_a_sum_over_two_species_is_the_sum_of_their_sheets(atlas, slabs):
    gas, stars, both = (atlas.read(name, slabs=slabs).values.astype(float) for name in ("gas", "stars", "all"))
    # Each is rounded to 0.23 %.
    assert both == pytest.approx(gas + stars, rel=4.7e-3)


def test_the_totals_are_those_of_both(atlas):
    given = arrays()
    assert atlas.sheet("all")["total"] == pytest.approx(given["mass"].sum() + given["star_mass"].sum(), rel=1e-6)
    assert atlas.sheet("all")["species"] == "gas+stars"


def test_a_mean_over_two_species_is_weighted_by_both(atlas):
    gas, stars, v, w, both = (
        np.nan_to_num(atlas.read(name, slabs=0).values.astype(float))
        for name in ("gas", "stars", "velocity", "star-flow", "flow")
    )
    there = gas + stars > 0
    expected = (gas * v + stars * w)[there] / (gas + stars)[there]
    # Weights are rounded to 0.23 %, velocities span some 1200 km/s.
    assert both[there] == pytest.approx(expected, abs=3.0)


def test_the_order_of_species_changes_no_code_by_more_than_one(atlas, tmp_path):
    turned = built(tmp_path, **MOVING, sheets__all__species=["stars", "gas"], sheets__flow__species=["stars", "gas"])
    assert turned.read("all").values == pytest.approx(atlas.read("all").values, rel=4.7e-3)


def test_particles_that_wait_on_scratch_disk_make_the_same_sheets(tmp_path, monkeypatch):
    two = {
        "snapshot__species__gas__smoothing": {"neighbours": 9},
        "snapshot__species__stars__smoothing": {"neighbours": 12},
    }
    make = budget.make_budget
    made = []
    for held in (True, False):
        monkeypatch.setattr(
            building, "make_budget", lambda *given, held=held: replace(make(*given), held=held, chunk=100)
        )
        (tmp_path / str(held)).mkdir()
        made.append(built(tmp_path / str(held), **two))
    for sheet in ("all", "stars"):
        assert np.array_equal(made[0].read(sheet).values, made[1].read(sheet).values)
    assert made[0].sheet("all")["total"] == pytest.approx(
        arrays()["mass"].sum() + arrays()["star_mass"].sum(), rel=1e-6
    )


@pytest.mark.parametrize(
    ("values", "said"),
    [
        ({"sheets__all__species": ["gas", "star"]}, r"sheets\.all\.species: no species 'star'.*'stars'"),
        ({"sheets__all__species": ["gas", "gas"]}, r"gas\+gas names one species twice"),
        ({"sheets__all__species": []}, r"sheets\.all\.species: nothing is listed here"),
        ({"sheets__all__sum": "temperature"}, r"sheets\.all\.sum: species 'stars' has no field 'temperature'"),
        (
            {"snapshot__species__stars__smoothing__kernel": "wendland-c2"},
            r"one sheet is drawn with one kernel, and gas has cubic, stars wendland-c2: write the same, such as "
            r"snapshot\.species\.stars\.smoothing\.kernel: cubic",
        ),
        (
            {"sheets__t": {"species": ["gas", "stars"], "mean": "velocity", "weight": "gas", "unit": "km/s"}, **MOVING},
            r"sheets\.t\.weight: 'gas' is not a sum sheet of species 'gas\+stars': .*'?all",
        ),
        (
            MOVING
            | {
                "snapshot__species__stars__fields": {"velocity": {"dataset": "star_velocity", "unit": "K"}},
                "sheets__star-flow": None,
            },
            r"sheets\.flow: velocity is in km / s for gas and in K for stars: one sheet has one unit",
        ),
    ],
)
def test_what_cannot_be_drawn_together_is_refused(tmp_path, values, said):
    with pytest.raises(InputError, match=said):
        built(tmp_path, **values)
