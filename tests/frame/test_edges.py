"""The instruments on the edges, worked by hand and by keys."""

import json
import re

import numpy as np
import pytest
from atlas_maker import make_atlas
from live import Live

from tilemap.cosmology import Cosmology
from tilemap.server.app import make_app


def drag(screen, start, end):
    mouse = screen.page.mouse
    mouse.move(*start)
    mouse.down()
    mouse.move(*end, steps=6)
    mouse.up()
    screen.settle()


def middle(screen, selector):
    box = screen.page.locator(selector).bounding_box()
    return box["x"] + box["width"] / 2, box["y"] + box["height"] / 2


def tone(screen):
    return tuple(map(float, screen.link()["tone"].split(":")))


def handle(screen, name):
    """Where a handle can be gripped."""
    return middle(screen, f"[role=slider][aria-label='{name}']")


def test_dragging_the_bright_end_down_brightens_the_map(screen):
    screen.go("#u=50&v=37&width=60&tone=3e3:3e8")
    before = screen.pixels()[:, :, 1].mean()
    x, y = handle(screen, "Bright end")
    drag(screen, (x, y), (x, y + 40))
    low, high = tone(screen)
    assert low == 3e3 and 3e3 < high < 3e8
    assert screen.pixels()[:, :, 1].mean() > before + 5


def test_a_number_can_be_typed_for_an_end(screen):
    screen.go("#u=50&v=37&width=60&tone=3e3:3e8")
    screen.page.get_by_role("slider", name="Dark end").focus()
    screen.page.keyboard.press("Enter")
    screen.page.keyboard.type("1.5e4")
    screen.press("Enter")
    assert tone(screen) == (1.5e4, 3e8)
    assert screen.page.get_by_role("slider", name="Dark end").get_attribute("aria-valuetext") == "15000 M☉/kpc²"


def test_the_automatic_tone_spans_the_values_in_view(screen, atlas):
    screen.go("#u=50&v=37&width=20")
    screen.page.wait_for_timeout(300)
    screen.page.get_by_text("auto", exact=True).click()
    screen.settle()
    box = screen.map_box()
    values = atlas.read("gas", (50, 37), 20, 20 * box["height"] / box["width"]).values
    low, high = tone(screen)
    assert np.mean(values < low) < 0.1 and np.mean(values > high) < 0.01
    assert high < 2 * values.max() and low > 0.5 * values.min()


def test_a_click_on_a_slab_looks_at_that_slab_alone(screen):
    screen.go("#u=50&v=37&width=60&depth=0:33.3333")
    box = screen.page.locator("#depth .field").bounding_box()
    screen.page.mouse.click(box["x"] + 0.8 * box["width"], box["y"] + 0.7 * box["height"])
    screen.settle()
    low, high = map(float, screen.link()["depth"].split(":"))
    assert (round(low, 3), round(high, 3)) == (66.667, 100)


def test_a_click_on_the_whole_depth_takes_the_slab_under_the_hand(screen):
    screen.go("#u=50&v=37&width=60")
    box = screen.page.locator("#depth .field").bounding_box()
    screen.page.mouse.click(box["x"] + 0.5 * box["width"], box["y"] + 0.7 * box["height"])
    screen.settle()
    low, high = map(float, screen.link()["depth"].split(":"))
    assert (round(low, 3), round(high, 3)) == (33.333, 66.667)


def test_a_drag_over_the_whole_depth_takes_the_slabs_it_covers(screen):
    screen.go("#u=50&v=37&width=60")
    box = screen.page.locator("#depth .field").bounding_box()
    y = box["y"] + 0.7 * box["height"]
    drag(screen, (box["x"] + 0.8 * box["width"], y), (box["x"] + 0.5 * box["width"], y))
    low, high = map(float, screen.link()["depth"].split(":"))
    assert (round(low, 3), round(high, 3)) == (33.333, 100)


