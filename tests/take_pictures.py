"""Pictures of every state of the frame, for people to look at: `python tests/take_pictures.py ATLAS` fills `tests/pictures/`.

Three screens, both rooms, both languages. The states are those of `tests/frame/states.py` where their links make sense in any
atlas; the tests leave pictures of the others.
"""

from __future__ import annotations

import sys
from pathlib import Path

from playwright.sync_api import sync_playwright

HERE = Path(__file__).parent
sys.path.insert(0, str(HERE / "frame"))

from live import Live  # noqa: E402
from screen import PICTURES, Screen, how  # noqa: E402

from tilemap.server.app import make_app  # noqa: E402

SCREENS = {
    "desk": {"width": 1440, "height": 900},
    "phone": {"width": 390, "height": 844, "ratio": 2, "touch": True},
    "wall": {"width": 3840, "height": 2160},
}
CHROMIUM = "/usr/bin/chromium"
FLAGS = [
    "--no-sandbox",
    "--disable-gpu",
    "--disable-background-networking",
    "--disable-component-update",
    "--disable-sync",
]


def states(page) -> dict[str, tuple[str, tuple[str, ...]]]:
    """Links and keys for the atlas that is open, from what it says about itself."""
    atlas = page.evaluate("fetch('atlas.json').then((answer) => answer.json())")
    (u0, u1), (v0, v1) = atlas["view"]["u"], atlas["view"]["v"]
    u, v, width = (u0 + u1) / 2, (v0 + v1) / 2, u1 - u0
    sheets = [sheet["name"] for sheet in atlas["epochs"][0]["sheets"]]
    near = f"#u={u:g}&v={v:g}&width={width / 4:g}"
    pixel = width / atlas["pixels"][0]
    found = {
        "whole": ("", ()),
        "near": (near, ("n",)),
        "pixels": (f"#u={u:g}&v={v:g}&width={pixel * 20:g}", ()),
        "keys": (near, ("?",)),
        "outline": (
            f"{near}&outline={u - width / 12:g}:{v:g},{u:g}:{v + width / 16:g},{u + width / 12:g}:{v - width / 20:g}",
            (),
        ),
    }
    if len(sheets) > 1:
        found["hue"] = (f"{near}&sheet={sheets[0]}&hue={sheets[1]}", ())
        found["divided"] = (f"{near}&sheet={sheets[0]}&divide=0.5&beside={sheets[1]}", ())
    return found


def main(arguments: list[str]) -> int:
    if len(arguments) != 1 or not (Path(arguments[0]) / "atlas.json").is_file():
        print(
            "tests/take_pictures.py takes one atlas folder: python tests/take_pictures.py marram/marram.atlas",
            file=sys.stderr,
        )
        return 2
    server = Live(make_app(arguments))
    name = Path(arguments[0]).resolve().name.removesuffix(".atlas")
    with sync_playwright() as playwright:
        browser = playwright.chromium.launch(executable_path=CHROMIUM, headless=True, args=FLAGS)
        for size, settings in SCREENS.items():
            for room, language in (("dark", "en"), ("light", "de"), ("dark", "de"), ("light", "en")):
                context = browser.new_context(**how(**settings, locale=language))
                context.add_init_script(f"localStorage.setItem('tilemap-room', '{room}')")
                screen = Screen(context.new_page(), f"{server.address}/{name}/").open()
                for state, (link, keys) in states(screen.page).items():
                    screen.page.keyboard.press("Escape")
                    screen.go(link or "#")
                    screen.page.wait_for_timeout(600)
                    for key in keys:
                        screen.press(key)
                    screen.page.wait_for_timeout(400)
                    screen.picture(f"{name}-{size}-{room}-{language}-{state}")
                context.close()
        browser.close()
    server.stop()
    print(f"the pictures are in {PICTURES}")
    return 0


if __name__ == "__main__":
    sys.exit(main(sys.argv[1:]))
