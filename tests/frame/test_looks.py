"""Dark and light rooms, on a desk and on a phone: text stands out from what is behind it, everything has a name, and the
choice is kept. Every state of the frame is looked at once in each; the tests judge what was seen.
"""

from __future__ import annotations

from functools import cache
from pathlib import Path

import numpy as np
import pytest
from screen import Screen, how
from states import STATES, enter

AXE = Path(__file__).parents[1] / "node_modules" / "axe-core" / "axe.min.js"
SIZES = {"desk": {"width": 1440, "height": 900}, "phone": {"width": 390, "height": 844, "ratio": 2, "touch": True}}
ROOMS = ("dark", "light")
LEAST = 4.5  # WCAG 2.2, success criterion 1.4.3, level AA

# Every text that shows: its colour, and what is painted behind it, topmost first, as CSS writes it.
TEXTS = """() => {
  const found = [];
  for (const element of document.querySelectorAll('body *')) {
    const text = element.tagName === 'INPUT' ? element.value : [...element.childNodes].filter((n) => n.nodeType === 3).map((n) => n.data).join('');
    const box = element.getBoundingClientRect();
    if (!text.trim() || !box.width || !box.height) continue;
    const style = getComputedStyle(element);
    let opacity = 1;
    const behind = [];
    let over = false;
    for (let e = element; e; e = e.parentElement) {
      const { backgroundColor, backgroundImage, opacity: own } = getComputedStyle(e);
      opacity *= Number(own);
      const colours = [...backgroundImage.matchAll(/rgba?\\([^)]*\\)/g)].map((m) => m[0]);
      if (colours.length) behind.push(colours.at(-1));
      behind.push(backgroundColor);
      if (e.id === 'map') { over = true; break; }
    }
    if (opacity === 0 || style.visibility !== 'visible') continue;
    const ink = element.closest('svg') ? style.fill : style.color;
    found.push({ text: text.trim().slice(0, 40), ink, behind, over, opacity });
  }
  return found;
}"""
VIOLATIONS = """async () => (await axe.run(document, { resultTypes: ['violations'] })).violations
  .map(({ id, impact, nodes }) => ({ id, impact, where: nodes.map((n) => n.html.slice(0, 160)) }))"""


def colour(css: str) -> np.ndarray:
    """`rgb(1, 2, 3)` or `rgba(1, 2, 3, 0.5)` as red, green, blue in 0 to 1, and alpha."""
    parts = [float(x) for x in css[css.index("(") + 1 : -1].replace("/", ",").replace(",", " ").split()]
    return np.array([*(x / 255 for x in parts[:3]), parts[3] if len(parts) > 3 else 1.0])


def over(top: np.ndarray, below: np.ndarray) -> np.ndarray:
    """A translucent colour over an opaque one."""
    return np.array([*(top[:3] * top[3] + below[:3] * (1 - top[3])), 1.0])


def luminance(rgb: np.ndarray) -> float:
    """WCAG 2.2, relative luminance."""
    x = rgb[:3]
    return float(np.where(x <= 0.04045, x / 12.92, ((x + 0.055) / 1.055) ** 2.4) @ [0.2126, 0.7152, 0.0722])


def contrast(seen: dict) -> float:
    """WCAG 2.2, contrast ratio; over the map the worse of a black and a white one."""
    ratios = []
    for ground in ([0, 0, 0, 1], [1, 1, 1, 1]) if seen["over"] else ([0, 0, 0, 1],):
        # What lies over the map hides the map's own ground, which comes last.
        layers = [colour(css) for css in (seen["behind"][:-1] if seen["over"] else seen["behind"])]
        below = np.array(ground, dtype=float)
        for layer in reversed(layers):
            below = over(layer, below)
        ink = colour(seen["ink"])
        ink[3] *= seen["opacity"]
        a, b = sorted((luminance(over(ink, below)), luminance(below)))
        ratios.append((b + 0.05) / (a + 0.05))
    return min(ratios)


@pytest.fixture(scope="module")
def look(browser, live):
    """What is on screen in a state of the frame: texts, and what axe-core says."""
    assert AXE.exists(), "axe-core is missing: sh tests/all installs it into tests/node_modules"
    source = AXE.read_text()
    contexts = []

    @cache
    def tour(size: str, room: str) -> dict[str, tuple[list[dict], list[dict]]]:
        contexts.append(browser.new_context(**how(**SIZES[size])))
        screen = Screen(contexts[-1].new_page(), f"{live.address}/field/")
        screen.page.add_init_script(f"localStorage.setItem('tilemap-room', '{room}')")
        seen = {}
        for state in STATES:
            enter(screen, state)
            screen.page.evaluate(f"() => {{ if (!window.axe) {{ {source} }} }}")
            seen[state] = screen.page.evaluate(TEXTS), screen.page.evaluate(VIOLATIONS)
            screen.picture(f"{size}-{room}-{state}")
        assert not screen.errors
        return seen

    yield tour
    for context in contexts:
        context.close()


@pytest.mark.parametrize("state", STATES)
@pytest.mark.parametrize("room", ROOMS)
@pytest.mark.parametrize("size", SIZES)
def test_text_stands_out_from_what_is_behind_it(look, size, room, state):
    texts = look(size, room)[state][0]
    assert len(texts) > 8
    weak = {(seen["text"], round(contrast(seen), 2)) for seen in texts if contrast(seen) < LEAST}
    assert not weak


@pytest.mark.parametrize("state", STATES)
@pytest.mark.parametrize("room", ROOMS)
@pytest.mark.parametrize("size", SIZES)
def test_axe_finds_nothing_serious(look, size, room, state):
    assert not [v for v in look(size, room)[state][1] if v["impact"] in ("serious", "critical")]


def test_contrast_is_reckoned_as_the_standard_does():
    # WCAG 2.2: black on white is 21:1; #777777 on white is 4.48:1 (G18's well-known example, from memory).
    white = {"behind": ["rgb(255, 255, 255)"], "over": False, "opacity": 1}
    assert contrast({"ink": "rgb(0, 0, 0)", **white}) == pytest.approx(21)
    assert contrast({"ink": "rgb(119, 119, 119)", **white}) == pytest.approx(4.48, abs=0.01)


def room_of(screen):
    return screen.page.evaluate("getComputedStyle(document.body).backgroundColor")


@pytest.mark.parametrize("switch", ["word", "key"])
def test_the_room_is_dark_until_it_is_made_light_and_stays_so(open_screen, switch):
    screen = open_screen("#u=50&v=37&width=60", fresh=True)
    before, map_before = room_of(screen), screen.pixels()
    if switch == "word":
        screen.page.get_by_text("light room").click()
    else:
        screen.press("d")
    assert luminance(colour(before)) < 0.01 and luminance(colour(room_of(screen))) > 0.8
    assert np.array_equal(screen.pixels(), map_before)
    screen.page.reload()
    screen.settle()
    assert luminance(colour(room_of(screen))) > 0.8
    screen.press("d")
    assert room_of(screen) == before
