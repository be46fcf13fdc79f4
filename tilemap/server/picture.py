"""One coarse tile of an atlas in, a small picture of it out: what the page that lists the atlases shows."""

from __future__ import annotations

import io
from typing import TYPE_CHECKING

import numpy as np
from PIL import Image

if TYPE_CHECKING:
    from tilemap.server.shelf import Opened

# "Strandline", the frame's first ramp (static/ramps.js), at 17 even places.
STRANDLINE = np.array(
    [
        (2, 3, 8), (3, 7, 20), (5, 14, 34), (9, 23, 49), (12, 36, 66), (14, 52, 85), (18, 69, 103), (26, 89, 120),
        (40, 111, 135), (64, 131, 146), (97, 150, 147), (131, 168, 144), (172, 183, 138), (217, 196, 134),
        (243, 212, 153), (255, 230, 193), (255, 250, 239),
    ],
    dtype=np.float64,
)  # fmt: skip
GROUND = (5, 6, 9)  # where there is nothing: the frame's ground


def picture_png(opened: Opened) -> bytes:
    """The whole view in the first sheet of the first epoch, at the coarsest level (at most 512 pixels a side), as PNG.

    Brightness follows the logarithm of the values (the values themselves on a linear sheet) between the sheet's 5 and
    99.9 percentiles; where there is nothing, the picture is the page's background.
    """
    epoch = opened.info["epochs"][0]
    sheet = epoch["sheets"][0]
    level = opened.info["levels"] - 1
    columns, rows = ((side >> level) for side in opened.info["pixels"])
    reader = opened.reader(epoch["name"], sheet["name"], level, True)
    assert reader is not None  # the sheet and level come from the atlas's own list
    codes = reader.codes(0, 0, 0)[:rows, :columns]  # the coarsest level is one tile
    buffer = io.BytesIO()
    Image.fromarray(paint(codes, sheet)).save(buffer, "PNG")
    return buffer.getvalue()


def paint(codes: np.ndarray, sheet: dict) -> np.ndarray:
    """Colours of coded values: uint8 (rows, columns, 3) for uint16 (rows, columns)."""
    scaled = sheet["low"] + sheet["step"] * (codes.astype(np.float64) - 1)
    low, high = (sheet["percentiles"].get(rank) for rank in ("5", "99.9"))
    if low is None or high is None:  # a sheet with nothing on it has none
        return np.full((*codes.shape, 3), GROUND, dtype=np.uint8)
    if sheet["coding"] == "log":
        low, high = np.log10([low, high])
    brightness = np.clip((scaled - low) / ((high - low) or 1.0), 0.0, 1.0)
    place = brightness * (len(STRANDLINE) - 1)
    stops = np.arange(len(STRANDLINE))
    colours = np.stack([np.interp(place, stops, STRANDLINE[:, band]) for band in range(3)], axis=-1)
    return np.where(codes[..., np.newaxis] == 0, GROUND, colours).round().astype(np.uint8)
