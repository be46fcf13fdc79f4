"""The main states of the frame: for each a link, and what hands do then. Words, contrast and names are checked in all of
them, and a picture of each is left for people to look at. A new panel is a new state here.
"""

from __future__ import annotations

from typing import NamedTuple

# Wide enough to be seen by hand, close enough to have rings, values and edges in view, in the invented atlas of the tests.
NEAR = "#u=50&v=62&width=30"


class State(NamedTuple):
    link: str
    keys: tuple[str, ...] = ()
    focus: str = ""


STATES = {
    "whole": State(""),
    "near": State(NEAR),
    "mean": State(f"{NEAR}&sheet=temperature&depth=33.3333:100"),
    "asinh": State(f"{NEAR}&curve=asinh&ramp=heather"),
    "hue": State(f"{NEAR}&sheet=gas&hue=temperature&toned=temperature"),
    "above": State(f"{NEAR}&sheet=gas&above=stars"),
    "divided": State(f"{NEAR}&sheet=gas&divide=0.45&beside=temperature&hand=beside"),
    "runs": State(f"{NEAR}&sheet=gas&divide=0.6&beside=gas&beside.atlas=again&beside.epoch=z0.00"),
    "pixels": State("#u=50.01&v=40.01&width=0.2"),
    "object": State(f"{NEAR}&object=alone"),
    "brush": State(f"{NEAR}&census=1e10:1e12"),
    "tape": State(f"{NEAR}&line=42:55,50:60,58:57"),
    "outline": State(f"{NEAR}&sheet=temperature&outline=42:55,58:57,55:68"),
    "laying": State(NEAR, keys=("t", "Enter", "ArrowRight")),
    "keys": State(NEAR, keys=("?",)),
    "typing": State(f"{NEAR}&tone=3e3:3e8", focus=".lo[role=slider]", keys=("Enter",)),
    "trouble": State(f"{NEAR}&sheet=dust"),
}


def enter(screen, name: str):
    """Bring a page into a state: it follows the state's link, from whatever is open."""
    state = STATES[name]
    if screen.page.url.startswith(screen.address):
        screen.page.keyboard.press("Escape")
        screen.page.evaluate("document.activeElement.blur()")
        screen.page.mouse.move(2, 2)
        screen.go(state.link or "#")
    else:
        screen.open(state.link)
    screen.page.wait_for_selector("#census .outline", state="attached")
    if state.focus:
        screen.page.focus(state.focus)
    for key in state.keys:
        screen.page.keyboard.press(key)
    screen.settle()
    screen.page.wait_for_timeout(350)  # the line of trouble comes into sight over a moment
    return screen
