"""What lies inside an outline, against clipping pixel by pixel, a rasteriser from PyPI, and numpy on what the atlas reads."""

import astropy.units as u
import numpy as np
import pytest
from atlas_maker import SCALE_FACTOR, SheetData, make_atlas, write_atlas
from build_maker import changed, description, particles, write_build
from hypothesis import given
from hypothesis import strategies as st
from PIL import Image, ImageDraw

import tilemap
from tilemap import outline as outline_room
from tilemap.build_atlas import build_atlas
from tilemap.errors import InputError
from tilemap.outline import coverage

PIXEL = 100 / 1024
STAR = [(21.3, 30.1), (40.2, 33.7), (52.8, 21.2), (48.1, 44.4), (60.3, 58.8), (39.9, 51.2), (22.2, 63.1), (28.7, 45.3)]


def shoelace(points):
    """Area of a polygon that does not cross itself; the surveyor's formula (Meister 1769; from memory)."""
    x, y = np.asarray(points, dtype=float).T
    return abs(np.dot(x, np.roll(y, -1)) - np.dot(y, np.roll(x, -1))) / 2


def clipped(points, row, column):
    """The part of a polygon within one pixel: Sutherland & Hodgman (1974), CACM 17, 32 (from memory)."""
    for axis, line, side in ((0, column, 1), (0, column + 1, -1), (1, row, 1), (1, row + 1, -1)):
        kept = []
        for a, b in zip(points, points[1:] + points[:1], strict=True):
            da, db = side * (a[axis] - line), side * (b[axis] - line)
            if da >= 0:
                kept.append(a)
            if (da > 0 > db) or (da < 0 < db):
                t = da / (da - db)
                kept.append((a[0] + t * (b[0] - a[0]), a[1] + t * (b[1] - a[1])))
        points = kept
    return shoelace(points) if len(points) > 2 else 0.0


def star_shaped(radii, turn, x, y):
    angles = turn + 2 * np.pi * np.arange(len(radii)) / len(radii)
    return [(x + r * np.cos(a), y + r * np.sin(a)) for r, a in zip(radii, angles, strict=True)]


stars = st.builds(
    star_shaped,
    st.lists(st.floats(0.2, 9), min_size=3, max_size=9),
    st.floats(0, 7),
    st.floats(-2, 14),
    st.floats(-2, 12),
)


@given(stars)
def test_each_pixel_counts_by_the_part_of_it_that_is_inside(points):
    expected = [[clipped(points, row, column) for column in range(12)] for row in range(10)]
    np.testing.assert_allclose(coverage(points, 10, 12), expected, atol=1e-9)


@given(stars, st.booleans())
def test_neither_direction_nor_first_corner_matter(points, back):
    other = points[2:] + points[:2]
    np.testing.assert_allclose(coverage(points, 10, 12), coverage(other[::-1] if back else other, 10, 12), atol=1e-9)


def test_corners_and_edges_on_pixel_edges_take_whole_pixels():
    expected = np.zeros((5, 6))
    expected[1:4, 2:5] = 1
    assert np.array_equal(coverage([(2, 1), (5, 1), (5, 4), (2, 4)], 5, 6), expected)


def test_an_outline_that_crosses_itself_or_goes_round_twice_counts_each_place_once():
    bow = [(0, 0), (4, 4), (4, 0), (0, 4)]
    assert coverage(bow, 4, 4).sum() == pytest.approx(8)
    twice = [(0, 0), (3, 0), (3, 3), (0, 3)] * 2
    assert coverage(twice, 4, 4).sum() == pytest.approx(9)


@pytest.fixture(scope="module")
def atlas(tmp_path_factory):
    """1024 x 1024 pixels of 100 Mpc, three slabs."""
    return tilemap.open(make_atlas(tmp_path_factory.mktemp("outline") / "a.atlas"))


def mask(points, fine=16):
    """Share of each pixel inside, by PIL's rasteriser on pixels sixteen times as fine, which have their centres at whole numbers."""
    corners = [((x / PIXEL - 200) * fine - 0.5, ((100 - y) / PIXEL - 350) * fine - 0.5) for x, y in points]
    image = Image.new("1", (450 * fine, 470 * fine))
    ImageDraw.Draw(image).polygon(corners, fill=1)
    share = np.zeros((1024, 1024))
    share[350:820, 200:650] = np.asarray(image).reshape(470, fine, 450, fine).mean(axis=(1, 3))
    return share


