"""The tape: laid by mouse, finger and keys, kept in the link, and its numbers against the atlas."""

import math
import time

import numpy as np
import pytest
from live import Live

from tilemap.server.app import make_app

START = "#u=50&v=37&width=40"
SQUARE = [(42.0, 30.0), (61.0, 30.0), (61.0, 44.0), (42.0, 44.0)]
A = 1 / 1.5  # scale factor of the invented atlas; it says 9.27 comoving kpc per arcsecond


def outline(points):
    return "&outline=" + ",".join(f"{u}:{v}" for u, v in points)


def laid(screen, key):
    return [tuple(map(float, place.split(":"))) for place in screen.link()[key].split(",")]


def shoelace(points):
    x, y = np.asarray(points).T
    return abs(np.dot(x, np.roll(y, -1)) - np.dot(y, np.roll(x, -1))) / 2


def rows(screen):
    """The note, line by line: what it says, by what it is about."""
    screen.page.wait_for_selector("#tape dl")
    names, values = (screen.page.locator(f"#tape {part}").all_inner_texts() for part in ("dt", "dd button"))
    return dict(zip(names, values, strict=True))


def copied(screen, row):
    screen.page.locator("#tape dd button", has_text=rows(screen)[row]).first.click()
    screen.page.wait_for_timeout(100)
    value, _, unit = screen.page.evaluate("navigator.clipboard.readText()").partition(" ")
    return float(value), unit


def wait_for_note(screen, holds, timeout=15.0):
    """Wait until what the note says holds."""
    end = time.monotonic() + timeout
    while not holds(screen.page.inner_text("#tape")):
        assert time.monotonic() < end, screen.page.inner_text("#tape")
        screen.page.wait_for_timeout(50)


def answered(screen):
    wait_for_note(screen, lambda text: "total" in text and "…" not in text)
    return screen


def click(screen, *places):
    for u, v in places:
        screen.page.mouse.click(*screen.at(u, v))


def test_two_points_by_mouse_measure_the_length_between_them(screen):
    screen.go(START)
    screen.press("t")
    a, b = (42.0, 33.0), (57.5, 40.5)
    click(screen, a, b, b)
    screen.settle()
    ends = laid(screen, "line")
    assert np.allclose(ends, [a, b], atol=0.05)
    value, unit = copied(screen, "length")
    assert (value, unit) == (pytest.approx(math.dist(*ends), rel=1e-6), "Mpc")


@pytest.mark.parametrize(
    ("measure", "factor", "unit"), [("comoving", 1, "Mpc"), ("proper", A, "Mpc"), ("angle", 1e3 / 9.27 / 60, "arcmin")]
)
def test_lengths_and_areas_are_read_in_the_chosen_measure(screen, measure, factor, unit):
    screen.go(f"{START}&lengths={measure}{outline([(48, 35), (51, 35), (51, 39), (48, 39)])}")
    value, said = copied(screen, "around")
    assert (value, said) == (pytest.approx(14 * factor, rel=1e-6), unit)
    value, said = copied(answered(screen), "area")
    assert (value, said) == (pytest.approx(12 * factor**2, rel=1e-6), f"{unit}2")


def test_a_click_on_the_first_knot_closes_an_outline(screen):
    screen.go(START)
    screen.press("t")
    click(screen, *SQUARE, SQUARE[0])
    screen.settle()
    points = laid(screen, "outline")
    assert len(points) == 4 and np.allclose(points, SQUARE, atol=0.05)
    assert screen.page.locator("#hand.laying").count() == 0


