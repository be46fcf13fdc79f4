"""Atlas folders in, a WSGI application out that serves them, and the frame to look at them with.

Every address that it sends is relative, so it works under any path: through a tunnel, behind a proxy, mounted in
another application.
"""

from __future__ import annotations

from collections.abc import Callable, Iterable
from pathlib import Path
from typing import Any

import duckdb
from flask import Flask, Response, jsonify
from werkzeug.exceptions import HTTPException

from tilemap.errors import InputError, NotSoError
from tilemap.server.inside import inside
from tilemap.server.objects import objects
from tilemap.server.pages import frame_folder, pages
from tilemap.server.shelf import Shelf
from tilemap.server.tiles import Start, Tiles

# No script and no style but the frame's own files: nothing in an atlas (titles, names, notes) can become either.
POLICY = "; ".join(
    [
        "default-src 'self'",
        "img-src 'self' data: blob:",
        "worker-src 'self' blob:",
        "style-src 'self'",
        "object-src 'none'",
        "base-uri 'none'",
        "form-action 'self'",
    ]
)
SECURITY = {
    "Content-Security-Policy": POLICY,
    "X-Content-Type-Options": "nosniff",
    "Referrer-Policy": "same-origin",
}


def make_app(atlases: Iterable[str | Path]) -> Callable[[dict[str, Any], Start], Iterable[bytes]]:
    """The server as one WSGI callable.

    Parameters
    ----------
    atlases
        Atlas folders; each is served under its folder's name without ``.atlas``.

    Raises
    ------
    InputError
        If one of them is not an atlas.
    """
    shelf = Shelf(atlases)
    flask = Flask("tilemap.server", static_folder=None)
    flask.extensions["tilemap_shelf"] = shelf
    flask.config["FRAME_FOLDER"] = str(frame_folder())
    flask.url_map.merge_slashes = False  # it would redirect to an absolute address
    flask.url_map.redirect_defaults = False
    flask.register_blueprint(pages)
    flask.register_blueprint(objects)
    flask.register_blueprint(inside)

    @flask.after_request
    def secure(response: Response) -> Response:
        response.headers.update(SECURITY)
        return response

    @flask.errorhandler(HTTPException)
    def refused(failure: HTTPException) -> tuple[Response, int]:
        return _refusal(failure.description or failure.name, failure.code or 500)

    @flask.errorhandler(InputError)
    def wrong_question(failure: InputError) -> tuple[Response, int]:
        return _refusal(str(failure), 400)

    @flask.errorhandler(duckdb.Error)
    @flask.errorhandler(NotSoError)
    @flask.errorhandler(OSError)
    def damaged(failure: Exception) -> tuple[Response, int]:
        flask.logger.warning("%s", failure)
        return _refusal("the atlas on disk cannot be read here; tilemap verify tells more", 502)

    return Tiles(shelf, Root(flask.wsgi_app))


class Root:
    """Sends ``/prefix`` to ``/prefix/``, without which the relative addresses of the list would miss the prefix."""

    def __init__(self, behind: Callable[[dict[str, Any], Start], Iterable[bytes]]) -> None:
        self._behind = behind

    def __call__(self, environ: dict[str, Any], start: Start) -> Iterable[bytes]:
        mount = environ.get("SCRIPT_NAME", "").rstrip("/")
        if not environ.get("PATH_INFO") and mount:
            start("302 Found", [("Location", f"./{mount.rsplit('/', 1)[-1]}/"), ("Content-Length", "0")])
            return [b""]
        return self._behind(environ, start)


def _refusal(message: str, code: int) -> tuple[Response, int]:
    response = jsonify(error=" ".join(message.split()))
    response.headers["Cache-Control"] = "no-store"
    return response, code
