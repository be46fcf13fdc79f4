"""Two sheets in one picture, and two pictures under a divider: what is on screen against numbers from the atlas."""

import numpy as np
import pytest
import pyvips
from colorspacious import cspace_convert
from screen import shade
from test_ramps import APART, linear, seen

import tilemap

PIXEL = 100 / 2048
COLUMN, ROW, ZOOM = 240, 360, 4  # where the values of the invented gas differ most
GAS = "tone=1e5:1e8&curve=log&ramp=strandline"
TEMPERATURE = "tone.temperature=5e4:2e6&curve.temperature=log"
STARS = "tone.stars=1e3:1e9&ramp.stars=starwort"


def aligned(screen, column=COLUMN, row=ROW):
    """A place whose map begins at a pixel of the file, with ZOOM device pixels for each."""
    box = screen.map_box()
    width = box["width"] / ZOOM * PIXEL
    u = column * PIXEL + width / 2
    v = 75 - row * PIXEL - box["height"] / ZOOM * PIXEL / 2
    return f"#u={u:.9f}&v={v:.9f}&width={width:.9f}&markers=off"


def values(screen, atlas, sheet, column=COLUMN, row=ROW, epoch=None):
    """The number of the file behind each device pixel of an aligned map."""
    box = screen.map_box()
    rows, columns = int(np.ceil(box["height"] / ZOOM)), int(np.ceil(box["width"] / ZOOM))
    centre = ((column + columns / 2) * PIXEL, 75 - (row + rows / 2) * PIXEL)
    read = atlas.read(sheet, centre, columns * PIXEL, rows * PIXEL, epoch=epoch).values
    return np.repeat(np.repeat(read, ZOOM, 0), ZOOM, 1)[: round(box["height"]), : round(box["width"])]


def oklab(rgb):
    """Lightness, a and b of sRGB bytes (rows, columns, 3) as libvips has them."""
    image = pyvips.Image.new_from_array(np.ascontiguousarray(rgb, dtype=np.uint8)).copy(interpretation="srgb")
    return np.moveaxis(image.colourspace("oklab").numpy(), 2, 0)


def shown(screen):
    return screen.pixels()[:, :, :3]


# Brightness from one, hue from another ----------------------------------------------------------------------------


@pytest.fixture(params=["dusk", "estuary"])
def blended(request, screen, atlas):
    """Lightness, a, b of each pixel, and where the first and the second sheet fall between their ends."""
    link = f"&sheet=gas&hue=temperature&{GAS}&{TEMPERATURE}&hues.temperature={request.param}"
    screen.go(aligned(screen) + link)
    screen.picture(f"hue-{request.param}")
    first = shade(values(screen, atlas, "gas"), 1e5, 1e8, "log")
    second = shade(values(screen, atlas, "temperature"), 5e4, 2e6, "log")
    return oklab(shown(screen)), first, second


def test_brightness_is_that_of_the_first_sheet_whatever_the_second(blended, screen):
    (light, _, _), first, _ = blended
    ramp = oklab(screen.ramp("strandline")[None])[0][0]
    of_ramp = np.interp(first, np.linspace(0, 1, 1024), ramp)
    # The blend keeps the ramp's lightness, drawn together towards a top of 0.87 so that a hue can be seen there.
    expected = ramp[0] + (of_ramp - ramp[0]) * (0.87 - ramp[0]) / (ramp[-1] - ramp[0])
    assert np.abs(light - expected).max() < 0.012
    assert np.ptp(expected) > 0.3


def test_hue_is_that_of_the_second_sheet_whatever_the_first(blended):
    (light, a, b), _, second = blended
    there = (np.hypot(a, b) > 0.05) & (light > 0.3)
    hue = np.degrees(np.arctan2(b, a))[there]
    bins = np.round(second[there] * 12).astype(int)
    turned = {k: np.angle(np.exp(1j * np.radians(hue[bins == k])).mean(), deg=True) for k in np.unique(bins)}
    off = [(hue[bins == k] - turned[k] + 180) % 360 - 180 for k in turned]
    assert max(np.abs(each).max() for each in off) < 16 and len(turned) >= 6
    steps = (np.diff([turned[k] for k in sorted(turned)]) + 180) % 360 - 180
    assert (steps > 2).all() or (steps < -2).all()