@pytest.mark.parametrize(
    ("sheet", "depth", "slabs"),
    [("gas", "", None), ("gas", "&depth=0:66.67", slice(0, 2)), ("temperature", "", None), ("stars", "", None)],
)
def test_the_numbers_inside_an_outline_are_those_of_the_atlas(screen, atlas, sheet, depth, slabs):
    points = [(30.0, 20.0), (60.5, 14.5), (52.5, 40.0), (71.0, 60.25), (38.0, 55.5)]
    screen.go(f"#u=50&v=37&width=90&sheet={sheet}{depth}{outline(points)}")
    answered(screen)
    found = atlas.inside(sheet, points, slabs)
    assert copied(screen, "area") == (pytest.approx(shoelace(points), rel=1e-6), "Mpc2")
    assert copied(screen, "mean") == (pytest.approx(found.mean, rel=1e-6), found.unit)
    assert copied(screen, "spread") == (pytest.approx(found.spread, rel=1e-6), found.unit)
    assert copied(screen, "total") == (pytest.approx(found.total, rel=1e-6), "Msun")
    text = screen.page.inner_text("#tape")
    assert "From every pixel of the file" in text and "standard deviation" in text
    assert ("weighted by Gas" in text) == (sheet == "temperature")
    screen.picture(f"tape-{sheet}")


def test_a_window_of_depth_changes_the_numbers_inside(screen, atlas):
    screen.go(f"{START}{outline(SQUARE)}")
    answered(screen)
    screen.press("]")
    answered(screen)
    screen.page.wait_for_timeout(400)
    assert copied(screen, "mean")[0] == pytest.approx(atlas.inside("gas", SQUARE, slice(0, 1)).mean, rel=1e-6)


def test_a_large_outline_says_in_words_how_coarse_its_numbers_are(screen, atlas):
    # 2048 x 1536 pixels are read as they are; the answer for a larger atlas is put in its place.
    found = {"area": 100.0, "outside": 0.25, "mean": 3.0, "spread": 1.0, "unit": "Msun / kpc2", "total": 5.0}
    found |= {"total_unit": "Msun", "total_of": "gas", "together": None, "level": 2, "pixel": 0.2}
    screen.page.route("**/inside?*", lambda route: route.fulfill(json=found))
    screen.go(f"#u=50&v=37&width=41{outline(SQUARE)}")
    text = answered(screen).page.inner_text("#tape")
    screen.page.unroute("**/inside?*")
    assert "coarser pixels of 200 kpc: level 2" in text and "25 % of it lies outside" in text


def test_a_free_hand_draws_an_outline_that_holds_what_was_drawn(screen):
    screen.go(START)
    screen.press("t")
    x, y = screen.at(50, 37)
    angles = np.linspace(0, 2 * np.pi, 90)
    screen.page.mouse.move(x + 150, y)
    screen.page.mouse.down()
    for a in angles:
        screen.page.mouse.move(x + 150 * math.cos(a), y + 150 * math.sin(a))
    screen.page.mouse.up()
    screen.settle()
    points = laid(screen, "outline")
    per_mpc = screen.map_box()["width"] / 40
    assert 20 < len(points) < 90
    assert shoelace(points) == pytest.approx(math.pi * (150 / per_mpc) ** 2, rel=0.015)


def test_a_free_hand_that_does_not_come_back_draws_a_line_of_its_length(screen):
    screen.go(START)
    screen.press("t")
    x, y = screen.at(50, 37)
    screen.page.mouse.move(x - 150, y)
    screen.page.mouse.down()
    for a in np.linspace(np.pi, 2 * np.pi, 60):
        screen.page.mouse.move(x + 150 * math.cos(a), y + 150 * math.sin(a))
    screen.page.mouse.up()
    screen.press("t")
    per_mpc = screen.map_box()["width"] / 40
    assert copied(screen, "length")[0] == pytest.approx(math.pi * 150 / per_mpc, rel=0.01)
    assert copied(screen, "end to end")[0] == pytest.approx(300 / per_mpc, rel=0.01)


