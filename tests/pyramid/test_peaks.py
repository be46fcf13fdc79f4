"""Sheets of peaks: every coarser pixel, and all slabs together, hold the highest value and not the average."""

from __future__ import annotations

import numpy as np
import pytest
import zarr
from atlas_maker import write_array
from build_maker import changed, description, particles, write_build

import tilemap
from tilemap.build_atlas import build_atlas
from tilemap.pyramid.coding import LogCoding
from tilemap.pyramid.peaks import PeakWriter, highest
from tilemap.pyramid.publish import write_checksums
from tilemap.pyramid.reader import ArrayReader
from tilemap.pyramid.verify import verify
from tilemap.pyramid.writer import WHOLE
from tilemap.spill import ImageFile

PEAK = {"species": "gas", "peak": "mass", "unit": "Msun/kpc2"}


def built(folder, **values):
    build = changed(description(), view__slabs=3, sheets__peak=PEAK, **{"view__pixels": 1024} | values)
    return tilemap.open(build_atlas(write_build(folder, build, particles(900)), folder / "small.atlas"))


@pytest.fixture(scope="module")
def atlas(tmp_path_factory):
    """1024 pixels, two levels, three slabs."""
    return built(tmp_path_factory.mktemp("peaks"))


def codes_of(atlas, place: str) -> np.ndarray:
    return zarr.open(atlas.path / "z1.00" / place, mode="r")[:]


def test_what_is_built_verifies(atlas):
    assert verify(atlas.path) == []


@pytest.mark.parametrize("pixels", [512, 1536])
def test_images_of_one_tile_and_of_odd_numbers_of_tiles_verify_too(tmp_path, pixels):
    atlas = built(tmp_path, view__pixels=pixels)
    assert verify(atlas.path) == []
    finest = codes_of(atlas, "peak/0")
    assert np.array_equal(codes_of(atlas, "peak/whole/0")[0], finest.max(axis=0))


def test_at_the_finest_level_a_peak_is_the_sum(atlas):
    assert np.array_equal(codes_of(atlas, "peak/0"), codes_of(atlas, "gas/0"))


def test_a_coarser_pixel_is_the_highest_of_the_finer_ones_to_the_code(atlas):
    finest, coarse = codes_of(atlas, "peak/0"), codes_of(atlas, "peak/1")
    assert np.array_equal(coarse, finest.reshape(3, 512, 2, 512, 2).max(axis=(2, 4)))


def test_the_whole_is_the_highest_of_the_slabs_to_the_code(atlas):
    for level in (0, 1):
        assert np.array_equal(codes_of(atlas, f"peak/whole/{level}")[0], codes_of(atlas, f"peak/{level}").max(axis=0))


def test_a_compact_bright_object_does_not_fade(tmp_path):
    arrays = particles(2)
    arrays["radius"] = np.array([3.0, 0.004])
    arrays["mass"] = np.array([1e9, 1e9])
    build = changed(description(), view__pixels=2048, view__slabs=1, sheets__peak=PEAK)
    atlas = tilemap.open(build_atlas(write_build(tmp_path, build, arrays), tmp_path / "small.atlas"))
    at_hand = {
        name: [atlas.read(name, pixels=2048 >> level).values.max() for level in range(3)] for name in ("peak", "gas")
    }
    assert at_hand["peak"] == [at_hand["peak"][0]] * 3
    assert at_hand["gas"][2] < at_hand["gas"][0] / 4


def test_the_description_has_the_totals_of_the_slabs_and_the_range_of_what_is_shown(atlas):
    peak, gas = atlas.sheet("peak"), atlas.sheet("gas")
    assert (peak["kind"], peak["totals"], peak["weight"]) == ("peak", gas["totals"], None)
    shown = atlas.read("peak", pixels=512).values  # the level from which percentiles are taken
    assert peak["range"] == pytest.approx([shown[shown > 0].min(), shown.max()])
    assert peak["percentiles"]["50"] == pytest.approx(np.percentile(shown[shown > 0], 50), rel=1e-6)