@pytest.mark.parametrize("eyes", ["usual", "protan", "deutan"])
@pytest.mark.parametrize("hues", ["dusk", "estuary"])
def test_hues_can_be_told_apart_by_eyes_that_see_fewer_colours(screen, hues, eyes):
    """Without blue cones, as one in some ten thousand is (from memory), only the brightness is left to tell by."""
    screen.go("#sheet=gas")
    table = screen.page.evaluate(
        """async (hues) => {
          const { colours } = await import(new URL('frame/blend.js', document.baseURI));
          const { table, across, rowOf, columnOf } = colours('hue', [{ ramp: 'shingle' }, { hues }]);
          const at = [...Array(9).keys()].map((k) => table[across * rowOf(700) + columnOf(Math.round(127.875 * k))]);
          return at.map((c) => [c & 255, (c >> 8) & 255, (c >> 16) & 255]);
        }""",
        hues,
    )
    uniform = cspace_convert(seen(np.array(table), eyes), "sRGB1", "CAM02-UCS")
    assert np.linalg.norm(np.diff(uniform, axis=0), axis=1).min() >= APART
    assert np.linalg.norm(uniform[0] - uniform[-1]) > 8 * APART


# One laid over another --------------------------------------------------------------------------------------------


@pytest.fixture
def starry(atlas):
    """Where an aligned map has the brightest stars of the atlas in its middle."""
    stars = atlas.read("stars").values
    row, column = np.unravel_index(np.nanargmax(stars), stars.shape)
    return min(max(int(column) - 104, 0), 2048 - 210), min(int(row) - 77, 1536 - 156)


def test_stars_over_gas_add_their_light(screen, atlas, starry):
    column, row = starry
    screen.go(aligned(screen, column, row) + f"&sheet=gas&above=stars&{GAS}&{STARS}")
    screen.picture("above")
    parts = {}
    for sheet, ramp, low, high in (("gas", "strandline", 1e5, 1e8), ("stars", "starwort", 1e3, 1e9)):
        t = shade(np.nan_to_num(values(screen, atlas, sheet, column, row)), low, high, "log")
        parts[sheet] = linear(screen.ramp(ramp)[np.round(t * 1023).astype(int)] / 255)
    ground = linear(screen.ramp("shingle")[0] / 255)
    gas, stars = ground + 0.5 * (parts["gas"] - ground), parts["stars"] - ground
    light = gas + stars - gas * stars
    expected = 255 * np.where(light <= 0.0031308, 12.92 * light, 1.055 * light ** (1 / 2.4) - 0.055)
    # A ramp has 256 steps here, of up to two bytes each.
    assert np.abs(shown(screen) - expected).max() <= 4.5
    assert (parts["stars"].max(axis=2) > 0.5).mean() > 0.001


def test_where_there_are_no_stars_the_gas_keeps_its_hue(screen, atlas):
    screen.go(aligned(screen) + f"&sheet=gas&{GAS}")
    _, a, b = oklab(shown(screen))
    screen.go(aligned(screen) + f"&sheet=gas&above=stars&{GAS}&{STARS}")
    _, dim_a, dim_b = oklab(shown(screen))
    there = np.hypot(dim_a, dim_b) > 0.03
    turn = np.angle((dim_a + 1j * dim_b)[there] / (a + 1j * b)[there], deg=True)
    assert np.percentile(np.abs(turn), 99) < 4 and there.mean() > 0.2


# What they have in common -----------------------------------------------------------------------------------------


