"""Tile addresses in, stored bytes out: a bare WSGI callable that stands in front of the rest of the server.

A tile is some bytes at a known place in a file, so nothing else lies on its way: no framework, no decoding, no copy
but the one into the answer. Everything that is not a tile goes on to the application behind.
"""

from __future__ import annotations

import json
from collections.abc import Callable, Iterable
from typing import TYPE_CHECKING, Any

from tilemap.errors import InputError, NotSoError

if TYPE_CHECKING:
    from tilemap.server.shelf import Shelf

# RFC 9111 and RFC 8246. Not `public`: a hub that asks for a login may stand in front of this server.
KEPT = "max-age=31536000, immutable"
NOSNIFF = ("X-Content-Type-Options", "nosniff")

Start = Callable[..., Any]
Application = Callable[[dict[str, Any], Start], Iterable[bytes]]


class Tiles:
    """``/<atlas>/tiles/<id>/<epoch>/<sheet>/<level>/<slab|whole>/<row>/<col>`` answered from the shelf.

    ====  ==================================================================================
    200   the gzip member exactly as stored, as application/octet-stream
    204   an empty tile
    304   the page has it (If-None-Match)
    404   no such place
    405   anything but GET and HEAD
    410   another build of this atlas: the page should read atlas.json again
    502   the atlas on disk is damaged here; other tiles are still served
    ====  ==================================================================================
    """

    def __init__(self, shelf: Shelf, behind: Application) -> None:
        self._shelf = shelf
        self._behind = behind

    def __call__(self, environ: dict[str, Any], start: Start) -> Iterable[bytes]:
        path: str = environ["PATH_INFO"]
        if "/tiles/" not in path:
            return self._behind(environ, start)
        parts = path.split("/")
        if len(parts) < 3 or parts[2] != "tiles":
            return self._behind(environ, start)
        method = environ["REQUEST_METHOD"]
        if method not in ("GET", "HEAD"):
            return refuse(start, "405 Method Not Allowed", "a tile can only be read", ("Allow", "GET, HEAD"))
        if len(parts) != 10:
            return refuse(start, "404 Not Found", "a tile is at tiles/id/epoch/sheet/level/slab/row/column")
        _, name, _, build, epoch, sheet, level, slab, row, column = parts

        served = self._shelf.get(name) or self._shelf.get(as_text(name))
        opened = served.current() if served else None
        if served is None or opened is None:
            return refuse(start, "404 Not Found", "there is no such atlas here")
        if build != opened.id:
            return refuse(start, "410 Gone", "this build of the atlas is no longer here; read atlas.json again")

        whole = slab == "whole"
        numbers = [level, row, column] if whole else [level, row, column, slab]
        if not all(number.isascii() and number.isdigit() and len(number) < 10 for number in numbers):
            return refuse(start, "404 Not Found", "level, slab, row and column are whole numbers, or slab is whole")
        level_, row_, column_, slab_ = int(level), int(row), int(column), 0 if whole else int(slab)
        try:
            reader = opened.reader(epoch, sheet, level_, whole)
            if reader is None:
                return refuse(start, "404 Not Found", "there is no such epoch, sheet or level")
            rows, columns = opened.grid(level_)
            if not (row_ < rows and column_ < columns and slab_ < len(opened.info["slabs"]) - 1):
                return refuse(start, "404 Not Found", f"level {level_} has {rows} rows and {columns} columns of tiles")
            # The address names the build, so the build's id is all that a tag has to tell apart.
            tag = f'"{build}"'
            kept = [("Cache-Control", KEPT), ("ETag", tag), NOSNIFF]
            wanted = environ.get("HTTP_IF_NONE_MATCH")
            if wanted is not None and matches(wanted, tag):
                start("304 Not Modified", kept)
                return [b""]
            blob = reader.blob(slab_, row_, column_)
            if served.current() is not opened:  # replaced while it was read: these bytes may be anything
                return refuse(
                    start, "410 Gone", "this build of the atlas has just been replaced; read atlas.json again"
                )
        except (InputError, NotSoError, OSError, ValueError, KeyError) as failure:
            reason = " ".join(str(failure).split())
            return refuse(start, "502 Bad Gateway", f"the atlas is damaged here: {reason}; tilemap verify tells more")
        if blob is None:
            start("204 No Content", kept)
            return [b""]
        start(
            "200 OK",
            [("Content-Type", "application/octet-stream"), ("Content-Length", str(len(blob))), *kept],
        )
        return [blob] if method == "GET" else [b""]


def refuse(start: Start, status: str, message: str, *headers: tuple[str, str]) -> list[bytes]:
    """Answer with one line of JSON, kept by no cache."""
    body = json.dumps({"error": message}).encode()
    start(
        status,
        [
            ("Content-Type", "application/json"),
            ("Content-Length", str(len(body))),
            ("Cache-Control", "no-store"),
            NOSNIFF,
            *headers,
        ],
    )
    return [body]


def matches(header: str, tag: str) -> bool:
    """Whether an If-None-Match header names `tag`, by the weak comparison of RFC 9110, section 13.1.2."""
    return any(each.strip().removeprefix("W/") in (tag, "*") for each in header.split(","))


def as_text(path: str) -> str:
    """Part of a WSGI path as text: PEP 3333 hands its UTF-8 bytes over as if they were Latin-1."""
    try:
        return path.encode("latin-1").decode("utf-8")
    except UnicodeError:
        return path
