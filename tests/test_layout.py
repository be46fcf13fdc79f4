"""From a build file and a box to the camera: where lengths become pixels and slabs."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
import yaml
from build_maker import changed, description

from tilemap.buildfile import BuildFile, loads
from tilemap.errors import InputError
from tilemap.layout import describe_view, make_camera
from tilemap.sources import Facts

BOX = np.array([10.0, 20.0, 40.0])


def build(**values: object) -> BuildFile:
    text = yaml.safe_dump(changed(description(), **values))
    return loads(text, Path("somewhere") / "small.yaml")


def facts(box: np.ndarray | None = BOX, periodic: bool = True) -> Facts:
    return Facts(box, 1.0, None, [], periodic and box is not None)


def chart(**values: object) -> BuildFile:
    flat = {"snapshot__box": None, "snapshot__redshift": None, "snapshot__cosmology": None, "view__unit": "deg"}
    return build(
        **flat | {"view__centre": [180, 0], "view__width": 360, "view__height": 180, "view__pixels": 1024} | values
    )


@pytest.mark.parametrize(
    ("along", "u", "v", "depth"),
    [("z", (0, 10), (0, 20), (0, 40)), ("x", (0, 20), (0, 40), (0, 10)), ("y", (0, 40), (0, 10), (0, 20))],
)
def test_without_more_words_the_view_is_the_box(along, u, v, depth):
    # Along y the image is four times as wide as high, so it needs 2048 columns for 512 rows.
    pixels = 2048 if along == "y" else 512
    camera = make_camera(build(view={"along": along, "pixels": pixels}), facts())
    assert (camera.u, camera.v, camera.depth) == (
        pytest.approx(u),
        pytest.approx(v),
        pytest.approx(depth),
    )


def test_pixels_are_square():
    camera = make_camera(build(view__pixels=1024), facts())
    assert (camera.columns, camera.rows) == (1024, 2048)
    assert camera.pixel == pytest.approx(10 / 1024)


def test_the_centre_is_given_in_x_y_z_whatever_the_line_of_sight():
    camera = make_camera(build(view__along="x", view__centre=[1, 2, 3], view__width=1, view__depth=4), facts())
    middle = [np.mean(side) for side in (camera.u, camera.v, camera.depth)]
    assert middle == pytest.approx([2, 3, 1])


def test_a_width_alone_makes_a_square():
    camera = make_camera(build(view__width=4), facts())
    assert (camera.u, camera.v) == (pytest.approx((3, 7)), pytest.approx((8, 12)))


def test_a_height_makes_rows():
    camera = make_camera(build(view__width=4, view__height=8), facts())
    assert (camera.columns, camera.rows) == (512, 1024)


def test_slabs_cut_the_depth_evenly():
    assert make_camera(build(view__slabs=4), facts()).edges == pytest.approx([0, 10, 20, 30, 40])


def test_slabs_may_be_given_by_their_edges():
    assert make_camera(build(view__slabs=[1.0, 2.0, 30.0]), facts()).edges == pytest.approx([1, 2, 30])


def test_the_period_stands_in_the_order_of_the_image_axes():
    camera = make_camera(build(view__along="x", view__width=1), facts())
    assert camera.period == pytest.approx([20, 40, 10])


def test_where_nothing_repeats_there_is_no_period():
    assert make_camera(build(view__width=1), facts(periodic=False)).period is None


def test_a_chart_in_degrees_is_one_slab_around_depth_zero():
    camera = make_camera(chart(view__slabs=1), facts(None))
    assert (camera.u, camera.v) == (pytest.approx((0, 360)), pytest.approx((-90, 90)))
    assert (camera.columns, camera.rows, camera.slabs) == (1024, 512, 1)
    assert camera.edges[0] < 0 < camera.edges[1]


@pytest.mark.parametrize(
    ("values", "box", "said"),
    [
        ({}, None, "the files name no box, so centre and width must be given"),
        ({"view__centre": [0, 0, 0]}, None, "centre and width must be given"),
        ({"view__width": 5}, None, "centre and width must be given"),
        ({"view__centre": [0, 0, 0], "view__width": 5}, None, "the files name no box, so depth must be given"),
        ({"view__along": "y"}, BOX, r"view\.height is 10: at 512 pixels across 40 it must be a multiple of 512"),
        ({"view__slabs": [0.0, 41.0]}, BOX, "slabs reach over 41, more than the box, which is 40 deep"),
        ({"view__depth": 41}, BOX, "slabs reach over 41, more than the box"),
    ],
)
def test_a_view_that_cannot_be_cut_is_refused(values, box, said):
    with pytest.raises(InputError, match=said):
        make_camera(build(**values), facts(box))


def test_slabs_may_reach_beyond_a_box_that_does_not_repeat():
    assert make_camera(build(view__depth=50), facts(periodic=False)).depth == pytest.approx((-5, 45))


def test_the_description_has_the_axes_in_the_order_of_the_image_and_the_box_in_that_of_the_space():
    spec = build(view__along="x", view__width=2)
    described = describe_view(spec, make_camera(spec, facts()))
    assert described["axes"] == ["y", "z", "x"]
    assert described["box"] == pytest.approx([10, 20, 40])
    assert (described["along"], described["periodic"], described["coordinates"]) == ("x", True, "comoving")


def test_the_description_of_a_chart_is_plane_and_has_no_box():
    described = describe_view(chart(), make_camera(chart(), facts(None)))
    assert (described["coordinates"], described["unit"], described["box"]) == ("plane", "deg", None)
    assert described["periodic"] is False


# Turned.

CUBE = np.array([20.0, 20.0, 20.0])


@pytest.mark.parametrize(
    ("view", "vectors"),
    [
        ({"toward": [0, 0, 5], "up": [0, 2, 0]}, [[1, 0, 0], [0, 1, 0], [0, 0, 1]]),
        ({"toward": [0, 0, 1]}, [[1, 0, 0], [0, 1, 0], [0, 0, 1]]),
        ({"toward": [1, 0, 0]}, [[0, 1, 0], [0, 0, 1], [1, 0, 0]]),
        ({"toward": [0, 1, 0], "up": [1, 0, 0]}, [[0, 0, 1], [1, 0, 0], [0, 1, 0]]),
        ({"toward": [0, 0, -1]}, [[-1, 0, 0], [0, 1, 0], [0, 0, -1]]),
        ({"toward": [3, 4, 0]}, [[-0.8, 0.6, 0], [0, 0, 1], [0.6, 0.8, 0]]),
        ({"toward": [0, 3, 4], "up": [0, 9, 1]}, [[1, 0, 0], [0, 0.8, -0.6], [0, 0.6, 0.8]]),
    ],
)
def test_the_vectors_of_a_view_are_those_worked_out_by_hand(view, vectors):
    assert build(view={"pixels": 512, **view}).view.vectors == pytest.approx(np.array(vectors, dtype=float))


def test_the_vectors_of_any_view_are_right_handed_and_up_is_up():
    rng = np.random.default_rng(2)
    for toward, up in rng.normal(size=(20, 2, 3)):
        u, v, depth = build(view={"pixels": 512, "toward": toward.tolist(), "up": up.tolist()}).view.vectors
        assert np.cross(u, v) == pytest.approx(depth)
        assert depth @ toward == pytest.approx(np.linalg.norm(toward))
        assert (v @ up > 0, u @ up) == (True, pytest.approx(0))


def test_a_turned_view_without_more_words_is_a_cube_of_the_longest_side_about_the_middle():
    camera = make_camera(build(view={"pixels": 512, "toward": [3, 4, 0]}), facts())
    # The middle of the box is (5, 10, 20): u = -4 + 6, v = 20, depth = 3 + 8.
    assert (camera.u, camera.v) == (pytest.approx((-18, 22)), pytest.approx((0, 40)))
    assert camera.depth == pytest.approx((-9, 31))
    assert (camera.period, camera.box.tolist()) == (None, [10, 20, 40])


def test_a_turned_view_has_a_part_of_the_volume_and_slabs_of_any_depth():
    view = {"pixels": 1024, "toward": [3, 4, 0], "centre": [5, 0, 7], "width": 4, "height": 2, "slabs": [1, 2, 5]}
    camera = make_camera(build(view=view), facts())
    assert (camera.u, camera.v) == (pytest.approx((-6, -2)), pytest.approx((6, 8)))
    assert (camera.rows, camera.edges.tolist()) == (512, [1, 2, 5])


def test_where_nothing_repeats_a_turned_view_has_no_images():
    assert make_camera(build(view={"pixels": 512, "toward": [3, 4, 0]}), facts(periodic=False)).box is None


def test_the_description_of_a_turned_view_has_its_vectors():
    spec = build(view={"pixels": 512, "toward": [3, 4, 0]})
    described = describe_view(spec, make_camera(spec, facts()))
    assert described["vectors"] == [pytest.approx(row) for row in ([-0.8, 0.6, 0], [0, 0, 1], [0.6, 0.8, 0])]
    assert (described["along"], described["axes"]) == (None, ["u", "v", "depth"])
    assert (described["periodic"], described["box"]) == (True, [10, 20, 40])


def test_the_description_along_an_axis_has_vectors_too():
    spec = build(view__along="x", view__width=2)
    assert describe_view(spec, make_camera(spec, facts()))["vectors"] == [[0, 1, 0], [0, 0, 1], [1, 0, 0]]


def test_a_turned_view_over_too_many_copies_of_the_box_is_refused():
    view = {"pixels": 512, "toward": [1, 2, 3], "width": 900}
    with pytest.raises(
        InputError, match=r"it touches \d+ copies of the periodic box: make width, height or depth smaller"
    ):
        make_camera(build(view=view), facts(CUBE))


def test_a_chart_is_not_turned():
    with pytest.raises(InputError, match=r"view\.toward: a chart in deg cannot be turned"):
        chart(view__toward=[0, 0, 1], view__along=None)