@pytest.mark.parametrize("link, mate", [("hue=temperature", "temperature"), ("above=stars", "stars")])
def test_the_key_shows_the_colours_of_the_map(screen, atlas, starry, link, mate):
    column, row = starry if mate == "stars" else (COLUMN, ROW)
    ends = (5e4, 2e6) if mate == "temperature" else (1e3, 1e9)
    screen.go(aligned(screen, column, row) + f"&sheet=gas&{link}&{GAS}&{TEMPERATURE}&{STARS}")
    screen.page.wait_for_timeout(150)
    key = screen.pixels(".tone .strip")[:, :, :3].astype(int)
    handles = [screen.page.locator(f".tone .{end}").bounding_box()["y"] for end in ("hi", "lo")]
    top = screen.page.locator(".tone .strip").bounding_box()["y"]
    bright, dark = (y - top for y in handles)
    first = shade(values(screen, atlas, "gas", column, row), 1e5, 1e8, "log")
    second = shade(values(screen, atlas, mate, column, row), *ends, "log")
    inside = (first > 0.02) & (first < 0.98) & (second > 0)
    rows = np.clip(np.round(dark + (bright - dark) * first - 0.5).astype(int), 0, len(key) - 1)
    columns = np.round(second * (key.shape[1] - 1)).astype(int)
    off = np.abs(key[rows, columns] - shown(screen)).max(axis=2)[inside]
    # A row of the key is a hundredth of the way from dark to bright, a column a fortieth.
    assert np.percentile(off, 99) < 14 and inside.mean() > 0.002


@pytest.mark.parametrize("link, mate", [("hue=temperature", "temperature"), ("above=stars", "stars")])
def test_both_numbers_are_read_under_the_cursor(screen, atlas, link, mate):
    u, v = 31.204, 60.007 if mate == "temperature" else 8.0
    screen.go(f"#u={u}&v={v}&width=6&sheet=gas&{link}")
    x, y = map(round, screen.at(u, v))
    screen.page.mouse.move(x, y)
    u, v = screen.under(x, y)
    screen.page.wait_for_timeout(150)
    read = [float(atlas.read(sheet, (u, v), PIXEL, PIXEL).values[0, 0]) for sheet in ("gas", mate)]
    known = [value for value in read if value > 0]
    said = screen.page.get_attribute("#reading .value", "data-value").split()
    assert [float(text) for text in said] == pytest.approx(known, rel=2e-6)
    screen.page.keyboard.press("c")
    screen.page.wait_for_timeout(100)
    copied = screen.page.evaluate("navigator.clipboard.readText()")
    assert f"(Gas, {mate.capitalize()}, level 0)" in copied


def test_the_tone_of_the_second_sheet_can_be_taken_in_hand(screen):
    screen.go(f"#u=50&v=37&width=60&sheet=gas&hue=temperature&{GAS}&{TEMPERATURE}")
    before = shown(screen)
    screen.page.get_by_role("radio", name="Temperature K").click()
    screen.settle()
    handle = screen.page.get_by_role("slider", name="High end")
    assert float(handle.get_attribute("aria-valuenow")) == 2e6
    handle.focus()
    screen.press("ArrowDown", 10)
    link = screen.link()
    assert float(link["tone.temperature"].split(":")[1]) < 2e6 and link["tone"] == "100000:1e8"
    assert (shown(screen) != before).any(axis=2).mean() > 0.3


def test_another_way_to_show_two_sheets_asks_for_no_tile_again(open_screen, live):
    screen = open_screen("#u=50&v=37&width=60&sheet=gas&hue=stars", fresh=True)
    screen.page.wait_for_timeout(900)  # at rest, the tiles around are fetched ahead
    asked = len(live.tiles())
    screen.page.get_by_label("How it is shown").select_option("above")
    screen.settle()
    screen.page.get_by_label("How it is shown").select_option("")
    screen.settle()
    screen.page.wait_for_timeout(900)
    assert screen.link()["sheet"] == "gas" and "above" not in screen.link()
    assert len(live.tiles()) == asked


