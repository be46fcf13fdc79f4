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
        ("gas", "33.34:100", slice(1, 3)),
        ("temperature", "", None),
        ("temperature", "66.67:100", 2),
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


@pytest.mark.parametrize(("width", "level"), [(30, 0), (60, 1), (100, 2)])
@pytest.mark.parametrize("sheet", ["gas", "temperature"])
def test_from_afar_the_reading_is_the_number_of_the_level_on_screen(open_screen, atlas, sheet, width, level):
    """The very code in the file: what a plain reader of its array decodes."""
    screen = open_screen(f"#u=50&v=37.5&width={width}&sheet={sheet}", width=800, height=620)
    box = screen.map_box()
    for x, y in ((101, 93), (317, 211), (402, 305)):
        x, y = round(box["x"] + x), round(box["y"] + y)
        screen.page.mouse.move(x, y)
        u, v = screen.under(x, y)
        side = PIXEL * 2**level
        row, column = int((75 - v) / side), int(u / side)
        codes = atlas.reader("z0.50", sheet, level, whole=True).codes(0, row // 512, column // 512)
        expected = atlas.coding(sheet).decode(codes)[row % 512, column % 512]
        value = screen.value()
        assert (value is None) == bool(np.isnan(expected)) and value in (None, pytest.approx(float(expected), rel=2e-6))
        screen.page.keyboard.press("c")
        screen.page.wait_for_timeout(80)
        copied = screen.page.evaluate("navigator.clipboard.readText()")
        assert copied.endswith(f", level {level})") and (
            value is None or float(copied.split()[0]) == pytest.approx(value, rel=1e-6)
        )


@pytest.mark.parametrize(
    ("lengths", "factor", "unit"), [("proper", 1 / 1.5, "Mpc"), ("angle", 1e3 / 9.27 / 3600, "deg")]
)
def test_the_place_is_read_in_the_chosen_measure(screen, lengths, factor, unit):
    screen.wanted = f"sheet=gas&lengths={lengths}"
    u, v = point(screen, 31.204, 40.007)
    screen.page.wait_for_timeout(150)
    x, y = (line.split() for line in screen.page.locator("#reading .where div").all_inner_texts())
    assert (float(x[1]), float(y[1])) == pytest.approx((u * factor, v * factor), abs=2e-3)
    assert x[2] == y[2] == unit
    screen.page.keyboard.press("c")
    screen.page.wait_for_timeout(80)
    assert f"x = {x[1]}, y = {y[1]} {unit} ({lengths})" in screen.page.evaluate("navigator.clipboard.readText()")


def test_a_press_on_the_reading_copies_it(screen):
    screen.go("#u=50&v=40&width=6")
    value = screen.value()
    screen.page.click("#reading .value")
    screen.page.wait_for_timeout(100)
    assert float(screen.page.evaluate("navigator.clipboard.readText()").split()[0]) == pytest.approx(value, rel=1e-6)


def test_without_a_cursor_the_middle_of_the_map_is_read(screen, atlas):
    u, v = 500.5 * PIXEL, 700.5 * PIXEL
    screen.go(f"#u={u:.6f}&v={v:.6f}&width=6")
    assert screen.value() == pytest.approx(read_one(atlas, "gas", u, v), rel=2e-6)
