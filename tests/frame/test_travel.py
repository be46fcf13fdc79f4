"""Hands and keys on the map: where it goes, read from the link that it writes."""

import math

import numpy as np
import pytest

START = "#u=50&v=37&width=40"


@pytest.mark.parametrize("notches, motion", [(-3, True), (3, False)])
def test_the_wheel_zooms_about_the_pointer(open_screen, notches, motion):
    screen = open_screen(START, motion=motion)
    box = screen.map_box()
    x, y = round(box["x"] + 0.3 * box["width"]), round(box["y"] + 0.7 * box["height"])
    before, width = screen.under(x, y), screen.place()[2]
    screen.page.mouse.move(x, y)
    for _ in range(abs(notches)):
        screen.page.mouse.wheel(0, math.copysign(100, notches))
    screen.settle()
    after = screen.under(x, y)
    assert (screen.place()[2] > width) == (notches > 0)
    assert np.hypot(after[0] - before[0], after[1] - before[1]) < 0.6 * screen.place()[2] / box["width"]


@pytest.mark.parametrize("x", [500, 1080])
def test_a_wheel_with_large_steps_zooms_no_more_than_a_half_closer(screen, x):
    """On the map, and on the ladder."""
    screen.go(START)
    screen.page.mouse.move(x, 400)
    screen.page.wait_for_timeout(200)
    screen.page.mouse.wheel(0, -2400)
    screen.settle()
    assert 1.3 < 40 / screen.place()[2] < 1.5


def test_a_drag_takes_the_place_under_the_hand_along(screen):
    screen.go(START)
    place = screen.under(500, 400)
    screen.page.mouse.move(500, 400)
    screen.page.mouse.down()
    screen.page.mouse.move(610, 330, steps=5)
    screen.page.mouse.up()
    screen.settle()
    assert np.allclose(screen.under(610, 330), place, atol=0.02)


def test_a_fling_goes_on_after_the_hand_has_let_go(open_screen):
    screen = open_screen(START, motion=True)
    place = screen.under(600, 400)
    screen.page.mouse.move(600, 400)
    screen.page.mouse.down()
    screen.page.mouse.move(500, 400, steps=6)
    screen.page.mouse.up()
    screen.settle()
    assert screen.at(*place)[0] < 480


def test_a_double_click_zooms_about_its_place(screen):
    screen.go(START)
    before = screen.under(700, 300)
    screen.page.mouse.dblclick(700, 300)
    screen.settle()
    assert screen.place()[2] == pytest.approx(20, rel=1e-4)
    assert np.allclose(screen.under(700, 300), before, atol=0.02)


def test_two_fingers_pinch_about_the_point_between_them(open_screen):
    screen = open_screen("#u=50&v=37&width=20", width=390, height=844, touch=True)
    box = screen.map_box()
    x, y = box["x"] + box["width"] / 2, box["y"] + 0.4 * box["height"]
    before = screen.under(x, y)
    touch = screen.page.context.new_cdp_session(screen.page)

    def fingers(kind, *apart):
        points = [{"x": x + side * a, "y": y, "id": side + 1} for a in apart for side in (-1, 1)]
        touch.send("Input.dispatchTouchEvent", {"type": kind, "touchPoints": points})

    fingers("touchStart", 40)
    for apart in (50, 60, 70, 80):
        fingers("touchMove", apart)
    fingers("touchEnd")
    screen.settle()
    assert screen.place()[2] == pytest.approx(10, rel=0.05)
    assert np.allclose(screen.under(x, y), before, atol=0.1)


@pytest.mark.parametrize(
    "key, du, dv, zoom",
    [
        ("ArrowRight", 1, 0, 0),
        ("ArrowLeft", -1, 0, 0),
        ("ArrowUp", 0, 1, 0),
        ("ArrowDown", 0, -1, 0),
        ("+", 0, 0, -1),
        ("-", 0, 0, 1),
    ],
)
def test_keys_travel_and_zoom(screen, key, du, dv, zoom):
    screen.go(START)
    u, v, width = screen.place()
    screen.press(key)
    moved = screen.place()
    sign = [
        0 if abs(b - a) < 1e-6 * width else math.copysign(1, b - a) for a, b in zip((u, v, width), moved, strict=True)
    ]
    assert sign == [du, dv, zoom]


@pytest.mark.parametrize(
    "key, part, value",
    [
        ("2", "sheet", "temperature"),
        ("l", "curve", "asinh"),
        ("r", "ramp", "kelpfire"),
        ("]", "depth", "0:33.333333333333336"),
        ("u", "lengths", "proper"),
        ("m", "markers", "off"),
        ("n", "object", "alone"),
    ],
)
def test_keys_work_the_edges(screen, key, part, value):
    screen.go("#u=50&v=50&width=60")
    screen.page.wait_for_timeout(300)
    screen.press(key)
    assert screen.link()[part] == value


def test_every_control_is_named_and_says_its_value(open_screen):
    screen = open_screen()
    screen.page.wait_for_timeout(300)
    sliders = screen.page.get_by_role("slider")
    assert sliders.count() == 8
    for slider in sliders.all():
        assert slider.get_attribute("aria-label") and slider.get_attribute("aria-valuetext")


def test_the_whole_frame_is_reached_by_tab_with_the_focus_in_sight(open_screen):
    screen = open_screen()
    screen.page.wait_for_timeout(300)
    reached = set()
    for _ in range(30):
        screen.page.keyboard.press("Tab")
        reached.add(screen.page.evaluate("document.activeElement.ariaLabel || document.activeElement.textContent"))
    wanted = {
        "Gas",
        "Bright end",
        "Dark end",
        "auto",
        "log",
        "strandline",
        "Width in view",
        "comoving",
        "copy link",
        "keys",
    }
    wanted |= {"Near end of the depth window", "Far end of the depth window", "Depth window"}
    assert wanted <= reached
