"""Content in, Flask responses out: each with a tag of what it holds, so that asking again costs no bytes."""

from __future__ import annotations

import hashlib
import json
from typing import TYPE_CHECKING, Any

from flask import Response, abort, current_app, request

if TYPE_CHECKING:
    from tilemap.server.shelf import Opened, Shelf


def answer(body: bytes, kind: str, tag: str | None = None) -> Response:
    """`body` as media type `kind`, to be asked for again each time, 304 where the tag still fits."""
    response = Response(body, mimetype=kind)
    # Content, not date and size: files unpacked from a wheel all carry the same date.
    response.set_etag(tag or hashlib.sha256(body).hexdigest()[:24])
    response.headers["Cache-Control"] = "no-cache"
    response.make_conditional(request)
    return response


def json_answer(value: Any) -> Response:
    return answer(json.dumps(value, allow_nan=False, separators=(",", ":")).encode(), "application/json")


def shelf() -> Shelf:
    """The atlases of the application that answers this request."""
    return current_app.extensions["tilemap_shelf"]


def opened_or_404(name: str) -> Opened:
    served = shelf().get(name)
    opened = served.current() if served else None
    if opened is None:
        abort(404, "there is no such atlas here")
    return opened
