"""Words and numbers: every language is complete, nothing is said that is not in the table, and the choice is kept."""

import re
from pathlib import Path

import pytest
from states import STATES, enter

STATIC = Path(__file__).parents[2] / "static"


def table():
    """Entries of the table as the file has them: name -> texts."""
    text = (STATIC / "words.js").read_text()
    body = re.search(r"const WORDS = .*?\(\{\n(.*?)\n\}\);", text, re.S)[1]
    one = r"'((?:[^'\\\n]|\\.)*)'"
    entries = re.findall(rf"^  (\w+): \[\s*{one}(?:,\s*{one})?(?:,\s*{one})?,?\s*\],$", body, re.M)
    keys = re.findall(
        rf"^  \[{one}, \[\s*{one}(?:,\s*{one})?,?\s*\]\],$",
        re.search(r"const KEYS = \[\n(.*?)\n\];", text, re.S)[1],
        re.M,
    )
    lines = [line for line in body.splitlines() if re.match(r"  \w+:", line)]
    assert len(entries) == len(lines), "an entry of words.js is not written as the others are"
    return {name: texts for name, *texts in entries} | {f"key {name}": (*texts, "") for name, *texts in keys}


def test_every_word_is_there_in_every_language():
    for name, (english, german, more) in table().items():
        assert english.strip() and german.strip() and not more, name


def test_every_language_fills_in_the_same_things():
    for name, texts in table().items():
        english, german = (sorted(re.findall(r"\{(\w+)\}", text)) for text in texts[:2])
        assert english == german, name


def test_every_word_is_used():
    rest = "\n".join(file.read_text() for file in STATIC.glob("*.js"))
    rest = re.sub(r"const WORDS = .*?\n\}\);", "", rest, flags=re.S)
    # Names that are put together: `curve_${value}`, `${key}_title`.
    made = [
        re.compile(part)
        for part in (r"trouble_\w+", r"curve_\w+", r"ramp_\w+", r"hues_\w+", r"how_\w+", r"key_\w+", r"\w+_title")
    ]
    for name in table():
        if name.startswith("key ") or any(pattern.fullmatch(name) for pattern in made):
            continue
        assert re.search(rf"['`.]{name}\b", rest), f"nothing says {name}"


@pytest.mark.parametrize(
    "asked, browser_language, spoken",
    [("", "de-AT", "de"), ("", "fr-FR", "en"), ("?lang=de", "en-GB", "de"), ("?lang=xx", "de-DE", "de")],
)
def test_the_link_or_else_the_browser_decides_the_language(open_screen, live, asked, browser_language, spoken):
    screen = open_screen(address=f"{live.address}/field/{asked}", locale=browser_language)
    assert screen.page.get_attribute("html", "lang") == spoken
    assert (screen.page.get_by_role("button", name="Link kopieren").count() == 1) == (spoken == "de")


def test_the_language_is_switched_in_the_frame_and_kept(open_screen, live):
    screen = open_screen("#u=50&v=37&width=60", address=f"{live.address}/field/?lang=en", fresh=True)
    screen.page.get_by_text("Deutsch").click()
    screen.page.wait_for_selector("text=Link kopieren")
    screen.settle()
    assert screen.place() == (50, 37, 60) and "lang" not in screen.page.url
    screen.page.reload()
    screen.settle()
    assert screen.page.get_attribute("html", "lang") == "de"
    assert screen.page.get_by_role("slider", name="Dunkles Ende").count() == 1


def test_numbers_follow_the_language(open_screen, live):
    # Decimal comma and grouping point: Unicode CLDR, numbers of `de`, through ICU in the browser.
    screen = open_screen("#u=50.5&v=37&width=60&tone=3e3:3.25e8", address=f"{live.address}/field/?lang=de")
    assert screen.page.get_by_role("slider", name="Helles Ende").get_attribute("aria-valuetext") == "3,25 · 10⁸ M☉/kpc²"
    assert re.search(r"x 50,50* Mpc", screen.page.inner_text("#reading .where"))
    said = screen.page.evaluate(
        "async () => (await import(new URL('frame/units.js', document.baseURI))).count(1234567)"
    )
    assert said == "1.234.567"


def test_a_number_is_typed_as_it_is_written(open_screen, live):
    screen = open_screen("#u=50&v=37&width=60&tone=3500.5:3e8", address=f"{live.address}/field/?lang=de")
    screen.page.get_by_role("slider", name="Dunkles Ende").press("Enter")
    field = screen.page.locator("input.typed")
    assert field.input_value() == "3500,5"
    field.fill("1,5 · 10^4")
    field.press("Enter")
    screen.settle()
    assert screen.link()["tone"] == "15000:3e8"


# What an atlas brings along: its titles, axes, columns, names and units; and units that lengths are given in.
DATA = r"(?<![A-Za-z])(mass|radius|name|mark|alone|again|dust|kpc|Mpc|Gpc|pc|mas)(?![A-Za-z])"


# The table with every text in brackets, and what is filled in outside them again.
BRACKETS = """
export function say(key, fill = {}) {
  return `⟦${plain(key, Object.fromEntries(Object.entries(fill).map(([name, value]) => [name, `⟧${value}⟦`])))}⟧`;
}
export const keyList = () => plainKeys().map(([keys, what]) => [keys, `⟦${what}⟧`]);
"""
SAID = """() => {
  const texts = [document.title];
  for (const element of document.querySelectorAll('body *')) {
    if (element.lang) continue; // another language, by its own name
    for (const name of ['aria-label', 'aria-valuetext', 'title', 'placeholder', 'alt']) texts.push(element.getAttribute(name));
    for (const node of element.childNodes) if (node.nodeType === 3) texts.push(node.data);
  }
  return texts.filter(Boolean);
}"""


@pytest.mark.parametrize("state", STATES)
def test_nothing_is_said_that_is_not_in_the_table(open_screen, state):
    screen = open_screen(settle=False, fresh=True)
    body = (STATIC / "words.js").read_text()
    body = body.replace("export function say(", "function plain(").replace("export const keyList", "const plainKeys")
    body += BRACKETS
    screen.page.route("**/frame/words.js", lambda route: route.fulfill(body=body, content_type="text/javascript"))
    screen.page.goto("about:blank")  # so that the table is read again
    enter(screen, state)
    said = screen.page.evaluate(SAID)
    assert sum("⟦" in text for text in said) > 30
    atlas = screen.page.evaluate("fetch('atlas.json').then((answer) => answer.json())")
    given = [atlas["title"], atlas["about"], *(sheet["title"] for sheet in atlas["epochs"][0]["sheets"])]
    for text in said:
        outside = re.sub(r"⟦[^⟦⟧]*⟧", " ", text)
        for title in filter(None, given):
            outside = outside.replace(title, " ")
        assert not re.search(r"[A-Za-zÀ-ž]{2,}", re.sub(DATA, " ", outside)), f"{text!r} is not in words.js"