def test_the_sentence_is_worked_with_keys_alone(screen):
    screen.go("#u=50&v=37&width=60&sheet=gas")
    screen.page.get_by_label("How it is shown").focus()
    screen.press("ArrowDown")
    assert screen.link()["hue"] == "temperature"
    screen.page.keyboard.press("Tab")
    assert screen.page.evaluate("document.activeElement.getAttribute('aria-label')") == "Second sheet"
    screen.press("ArrowDown")
    assert screen.link()["hue"] == "stars"
    screen.page.evaluate("document.activeElement.blur()")
    screen.press("b")
    assert screen.link()["above"] == "stars" and "hue" not in screen.link()
    screen.press("b")
    assert "above" not in screen.link()


def test_the_second_sheet_chosen_first_changes_places(screen):
    screen.go("#sheet=gas&hue=temperature")
    screen.press("2")
    assert (screen.link()["sheet"], screen.link()["hue"]) == ("temperature", "gas")


# The divider ------------------------------------------------------------------------------------------------------

PLACE = "#u=50&v=37&width=60&markers=off"
SIDES = [
    ("field", "sheet=gas", "sheet=temperature", "beside=temperature"),
    ("field", "sheet=gas", "sheet=gas&hue=temperature", "beside=gas&beside.hue=temperature"),
    ("again", "sheet=gas", "sheet=gas&epoch=z0.00", "beside=gas&beside.epoch=z0.00"),
    ("again", "sheet=stars&epoch=z0.00", "sheet=gas", "beside=gas&beside.epoch=z0.50"),
]


def alike(one, other):
    """Smoothing between pixels begins at another tile under a divider, and may round otherwise."""
    off = np.abs(one.astype(int) - other)
    return off.max() <= 1 and (off > 0).mean() < 1e-3


def line(screen, share):
    return round(share * screen.pixels().shape[1])


@pytest.mark.parametrize("name, left, right, beside", SIDES)
def test_each_side_of_the_divider_is_the_picture_of_its_own(open_screen, name, left, right, beside):
    screen = open_screen(f"{PLACE}&{left}", atlas=name)
    one = shown(screen)
    screen.go(f"{PLACE}&{right}")
    other = shown(screen)
    screen.go(f"{PLACE}&{left}&divide=0.4&{beside}")
    both, x = shown(screen), line(screen, 0.4)
    assert alike(both[:, :x], one[:, :x]) and alike(both[:, x:], other[:, x:])
    assert (one[:, x:] != other[:, x:]).any(axis=2).mean() > 0.3


@pytest.fixture
def runs(open_screen):
    """Two runs of a volume side by side, one tone for both."""
    return open_screen(f"{PLACE}&sheet=gas&tone=3e3:3e6&divide=0.5&beside=gas&beside.atlas=again")


def test_two_atlases_stand_side_by_side(runs, open_screen):
    other = shown(open_screen(f"{PLACE}&sheet=gas&tone=3e3:3e6", atlas="again"))
    one = shown(open_screen(f"{PLACE}&sheet=gas&tone=3e3:3e6"))
    runs.picture("divided-runs")
    both, x = shown(runs), line(runs, 0.5)
    assert alike(both[:, :x], one[:, :x]) and alike(both[:, x:], other[:, x:])


def test_both_sides_keep_the_same_place_and_scale(runs, open_screen):
    box = runs.map_box()
    runs.page.mouse.move(box["x"] + 200, box["y"] + 300)
    runs.page.mouse.wheel(0, -250)
    runs.settle()
    runs.page.mouse.down()
    runs.page.mouse.move(box["x"] + 290, box["y"] + 240, steps=4)
    runs.page.mouse.up()
    runs.settle()
    u, v, width = runs.place()
    place = f"#u={u}&v={v}&width={width}&markers=off&sheet=gas&tone=3e3:3e6"
    both, x = shown(runs), line(runs, 0.5)
    assert alike(both[:, :x], shown(open_screen(place))[:, :x])
    assert alike(both[:, x:], shown(open_screen(place, atlas="again"))[:, x:])


