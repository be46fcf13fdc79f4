"""Hands and keys on the map: where it goes, read from the link that it writes."""

import math
import time

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
    hand = screen.page.context.new_cdp_session(screen.page)
    # The events carry the times of a hand, however busy the machine is.
    begin = time.time()
    for step, kind in enumerate(["mousePressed", *["mouseMoved"] * 6, "mouseReleased"]):
        x = 600 - 100 * min(step, 6) / 6
        how = {"x": x, "y": 400, "button": "left", "buttons": 1, "clickCount": 1, "timestamp": begin + 0.016 * step}
        hand.send("Input.dispatchMouseEvent", {"type": kind, **how})
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


def doubles(screen, x, y):
    for _ in range(2):
        screen.page.touchscreen.tap(x, y)


def test_a_double_tap_zooms_about_its_place(open_screen):
    screen = open_screen("#u=50&v=37&width=20", width=390, height=844, ratio=2, touch=True)
    box = screen.map_box()
    x, y = box["x"] + 100, box["y"] + 300
    before = screen.under(x, y)
    doubles(screen, x, y)
    screen.settle()
    assert screen.place()[2] == pytest.approx(10, rel=1e-4)
    assert np.allclose(screen.under(x, y), before, atol=0.05)


def widths(screen, link, frames):
    """Width in view, frame by frame, after a link was followed."""
    return screen.page.evaluate(
        """([link, frames]) => new Promise((done) => {
        const seen = [];
        const thumb = document.querySelector('#scale [role=slider]');
        location.hash = link;
        const look = () => {
          seen.push(Number(thumb.getAttribute('aria-valuenow')));
          if (seen.length < frames) requestAnimationFrame(look); else done(seen);
        };
        requestAnimationFrame(look); })""",
        [link, frames],
    )


def test_a_flight_rises_goes_across_and_comes_down(open_screen):
    screen = open_screen("#u=10&v=40&width=4", motion=True)
    seen = widths(screen, "#u=90&v=30&width=6", 240)
    screen.settle()
    top = int(np.argmax(seen))
    assert seen[0] < 6 and max(seen) > 25
    assert (np.diff(seen[:top]) >= 0).all() and (np.diff(seen[top:]) <= 0).all()
    assert screen.place() == (90, 30, 6)


def test_with_reduced_motion_a_link_is_followed_at_once(screen):
    screen.go("#u=10&v=40&width=4")
    seen = widths(screen, "#u=90&v=30&width=6", 6)
    assert set(seen) <= {4, 6} and seen[-1] == 6


@pytest.mark.parametrize(
    ("a", "b"), [((10, 40, 4), (90, 30, 6)), ((50, 50, 100), (50.1, 50, 0.01)), ((1, 2, 3), (1.5, 2, 3))]
)
def test_flights_follow_the_published_path(screen, a, b):
    """van Wijk & Nuij (2003), section 3: a path of unit speed in ds2 = (rho2 du2 + dw2 / rho2) / w2, and the shortest."""
    rho = 1.4  # their user study
    path, length = screen.page.evaluate(
        """async ([a, b]) => {
        const { flight } = await import(new URL('frame/motion.js', document.baseURI));
        const { View } = await import(new URL('frame/view.js', document.baseURI));
        const { path, length } = flight(new View(...a, 800, 600), new View(...b, 800, 600));
        return [Array.from({ length: 4001 }, (_, i) => { const { u, v, width } = path(i / 4000); return [u, v, width]; }), length]; }""",
        [a, b],
    )
    u, v, w = np.array(path).T

    def steps(u, v, w):
        across, middle = np.hypot(np.diff(u), np.diff(v)), (w[1:] + w[:-1]) / 2
        return np.hypot(rho * across, np.diff(w) / rho) / middle

    assert (u[0], v[0], w[0]) == pytest.approx(a, rel=1e-9) and (u[-1], v[-1], w[-1]) == pytest.approx(b, rel=1e-9)
    speed = steps(u, v, w) * 4000
    assert speed == pytest.approx(length, rel=2e-3)
    t = np.linspace(0, 1, 4001)
    for bend in (-0.1, 0.1):  # any other way is longer
        for n in (1, 2, 3):
            longer = steps(u, v, w * np.exp(bend * np.sin(n * np.pi * t))).sum()
            assert longer > speed.sum() / 4000 * (1 - 1e-6)


def test_no_frame_of_a_journey_shows_a_blank(open_screen, live):
    """On an atlas of one value, with fine tiles held back, the inside of the map has one colour in every frame."""
    live.delay = lambda path: 0.4 if "/gas/0/" in path or "/gas/1/" in path else 0.0
    screen = open_screen("#u=50&v=50&width=60&tone=1e5:1e6", motion=True, atlas="even", fresh=True)
    colours = screen.page.evaluate(
        """() => new Promise((done) => {
        const canvas = document.querySelector('#ground');
        const context = canvas.getContext('2d');
        const seen = new Set();
        location.hash = '#u=30&v=65&width=3&tone=1e5:1e6';
        const end = performance.now() + 2500;
        const look = () => {
          for (let k = 1; k < 8; k++) {
            const { data } = context.getImageData(0, Math.round((canvas.height * k) / 8), canvas.width, 1);
            for (const c of new Uint32Array(data.buffer)) seen.add(c & 0xffffff);
          }
          if (performance.now() < end) requestAnimationFrame(look); else done([...seen]);
        };
        requestAnimationFrame(look); })"""
    )
    screen.settle()
    red, green, blue = (np.array(colours)[:, None] >> np.array([0, 8, 16]) & 255).T
    assert np.ptp(red) <= 1 and np.ptp(green) <= 1 and np.ptp(blue) <= 1  # rounding where a tile fades in


def test_requests_for_tiles_that_left_the_view_are_cancelled(open_screen, live):
    screen = open_screen("#u=80&v=20&width=90", fresh=True)
    cancelled = []
    screen.page.context.on("requestfailed", lambda request: cancelled.append(request.url))
    live.delay = lambda path: 3.0 if "/gas/0/" in path else 0.0
    screen.go("#u=20&v=60&width=12", settle=False)
    screen.page.wait_for_timeout(500)
    asked = {place[4:] for place in live.tiles() if place[2] == "0"}
    screen.go("#u=80&v=20&width=90")
    screen.page.wait_for_timeout(300)
    gone = {tuple(url.rsplit("/", 2)[1:]) for url in cancelled if "/tiles/" in url}
    assert asked and gone == asked
