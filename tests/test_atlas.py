"""Pieces read from an atlas, against the float arrays that it was made from."""

import json

import astropy.units as u
import numpy as np
import pytest
from atlas_maker import EPOCH, SheetData, make_atlas, make_sheets, pyramid_of, write_atlas

import tilemap
from tilemap.atlas import Atlas
from tilemap.errors import InputError
from tilemap.pyramid.coding import LinearCoding

# Half a step of 0.002 dex.
ROUNDING = 0.0024
COLUMNS, ROWS, SLABS = 1536, 512, 3
PIXEL = 100.0 / COLUMNS
HEIGHT = ROWS * PIXEL


@pytest.fixture(scope="module")
def sheets():
    return {sheet.name: sheet for sheet in make_sheets(COLUMNS, ROWS, SLABS)}


@pytest.fixture(scope="module")
def atlas(tmp_path_factory, sheets):
    """100 x 33.3 Mpc of a periodic box: the view covers it in u, not in v."""
    return tilemap.open(write_atlas(tmp_path_factory.mktemp("atlas") / "a.atlas", list(sheets.values())))


@pytest.fixture(scope="module")
def square(tmp_path_factory):
    """1024 x 1024 pixels, 2 levels, over the whole of a periodic box."""
    return tilemap.open(make_atlas(tmp_path_factory.mktemp("square") / "s.atlas", slabs=2))


@pytest.fixture(scope="module")
def aperiodic(tmp_path_factory):
    folder = tmp_path_factory.mktemp("aperiodic") / "s.atlas"
    return tilemap.open(make_atlas(folder, columns=512, rows=512, slabs=1, box=None))


def test_without_any_window_the_whole_of_the_finest_level_is_read(atlas, sheets):
    piece = atlas.read("gas")
    np.testing.assert_allclose(piece.values, sheets["gas"].values.sum(axis=0), rtol=ROUNDING)


def test_values_are_float32_in_the_sheets_unit(atlas):
    piece = atlas.read("gas", centre=(50, 20), width=1)
    assert (piece.values.dtype, piece.unit) == (np.float32, u.Msun / u.kpc**2)


def test_row_0_is_the_largest_v_and_column_0_the_smallest_u(atlas, sheets):
    piece = atlas.read("gas", centre=(10 * PIXEL, HEIGHT - 4 * PIXEL), width=4 * PIXEL, height=2 * PIXEL)
    np.testing.assert_allclose(piece.values, sheets["gas"].values.sum(axis=0)[3:5, 8:12], rtol=ROUNDING)


def test_the_window_moves_to_the_nearest_pixel_edges(atlas):
    piece = atlas.read("gas", centre=(10.3 * PIXEL, HEIGHT - 4.2 * PIXEL), width=4.1 * PIXEL, height=2 * PIXEL)
    assert piece.centre == pytest.approx((10 * PIXEL, HEIGHT - 4 * PIXEL))
    assert (piece.width, piece.height) == pytest.approx((4 * PIXEL, 2 * PIXEL))


def test_one_slab_is_that_slab(atlas, sheets):
    np.testing.assert_allclose(atlas.read("gas", slabs=1).values, sheets["gas"].values[1], rtol=ROUNDING)


def test_slabs_are_counted_from_the_end_where_negative(atlas):
    assert atlas.read("gas", width=1, slabs=-1).slabs == (2,)


def test_a_slice_of_slabs_is_their_sum(atlas, sheets):
    np.testing.assert_allclose(
        atlas.read("gas", slabs=slice(0, 2)).values, sheets["gas"].values[:2].sum(axis=0), rtol=ROUNDING
    )


def test_means_of_several_slabs_are_weighted(atlas, sheets):
    gas, temperature = sheets["gas"].values[1:].astype(float), np.nan_to_num(sheets["temperature"].values[1:])
    with np.errstate(invalid="ignore"):
        expected = (gas * temperature).sum(axis=0) / gas.sum(axis=0)
    # Weights are rounded too; a mean moves by at most the weights' rounding times the spread of what is averaged.
    np.testing.assert_allclose(atlas.read("temperature", slabs=slice(1, None)).values, expected, rtol=3 * ROUNDING)