def test_keys_alone_lay_the_tape_and_copy_what_it_measures(screen):
    screen.go(START)
    screen.press("t")
    screen.press("Enter")
    screen.press("ArrowRight", 3)
    screen.press("Enter")
    screen.press("ArrowUp", 3)
    screen.press("Enter")
    screen.press("ArrowDown")
    screen.press("Enter")
    screen.press("Backspace")
    screen.press("t")
    (u0, v0), (u1, v1), (u2, v2) = laid(screen, "line")
    assert (u0, v0) == (50, 37) and u1 > 55 and v1 == pytest.approx(37) and u2 == pytest.approx(u1) and v2 > 41
    screen.press("y")
    text = screen.page.evaluate("navigator.clipboard.readText()")
    lines = dict(line.split("\t") for line in text.splitlines())
    assert float(lines["length"].split()[0]) == pytest.approx(u1 - u0 + v2 - v1, rel=1e-5)


def test_a_finger_lays_knots_and_two_fingers_still_zoom(open_screen):
    screen = open_screen(START, width=390, height=844, ratio=2, touch=True)
    screen.page.get_by_text("tape", exact=True).tap()
    places = [(42, 30), (60, 30), (55, 45)]
    for u, v in places[:2]:
        screen.page.touchscreen.tap(*screen.at(u, v))
    screen.settle()
    touch = screen.page.context.new_cdp_session(screen.page)
    width, before = screen.place()[2], screen.link()["line"]
    for kind, apart in (("touchStart", 40), ("touchMove", 45), ("touchMove", 60), ("touchEnd", None)):
        points = [] if apart is None else [{"x": 195 + side * apart, "y": 400, "id": side + 1} for side in (-1, 1)]
        touch.send("Input.dispatchTouchEvent", {"type": kind, "touchPoints": points})
    screen.settle()
    assert screen.place()[2] < width and screen.link()["line"] == before
    for place in (places[2], places[0]):
        screen.page.touchscreen.tap(*screen.at(*place))
    screen.settle()
    assert np.allclose(laid(screen, "outline"), places, atol=0.15)
    screen.picture("tape-phone")


def test_a_knot_is_moved_by_hand_and_the_numbers_follow(screen, atlas):
    screen.go(f"{START}{outline(SQUARE)}")
    answered(screen)
    screen.page.mouse.move(*screen.at(*SQUARE[3]))
    screen.page.mouse.down()
    screen.page.mouse.move(*screen.at(45, 40), steps=5)
    screen.page.mouse.up()
    screen.settle()
    points = laid(screen, "outline")
    assert np.allclose(points[3], (45, 40), atol=0.05) and points[0] == SQUARE[0]
    assert screen.place()[:2] == (50, 37)
    answered(screen)
    screen.page.wait_for_timeout(400)
    assert copied(screen, "mean")[0] == pytest.approx(atlas.inside("gas", points).mean, rel=1e-6)


def test_a_link_brings_the_tape_back_and_escape_puts_it_away(screen):
    screen.go(f"{START}&line=45:30,55:30")
    map_before = screen.pixels("#marks")
    x, y = (round(c) for c in screen.at(50.3, 30))
    box = screen.map_box()
    thread = map_before[y - round(box["y"]) - 2 : y - round(box["y"]) + 3, x - round(box["x"])]
    assert thread[:, :3].max() > 200
    assert rows(screen)["length"] == "10 Mpc"
    screen.press("Escape")
    assert "line" not in screen.link() and not screen.page.is_visible("#tape")


def test_the_rungs_of_the_ladder_lie_along_the_thread(screen):
    """A thread of 10 Mpc on a map of 40 Mpc bears a short stroke at every one of them."""
    screen.go("#u=50&v=37&width=40&markers=off&line=45:37,55:37")
    box = screen.map_box()
    per_mpc = box["width"] / 40
    drawn = screen.pixels("#marks")[:, :, :].astype(int)
    (x0, y0), (x1, _) = screen.at(45, 37), screen.at(55, 37)
    row = round(y0 - box["y"]) - 2
    ink = drawn[row - 1 : row + 1, round(x0 - box["x"]) : round(x1 - box["x"])]
    ink = (ink[:, :, 3] * ink[:, :, :3].min(axis=2)).mean(axis=0)  # light, not the dark rim of the thread
    strokes = [ink[round(mpc * per_mpc) - 1 : round(mpc * per_mpc) + 2].max() for mpc in range(1, 10)]
    between = [ink[round((mpc + 0.5) * per_mpc) - 5 : round((mpc + 0.5) * per_mpc) + 5].max() for mpc in range(1, 9)]
    assert min(strokes) > 2 * max(between)


