"""Sheets that are neither sums nor means: what the frame makes of several of their slabs is what `atlas.read` makes."""

from __future__ import annotations

import numpy as np
import pytest
from build_maker import BOX, changed, description, particles, write_build
from live import Live

import tilemap
from tilemap.build_atlas import build_atlas
from tilemap.server.app import make_app

PIXEL = BOX / 1024
SHEETS = {
    "spread": {"species": "gas", "dispersion": "velocity", "unit": "km/s", "coding": "linear"},
    "peak": {"species": "gas", "peak": "mass", "unit": "Msun/kpc2"},
}


@pytest.fixture(scope="module")
def built(tmp_path_factory):
    """A box of 8 Mpc, 1024 pixels, 4 slabs."""
    folder = tmp_path_factory.mktemp("kinds")
    sheets = {f"sheets__{name}": sheet for name, sheet in SHEETS.items()}
    build = changed(description(), view__pixels=1024, view__slabs=4, **sheets)
    return tilemap.open(build_atlas(write_build(folder, build, particles(3000)), folder / "kinds.atlas"))


@pytest.fixture(scope="module")
def address(built):
    server = Live(make_app([built.path]))
    yield f"{server.address}/kinds/"
    server.stop()


@pytest.mark.parametrize(("depth", "slabs"), [("", None), ("2:4", 1), ("2:6", slice(1, 3)), ("0:6", slice(0, 3))])
@pytest.mark.parametrize("sheet", SHEETS)
def test_the_reading_is_the_number_in_the_atlas(open_screen, address, built, sheet, depth, slabs):
    window = f"&depth={depth}" if depth else ""
    screen = open_screen(f"#u=4&v=4&width=2&sheet={sheet}{window}", address=address)
    for u, v in [(4.1, 4.2), (3.7, 3.9), (4.4, 3.6)]:
        u, v = ((np.floor(place / PIXEL) + 0.5) * PIXEL for place in (u, v))
        x, y = map(round, screen.at(u, v))
        screen.page.mouse.move(x, y)
        u, v = screen.under(x, y)
        expected = float(built.read(sheet, (u, v), PIXEL, PIXEL, slabs=slabs).values[0, 0])
        assert screen.value() == pytest.approx(expected, rel=2e-6)


@pytest.mark.parametrize(("depth", "slabs"), [("", None), ("2:6", slice(1, 3))])
def test_seen_from_afar_a_peak_reads_as_the_highest_of_its_pixels(open_screen, address, built, depth, slabs):
    window = f"&depth={depth}" if depth else ""
    screen = open_screen(f"#u=4&v=4&width=18&sheet=peak{window}", address=address)
    values = built.read("peak", slabs=slabs).values
    coarse = values.reshape(512, 2, 512, 2).max(axis=(1, 3))
    for u, v in [(4.1, 4.2), (1.7, 6.9), (7.4, 0.6)]:
        x, y = map(round, screen.at(u, v))
        screen.page.mouse.move(x, y)
        u, v = screen.under(x, y)
        expected = float(coarse[int((BOX - v) / (2 * PIXEL)), int(u / (2 * PIXEL))])
        assert screen.value() == pytest.approx(expected, rel=2e-6)


@pytest.mark.parametrize("sheet", SHEETS)
def test_an_outline_says_the_dispersion_and_the_peak_of_all_inside(open_screen, address, built, sheet):
    points = [(2.0, 2.5), (6.0, 3.0), (5.0, 6.5)]
    outline = ",".join(f"{u}:{v}" for u, v in points)
    screen = open_screen(f"#u=4&v=4&width=8&sheet={sheet}&outline={outline}", address=address)
    button = screen.page.locator("#tape [data-row=tape_together]:not([disabled])")
    button.click()
    screen.page.wait_for_timeout(100)
    value, said = screen.page.evaluate("navigator.clipboard.readText()").split(" ", 1)
    found = built.inside(sheet, points)
    assert (float(value), said) == (pytest.approx(found.together, rel=1e-6), found.unit)
    assert screen.page.locator("#tape [data-row=tape_total]").count() == (sheet == "spread")
