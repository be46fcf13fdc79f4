"""Dispersions: put together over slabs and pixels they are those that one slab, or one pixel, would have had."""

from __future__ import annotations

import numpy as np
import pytest
from atlas_maker import write_array
from build_maker import changed, description, particles, write_build
from hypothesis import given, settings
from hypothesis import strategies as st

import tilemap
from tilemap.build_atlas import build_atlas
from tilemap.pyramid.agree import dispersion_misfits
from tilemap.pyramid.coding import LinearCoding, LogCoding
from tilemap.pyramid.publish import write_checksums
from tilemap.pyramid.reader import ArrayReader
from tilemap.pyramid.verify import verify

SPREAD = {"species": "gas", "dispersion": "velocity", "unit": "km/s", "coding": "linear"}
EDGES = [0.0, 2.5, 5.0, 8.0]


def built(folder, slabs, **more):
    build = changed(description(), view__pixels=1024, view__slabs=slabs, sheets__spread=SPREAD | more)
    return tilemap.open(build_atlas(write_build(folder, build, particles(3000)), folder / "small.atlas"))


@pytest.fixture(scope="module")
def atlas(tmp_path_factory):
    """1024 pixels, two levels, three slabs; particles of 200 km/s each way."""
    return built(tmp_path_factory.mktemp("slabs"), EDGES)


def test_what_is_built_verifies(atlas):
    assert verify(atlas.path) == []


def test_a_dispersion_in_log_coding_verifies_too(tmp_path):
    assert verify(built(tmp_path, EDGES, coding="log").path) == []


@pytest.mark.parametrize(("slabs", "edges"), [(slice(0, 2), [0.0, 5.0]), (slice(1, 3), [2.5, 8.0]), (None, [0.0, 8.0])])
def test_slabs_together_are_what_one_slab_of_their_depth_is(atlas, tmp_path, slabs, edges):
    one = built(tmp_path, edges)
    found, expected = atlas.read("spread", slabs=slabs).values, one.read("spread").values
    assert np.array_equal(np.isnan(found), np.isnan(expected))
    # Weights are rounded to 0.23 %; the floor of single precision is seen where hardly anything moves.
    moving = expected > 20
    assert moving.mean() > 0.2
    assert found[moving] == pytest.approx(expected[moving], rel=4e-3)
    assert found[~moving & ~np.isnan(expected)] == pytest.approx(expected[~moving & ~np.isnan(expected)], abs=0.6)


def test_the_whole_is_what_the_slabs_read_together_are(atlas):
    whole = atlas.read("spread").values
    gas, mean, spread = (
        np.stack([atlas.read(name, slabs=slab).values.astype(np.float64) for slab in range(3)])
        for name in ("gas", "velocity", "spread")
    )
    mean, spread = np.nan_to_num(mean), np.nan_to_num(spread)
    with np.errstate(invalid="ignore"):
        middle = (gas * mean).sum(axis=0) / gas.sum(axis=0)
        expected = np.sqrt((gas * (spread**2 + (mean - middle) ** 2)).sum(axis=0) / gas.sum(axis=0))
    moving = expected > 20
    assert moving.mean() > 0.2
    # Weights are rounded to 0.23 %.
    assert whole[moving] == pytest.approx(expected[moving], rel=4e-3)


def test_where_all_move_alike_there_is_no_dispersion_above_the_floor(tmp_path):
    # Half of the box moves at 500 km/s one way, half the other way: wherever one is not mixed with the other, nothing
    # is left but rounding, however many particles overlap.
    rng = np.random.default_rng(6)
    arrays = particles(100_000)
    arrays["radius"] = 10 ** rng.uniform(-3, -0.5, 100_000)
    arrays["velocity"] = np.where(arrays["position"][:, 0] < 4, -500.0, 500.0)
    build = changed(description(), view__slabs=1, sheets__spread=SPREAD)
    atlas = tilemap.open(build_atlas(write_build(tmp_path, build, arrays), tmp_path / "small.atlas"))
    # Kernels reach 0.32 Mpc; the two halves also meet at the edge of the periodic box.
    values = atlas.read("spread", (2, 4), 3.2, 7.9).values
    assert atlas.sheet("spread")["floor"] == pytest.approx(1.0, rel=0.01)
    assert np.nanmax(values) < 1.0