def test_each_side_is_read_from_its_own_atlas(runs, atlas, twice_folder):
    again = tilemap.open(twice_folder)
    for u, from_atlas, more in ((30, atlas, {}), (70, again, {"epoch": "z0.50"})):
        x, y = map(round, runs.at(u, 40))
        runs.page.mouse.move(x, y)
        place = runs.under(x, y)
        box = runs.map_box()
        level = from_atlas.info["levels"] - 1
        size = 60 / box["width"] / PIXEL
        level = min(max(round(np.log2(size) + 0.1), 0), level)
        side = PIXEL * 2**level
        u0, v0 = (np.floor(place[0] / side) + 0.5) * side, (np.floor(place[1] / side) + 0.5) * side
        value = float(from_atlas.read("gas", (u0, v0), side, side, pixels=1, **more).values[0, 0])
        assert runs.value() == pytest.approx(value, rel=3e-3)


def test_the_divider_is_dragged_by_mouse_and_moved_by_keys(runs):
    box = runs.map_box()
    y = box["y"] + 0.5 * box["height"]
    runs.page.mouse.move(box["x"] + 0.5 * box["width"] + 3, y)
    runs.page.mouse.down()
    runs.page.mouse.move(box["x"] + 0.25 * box["width"] + 3, y, steps=5)
    runs.page.mouse.up()
    runs.settle()
    assert float(runs.link()["divide"]) == pytest.approx(0.25, abs=0.002)
    assert runs.place() == (50, 37, 60)
    divider = runs.page.get_by_role("slider", name="Divider")
    divider.focus()
    runs.press("ArrowRight", 3)
    assert float(runs.link()["divide"]) == pytest.approx(0.28, abs=0.002)
    assert "Gas · Invented field on the left" in divider.get_attribute("aria-valuetext")
    runs.press("End")
    assert runs.link()["divide"] == "1"


def test_the_divider_is_dragged_by_a_thumb(open_screen):
    screen = open_screen(f"{PLACE}&sheet=gas&beside=temperature", width=390, height=844, ratio=2, touch=True)
    screen.picture("divided-phone")
    box = screen.map_box()
    x, y = box["x"] + 0.5 * box["width"] + 8, box["y"] + 0.6 * box["height"]
    finger = screen.page.context.new_cdp_session(screen.page)
    send = lambda kind, *at: finger.send("Input.dispatchTouchEvent", {"type": kind, "touchPoints": list(at)})  # noqa: E731
    send("touchStart", {"x": x, "y": y})
    for step in range(1, 6):
        send("touchMove", {"x": x + 16 * step, "y": y})
    send("touchEnd")
    screen.settle()
    assert float(screen.link()["divide"]) == pytest.approx(0.5 + 80 / box["width"], abs=0.01)
    assert screen.place()[0] == 50


def test_keys_divide_take_a_side_in_hand_and_put_together(screen):
    screen.go(f"{PLACE}&sheet=gas")
    screen.press("v")
    assert screen.link() | {"hand": "beside", "divide": "0.5", "beside": "temperature"} == screen.link()
    screen.press("1")
    assert screen.link()["beside"] == "gas"
    screen.press("2")
    assert (screen.link()["sheet"], screen.link()["beside"]) == ("gas", "temperature")
    screen.press("s")
    screen.press("3")
    assert (screen.link()["sheet"], screen.link()["beside"]) == ("stars", "temperature")
    screen.press("v")
    assert screen.link()["sheet"] == "stars" and "divide" not in screen.link()


def test_a_tap_on_a_side_takes_it_in_hand(screen):
    screen.go(f"{PLACE}&sheet=gas&divide=0.5&beside=temperature")
    box = screen.map_box()
    screen.page.mouse.click(box["x"] + 0.8 * box["width"], box["y"] + 0.5 * box["height"])
    screen.settle()
    assert screen.link()["hand"] == "beside"
    assert screen.page.locator("#sheets [aria-checked=true]").inner_text() == "Temperature"
    screen.page.get_by_role("radiogroup", name="Side in hand").get_by_text("Gas").click()
    screen.settle()
    assert "hand" not in screen.link()