def test_the_depth_window_opens_by_its_handle(screen):
    screen.go("#u=50&v=37&width=60&depth=0:33.3333")
    x, y = handle(screen, "Far end of the depth window")
    width = screen.page.locator("#depth .field").bounding_box()["width"]
    drag(screen, (x, y), (x + width / 3, y))
    assert float(screen.link()["depth"].split(":")[1]) == pytest.approx(66.667, abs=1e-3)


def test_the_depth_window_slides_as_one(screen):
    screen.go("#u=50&v=37&width=60&depth=0:33.3333")
    x, y = handle(screen, "Depth window")
    width = screen.page.locator("#depth .field").bounding_box()["width"]
    drag(screen, (x, y), (x + 2 * width / 3, y))
    low, high = map(float, screen.link()["depth"].split(":"))
    assert (round(low, 3), round(high, 3)) == (66.667, 100)


def test_the_depth_window_plays_slab_by_slab_and_begins_again(screen):
    place = "#u=50&v=37&width=60&sheet=gas&tone=1e4:1e8&markers=off"
    screen.go(place)
    screen.page.get_by_role("button", name="play").click()
    seen = {}
    order = []
    while len(order) < 5:
        screen.settle()
        depth = screen.link()["depth"]
        if not order or order[-1] != depth:
            order.append(depth)
            seen[depth] = screen.pixels()
    screen.page.get_by_role("button", name="stop").click()
    screen.settle()
    third = 100 / 3
    firsts = [round(float(depth.split(":")[0]) / third) for depth in order]
    assert firsts == [(firsts[0] + step) % 3 for step in range(5)] and firsts[0] == 0
    rest = screen.link()["depth"]
    screen.page.wait_for_timeout(1200)
    assert screen.link()["depth"] == rest
    for depth, picture in seen.items():
        screen.go(f"{place}&depth={depth}")
        assert (screen.pixels() == picture).all(), depth


def test_a_window_plays_as_wide_as_it_is_and_stops_under_a_hand(screen):
    screen.go("#u=50&v=37&width=60&depth=0:66.6667")
    screen.page.keyboard.press("w")
    screen.page.wait_for_function("() => location.hash.includes('depth=33.3')")
    x, y = handle(screen, "Depth window")
    screen.page.mouse.click(x, y)
    screen.settle()
    assert screen.page.get_by_role("button", name="play").count() == 1
    low, high = map(float, screen.link()["depth"].split(":"))
    assert high - low == pytest.approx(66.667, abs=1e-3)


def test_the_thumb_of_the_ladder_sets_the_width_in_view(screen):
    screen.go("#u=50&v=37&width=60")
    x, y = handle(screen, "Width in view")
    drag(screen, (x - 20, y), (x - 20, y + 150))
    thumb = screen.page.get_by_role("slider", name="Width in view")
    width = screen.place()[2]
    assert width < 30
    assert float(thumb.get_attribute("aria-valuenow")) == pytest.approx(width, rel=1e-3)


def test_rungs_that_fit_are_as_long_as_they_are_on_the_map(screen):
    screen.go("#u=50&v=37&width=60")
    lengths = screen.page.evaluate("[...document.querySelectorAll('#scale .rung.true')].map(r => r.getBBox().width)")
    per_mpc = screen.map_box()["width"] / 60
    rungs = [m * 10.0**p for p in range(-3, 3) for m in (1, 2, 5)]
    for length in lengths:
        assert min(abs(length - rung * per_mpc) for rung in rungs) < 0.06
    assert len(lengths) >= 3


@pytest.mark.parametrize("measure, said", [("comoving", "60 Mpc"), ("proper", "40 Mpc"), ("angle", "1.8°")])
def test_lengths_read_as_comoving_proper_or_angle(screen, measure, said):
    # z = 0.5: a = 2/3; the invented atlas says 9.27 comoving kpc per arcsecond.
    screen.go(f"#u=50&v=37&width=60&lengths={measure}")
    assert screen.page.inner_text("#scale .number") == said