def weighted(values, weight):
    mean = np.average(values, weights=weight)
    return mean, np.sqrt(np.average((values - mean) ** 2, weights=weight))


@pytest.mark.parametrize("slabs", [None, 1, slice(0, 2)])
def test_a_sum_sheet_inside_an_outline(atlas, slabs):
    found = atlas.inside("gas", STAR, slabs=slabs)
    values = atlas.read("gas", slabs=slabs).values.astype(float)
    mean, spread = weighted(values, mask(STAR))
    assert found.area == pytest.approx(shoelace(STAR), rel=1e-12)
    # PIL draws edges that are a pixel of its own wide: up to 1e-3 of this area.
    assert (found.mean, found.spread) == pytest.approx((mean, spread), rel=2e-3)
    total = (mean * u.Msun / u.kpc**2 * shoelace(STAR) * u.Mpc**2).to_value(u.Msun)
    assert found.total == pytest.approx(total, rel=2e-3)
    assert (found.unit, found.total_unit, found.total_of, found.level, found.outside) == (
        "Msun / kpc2", "Msun", "gas", 0, 0.0,
    )  # fmt: skip


@pytest.mark.parametrize("slabs", [None, slice(1, 3)])
def test_a_mean_sheet_inside_an_outline_is_weighted_by_its_weight(atlas, slabs):
    found = atlas.inside("temperature", STAR, slabs=slabs)
    gas = atlas.read("gas", slabs=slabs).values.astype(float)
    values = np.nan_to_num(atlas.read("temperature", slabs=slabs).values.astype(float))
    mean, spread = weighted(values, mask(STAR) * gas)
    assert (found.mean, found.spread) == pytest.approx((mean, spread), rel=4e-3)
    assert (found.unit, found.total_of, found.total_unit) == ("K", "gas", "Msun")
    assert found.total == pytest.approx(atlas.inside("gas", STAR, slabs=slabs).total, rel=1e-9)


def test_a_rectangle_of_whole_pixels_is_numpy_on_those_pixels(atlas):
    u0, u1, v0, v1 = (PIXEL * n for n in (100, 180, 300, 340))
    found = atlas.inside("gas", [(u0, v0), (u1, v0), (u1, v1), (u0, v1)])
    values = atlas.read("gas").values[1024 - 340 : 1024 - 300, 100:180].astype(float)
    assert (found.mean, found.spread) == pytest.approx((values.mean(), values.std()), rel=1e-6)


def test_a_tiny_outline_inside_one_pixel_reads_that_pixel(atlas):
    middle = 50.5 * PIXEL
    found = atlas.inside("gas", [(middle, middle), (middle + 1e-4, middle), (middle, middle + 1e-4)])
    assert found.mean == pytest.approx(float(atlas.read("gas").values[1024 - 51, 50]), rel=1e-6)
    assert found.area == pytest.approx(5e-9, rel=1e-6)
    assert found.spread == pytest.approx(0, abs=1e-9 * found.mean)


def test_pixels_without_a_value_do_not_count_in_a_mean(atlas):
    # The gas ends at a straight line there: 40 rows at the bottom of the left quarter are empty.
    box = [(2, 1), (8, 1), (8, 39 * PIXEL), (2, 39 * PIXEL)]
    found = atlas.inside("temperature", box)
    assert np.isnan(found.mean) and np.isnan(found.spread) and found.total == 0
    wider = atlas.inside("temperature", [(2, 1), (8, 1), (8, 45 * PIXEL), (2, 45 * PIXEL)])
    narrow = atlas.inside("temperature", [(2, 40 * PIXEL), (8, 40 * PIXEL), (8, 45 * PIXEL), (2, 45 * PIXEL)])
    assert wider.mean == pytest.approx(narrow.mean, rel=1e-9)