def test_a_change_of_tone_recolours_both_sides_that_show_the_sheet(runs):
    before = shown(runs)
    runs.page.locator(".tone .hi").focus()
    runs.press("ArrowDown", 8)
    changed, x = (shown(runs) != before).any(axis=2), line(runs, 0.5)
    assert changed[:, :x].mean() > 0.5 and changed[:, x:].mean() > 0.5


def test_another_atlas_is_chosen_in_the_sentence(open_screen):
    screen = open_screen(f"{PLACE}&sheet=gas&divide=0.5&beside=gas&hand=beside")
    screen.page.get_by_label("Atlas on the right").select_option("again")
    screen.settle()
    assert screen.link()["beside.atlas"] == "again"
    # Without the catalogue of the left, whose objects are not those of the other run.
    assert screen.page.locator("#census-corner").inner_text().strip() == "no catalogue"


# Links and epochs -------------------------------------------------------------------------------------------------


def test_a_link_brings_blend_divider_and_tones_back(open_screen):
    link = (
        f"{PLACE}&sheet=gas&hue=temperature&tone=3000:3e6&tone.temperature=5000:300000&hues.temperature=estuary&toned=temperature"
        "&divide=0.62&beside=stars&beside.epoch=z0.00&beside.above=gas&hand=beside"
    )
    first = open_screen(link, atlas="again")
    again = open_screen(f"#{first.page.url.split('#')[1]}", atlas="again")
    assert again.page.url == first.page.url
    assert np.array_equal(again.pixels(), first.pixels())
    asked = dict(part.split("=") for part in link[1:].split("&")) | {"toned": None}
    assert {key: value for key, value in first.link().items() if asked.get(key) != value} == {}


@pytest.mark.parametrize(
    "fragment, said",
    [
        ("#sheet=gas&hue=dust", "a sheet “dust” that this atlas does not have"),
        ("#sheet=gas&divide=0.5&beside=dust", "a sheet “dust” that this atlas does not have"),
        ("#sheet=gas&beside=gas&beside.epoch=z9", "an epoch “z9” that this atlas does not have"),
        ("#sheet=gas&beside=gas&beside.atlas=nowhere", "an atlas “nowhere” that this server does not have"),
        ("#sheet=gas&divide=1.5", "could not be read at “divide=1.5”"),
    ],
)
def test_a_bad_link_is_answered_in_a_line_and_shows_what_it_can(screen, fragment, said):
    screen.go(fragment, settle=False)
    screen.wait_for_status(said)
    screen.settle()
    assert screen.pixels()[:, :, :3].max() > 100 and not screen.errors


def test_epochs_are_stepped_in_place(open_screen, twice_folder):
    again = tilemap.open(twice_folder)
    screen = open_screen("#u=50.01&v=40.01&width=6&sheet=temperature&markers=off", atlas="again")
    read = {}
    for epoch in ("z0.50", "z0.00", "z0.50"):
        at = again.read("temperature", screen.under(*map(round, screen.at(50.01, 40.01))), PIXEL, PIXEL, epoch=epoch)
        read[epoch] = float(at.values[0, 0])
        screen.page.mouse.move(*map(round, screen.at(50.01, 40.01)))
        assert screen.value() == pytest.approx(read[epoch], rel=2e-6)
        assert screen.link().get("epoch", "z0.50") == epoch and screen.place() == (50.01, 40.01, 6)
        screen.press("e")
    assert read["z0.50"] != read["z0.00"]


def test_epochs_of_one_sheet_share_their_tone(open_screen):
    screen = open_screen(f"{PLACE}&sheet=gas&tone=2e4:4e6", atlas="again")
    screen.press("E")
    assert screen.link()["epoch"] == "z0.00" and screen.link()["tone"] == "20000:4e6"
