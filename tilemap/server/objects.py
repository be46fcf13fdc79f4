"""Query strings in, JSON about objects out."""

from __future__ import annotations

import math
from collections.abc import Mapping
from typing import TYPE_CHECKING

from flask import Blueprint, Response, abort, request

from tilemap.catalogue.query import BINS, BINS_MOST, LIMIT, LIMIT_MOST
from tilemap.errors import InputError
from tilemap.server.answers import json_answer, opened_or_404

if TYPE_CHECKING:
    from tilemap.catalogue.query import Objects
    from tilemap.server.shelf import Opened

objects = Blueprint("objects", __name__)
Range = tuple[float, float]


@objects.get("/<atlas>/objects")
def in_view(atlas: str) -> Response:
    """Objects in a window: ``u0 u1 v0 v1 d0 d1`` (the whole view where absent), ``limit``, ``lo`` and ``hi`` on the rank."""
    opened = opened_or_404(atlas)
    asked = request.args
    window = window_of(asked, opened)
    limit = whole_number(asked, "limit", LIMIT, 0, LIMIT_MOST)
    low, high = number(asked, "lo"), number(asked, "hi")
    return json_answer(_catalogue(opened).in_view(*window, limit=limit, low=low, high=high))


@objects.get("/<atlas>/census")
def census(atlas: str) -> Response:
    """Counts of ``column`` (the rank where absent) in ``bins``, in a window and in the whole view."""
    opened = opened_or_404(atlas)
    asked = request.args
    window = window_of(asked, opened)
    bins = whole_number(asked, "bins", BINS, 1, BINS_MOST)
    catalogue = _catalogue(opened)
    return json_answer(catalogue.census(asked.get("column", catalogue.entry["rank"]), *window, bins=bins))


def window_of(asked: Mapping[str, str], opened: Opened) -> tuple[Range, Range, Range]:
    """The u, v and depth ranges of a query, in the view's unit.

    Raises
    ------
    InputError
        If a bound is not a finite number, or a range runs backwards.
    """
    view = opened.info["view"]
    ranges = []
    for letter, whole in (("u", view["u"]), ("v", view["v"]), ("d", view["depth"])):
        low, high = number(asked, f"{letter}0"), number(asked, f"{letter}1")
        low, high = whole[0] if low is None else low, whole[1] if high is None else high
        if low > high:
            raise InputError(f"{letter}0 = {low:g} lies above {letter}1 = {high:g}; the lower bound comes first")
        ranges.append((low, high))
    u, v, depth = ranges
    return u, v, depth


def number(asked: Mapping[str, str], key: str) -> float | None:
    """A finite number of the query; None if it is absent or empty."""
    text = asked.get(key, "")
    if not text:
        return None
    try:
        value = float(text)
    except ValueError:
        value = math.nan
    if not math.isfinite(value):
        raise InputError(f"{key}: expected a number, found {text!r:.40}")
    return value


def whole_number(asked: Mapping[str, str], key: str, default: int, low: int, high: int) -> int:
    text = asked.get(key, "")
    if not text:
        return default
    if not (text.isascii() and text.isdigit() and low <= int(text[:12]) <= high):
        raise InputError(f"{key}: expected a whole number from {low} to {high}, found {text!r:.40}")
    return int(text)


def _catalogue(opened: Opened) -> Objects:
    epoch = request.args.get("epoch")
    found = opened.objects(epoch)
    if found is None:
        abort(404, f"no catalogue here for epoch {epoch}" if epoch else "this atlas has no catalogue")
    return found