@pytest.fixture(scope="module")
def reckoned(tmp_path_factory):
    """An atlas whose epoch carries what a build reckons from the parameters of its cosmology."""
    folder = make_atlas(tmp_path_factory.mktemp("reckoned") / "sky.atlas", columns=512, rows=512, slabs=1)
    described = json.loads((folder / "atlas.json").read_text())
    cosmology = Cosmology(H0=67.7, Om0=0.31, Ode0=0.69)
    described["epochs"][0] |= {
        "kpc_per_arcsec_comoving": cosmology.kpc_per_arcsec_comoving(0.5),
        "kpc_per_arcsec_proper": cosmology.kpc_per_arcsec_proper(0.5),
    }
    (folder / "atlas.json").write_text(json.dumps(described))
    server = Live(make_app([folder]))
    yield f"{server.address}/sky/"
    server.stop()


@pytest.mark.parametrize(
    ("measure", "across", "ten_mpc"),
    # Comoving transverse distance at z = 0.5 by astropy 8.0.2, LambdaCDM(H0=67.7, Om0=0.31, Ode0=0.69, Tcmb0=0):
    # 1946.0662648739783 Mpc, so that 10 comoving Mpc are 17.665106439772533 arcmin on the sky; proper lengths are 1 / 1.5.
    [("comoving", "60 Mpc", "10 Mpc"), ("proper", "40 Mpc", "6.666667 Mpc"), ("angle", "1.77°", "17.66511 arcmin")],
)
def test_the_ladder_and_the_tape_agree_with_astropy(open_screen, reckoned, measure, across, ten_mpc):
    screen = open_screen(f"#u=50&v=50&width=60&lengths={measure}&line=45:50,55:50", address=reckoned)
    assert screen.page.inner_text("#scale .number") == across
    screen.press("y")
    screen.page.wait_for_timeout(100)
    assert screen.page.evaluate("navigator.clipboard.readText()") == f"length\t{ten_mpc}"
    # The rung of a length is drawn as long as that length is on the map.
    names, lengths = screen.page.evaluate(
        """() => ['text:not(.start)', '.rung.true'].map((part) => [...document.querySelectorAll(`#scale ${part}`)]
        .map((e) => part[0] === 't' ? [e.textContent, Number(e.getAttribute('y'))] : [e.getBBox().width, e.getBBox().y]))"""
    )
    units = {"Mpc": 1.0, "kpc": 1e-3, "°": 60.0, "′": 1.0, "″": 1 / 60}
    mpc = {"comoving": 1.0, "proper": 1.5, "angle": 10 / 17.665106439772533}[measure]
    per_mpc = screen.map_box()["width"] / 60
    known = 0
    for long, y in lengths:
        for text, line in names:
            if abs(line + 3 - y) < 1:
                number, unit = re.match(r"([\d.]+)\s?(.+)", text).groups()
                assert long == pytest.approx(float(number) * units[unit] * mpc * per_mpc, abs=0.1)
                known += 1
    assert known >= 2


def test_slabs_stand_as_high_as_their_mass(screen, atlas):
    screen.go("#u=50&v=37&width=60")
    heights = screen.page.evaluate("[...document.querySelectorAll('#depth .bar')].map(r => r.getBBox().height)")
    totals = np.array(atlas.sheet("gas")["totals"])
    assert np.allclose(np.array(heights) / max(heights), totals / totals.max(), atol=0.02)


def test_a_drag_over_the_census_brushes_it(screen):
    screen.go("#u=50&v=37&width=100")
    screen.page.wait_for_selector("#census .bar")
    box = screen.page.locator("#census .field").bounding_box()
    y = box["y"] + 0.3 * box["height"]
    drag(screen, (box["x"] + 0.3 * box["width"], y), (box["x"] + 0.6 * box["width"], y))
    low, high = map(float, screen.link()["census"].split(":"))
    assert 1e9 < low < high < 2e14
    screen.page.get_by_text("all objects").click()
    screen.settle()
    assert "census" not in screen.link()
