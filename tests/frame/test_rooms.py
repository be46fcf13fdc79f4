"""The frame under another path, on other screens, and what it leaves out."""

import re
from pathlib import Path

import pytest
from live import Live
from werkzeug.middleware.dispatcher import DispatcherMiddleware

from tilemap.server.app import make_app

STATIC = Path(__file__).parents[2] / "static"


def nowhere(environ, start):
    start("404 Not Found", [("Content-Length", "0")])
    return [b""]


@pytest.fixture
def mounted(folder):
    app = DispatcherMiddleware(nowhere, {"/hub/user/proxy/8750": make_app([folder])})
    server = Live(app)
    yield server
    server.stop()


def test_the_frame_works_under_any_path(open_screen, mounted):
    screen = open_screen("#u=50&v=68&width=20", address=f"{mounted.address}/hub/user/proxy/8750/field/")
    screen.page.wait_for_selector("#census .bar")
    assert screen.pixels()[:, :, :3].max() > 100
    assert all(path.startswith("/hub/user/proxy/8750/") for path in mounted.asked)


@pytest.mark.parametrize(
    "name, width, height, ratio, touch",
    [
        ("desk", 1440, 900, 1, False),
        ("phone", 390, 844, 2, True),
        ("wall", 3840, 2160, 1, False),
    ],
)
def test_the_frame_fits_the_screen(open_screen, name, width, height, ratio, touch):
    screen = open_screen("", width=width, height=height, ratio=ratio, touch=touch)
    screen.page.wait_for_selector("#census .bar")
    screen.page.wait_for_timeout(300)
    screen.picture(name)
    inside = """name => { const b = document.querySelector(name).getBoundingClientRect();
                return b.left >= 0 && b.top >= 0 && b.right <= innerWidth && b.bottom <= innerHeight && b.width > 15 }"""
    for part in ("#title", "#sheets", "#census", "#tone", "#map", "#scale", "#depth", "#reading", "#links"):
        assert screen.page.evaluate(inside, part), part
    box = screen.map_box()
    assert box["width"] * box["height"] > 0.6 * width * height


def test_a_long_title_keeps_clear_of_the_sheets(open_screen):
    screen = open_screen("", width=1440, height=900)
    screen.page.wait_for_selector("#census .bar")
    before = screen.page.locator("#census").bounding_box()["height"]
    screen.page.evaluate("document.querySelector('h1 a').textContent = 'A small hydrodynamic volume of some length'")
    ends = screen.page.evaluate("document.querySelector('#title .dim').getBoundingClientRect().bottom")
    begins = screen.page.evaluate("document.querySelector('#sheets .word').getBoundingClientRect().top")
    assert ends <= begins
    assert screen.page.locator("#census").bounding_box()["height"] < before + 60


@pytest.mark.parametrize("width", [320, 390])
def test_no_line_of_words_is_cut_off_on_a_phone(open_screen, width):
    screen = open_screen("#u=50.123&v=37.456&width=0.5", width=width, height=568, ratio=2, touch=True)
    assert screen.page.evaluate("document.querySelector('#reading').scrollWidth") <= width


@pytest.mark.parametrize("edge", ["tone", "scale", "depth", "census"])
def test_on_a_phone_an_edge_opens_under_the_thumb_and_closes_on_the_map(open_screen, edge):
    screen = open_screen("", width=390, height=844, ratio=2, touch=True)
    screen.page.wait_for_selector("#census .bar", state="attached")
    strip = screen.page.locator(f"#{edge}")
    before = strip.bounding_box()
    screen.page.touchscreen.tap(before["x"] + before["width"] / 2, before["y"] + before["height"] / 2)
    after = strip.bounding_box()
    assert max(after["width"] - before["width"], after["height"] - before["height"]) > 60
    screen.page.wait_for_timeout(200)
    screen.picture(f"phone-{edge}")
    screen.page.touchscreen.tap(195, 420)
    assert strip.bounding_box() == before


