"""An outline in a query string in, JSON about what a sheet holds inside it out."""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import asdict
from typing import TYPE_CHECKING

from flask import Blueprint, Response, request

from tilemap.errors import InputError
from tilemap.server.answers import json_answer, opened_or_404

if TYPE_CHECKING:
    from tilemap.server.shelf import Opened

inside = Blueprint("inside", __name__)


@inside.get("/<atlas>/inside")
def of_outline(atlas: str) -> Response:
    """``sheet``, ``outline`` (``u:v,u:v,...`` in the view's unit), ``slabs`` (``first:end``) and ``epoch``, the last two optional."""
    opened = opened_or_404(atlas)
    asked = request.args
    epoch = asked.get("epoch") or opened.info["epochs"][0]["name"]
    found = asdict(opened.atlas.inside(asked.get("sheet", ""), _places(asked), _slabs(asked, opened), epoch))
    # JSON has no number for nothing.
    return json_answer({k: None if isinstance(v, float) and math.isnan(v) else v for k, v in found.items()})


def _places(asked: Mapping[str, str]) -> list[tuple[float, float]]:
    places = []
    for place in asked.get("outline", "").split(","):
        try:
            x, y = map(float, place.split(":"))
        except ValueError:
            raise InputError(f"outline: expected places u:v with commas between them, found {place!r:.40}") from None
        places.append((x, y))
    return places


def _slabs(asked: Mapping[str, str], opened: Opened) -> slice | None:
    text = asked.get("slabs", "")
    if not text:
        return None
    count = opened.atlas.slab_count
    first, _, end = text.partition(":")
    if all(part.isascii() and part.isdigit() for part in (first, end)) and int(first[:9]) < int(end[:9]) <= count:
        return slice(int(first), int(end))
    raise InputError(f"slabs: expected first:end, within 0:{count}, found {text!r:.40}")