def test_all_of_the_view_has_the_total_of_the_sheet(atlas):
    found = atlas.inside("gas", [(0, 0), (100, 0), (100, 100), (0, 100)])
    # Rounded codes: 0.13 % each at random, over a million pixels.
    assert found.total == pytest.approx(atlas.sheet("gas")["total"], rel=1e-4)


def test_what_lies_outside_the_view_does_not_count_and_is_told(atlas):
    whole = [(-50, 20), (50, 20), (50, 60), (-50, 60)]
    found = atlas.inside("gas", whole)
    half = atlas.inside("gas", [(0, 20), (50, 20), (50, 60), (0, 60)])
    assert found.outside == pytest.approx(0.5, rel=1e-9)
    assert (found.area, found.mean, found.total) == pytest.approx((half.area, half.mean, half.total), rel=1e-9)


def test_a_large_outline_is_read_from_a_coarser_level_and_says_so(atlas, monkeypatch):
    fine = atlas.inside("gas", STAR)
    monkeypatch.setattr(outline_room, "MOST_PIXELS", 150_000)
    found = atlas.inside("gas", STAR)
    assert (found.level, found.pixel) == (1, 2 * PIXEL)
    assert found.area == pytest.approx(fine.area, rel=1e-12)
    assert (found.mean, found.total) == pytest.approx((fine.mean, fine.total), rel=2e-3)


def test_totals_of_a_proper_density_are_over_proper_area(tmp_path):
    values = np.full((1, 512, 512), 3e5, dtype=np.float32)
    values[0, 0, 0] = 1e5
    sheet = SheetData("gas", "sum", values, "Msun / kpc2", area="proper")
    atlas = tilemap.open(write_atlas(tmp_path / "p.atlas", [sheet]))
    found = atlas.inside("gas", [(50, 50), (51, 50), (51, 51), (50, 51)])
    assert found.total == pytest.approx(found.mean * 1e6 * SCALE_FACTOR**2, rel=1e-9)


def test_a_dispersion_inside_is_that_about_the_common_mean(tmp_path):
    spread = {"species": "gas", "dispersion": "velocity", "unit": "km/s", "coding": "linear"}
    build = changed(description(), view__pixels=1024, view__slabs=2, sheets__spread=spread)
    atlas = tilemap.open(build_atlas(write_build(tmp_path, build, particles(3000)), tmp_path / "small.atlas"))
    found = atlas.inside("spread", [(2, 2), (6, 2), (6, 6), (2, 6)])
    window = {"centre": (4.0, 4.0), "width": 4.0}
    gas, velocity, own = (
        np.nan_to_num(atlas.read(name, **window).values.astype(float)) for name in ("gas", "velocity", "spread")
    )
    _, about = weighted(velocity, gas)
    assert found.together == pytest.approx(np.sqrt(np.average(own**2, weights=gas) + about**2), rel=1e-6)
    assert found.mean == pytest.approx(np.average(own, weights=gas), rel=1e-6)
    # One pixel of that size, as the pyramid puts it together from its coarsest level.
    assert found.together == pytest.approx(float(atlas.read("spread", pixels=1, **window).values[0, 0]), rel=1e-2)
    assert atlas.inside("velocity", [(2, 2), (6, 2), (6, 6), (2, 6)]).together is None


@pytest.mark.parametrize(
    ("points", "said"),
    [
        ([(1, 1), (2, 2)], "3 to 1000"),
        ([(1, 1), (2, 2), (3, 3)], "one line"),
        ([(1, 1), (1, 1), (1, 1)], "one line"),
        ([(1, 1, 1)] * 3, "places"),
        ([("a", "b")] * 3, "in numbers"),
        ([(1, 1), (2, 2), (3, float("nan"))], "finite"),
        ([(101, 1), (102, 1), (102, 2)], r"outside the view.*u 0 to 100"),
        ([(-9, 3), (-9, -9), (3, -9)], "outside the view"),  # round the corner of the view
        ([(0, 0)] * 1001, "3 to 1000"),
    ],
)
def test_an_outline_that_is_none_is_answered_in_one_line(atlas, points, said):
    with pytest.raises(InputError, match=said):
        atlas.inside("gas", points)