@pytest.mark.parametrize(
    "edge, part, begin, way, moved",
    [
        ("tone", "tone", (0.5, 0.1), (0, 40), lambda value: 3e3 < float(value.split(":")[1]) < 3e6),
        ("scale", "width", (0.5, 0.3), (0, 120), lambda value: float(value) < 30),
        ("depth", "depth", (0.3, 0.5), (100, 0), lambda value: value.startswith("0:66")),
        ("census", "census", (0.3, 0.5), (120, 0), lambda value: float(value.split(":")[0]) > 1e9),
    ],
)
def test_on_a_phone_a_drag_that_begins_on_a_strip_opens_it_and_acts(open_screen, edge, part, begin, way, moved):
    screen = open_screen("#u=50&v=37&width=60&tone=3e3:3e6", width=390, height=844, ratio=2, touch=True)
    screen.page.wait_for_selector("#census .bar", state="attached")
    box = screen.page.locator(f"#{edge}").bounding_box()
    x, y = box["x"] + begin[0] * box["width"], box["y"] + begin[1] * box["height"]
    touch = screen.page.context.new_cdp_session(screen.page)
    for step in range(7):
        point = {"x": x + way[0] * step / 6, "y": y + way[1] * step / 6}
        kind = "touchMove" if step else "touchStart"
        touch.send("Input.dispatchTouchEvent", {"type": kind, "touchPoints": [point]})
    touch.send("Input.dispatchTouchEvent", {"type": "touchEnd", "touchPoints": []})
    screen.settle()
    assert moved(screen.link().get(part, "nan"))


def test_on_a_phone_a_tap_reads_the_value_there(open_screen, atlas):
    screen = open_screen("#u=50&v=37&width=4", width=390, height=844, ratio=2, touch=True)
    box = screen.map_box()
    x, y = box["x"] + 200, box["y"] + 420
    u, v = screen.under(x, y)
    screen.page.touchscreen.tap(x, y)
    value = atlas.read("gas", (u, v), 100 / 2048, 100 / 2048).values[0, 0]
    assert screen.value() == pytest.approx(float(value), rel=1e-5)


def test_every_module_is_fetched_at_once():
    named = set(re.findall(r'modulepreload" href="frame/(.*?)"', (STATIC / "index.html").read_text()))
    assert named == {file.name for file in STATIC.glob("*.js")} - {"app.js", "tile-worker.js"}


def test_every_style_sheet_is_used():
    used = re.findall(r'stylesheet" href="frame/(.*?)"', (STATIC / "index.html").read_text())
    assert sorted(used) == sorted(file.name for file in STATIC.glob("*.css"))


def test_the_list_of_keys_names_every_key():
    answered = set(re.findall(r"^    (?:'(.+)'|(\w+)): \(", (STATIC / "keys.js").read_text(), re.M))
    listed = re.findall(r"^  \['(.+?)', \['", (STATIC / "words.js").read_text(), re.M)
    words = {
        "arrows": ["ArrowLeft", "ArrowRight", "ArrowUp", "ArrowDown"],
        "shift a": ["A"],
        "esc": ["Escape"],
        "enter": ["Enter"],
        "backspace": ["Backspace"],
        "shift e": ["E"],
    }
    named = {key for entry in listed for key in words.get(entry, entry.replace("−", "-").split())}
    # = and _ lie on the keys of + and -, with or without shift.
    assert {a or b for a, b in answered} - {"=", "_"} == named - {"1", "…", "9"}


def test_the_frame_needs_no_script_but_its_own():
    page = (STATIC / "index.html").read_text()
    assert not re.search(r"<script(?![^>]*src=)|\son\w+=|style=|https?://", page)
    for file in STATIC.glob("*.js"):
        sources = re.findall(r"^import .* from '(.*)';$", file.read_text(), re.M)
        assert all(source.startswith("./") for source in sources), file.name
        assert not re.search(r"\beval\(|new Function", file.read_text()), file.name
