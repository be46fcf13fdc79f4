"""A link brings the same view back, and a bad one is borne."""

import numpy as np
import pytest

RICH = "#u=50.2&v=68.1&width=8&sheet=temperature&depth=0:66.6667&tone=8000:300000&curve=linear&ramp=heather&census=1e10:1e15"


def test_a_link_brings_the_same_picture_back(open_screen):
    first = open_screen("#u=31&v=42&width=17")
    box = first.map_box()
    first.page.mouse.move(box["x"] + 371, box["y"] + 203)
    first.page.mouse.wheel(0, -137)
    first.press("2")
    first.press("]")
    first.press("a")
    first.press("n")
    again = open_screen(f"#{first.page.url.split('#')[1]}")
    first.page.mouse.move(3, 3)
    again.page.mouse.move(3, 3)
    assert again.page.url == first.page.url
    assert np.array_equal(again.pixels(), first.pixels())
    assert np.array_equal(again.pixels("#marks"), first.pixels("#marks"))


def test_a_link_is_written_as_it_was_read(open_screen):
    link = open_screen(RICH).link()
    assert link["depth"] == "0:66.66666666666667"
    assert {k: link[k] for k in ("u", "v", "width", "sheet", "tone", "curve", "ramp", "census")} == {
        "u": "50.2",
        "v": "68.1",
        "width": "8",
        "sheet": "temperature",
        "tone": "8000:300000",
        "curve": "linear",
        "ramp": "heather",
        "census": "1e10:1e15",
    }


def test_a_change_of_the_address_is_followed(open_screen):
    screen = open_screen("#u=20&v=20&width=30", motion=True)
    screen.page.evaluate("location.hash = '#u=70&v=50&width=4&sheet=stars'")
    screen.settle()
    assert screen.place() == (70, 50, 4)
    assert screen.page.locator("#sheets [aria-checked=true]").inner_text() == "Stars"


@pytest.mark.parametrize(
    "fragment, said",
    [
        ("#sheet=dust", "a sheet “dust” that this atlas does not have"),
        ("#epoch=z9", "an epoch “z9” that this atlas does not have"),
        ("#ramp=rainbow", "a colour ramp “rainbow”"),
        ("#object=nobody", "an object “nobody” that is not in view"),
        ("#u=here&v=3", "could not be read at “u=here”"),
        ("#width=-3", "could not be read at “width=-3”"),
        ("#tone=5:1", "could not be read at “tone=5:1”"),
        ("#%E0%A4%A=1", "could not be read"),
    ],
)
def test_a_bad_link_is_answered_in_a_line_and_shows_what_it_can(screen, fragment, said):
    screen.go(fragment, settle=False)
    screen.wait_for_status(said)
    screen.settle()
    assert screen.pixels()[:, :, :3].max() > 100 and not screen.errors


def test_the_word_copies_the_link(screen):
    screen.go("#u=20&v=20&width=30")
    screen.page.get_by_text("copy link").click()
    screen.page.wait_for_timeout(100)
    assert screen.page.evaluate("navigator.clipboard.readText()") == screen.page.url


def test_a_link_typed_while_the_address_is_being_written_is_followed(screen):
    screen.go("#u=20&v=20&width=30")
    # The key sets a timer that writes the address, 150 ms on; the page is so busy that it is due at once after the change.
    screen.page.evaluate("""() => {
      dispatchEvent(new KeyboardEvent('keydown', { key: 'r' }));
      setTimeout(() => { location.hash = '#u=70&v=50&width=4'; }, 100);
      const end = performance.now() + 400;
      while (performance.now() < end);
    }""")
    screen.page.wait_for_timeout(500)
    screen.settle()
    assert screen.place() == (70, 50, 4)