def test_the_whole_of_a_mean_is_the_mean_of_all_slabs(atlas, sheets):
    expected = pyramid_of(sheets["temperature"], sheets, whole=True)[0][0]
    np.testing.assert_allclose(atlas.read("temperature").values, expected, rtol=ROUNDING)


def test_a_mean_is_nan_where_there_is_nothing_and_a_sum_zero(atlas):
    corner = {"centre": (2, 1), "width": 1}
    assert np.isnan(atlas.read("temperature", **corner).values).all()
    assert (atlas.read("gas", **corner).values == 0).all()


def test_tiles_that_are_not_there_are_zero_in_a_sum(atlas):
    assert (atlas.read("stars", centre=(50, HEIGHT - 1), width=2, slabs=0).values == 0).all()


@pytest.mark.parametrize("pixels", [1, 7, 100, 511, 512, 700, 1024, 1500])
def test_any_number_of_pixels_keeps_the_total(square, pixels):
    finest = square.read("gas").values
    piece = square.read("gas", pixels=pixels)
    assert piece.values.shape == (pixels, pixels)
    # Levels differ by the rounding of their codes, which averages out over many pixels; the resampling adds 1e-6.
    assert piece.values.mean(dtype=np.float64) == pytest.approx(finest.mean(dtype=np.float64), rel=2e-4)


@pytest.mark.parametrize("pixels", [1024, 1300, 2048])
def test_resampling_the_finest_level_keeps_its_total_to_1e_6(square, pixels):
    finest = square.read("gas").values.mean(dtype=np.float64)
    assert square.read("gas", pixels=pixels).values.mean(dtype=np.float64) == pytest.approx(finest, rel=1e-6)


def test_half_as_many_pixels_are_the_next_level_as_stored(square):
    piece = square.read("gas", pixels=512)
    reader = square.reader(EPOCH, "gas", 1, whole=True)
    assert np.array_equal(piece.values, square.coding("gas").decode(reader.codes(0, 0, 0)))


@pytest.mark.parametrize(("pixels", "level"), [(512, 1), (513, 0), (1024, 0), (5000, 0), (511, 1), (3, 1)])
def test_the_coarsest_level_that_is_fine_enough_is_read(square, pixels, level):
    assert square.read("stars", pixels=pixels).level == level


def test_averaged_means_are_weighted(square):
    fine = square.read("temperature", slabs=0).values.astype(float)
    weight = square.read("gas", slabs=0).values.astype(float)
    block = (slice(0, 4), slice(0, 4))
    expected = (fine[block] * weight[block]).sum() / weight[block].sum()
    pixel = 100 / 1024
    piece = square.read(
        "temperature", centre=(2 * pixel, 100 - 2 * pixel), width=4 * pixel, height=4 * pixel, pixels=1, slabs=0
    )
    assert piece.values[0, 0] == pytest.approx(expected, rel=3 * ROUNDING)


def test_a_window_across_the_edge_of_a_periodic_box_goes_on_at_the_other_side(square):
    everything = square.read("gas").values
    piece = square.read("gas", centre=(0, 0), width=16 * 100 / 1024)
    assert np.array_equal(piece.values, np.roll(everything, (8, 8), axis=(0, 1))[:16, :16])


def test_a_window_wider_than_a_periodic_box_repeats_it(square):
    piece = square.read("gas", centre=(100, 50), width=200, height=10)
    assert np.array_equal(piece.values[:, :1024], piece.values[:, 1024:])


def test_a_centre_some_boxes_away_is_the_same_place(square):
    near, far = (square.read("gas", centre=(u0, 40), width=5, pixels=33).values for u0 in (30, 330))
    np.testing.assert_allclose(near, far, rtol=1e-5)


