"""What the map shows, read back from its canvas, against numbers read from the atlas."""

import numpy as np
import pytest
from screen import shade

PIXEL = 100 / 2048  # side of a finest pixel of the invented atlas, Mpc
LOW, HIGH = 3e3, 3e6


def aligned(screen, column, row, zoom):
    """A link whose map begins at a pixel of the file, with `zoom` device pixels for each; and the pixels it shows."""
    box = screen.map_box()
    width = box["width"] / zoom * PIXEL
    u = column * PIXEL + width / 2
    v = 75 - row * PIXEL - box["height"] / zoom * PIXEL / 2
    shape = int(np.ceil(box["height"] / zoom)), int(np.ceil(box["width"] / zoom))
    return f"#u={u:.9f}&v={v:.9f}&width={width:.9f}", shape


def expected(atlas, sheet, column, row, shape, slabs=None):
    """Values of the file from a pixel on, rows downwards."""
    rows, columns = shape
    centre = ((column + columns / 2) * PIXEL, 75 - (row + rows / 2) * PIXEL)
    return atlas.read(sheet, centre, columns * PIXEL, rows * PIXEL, slabs=slabs).values


def check_colours(screen, atlas, sheet, curve, ramp, low, high, slabs=None, depth=""):
    fragment, shape = aligned(screen, 700, 480, 4)
    screen.go(f"{fragment}&sheet={sheet}&tone={low}:{high}&curve={curve}&ramp={ramp}{depth}")
    shown = screen.pixels()[:, :, :3].astype(int)
    rows = np.arange(shown.shape[0]) // 4
    columns = np.arange(shown.shape[1]) // 4
    values = expected(atlas, sheet, 700, 480, shape, slabs)[rows][:, columns]
    steps = np.round(shade(values, low, high, curve) * 1023).astype(int)
    table = screen.ramp(ramp).astype(int)
    # One step of the coding or of the ramp to either side is rounding.
    nearby = [np.abs(shown - table[np.clip(steps + k, 0, 1023)]).max(axis=2) for k in (-1, 0, 1)]
    assert np.min(nearby, axis=0).max() <= 2


@pytest.mark.parametrize("curve, low, high", [("log", LOW, HIGH), ("linear", 2e4, 4e6), ("asinh", 2e4, 4e6)])
def test_colours_on_screen_are_the_numbers_in_the_atlas(screen, atlas, curve, low, high):
    check_colours(screen, atlas, "gas", curve, "strandline", low, high)


def test_a_mean_is_coloured_from_the_numbers_in_the_atlas(screen, atlas):
    check_colours(screen, atlas, "temperature", "log", "kelpfire", 4e3, 4e5)


def test_a_window_of_some_slabs_shows_their_sum(screen, atlas):
    depth = "&depth=0:66.666667"
    check_colours(screen, atlas, "gas", "log", "strandline", LOW, HIGH, slice(0, 2), depth)


def test_a_window_of_some_slabs_shows_the_weighted_mean(screen, atlas):
    depth = "&depth=33.333333:100"
    check_colours(screen, atlas, "temperature", "log", "kelpfire", 4e3, 4e5, slice(1, 3), depth)


@pytest.mark.parametrize("ratio", [1, 1.1, 1.25, 1.5, 2, 2.625, 3])
def test_no_seam_shows_at_any_fractional_zoom(open_screen, ratio):
    screen = open_screen("#u=50&v=50&width=70&tone=1e5:1e6", width=720, height=480, ratio=ratio, atlas="even")
    for width in (73.1, 33.333, 17.77, 9.3, *np.random.default_rng(round(100 * ratio)).uniform(1, 74, 4).round(4)):
        screen.go(f"#u=50.123&v=49.77&width={width}&tone=1e5:1e6")
        shown = screen.pixels()[2:-2, 2:-2, :3]
        assert (shown == shown[0, 0]).all() and shown.max() > 50, f"width {width}"


def test_the_outermost_view_shows_the_whole_volume(screen):
    screen.go("#u=20&v=30&width=5")
    screen.press("0")
    box = screen.map_box()
    corners = [screen.at(u, v) for u in (0, 100) for v in (0, 75)]
    assert all(box["x"] < x < box["x"] + box["width"] and box["y"] < y < box["y"] + box["height"] for x, y in corners)


def test_the_innermost_view_goes_past_one_pixel_with_crisp_edges(screen):
    screen.go("#u=50.01&v=40.01&width=3&markers=off&tone=3e3:3e6")
    screen.press("+", 12)
    side = screen.map_box()["width"] / screen.place()[2] * PIXEL
    assert side > 100
    row = screen.pixels()[200, :, :3].astype(int)
    edges = np.flatnonzero(np.abs(np.diff(row, axis=0)).sum(axis=1))
    assert 5 < len(edges) <= np.ceil(len(row) / side)