@pytest.mark.parametrize(("slabs", "which"), [(slice(0, 2), [0, 1]), (1, [1]), (None, [0, 1, 2])])
def test_slabs_are_read_together_as_their_highest(atlas, slabs, which):
    each = np.stack([atlas.read("peak", slabs=slab).values for slab in which])
    assert np.array_equal(atlas.read("peak", slabs=slabs).values, each.max(axis=0))


def test_new_pixels_hold_the_highest_of_what_they_touch(atlas):
    # A pixel and a half each way, from level 0: cut each old pixel into 2 x 2, and 3 x 3 of those are a new one.
    window = {"centre": (4, 4), "width": 6.0, "slabs": 0}
    fine = atlas.read("peak", **window).values
    parts = np.repeat(np.repeat(fine, 2, axis=0), 2, axis=1).reshape(512, 3, 512, 3)
    assert np.array_equal(atlas.read("peak", **window, pixels=512).values, parts.max(axis=(1, 3)))


def test_beyond_the_edge_of_a_periodic_box_peaks_go_on(atlas):
    across = atlas.read("peak", (0, 4), 2.0, slabs=0).values
    columns = atlas.read("peak", slabs=0).values[384:640]
    assert np.array_equal(across, np.concatenate([columns[:, -128:], columns[:, :128]], axis=1))


def test_peaks_inside_an_outline_add_up_to_nothing(atlas):
    assert np.isnan(atlas.inside("peak", [(1, 1), (2, 1), (2, 2)]).total)


@pytest.mark.parametrize(
    ("place", "said"), [("peak/1", "not the highest of level 0"), ("peak/whole/1", "not the highest")]
)
def test_a_pixel_that_is_off_by_one_code_is_found(tmp_path, place, said):
    atlas = built(tmp_path)
    folder = atlas.path / "z1.00" / place
    reader = ArrayReader(folder)
    codes = np.stack([reader.codes(slab, 0, 0) for slab in range(reader.shape[0])])
    codes[0, np.unravel_index(codes[0].argmax(), codes[0].shape)[0], 7] += 1
    write_array(folder, codes)
    write_checksums(atlas.path)
    found = [str(each) for each in verify(atlas.path)]
    assert any("1 pixel is " + said in each for each in found)
    assert all("sheet peak" in each for each in found)


# The writer by itself, with pieces four tiles wide.


def test_pieces_four_tiles_wide_in_any_order_make_the_pyramid_of_the_whole_image(tmp_path):
    shape, slabs, side = (2560, 4608), 2, 2048
    rng = np.random.default_rng(5)
    values = (10.0 ** rng.uniform(-3, 9, (slabs, *shape)) * (rng.random((slabs, *shape)) > 0.6)).astype(np.float32)
    values[1, :2048, :2048] = 0
    coding = LogCoding(-2.0, 0.002)
    held = ImageFile(tmp_path / "codes", (slabs, 1, shape[0] // 4, shape[1] // 4), np.uint16)
    writer = PeakWriter(tmp_path / "peak", shape, slabs, coding, held, 2)
    corners = [(row, column) for row in range(0, shape[0], side) for column in range(0, shape[1], side)]
    for row, column in rng.permutation(corners).tolist():
        for slab in range(slabs):
            piece = values[slab, row : row + side, column : column + side]
            at = row // 512, column // 512
            if piece.any():
                writer.put(0, slab, at, piece)
            else:
                writer.put_nothing(0, slab, at, piece.shape)
        writer.put(0, WHOLE, at, piece)
    shown = writer.finish(1024)
    writer.close({})
    expected = coding.encode(values)
    for level in range(5):
        root = zarr.open(tmp_path / "peak", mode="r")
        assert np.array_equal(root[str(level)][:], expected), level
        assert np.array_equal(root[f"whole/{level}"][0], expected.max(axis=0)), level
        if level == 3:
            assert np.array_equal(shown, expected.max(axis=0))
        if level < 4:
            expected = highest(expected)
