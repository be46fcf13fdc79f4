"""When things go wrong the frame says so in one quiet line, keeps what it has, and recovers by itself."""

import json

import numpy as np
import pytest
from atlas_maker import make_atlas
from live import Live

from tilemap.server.app import make_app


@pytest.fixture
def own(tmp_path):
    """A small atlas and server that a test may break."""
    folder = make_atlas(tmp_path / "own.atlas", columns=2048, rows=1024, slabs=1)
    server = Live(make_app([folder]))
    yield server, folder
    server.stop()


def test_a_server_that_is_gone_and_back_leaves_the_map_whole(open_screen, own):
    server, _ = own
    start = "#u=90&v=15&width=12&tone=3e3:3e6"
    screen = open_screen(start, address=f"{server.address}/own/")
    whole = screen.pixels()
    server.stop()
    screen.page.evaluate("location.hash = '#u=10&v=30&width=12&tone=3e3:3e6'")
    screen.wait_for_status("The server does not answer")
    assert screen.pixels()[:, :, :3].max() > 100  # what there is stands in
    screen.picture("server-gone")
    server.start()
    screen.settle(timeout=12)
    screen.wait_for_status("answers again")
    screen.page.evaluate(f"location.hash = '{start}'")
    screen.settle()
    assert np.array_equal(screen.pixels(), whole)


def test_an_atlas_that_is_built_anew_is_read_again(open_screen, own):
    server, folder = own
    screen = open_screen("#u=90&v=15&width=12", address=f"{server.address}/own/")
    described = json.loads((folder / "atlas.json").read_text())
    (folder / "atlas.json").write_text(json.dumps(described | {"id": "0123456789abcdef", "title": "Second build"}))
    screen.page.evaluate("location.hash = '#u=10&v=30&width=12'")
    screen.wait_for_status("built anew")
    screen.settle()
    assert screen.page.title() == "Second build"
    assert screen.place() == (10, 30, 12)


def test_a_damaged_tile_is_replaced_by_a_coarser_one(open_screen, own):
    server, _ = own
    server.spoil = lambda path, body: body[:5000] + bytes(200) + body[5200:] if "/gas/0/0/1/0" in path else body
    screen = open_screen("#u=20&v=20&width=40&tone=3e3:3e6", address=f"{server.address}/own/", settle=False)
    screen.wait_for_status("A tile is damaged")
    screen.settle()
    corner = screen.pixels()[-120:-20, 20:120, :3]
    assert corner.max() > 60 and len(np.unique(corner.reshape(-1, 3), axis=0)) > 50


def test_a_start_without_a_server_is_tried_again(open_screen, own):
    server, _ = own
    address = f"{server.address}/own/"
    refused = iter([True, True])
    server.refuse = lambda path: path.endswith("atlas.json") and next(refused, False)
    screen = open_screen("", address=address, settle=False)
    screen.wait_for_status("The atlas cannot be read")
    screen.settle(timeout=12)
    assert screen.pixels()[:, :, :3].max() > 100


def test_a_tile_that_the_server_cannot_read_keeps_no_other_from_coming(open_screen, own):
    """The index of a file is damaged: its tiles are answered with 502, those of other levels come as ever."""
    server, folder = own
    shard = folder / "z0.50" / "gas" / "0" / "c" / "0" / "0" / "0"
    shard.write_bytes(shard.read_bytes()[:-40] + bytes(40))
    screen = open_screen("#u=20&v=20&width=40&tone=3e3:3e6", address=f"{server.address}/own/", settle=False)
    screen.wait_for_status("A tile is damaged")
    screen.settle()
    shown = screen.pixels()[20:-40, 60:-20, :3]
    assert shown.max() > 60 and len(np.unique(shown.reshape(-1, 3), axis=0)) > 50
    screen.go("#u=50&v=25&width=100&tone=3e3:3e6")  # a coarser level, whole
    assert screen.value() is not None


def test_a_connection_lost_in_mid_flight_is_borne_and_the_flight_arrives(open_screen, own):
    server, _ = own
    screen = open_screen("#u=90&v=15&width=2&tone=3e3:3e6", address=f"{server.address}/own/", motion=True)
    screen.go("#u=10&v=40&width=2&tone=3e3:3e6", settle=False)
    screen.page.wait_for_timeout(300)
    server.stop()
    screen.wait_for_status("The server does not answer", timeout=15)
    screen.page.wait_for_timeout(500)
    assert screen.pixels()[:, :, :3].max() > 60  # coarse tiles stand in where the flight has come to
    server.start()
    screen.settle(timeout=20)
    assert screen.place() == (10, 40, 2)
    fresh = open_screen("#u=10&v=40&width=2&tone=3e3:3e6", address=f"{server.address}/own/")
    assert np.array_equal(screen.pixels(), fresh.pixels())


def test_a_browser_that_goes_offline_and_back_fetches_what_is_missing(open_screen, own):
    server, _ = own
    screen = open_screen("#u=90&v=15&width=12", address=f"{server.address}/own/", fresh=True)
    screen.page.context.set_offline(True)
    screen.go("#u=10&v=40&width=3", settle=False)
    screen.wait_for_status("The server does not answer")
    screen.page.context.set_offline(False)
    screen.settle(timeout=20)
    screen.wait_for_status("answers again")


@pytest.mark.parametrize("how", ["no scripts at all", "a module that does not come"])
def test_without_its_modules_the_page_says_what_it_needs(browser, live, how):
    context = browser.new_context(java_script_enabled=how != "no scripts at all")
    page = context.new_page()
    page.route("**/frame/map.js", lambda route: route.abort())
    page.goto(f"{live.address}/field/")
    page.wait_for_timeout(300)
    assert page.locator("#status").is_visible()
    assert "needs JavaScript with modules" in page.inner_text("#status")
    context.close()


@pytest.mark.parametrize(("width", "height"), [(320, 240), (240, 180), (160, 120), (800, 300), (60, 60)])
def test_in_a_tiny_window_the_map_stays_and_everything_comes_back_with_room(open_screen, width, height):
    screen = open_screen("#u=50&v=37&width=15&tone=3e3:3e6", width=width, height=height)
    box = screen.map_box()
    assert box["width"] * box["height"] > 0.3 * width * height or width == 60
    assert box["y"] >= 0 and box["y"] + box["height"] <= height
    assert screen.pixels()[:, :, :3].max() > 60
    screen.page.set_viewport_size({"width": 1100, "height": 760})
    screen.page.wait_for_timeout(300)
    screen.settle()
    assert not screen.errors
    for part in ("#title", "#sheets", "#census", "#tone", "#scale", "#depth"):
        assert screen.page.is_visible(part)
    assert screen.place() == (50, 37, 15)


def test_a_catalogue_that_cannot_be_read_leaves_the_map_and_is_asked_again(open_screen, live):
    refused = iter([True] * 2)
    live.refuse = lambda path: path.endswith("/census") and next(refused, False)
    screen = open_screen("#u=50&v=37&width=60&tone=3e3:3e6", fresh=True)
    assert screen.pixels()[:, :, :3].max() > 100
    screen.page.wait_for_selector("#census .bar", timeout=12000)
    assert not screen.errors
