"""The reading under the cursor is the number in the file."""

import numpy as np
import pytest

PIXEL = 100 / 2048
SPOTS = [(31.204, 40.007), (77.7, 12.34), (3.21, 70.5)]


def read_one(atlas, sheet, u, v, slabs=None):
    return float(atlas.read(sheet, (u, v), PIXEL, PIXEL, slabs=slabs).values[0, 0])


def point(screen, u, v):
    """Bring the middle of a pixel under the cursor; the place that the cursor, which moves by whole pixels, comes to."""
    u, v = (np.floor(u / PIXEL) + 0.5) * PIXEL, (np.floor(v / PIXEL) + 0.5) * PIXEL
    screen.go(f"#u={u + 0.4:.6f}&v={v - 0.3:.6f}&width=6&{screen.wanted}")
    x, y = map(round, screen.at(u, v))
    screen.page.mouse.move(x, y)
    return screen.under(x, y)


@pytest.mark.parametrize(
    "sheet, depth, slabs",
    [
        ("gas", "", None),
        ("gas", "33.34:66.67", 1),
        ("gas", "0:66.67", slice(0, 2)),
        ("temperature", "", None),
        ("temperature", "0:66.67", slice(0, 2)),
    ],
)
def test_the_reading_is_the_number_in_the_atlas(screen, atlas, sheet, depth, slabs):
    screen.wanted = f"sheet={sheet}" + (f"&depth={depth}" if depth else "")
    for spot in SPOTS:
        u, v = point(screen, *spot)
        assert screen.value() == pytest.approx(read_one(atlas, sheet, u, v, slabs), rel=2e-6)


def test_the_reading_says_unit_and_place(screen):
    screen.wanted = "sheet=gas"
    u, v = point(screen, 31.204, 40.007)
    screen.page.wait_for_timeout(150)
    text = screen.page.inner_text("#reading")
    assert "M☉/kpc²" in text
    assert f"x {u:.3f} Mpc" in text and f"y {v:.3f} Mpc" in text


def test_a_place_without_anything_reads_as_nothing(screen):
    screen.go("#u=10&v=1&width=6&sheet=temperature")
    screen.page.mouse.move(*screen.at(10, 1))
    assert screen.value() is None
    assert "nothing here" in screen.page.inner_text("#reading")


def test_outside_the_volume_the_reading_says_so(screen):
    screen.go("#width=200")
    screen.page.mouse.move(*screen.at(50, 75.5))
    assert screen.value() is None
    assert "outside" in screen.page.inner_text("#reading")


def test_one_key_copies_the_reading_with_unit_and_place(screen, atlas):
    screen.wanted = "sheet=gas"
    u, _ = point(screen, 31.204, 40.007)
    value = screen.value()
    screen.page.keyboard.press("c")
    screen.page.wait_for_timeout(100)
    copied = screen.page.evaluate("navigator.clipboard.readText()")
    assert float(copied.split()[0]) == pytest.approx(value, rel=1e-6)
    assert copied.split(" at ")[0].split(" ", 1)[1] == "Msun / kpc2"
    assert f"x = {u:.3f}" in copied


def test_without_a_cursor_the_middle_of_the_map_is_read(screen, atlas):
    u, v = 500.5 * PIXEL, 700.5 * PIXEL
    screen.go(f"#u={u:.6f}&v={v:.6f}&width=6")
    assert screen.value() == pytest.approx(read_one(atlas, "gas", u, v), rel=2e-6)
