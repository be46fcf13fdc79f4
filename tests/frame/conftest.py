"""One browser, one invented atlas with objects, one server on a free port for all tests of the frame."""

import json

import numpy as np
import pytest
from astropy.table import Table
from atlas_maker import SheetData, add_epoch, make_atlas, make_sheets, write_atlas
from live import Live
from playwright.sync_api import sync_playwright
from screen import Screen, how

import tilemap
from tilemap.buildfile import Catalogue
from tilemap.catalogue.ingest import ingest
from tilemap.server.app import make_app

CHROMIUM = "/usr/bin/chromium"
FLAGS = [
    "--no-sandbox",
    "--disable-gpu",
    "--disable-background-networking",
    "--disable-component-update",
    "--disable-sync",
]


@pytest.fixture(scope="session")
def browser():
    with sync_playwright() as playwright:
        browser = playwright.chromium.launch(executable_path=CHROMIUM, headless=True, args=FLAGS)
        yield browser
        browser.close()


@pytest.fixture(scope="session")
def folder(tmp_path_factory):
    """2048 x 1536 pixels, three levels, three slabs, and 60 objects, the first alone in a corner."""
    folder = make_atlas(tmp_path_factory.mktemp("frame") / "field.atlas", columns=2048, rows=1536)
    rng = np.random.default_rng(11)
    table = Table({"x": rng.uniform(2, 98, 60), "y": rng.uniform(2, 55, 60), "z": rng.uniform(0, 100, 60)})
    table["mass"] = 10 ** rng.uniform(9, 13, 60)
    table["radius"] = rng.uniform(0.2, 1.0, 60)
    table["name"] = [f"mark {number}" for number in range(60)]
    for column, unit in (("x", "Mpc"), ("y", "Mpc"), ("z", "Mpc"), ("mass", "Msun"), ("radius", "Mpc")):
        table[column].unit = unit
    table[0] = (50.0, 68.0, 20.0, 2e14, 2.0, "alone")
    return with_objects(folder, table)


def with_objects(folder, table):
    table.write(folder.parent / "objects.fits")
    described = json.loads((folder / "atlas.json").read_text())
    section = Catalogue(
        file="objects.fits", position=["x", "y", "z"], unit="Mpc", id="name", rank="mass", size="radius"
    )
    described["epochs"][0]["catalogue"] = ingest(section, folder.parent, described["view"], folder)
    (folder / "atlas.json").write_text(json.dumps(described))
    return folder


@pytest.fixture(scope="session")
def even_folder(tmp_path_factory):
    """An atlas with the same value everywhere: whatever shows on its map is a fault of the map."""
    values = np.full((1, 1536, 1536), 3e5, dtype=np.float32)
    values[0, 0, 0], values[0, -1, -1] = 1e5, 1e6  # so that there is a range
    return write_atlas(tmp_path_factory.mktemp("even") / "even.atlas", [SheetData("gas", "sum", values, "Msun / kpc2")])


@pytest.fixture(scope="session")
def twice_folder(tmp_path_factory):
    """The volume of `folder` run again from another seed, and a later epoch of that run."""
    place = tmp_path_factory.mktemp("twice") / "again.atlas"
    make_atlas(place, columns=2048, rows=1536, seed=2, atlas_id="0ddba110ddba1100")
    return add_epoch(place, make_sheets(2048, 1536, seed=3), "z0.00", 0.0)


@pytest.fixture(scope="session")
def atlas(folder):
    return tilemap.open(folder)


@pytest.fixture(scope="session")
def live(folder, even_folder, twice_folder):
    server = Live(make_app([folder, even_folder, twice_folder]))
    yield server
    server.stop()


@pytest.fixture(scope="session")
def contexts(browser):
    """Browser contexts by their settings: pages of one share its cache."""
    made = {}

    def context(**settings):
        key = repr(sorted(settings.items()))
        if key not in made:
            made[key] = browser.new_context(permissions=["clipboard-read", "clipboard-write"], **settings)
        return made[key]

    return context


@pytest.fixture(scope="session")
def standing(contexts, live):
    screen = Screen(contexts(**how()).new_page(), f"{live.address}/field/")
    return screen.open()


@pytest.fixture
def screen(standing, live):
    """A page that stays open from test to test, for those that begin by following a link."""
    live.calm()
    standing.page.mouse.move(2, 2)
    standing.page.keyboard.press("Escape")
    standing.page.evaluate("document.activeElement.blur()")
    return standing


@pytest.fixture
def open_screen(contexts, browser, live):
    """Opens a page: ``open_screen(fragment, width=..., height=..., ratio=..., touch=..., motion=..., atlas=..., address=...,
    fresh=..., settle=..., locale=...)``; `fresh` is a browser that has seen nothing yet.
    """
    closing = []

    def new(
        fragment="",
        width=1100,
        height=760,
        ratio=1,
        touch=False,
        motion=False,
        atlas="field",
        address=None,
        fresh=False,
        settle=True,
        locale="en-GB",
    ):
        settings = how(width, height, ratio, touch, motion, locale)
        context = browser.new_context(**settings) if fresh else contexts(**settings)
        page = context.new_page()
        closing.append(context if fresh else page)
        return Screen(page, address or f"{live.address}/{atlas}/").open(fragment, settle)

    yield new
    for each in closing:
        each.close()
    live.calm()