def test_beyond_the_edge_of_a_view_that_does_not_cover_the_box_is_nan(atlas):
    piece = atlas.read("gas", centre=(50, HEIGHT), width=4 * PIXEL)
    assert np.isnan(piece.values).any(axis=1).tolist() == [True, True, False, False]


def test_beyond_the_edge_of_a_volume_without_a_box_is_nan(aperiodic):
    piece = aperiodic.read("gas", centre=(0, 50), width=4 * 100 / 512)
    assert np.isnan(piece.values).any(axis=0).tolist() == [True, True, False, False]


def test_a_new_pixel_partly_beyond_the_edge_is_nan(aperiodic):
    piece = aperiodic.read("gas", centre=(1, 50), width=3, height=1, pixels=3)
    assert np.isnan(piece.values).tolist() == [[True, False, False]]


def test_the_wcs_gives_u_and_v_of_the_values_as_they_stand(atlas):
    piece = atlas.read("gas", centre=(40, 20), width=6, height=3, pixels=60)
    # The rule of the geometry: u = u_lo + (j + 1/2) pixel, v = v_hi - (i + 1/2) pixel.
    u_of, v_of = piece.wcs.pixel_to_world(7, 2)
    assert (u_of.to_value(u.Mpc), v_of.to_value(u.Mpc)) == pytest.approx((37 + 7.5 * 0.1, 21.5 - 2.5 * 0.1))


def test_the_wcs_points_at_the_brightest_pixel(atlas, sheets):
    stars = sheets["stars"].values.sum(axis=0)
    row, column = np.unravel_index(stars.argmax(), stars.shape)
    place = ((column + 0.5) * PIXEL, HEIGHT - (row + 0.5) * PIXEL)
    piece = atlas.read("stars", centre=(place[0] + 0.3, place[1] - 0.2), width=4, height=3)
    brightest = np.unravel_index(piece.values.argmax(), piece.values.shape)
    found = piece.wcs.pixel_to_world(brightest[1], brightest[0])
    assert [q.to_value(u.Mpc) for q in found] == pytest.approx(place, abs=1e-9)


def test_the_wcs_survives_a_fits_header(atlas):
    from astropy.wcs import WCS

    piece = atlas.read("gas", centre=(40, 20), width=6, height=3, pixels=60)
    again = WCS(piece.wcs.to_header())
    assert [q.to_value(u.Mpc) for q in again.pixel_to_world(0, 0)] == pytest.approx([37.05, 21.45])


def test_lengths_may_carry_units(atlas):
    plain = atlas.read("gas", centre=(40, 20), width=0.5)
    other = atlas.read("gas", centre=(4e4 * u.kpc, "20 Mpc"), width="500 kpc")
    assert np.array_equal(plain.values, other.values)


def test_a_piece_says_what_it_is(atlas):
    piece = atlas.read("temperature", width=1, slabs=slice(1, 3))
    assert (piece.sheet, piece.epoch, piece.slabs, piece.level) == ("temperature", EPOCH, (1, 2), 0)


def test_a_sum_in_linear_coding_is_nan_only_where_no_slab_has_anything(tmp_path):
    values = np.zeros((2, 512, 512), dtype=np.float32)
    values[0, :2], values[1, 1:3] = 5.0, -3.0
    values[values == 0] = np.nan
    sheet = SheetData(
        "flow", "sum", values, "Msun / (Mpc2 yr)", total_unit="Msun / yr", coding=LinearCoding(-50.0, 0.01)
    )
    atlas = Atlas(write_atlas(tmp_path / "a", [sheet]))
    read = [atlas.read("flow", slabs=slabs).values[:4, 9] for slabs in (slice(0, 2), slice(0, 1))]
    np.testing.assert_allclose(read, [[5, 2, -3, np.nan], [5, 5, np.nan, np.nan]], atol=0.01)