@pytest.mark.parametrize(
    ("part", "said"),
    [
        ("line=3:4", "line=3:4"),
        ("outline=1:1,2:2", "outline=1:1,2:2"),
        ("outline=1:1,2:x,3:3", "outline=1:1,2:x,3:3"),
        ("line=" + ",".join(["1:1"] * 1001), "…"),
    ],
)
def test_a_tape_that_cannot_be_read_is_said_and_left_out(screen, part, said):
    screen.go(f"{START}&{part}", settle=False)
    screen.wait_for_status(said)
    screen.settle()
    assert "line" not in screen.link() and "outline" not in screen.link() and not screen.errors


@pytest.mark.parametrize(
    ("points", "said"),
    [([(1, 1), (2, 2), (3, 3)], "nothing inside"), ([(200, 1), (210, 1), (205, 9)], "nothing inside")],
)
def test_an_outline_round_nothing_has_lengths_and_says_so(screen, points, said):
    screen.go(f"{START}{outline(points)}")
    wait_for_note(screen, lambda text: said in text)
    assert set(rows(screen)) == {"area", "around"}


def test_numbers_that_cannot_be_had_now_come_when_the_server_answers(open_screen, folder):
    server = Live(make_app([folder]))
    screen = open_screen(START, address=f"{server.address}/field/")
    refused = iter([True, True])
    server.refuse = lambda path: path.endswith("/inside") and next(refused, False)
    screen.go(f"{START}{outline(SQUARE)}")
    assert rows(screen)["mean"] == "…"
    answered(screen)
    server.stop()


def test_the_rulers_bear_the_coordinates_of_the_view(screen):
    """Numerals and strokes of both rulers, in each measure."""
    for lengths, factor, name in (("comoving", 1, "Mpc"), ("proper", A, "Mpc"), ("angle", 1e3 / 9.27 / 3600, "deg")):
        screen.page.evaluate(
            """() => { window.ruled = []; const p = CanvasRenderingContext2D.prototype;
            window.plain ??= p.strokeText;
            p.strokeText = function (text, x, y) { window.ruled.push([text, x, y]); return window.plain.call(this, text, x, y); }; }"""
        )
        screen.go(f"#u=50.2&v=37.1&width=23.7&lengths={lengths}&markers=off")
        screen.page.mouse.move(3, 3)
        screen.page.evaluate("window.ruled.length = 0")
        screen.page.mouse.move(screen.map_box()["x"] + 300, 300)
        screen.page.wait_for_timeout(150)
        box = screen.map_box()
        words = {tuple(word) for word in screen.page.evaluate("window.ruled")}
        across = [(float(t), x) for t, x, y in words if y > box["height"] - 30 and "," not in t]
        down = [(float(t), y) for t, x, y in words if x == 12 and "," not in t]
        assert len(across) >= 4 and len(down) >= 3
        for coordinate, x in across:
            assert x + box["x"] == pytest.approx(screen.at(coordinate / factor, 37)[0], abs=1)
        for coordinate, y in down:
            assert y + box["y"] == pytest.approx(screen.at(50, coordinate / factor)[1], abs=1)
        assert {t for t, *_ in words if "," in t} == {f"x, {name}", f"y, {name}"}
        marks = screen.pixels("#marks")
        for _, x in across:
            assert marks[-6, int(x), 3] > 150
