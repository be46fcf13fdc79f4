"""The colour ramps: brighter always means more, to every eye."""

import numpy as np
import pytest
from colorspacious import cspace_convert

RAMPS = ["strandline", "kelpfire", "starwort", "undertow", "lichen", "heather", "shingle"]

# As simulated by Machado, Oliveira & Fernandes (2009) at full severity, in colorspacious.
EYES = {"protan": "protanomaly", "deutan": "deuteranomaly", "tritan": "tritanomaly"}
# A ramp is read in so many steps; next to each other they differ by at least so much in CAM02-UCS (Luo, Cui & Li 2006), where
# about 1 is just to be seen side by side (from memory).
READ_STEPS, APART = 24, 2.0


def seen(table, eyes):
    """sRGB bytes as other eyes see them, 0 to 1; as they are for "usual"."""
    rgb = np.asarray(table) / 255
    if eyes == "usual":
        return rgb
    return np.clip(cspace_convert(rgb, {"name": "sRGB1+CVD", "cvd_type": EYES[eyes], "severity": 100}, "sRGB1"), 0, 1)


def linear(x):
    """sRGB, 0 to 1, to linear light (IEC 61966-2-1)."""
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


@pytest.mark.parametrize("eyes", ["usual", *EYES])
@pytest.mark.parametrize("name", RAMPS)
def test_lightness_rises_all_along_a_ramp_to_every_eye(tables, name, eyes):
    rise = lightness(linear(seen(tables[name][::16], eyes)))
    assert (np.diff(rise) > 0.05).all()


@pytest.mark.parametrize("eyes", ["usual", *EYES])
@pytest.mark.parametrize("name", RAMPS)
def test_neighbouring_steps_of_a_ramp_can_be_told_apart_by_every_eye(tables, name, eyes):
    steps = tables[name][np.linspace(0, len(tables[name]) - 1, READ_STEPS + 1).round().astype(int)]
    apart = np.linalg.norm(np.diff(cspace_convert(seen(steps, eyes), "sRGB1", "CAM02-UCS"), axis=0), axis=1)
    assert apart.min() >= APART


def test_the_ramps_judged_here_are_all_there_are(browser, live):
    page = browser.new_page()
    page.goto(f"{live.address}/even/")
    names = page.evaluate("async () => (await import(new URL('frame/ramps.js', document.baseURI))).RAMPS")
    page.close()
    assert names == RAMPS and len(RAMPS) >= 6


def test_all_ramps_begin_with_the_colour_of_nothing(tables):
    assert len({tuple(table[0]) for table in tables.values()}) == 1


def test_ramps_reach_from_near_black_to_near_white(tables):
    ends = np.array([lightness(linear(table[[0, -1]] / 255)) for table in tables.values()])
    assert (ends[:, 0] < 3).all() and (ends[:, 1] > 95).all()
