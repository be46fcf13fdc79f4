"""The colour ramps: brighter always means more, to every eye."""

import numpy as np
import pytest

RAMPS = ["strandline", "kelpfire", "starwort", "undertow", "lichen", "heather", "shingle"]

# Machado, Oliveira & Fernandes (2009), severity 1, linear RGB; the matrices are written from memory.
DEFICIENCIES = {
    "protan": [[0.152286, 1.052583, -0.204868], [0.114503, 0.786281, 0.099216], [-0.003882, -0.048116, 1.051998]],
    "deutan": [[0.367322, 0.860646, -0.227968], [0.280085, 0.672501, 0.047413], [-0.011820, 0.042940, 0.968881]],
    "tritan": [[1.255528, -0.076749, -0.178779], [-0.078411, 0.930809, 0.147602], [0.004733, 0.691367, 0.303900]],
}


def linear(rgb):
    """sRGB bytes to linear light (IEC 61966-2-1)."""
    x = np.asarray(rgb) / 255
    return np.where(x <= 0.04045, x / 12.92, ((x + 0.055) / 1.055) ** 2.4)


def lightness(light):
    """CIE 1976 L* of linear sRGB, so that the ramps are not judged by the space they were made in."""
    y = np.clip(light, 0, 1) @ [0.2126, 0.7152, 0.0722]
    return np.where(y > (6 / 29) ** 3, 116 * np.cbrt(y) - 16, y * (29 / 3) ** 3)


@pytest.fixture(scope="module")
def tables(browser, live):
    from screen import Screen

    page = browser.new_page()
    screen = Screen(page, f"{live.address}/even/").open()
    yield {name: screen.ramp(name) for name in RAMPS}
    page.close()


@pytest.mark.parametrize("name", RAMPS)
def test_lightness_rises_all_along_a_ramp(tables, name):
    rise = lightness(linear(tables[name][::16]))
    assert (np.diff(rise) > 0.05).all()


@pytest.mark.parametrize("eyes", DEFICIENCIES)
@pytest.mark.parametrize("name", RAMPS)
def test_lightness_rises_to_eyes_that_see_fewer_colours(tables, name, eyes):
    seen = linear(tables[name][::16]) @ np.array(DEFICIENCIES[eyes]).T
    assert (np.diff(lightness(seen)) > 0.05).all()


def test_all_ramps_begin_with_the_colour_of_nothing(tables):
    assert len({tuple(table[0]) for table in tables.values()}) == 1


def test_ramps_reach_from_near_black_to_near_white(tables):
    ends = np.array([lightness(linear(table[[0, -1]])) for table in tables.values()])
    assert (ends[:, 0] < 3).all() and (ends[:, 1] > 95).all()
