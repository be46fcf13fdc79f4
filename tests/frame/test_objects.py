"""Catalogue objects: rings where they are, as large as they are; the note, the census and its brush."""

import numpy as np
import pytest

ALONE = {"u": 50.0, "v": 68.0, "radius": 2.0}  # as conftest puts it into the catalogue
NEAR = "#u=50&v=68&width=20&sheet=gas"


def ring_pixels(screen, inner, outer):
    """How many angles of 64 around the lone object have something drawn between two radii, Mpc."""
    marks = screen.pixels("#marks")[:, :, 3]
    box = screen.map_box()
    x, y = screen.at(ALONE["u"], ALONE["v"])
    scale = box["width"] / screen.place()[2]
    hit = 0
    for angle in np.linspace(0, 2 * np.pi, 64, endpoint=False):
        radii = np.arange(inner * scale, outer * scale, 0.5)
        columns = np.round(x - box["x"] + radii * np.cos(angle)).astype(int)
        rows = np.round(y - box["y"] - radii * np.sin(angle)).astype(int)
        hit += bool((marks[rows, columns] > 60).any())
    return hit


@pytest.fixture
def near(open_screen):
    screen = open_screen(NEAR)
    screen.page.wait_for_selector("#census .bar")
    screen.settle()
    return screen


def test_a_ring_of_the_size_of_the_object_is_drawn_around_it(near):
    drawn = ring_pixels(near, 1.9, 2.1)
    assert 50 < drawn < 60  # it is open to the right
    assert ring_pixels(near, 1.0, 1.85) == 0


def test_clicking_a_ring_shows_the_columns_of_the_object(near):
    near.page.mouse.click(*near.at(50 - 2.0, 68))
    note = near.page.inner_text("#note")
    assert "alone" in note and "2.0000 × 10¹⁴ M☉" in note and "68 Mpc" in note
    near.settle()
    assert near.link()["object"] == "alone"
    near.picture("object")


def test_a_thin_line_ties_the_object_to_its_note(near):
    near.page.mouse.click(*near.at(50 - 2.0, 68))
    near.settle()
    marks, box = near.pixels("#marks")[:, :, 3], near.map_box()
    note = near.page.locator("#note").bounding_box()
    x, _ = near.at(50, 68)
    scale = box["width"] / 20
    for part in (0.2, 0.5, 0.8):
        at = x + 2 * scale + part * (note["x"] - x - 2 * scale) - box["x"]
        assert (marks[:, round(at)] > 60).any()


def test_escape_puts_the_note_away(near):
    near.page.mouse.click(*near.at(50 - 2.0, 68))
    near.press("Escape")
    assert near.page.locator("#note").is_hidden() and "object" not in near.link()


def test_a_link_to_an_object_shows_its_note(open_screen):
    screen = open_screen(NEAR + "&object=alone")
    screen.page.wait_for_selector("#note:not([hidden])")
    assert "alone" in screen.page.inner_text("#note")


def test_rings_never_pile_up(open_screen):
    screen = open_screen("#u=50&v=37&width=100&sheet=gas")
    screen.page.wait_for_selector("#census .bar")
    screen.settle()
    rings = screen.page.evaluate(
        """async () => {
          const url = (name) => new URL(`frame/${name}.js`, document.baseURI);
          const { Markers } = await import(url('markers'));
          const { View } = await import(url('view'));
          const { objects } = await (await fetch('objects?limit=500')).json();
          const canvas = document.createElement('canvas');
          const note = document.createElement('aside');
          const marks = new Markers(canvas, note, { object: null, markers: true, epoch: {}, ownPart: [0, 1] }, { wake() {} });
          marks.setList(objects);
          return marks.thinned(new View(50, 37, 100, 900, 600)).map(({ x, y, r }) => [x, y, r]);
        }"""
    )
    rings = np.array(rings)
    apart = np.hypot(*(rings[:, None, :2] - rings[None, :, :2]).transpose(2, 0, 1))
    touching = apart < rings[:, None, 2] + rings[None, :, 2]
    np.fill_diagonal(touching, False)
    assert len(rings) > 20 and not touching.any()


def test_the_census_counts_what_is_in_view(open_screen, atlas):
    screen = open_screen("#u=25&v=20&width=30")
    screen.page.wait_for_selector("#census .bar")
    box = screen.map_box()
    tall = 30 * box["height"] / box["width"]
    table = screen.page.evaluate("async () => (await (await fetch('objects?limit=500')).json()).objects")
    inside = sum(10 <= o["u"] <= 40 and abs(o["v"] - 20) <= tall / 2 for o in table)
    assert screen.page.inner_text("#census-corner .text").startswith(f"{inside} in view")


def test_a_brush_on_the_census_takes_rings_away(near):
    assert ring_pixels(near, 1.9, 2.1) > 50
    near.page.get_by_role("slider", name="Upper end").focus()
    near.press("ArrowLeft", 3)
    near.page.wait_for_timeout(500)
    assert ring_pixels(near, 1.9, 2.1) == 0
    low, high = map(float, near.link()["census"].split(":"))
    assert low < high < 2e14