def test_a_flat_chart_in_degrees_reads_in_degrees(tmp_path):
    folder = make_atlas(tmp_path / "a", columns=512, rows=512, slabs=1, box=None)
    described = json.loads((folder / "atlas.json").read_text())
    described["view"] |= {"unit": "deg", "coordinates": "plane", "axes": ["l", "b", "depth"], "periodic": False}
    (folder / "atlas.json").write_text(json.dumps(described))
    piece = tilemap.open(folder).read("gas", centre=(50, "3000 arcmin"), width="2 deg")
    assert [q.unit for q in piece.wcs.pixel_to_world(0, 0)] == [u.deg, u.deg]


def test_the_sheets_and_epochs_are_listed(atlas):
    assert (atlas.sheets, atlas.epochs, atlas.slab_count) == (("gas", "temperature", "stars"), (EPOCH,), 3)


def test_the_reader_of_an_array_is_the_same_at_every_call(atlas):
    assert atlas.reader(EPOCH, "gas", 0) is atlas.reader(EPOCH, "gas", 0)


def test_the_whole_of_an_atlas_of_one_slab_is_the_slab(aperiodic):
    assert aperiodic.reader(EPOCH, "gas", 0, whole=True).folder == aperiodic.path / EPOCH / "gas" / "0"


@pytest.mark.parametrize(
    ("arguments", "word"),
    [
        ({"sheet": "gass"}, "'gas'"),
        ({"epoch": "z0.5"}, "z0.50"),
        ({"centre": (50, 90), "width": 4}, "outside the view"),
        ({"centre": (50, 10), "width": 0}, "above zero"),
        ({"centre": (50, 10), "width": -2}, "above zero"),
        ({"centre": 50, "width": 2}, "two lengths"),
        ({"centre": (50, 10), "width": "2 kg"}, "kg"),
        ({"centre": (50, 10), "width": 2 * u.s}, "length"),
        ({"centre": (50, float("nan")), "width": 2}, "finite"),
        ({"slabs": 3}, "0 to 2"),
        ({"slabs": slice(3, 9)}, "none"),
        ({"slabs": "all"}, "a number or a slice"),
        ({"pixels": 0}, "from 1 up"),
        ({"pixels": 2.5}, "from 1 up"),
        ({"pixels": 40_000, "height": 100}, "pixels="),
        ({"width": 3000, "height": 3000}, "too large"),
    ],
)
def test_what_cannot_be_read_is_refused_saying_what_can(atlas, arguments, word):
    with pytest.raises(InputError, match=word):
        atlas.read(**{"sheet": "gas", **arguments})


def test_a_level_that_is_not_there_is_refused(atlas):
    with pytest.raises(InputError, match="0 to 2"):
        atlas.reader(EPOCH, "gas", 3)


def test_one_of_several_epochs_must_be_named(tmp_path):
    folder = make_atlas(tmp_path / "a", columns=512, rows=512, slabs=1)
    described = json.loads((folder / "atlas.json").read_text())
    described["epochs"].append({**described["epochs"][0], "name": "z1.00"})
    (folder / "atlas.json").write_text(json.dumps(described))
    with pytest.raises(InputError, match=r"z0\.50, z1\.00"):
        Atlas(folder).read("gas")


@pytest.mark.parametrize(
    ("content", "word"),
    [
        (None, "no atlas.json"),
        ("{", "not JSON"),
        ("[]", "is not an atlas"),
        ('{"format": "other"}', "is not an atlas"),
        ('{"format": "tilemap-atlas", "version": 7}', "version 7"),
        ('{"format": "tilemap-atlas", "version": 1}', "missing"),
    ],
)
def test_a_folder_that_is_no_atlas_is_refused(tmp_path, content, word):
    if content is not None:
        (tmp_path / "atlas.json").write_text(content)
    with pytest.raises(InputError, match=word):
        tilemap.open(tmp_path)


def test_a_folder_that_is_not_there_is_refused(tmp_path):
    with pytest.raises(InputError, match="no such folder"):
        tilemap.open(tmp_path / "nowhere")