@pytest.mark.parametrize("side", [40, 64, 100])
def test_the_numbers_written_on_wide_pixels_are_those_in_the_atlas(screen, atlas, side):
    box = screen.map_box()
    screen.page.evaluate(
        """() => { if (window.written) return; window.written = []; const { fillText } = CanvasRenderingContext2D.prototype;
        let rimmed = '';  // the numerals of the rulers have a rim
        CanvasRenderingContext2D.prototype.strokeText = (text) => { rimmed = text; };
        CanvasRenderingContext2D.prototype.fillText = function (text, x, y) {
          if (this.canvas.id === 'marks' && text !== rimmed) window.written.push([text, x, y]);
          rimmed = '';
          return fillText.call(this, text, x, y); }; }"""
    )
    screen.go(f"#u=50.01&v=40.01&width={box['width'] / side * PIXEL}&markers=off")
    screen.page.wait_for_timeout(300)
    screen.page.evaluate("window.written.length = 0")
    screen.page.mouse.move(400, 300)  # the map is drawn anew
    screen.page.wait_for_timeout(200)
    screen.picture(f"pixels-{side}")
    words = screen.page.evaluate("window.written")
    powers = {digit: str(k) for k, digit in enumerate("⁰¹²³⁴⁵⁶⁷⁸⁹")}
    found = {}
    for text, x, y in dict.fromkeys(map(tuple, words)):
        u, v = screen.under(x + box["x"], y + box["y"])
        place = int(u / PIXEL), int((75 - v) / PIXEL)
        found[place] = found.get(place, "") + text
    assert len(found) > 0.8 * box["width"] * box["height"] / side**2
    for (column, row), text in found.items():
        front, _, power = text.partition("×10")
        value = float(front) * 10.0 ** int("".join(powers[digit] for digit in power) or 0)
        middle = ((column + 0.5) * PIXEL, 75 - (row + 0.5) * PIXEL)
        assert value == pytest.approx(float(atlas.read("gas", middle, PIXEL, PIXEL).values[0, 0]), rel=6e-3)


def test_no_number_is_written_on_pixels_that_are_too_small_for_it(screen):
    screen.go(f"#u=50.01&v=40.01&width={screen.map_box()['width'] / 31 * PIXEL}&markers=off")
    screen.page.wait_for_timeout(300)
    assert not screen.pixels("#marks")[60:-60, 60:-60, 3].any()


def test_coarse_tiles_stand_in_while_fine_ones_are_awaited(open_screen, live):
    screen = open_screen("#u=50&v=37&width=90&tone=3e3:3e6&markers=off", fresh=True)
    live.delay = lambda path: 1.5 if "/gas/0/" in path else 0.0
    screen.page.evaluate("location.hash = '#u=50&v=37&width=12&tone=3e3:3e6&markers=off'")
    screen.page.wait_for_timeout(500)
    early = screen.pixels()[:, :, 1].astype(float)
    assert screen.page.get_attribute("#hand", "aria-busy") == "true"
    screen.settle()
    late = screen.pixels()[:, :, 1].astype(float)
    assert np.corrcoef(early.ravel(), late.ravel())[0, 1] > 0.9


def test_a_change_of_tone_asks_for_no_tile_and_recolours_all_of_the_map(open_screen, live):
    screen = open_screen("#u=50&v=37&width=60&tone=3e3:3e6", fresh=True)
    before = screen.pixels()
    screen.page.wait_for_timeout(900)  # at rest, the tiles around are fetched ahead
    asked = len(live.tiles())
    screen.page.locator(".tone .hi").focus()
    screen.press("ArrowDown", 8)
    assert len(live.tiles()) == asked
    table = screen.ramp("strandline")
    between = (before[:, :, :3] != table[0]).any(axis=2) & (before[:, :, :3] != table[-1]).any(axis=2)
    changed = (screen.pixels() != before).any(axis=2)
    assert between.mean() > 0.5 and changed[between].mean() > 0.98


def test_the_tiles_nearest_to_the_middle_are_asked_for_first(open_screen, live):
    # Twelve tiles, four across and three down, of which eight are under way at a time in no certain order.
    live.delay = lambda path: 0.15 if "/gas/0/" in path else 0.0
    open_screen("#u=50&v=37.5&width=100", width=2300, height=1700, fresh=True)
    fine = [(int(row), int(column)) for _, _, level, _, row, column in live.tiles() if level == "0"]
    away = [np.hypot(column + 0.5 - 2, row + 0.5 - 1.5) for row, column in fine]
    assert len(away) == 12
    assert max(away[:4]) < max(away) and min(away[-3:]) > min(away)


def test_tiles_that_left_the_view_are_not_waited_for(open_screen, live):
    screen = open_screen("#u=80&v=20&width=90", fresh=True)
    live.delay = lambda path: 4.0 if "/gas/0/" in path else 0.0
    screen.page.evaluate("location.hash = '#u=20&v=60&width=12'")
    screen.page.wait_for_timeout(500)
    screen.page.evaluate("location.hash = '#u=80&v=20&width=90'")
    screen.page.wait_for_timeout(300)
    screen.settle(timeout=3.0)
