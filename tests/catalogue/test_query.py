"""Answers about objects, checked against numpy on the same numbers."""

import json
import threading

import numpy as np
import pytest
from astropy.table import Table

from tilemap.buildfile import Catalogue
from tilemap.catalogue.ingest import ingest
from tilemap.catalogue.query import Objects
from tilemap.errors import InputError

VIEW = {
    "along": "z",
    "u": [0, 100],
    "v": [0, 100],
    "depth": [0, 100],
    "unit": "Mpc",
    "periodic": True,
    "box": [100] * 3,
}
ALL = (0.0, 100.0)
COUNT = 3000


@pytest.fixture(scope="module")
def numbers():
    rng = np.random.default_rng(3)
    made = {axis: rng.uniform(0, 100, COUNT) for axis in "xyz"}
    made["mass"] = 10 ** rng.uniform(8, 14, COUNT)
    made["id"] = 2**60 + np.arange(COUNT)
    made["sfr"] = np.where(rng.random(COUNT) < 0.3, 0.0, 10 ** rng.normal(0, 1, COUNT))
    made["sfr"][:7] = np.nan
    made["speed"] = rng.normal(0, 300, COUNT)
    made['odd "name'] = np.full(COUNT, 4.0)
    made["kind"] = np.array(["disc", "ball"] * (COUNT // 2))
    return made


@pytest.fixture(scope="module")
def objects(numbers, tmp_path_factory):
    folder = tmp_path_factory.mktemp("a[1]*?'folder")  # letters that mean something to a database
    Table(numbers).write(folder / "objects.fits")
    section = Catalogue(file="objects.fits", position=["x", "y", "z"], unit="Mpc", id="id", rank="mass")
    entry = ingest(section, folder, VIEW, folder)
    answers = Objects(folder / entry["file"], entry)
    yield answers
    answers.close()


def inside(numbers, u, v, depth):
    return np.all(
        [(numbers[k] >= lo) & (numbers[k] <= hi) for k, (lo, hi) in zip("xyz", (u, v, depth), strict=True)], axis=0
    )


def test_the_heaviest_objects_in_the_window_come_first(objects, numbers):
    window = ((20.0, 60.0), (10.0, 50.0), (0.0, 40.0))
    found = objects.in_view(*window, limit=10)
    there = inside(numbers, *window)
    assert found["in_view"] == there.sum()
    assert [each["rank"] for each in found["objects"]] == sorted(numbers["mass"][there], reverse=True)[:10]


def test_the_brush_narrows_what_is_counted_and_named(objects, numbers):
    found = objects.in_view(ALL, ALL, ALL, limit=COUNT, low=1e10, high=1e11)
    assert found["in_view"] == len(found["objects"]) == np.sum((numbers["mass"] >= 1e10) & (numbers["mass"] <= 1e11))


def test_an_object_carries_its_place_and_every_column(objects, numbers):
    best = objects.in_view(ALL, ALL, ALL, limit=1)["objects"][0]
    row = int(np.argmax(numbers["mass"]))
    assert best["row"] == row + 1
    assert (best["u"], best["v"], best["depth"]) == (numbers["x"][row], numbers["y"][row], numbers["z"][row])
    assert best["id"] == str(2**60 + row)
    assert set(best["columns"]) == set(numbers)


def test_an_answer_is_plain_json_whatever_is_missing(objects):
    found = objects.in_view(ALL, ALL, ALL, limit=COUNT)
    json.dumps(found, allow_nan=False)
    assert {each["columns"]["sfr"] for each in found["objects"] if each["row"] <= 7} == {None}


def test_whole_numbers_beyond_a_browsers_keep_their_digits_as_text(objects):
    best = objects.in_view(ALL, ALL, ALL, limit=1)["objects"][0]
    assert best["columns"]["id"] == str(2**60 + best["row"] - 1)


def test_an_empty_window_has_no_objects(objects):
    assert objects.in_view((200.0, 201.0), ALL, ALL) == {"in_view": 0, "objects": []}


def test_the_census_counts_as_numpy_does(objects, numbers):
    window = ((20.0, 60.0), (10.0, 50.0), (0.0, 100.0))
    found = objects.census("speed", *window, bins=20)
    there = inside(numbers, *window)
    assert not found["log"]
    assert found["whole"] == np.histogram(numbers["speed"], found["edges"])[0].tolist()
    assert found["in_view"] == np.histogram(numbers["speed"][there], found["edges"])[0].tolist()


def test_the_census_of_a_wide_column_is_logarithmic(objects, numbers):
    found = objects.census("mass", ALL, ALL, ALL, bins=24)
    assert found["log"]
    assert np.allclose(np.diff(np.log10(found["edges"])), np.ptp(np.log10(numbers["mass"])) / 24)
    assert found["whole"] == np.histogram(numbers["mass"], found["edges"])[0].tolist()


def test_the_extremes_are_counted_in_the_first_and_last_bin(objects, numbers):
    found = objects.census("mass", ALL, ALL, ALL, bins=24)
    assert sum(found["whole"]) == COUNT
    assert (found["edges"][0], found["edges"][-1]) == (numbers["mass"].min(), numbers["mass"].max())


def test_zeros_and_missing_values_are_said_to_be_left_out(objects, numbers):
    found = objects.census("sfr", ALL, ALL, ALL)
    left = int(np.sum(~(numbers["sfr"] > 0)))
    assert found["left_out"] == {"in_view": left, "whole": left}
    assert sum(found["whole"]) == COUNT - left


def test_a_column_with_one_value_has_a_bin_that_holds_it(objects):
    found = objects.census('odd "name', ALL, ALL, ALL, bins=4)
    assert sum(found["whole"]) == COUNT and found["edges"] == sorted(set(found["edges"]))


@pytest.mark.parametrize("column", ["kind", "no such", 'x" FROM read_parquet(?); DROP TABLE objects; --', ""])
def test_a_column_that_cannot_be_counted_is_answered_with_those_that_can(objects, column):
    with pytest.raises(InputError, match="there are x, y, z, mass, id, sfr, speed"):
        objects.census(column, ALL, ALL, ALL)


def test_many_threads_get_the_same_answers(objects):
    expected = objects.in_view((10.0, 30.0), ALL, ALL, limit=50), objects.census("mass", (10.0, 30.0), ALL, ALL)
    different = []

    def ask():
        for _ in range(5):
            got = objects.in_view((10.0, 30.0), ALL, ALL, limit=50), objects.census("mass", (10.0, 30.0), ALL, ALL)
            if got != expected:
                different.append(got)

    threads = [threading.Thread(target=ask) for _ in range(8)]
    for thread in threads:
        thread.start()
    for thread in threads:
        thread.join()
    assert different == []
