"""A page of the browser in, what a person sees on it out: the pixels of the map, the reading, the link."""

from __future__ import annotations

import base64
import io
import time
from pathlib import Path
from typing import Any
from urllib.parse import parse_qsl, urlsplit

import numpy as np
from numpy.typing import NDArray
from PIL import Image
from playwright.sync_api import Page

PICTURES = Path(__file__).parents[1] / "pictures"
STEPS = 1024  # entries of a ramp
# Three frames in a row in which the map says that it is at rest; the first frames after a press have yet to show it.
AT_REST = """timeout => new Promise((done) => {
  const end = performance.now() + timeout;
  let still = 0;
  const look = () => {
    still = document.querySelector('#hand').getAttribute('aria-busy') === 'false' ? still + 1 : 0;
    if (still === 3 || performance.now() > end) done(still === 3);
    else requestAnimationFrame(look);
  };
  requestAnimationFrame(() => requestAnimationFrame(look));
})"""


def how(width=1100, height=760, ratio=1, touch=False, motion=False, locale="en-GB"):
    """Settings of a browser context."""
    return {
        "viewport": {"width": width, "height": height},
        "device_scale_factor": ratio,
        "has_touch": touch,
        "is_mobile": touch,
        "locale": locale,
        "reduced_motion": "no-preference" if motion else "reduce",
    }


class Screen:
    def __init__(self, page: Page, address: str) -> None:
        self.page = page
        self.address = address
        self.errors: list[str] = []
        page.on("pageerror", lambda error: self.errors.append(str(error)))

    def open(self, fragment: str = "", settle: bool = True) -> Screen:
        self.page.goto(self.address + fragment)
        if settle:
            self.settle()
        return self

    def go(self, fragment: str, settle: bool = True) -> Screen:
        """Follow a link in the page that is open."""
        self.page.evaluate("link => { location.hash = link }", fragment)
        if settle:
            self.settle()
        return self

    def settle(self, timeout: float = 10.0) -> None:
        """Wait until nothing moves and nothing is awaited, and the link has followed."""
        rests = self.page.evaluate(AT_REST, 1000 * timeout)
        assert rests, f"the map does not come to rest; {self.errors or self.status()}"

    def map_box(self) -> dict[str, float]:
        box = self.page.locator("#hand").bounding_box()
        assert box is not None
        return box

    def pixels(self, canvas: str = "#ground") -> NDArray[np.uint8]:
        """The map as drawn, device pixels: uint8 (rows, columns, 4)."""
        url = self.page.evaluate("name => document.querySelector(name).toDataURL('image/png')", canvas)
        return np.array(Image.open(io.BytesIO(base64.b64decode(url.split(",")[1]))).convert("RGBA"))

    def link(self) -> dict[str, str]:
        return dict(parse_qsl(urlsplit(self.page.url).fragment, keep_blank_values=True))

    def place(self) -> tuple[float, float, float]:
        link = self.link()
        return float(link["u"]), float(link["v"]), float(link["width"])

    def under(self, x: float, y: float) -> tuple[float, float]:
        """The place (u, v) that the link puts under a point of the page, CSS pixels."""
        box = self.map_box()
        u, v, width = self.place()
        scale = box["width"] / width
        return u + (x - box["x"] - box["width"] / 2) / scale, v - (y - box["y"] - box["height"] / 2) / scale

    def at(self, u: float, v: float) -> tuple[float, float]:
        """The point of the page where a place is, CSS pixels."""
        box = self.map_box()
        here_u, here_v, width = self.place()
        scale = box["width"] / width
        x = box["x"] + box["width"] / 2 + (u - here_u) * scale
        return x, box["y"] + box["height"] / 2 - (v - here_v) * scale

    def value(self) -> float | None:
        """The number in the reading, in full."""
        self.page.wait_for_timeout(120)
        text = self.page.get_attribute("#reading .value", "data-value")
        return float(text) if text else None

    def status(self) -> str:
        return self.page.inner_text("#status")

    def wait_for_status(self, text: str, timeout: float = 8.0) -> None:
        end = time.monotonic() + timeout
        while text not in self.status():
            assert time.monotonic() < end, f"expected {text!r}, the frame says {self.status()!r}"
            self.page.wait_for_timeout(50)

    def press(self, key: str, times: int = 1) -> None:
        for _ in range(times):
            self.page.keyboard.press(key)
        self.settle()

    def ramp(self, name: str) -> NDArray[np.uint8]:
        """A ramp as the frame makes it: uint8 (1024, 3)."""
        table = self.page.evaluate(
            "async name => [...(await import(new URL('frame/ramps.js', document.baseURI))).ramp(name)]", name
        )
        return np.array(table, dtype=np.uint8).reshape(STEPS, 3)

    def picture(self, name: str) -> None:
        """Leave a picture for people to look at."""
        PICTURES.mkdir(exist_ok=True)
        self.page.screenshot(path=PICTURES / f"{name}.png")


def shade(values: NDArray[Any], low: float, high: float, curve: str) -> NDArray[np.float64]:
    """Where values fall on a ramp, 0 to 1; asinh as in Lupton, Gunn & Szalay (1999), with a bend of 60."""
    values = np.asarray(values, dtype=np.float64)
    with np.errstate(divide="ignore", invalid="ignore"):
        if curve == "log":
            t = np.log(values / low) / np.log(high / low)
        else:
            t = (values - low) / (high - low)
            if curve == "asinh":
                t = np.arcsinh(60 * t) / np.arcsinh(60)
    return np.clip(np.nan_to_num(t, nan=0.0), 0, 1)
