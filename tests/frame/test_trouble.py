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