def test_coarser_pixels_hold_the_spread_of_the_finer_ones(atlas):
    gas, mean, spread = (atlas.read(name, slabs=1).values.astype(np.float64) for name in ("gas", "velocity", "spread"))
    blocks = [np.nan_to_num(each).reshape(512, 2, 512, 2) for each in (gas, mean, spread)]
    with np.errstate(invalid="ignore"):
        middle = (blocks[0] * blocks[1]).sum(axis=(1, 3)) / blocks[0].sum(axis=(1, 3))
        square = blocks[2] ** 2 + (blocks[1] - middle[:, None, :, None]) ** 2
        expected = np.sqrt((blocks[0] * square).sum(axis=(1, 3)) / blocks[0].sum(axis=(1, 3)))
    coarse = atlas.read("spread", slabs=1, pixels=512)
    assert coarse.level == 1
    moving = expected > 20
    assert coarse.values[moving] == pytest.approx(expected[moving], rel=4e-3)
    assert np.array_equal(np.isnan(coarse.values), np.isnan(expected))


def test_pixels_that_are_no_level_are_put_together_the_same_way(atlas):
    # A pixel and a half each way, from level 0: every old pixel is cut into 2 x 2, and 3 x 3 of those are a new one.
    window = {"centre": (4, 4), "width": 6.0}
    gas, mean, spread = (
        np.nan_to_num(atlas.read(name, **window, slabs=0).values.astype(np.float64))
        for name in ("gas", "velocity", "spread")
    )
    halves = [np.repeat(np.repeat(each, 2, axis=0), 2, axis=1).reshape(512, 3, 512, 3) for each in (gas, mean, spread)]
    with np.errstate(invalid="ignore"):
        weight = halves[0].sum(axis=(1, 3))
        first = (halves[0] * halves[1]).sum(axis=(1, 3)) / weight
        second = (halves[0] * (halves[1] ** 2 + halves[2] ** 2)).sum(axis=(1, 3)) / weight
        expected = np.sqrt(np.maximum(second - first**2, 0))
    found = atlas.read("spread", **window, slabs=0, pixels=512)
    assert found.level == 0
    moving = expected > 20
    assert moving.any()
    assert found.values[moving] == pytest.approx(expected[moving], rel=1e-4)


@pytest.mark.parametrize(
    ("place", "said"), [("1", "dispersion, weighted by gas, of level 0"), ("whole/1", "dispersion")]
)
def test_a_level_that_is_not_the_dispersion_of_the_finer_one_is_found(tmp_path, place, said):
    atlas = built(tmp_path, EDGES)
    folder = atlas.path / "z1.00" / "spread" / place
    reader = ArrayReader(folder)
    codes = np.stack([reader.codes(slab, 0, 0) for slab in range(reader.shape[0])])
    codes[codes > 20000] -= 2000  # 12 km/s too little
    write_array(folder, codes)
    write_checksums(atlas.path)
    found = [str(each) for each in verify(atlas.path)]
    assert found and all("sheet spread" in each for each in found)
    assert any(said in each for each in found)


MEAN, WEIGHT = LinearCoding(-1000.0, 0.03), LogCoding(-3.0, 0.002)


@settings(max_examples=60, deadline=None)
@given(st.integers(0, 2**32 - 1), st.sampled_from([0.0, 0.5, 0.95]), st.sampled_from(["log", "linear"]))
def test_parts_and_what_they_make_together_always_fit(seed, sparse, coded):
    rng = np.random.default_rng(seed)
    shape = (4, 24, 24)
    coding = LinearCoding(0.0, 0.02) if coded == "linear" else LogCoding(-3.0, 0.002, nothing=np.nan)
    weight = np.where(rng.random(shape) < sparse, 0.0, 10 ** rng.uniform(-2, 6, shape))
    mean = np.where(weight > 0, rng.uniform(-900, 900, shape), np.nan)
    spread = np.where(weight > 0, rng.uniform(0, 400, shape) * (rng.random(shape) < 0.7), np.nan)
    with np.errstate(invalid="ignore"):
        total = weight.sum(axis=0)
        middle = np.nansum(weight * mean, axis=0) / total
        square = np.nansum(weight * (spread**2 + (mean - middle) ** 2), axis=0) / total
    parts, whole = coding.encode(spread), coding.encode(np.sqrt(square))
    given_codes = whole, MEAN.encode(middle), parts, MEAN.encode(mean), WEIGHT.encode(weight)
    assert dispersion_misfits(*given_codes, coding, MEAN, WEIGHT, 0.1) == 0


def test_a_dispersion_that_leaves_out_how_the_parts_move_does_not_fit():
    coding = LinearCoding(0.0, 0.02)
    ones = np.ones((4, 8, 8))
    means = np.array([-50.0, 50.0, -50.0, 50.0])[:, None, None] * ones
    codes = (
        coding.encode(10 * ones[0]),
        MEAN.encode(0 * ones[0]),
        coding.encode(10 * ones),
        MEAN.encode(means),
        WEIGHT.encode(ones),
    )
    assert dispersion_misfits(*codes, coding, MEAN, WEIGHT, 0.1) == 64
