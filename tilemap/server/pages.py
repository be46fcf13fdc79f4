"""Addresses of pages in, the page that lists the atlases and the files of the frame out."""

from __future__ import annotations

from importlib import resources
from pathlib import Path
from typing import Any
from urllib.parse import quote

from flask import Blueprint, Response, abort, current_app, redirect, render_template
from werkzeug.utils import safe_join

from tilemap.errors import InputError
from tilemap.server.answers import answer, json_answer, opened_or_404, shelf
from tilemap.server.picture import picture_png
from tilemap.server.shelf import Opened, Served

pages = Blueprint("pages", __name__)

# Said here because what the operating system knows about suffixes differs from one machine to the next.
KINDS = {
    ".html": "text/html",
    ".css": "text/css",
    ".js": "text/javascript",
    ".mjs": "text/javascript",
    ".json": "application/json",
    ".svg": "image/svg+xml",
    ".png": "image/png",
    ".ico": "image/x-icon",
    ".webmanifest": "application/manifest+json",
    ".txt": "text/plain",
}


def frame_folder() -> Path:
    """Where the frame's files are: inside an installed package, beside it in a working copy.

    Raises
    ------
    InputError
        If they are in neither place.
    """
    package = Path(str(resources.files("tilemap")))
    for folder in (package / "static", package.parent / "static"):
        if (folder / "index.html").is_file():
            return folder
    raise InputError(f"the frame's files are neither in {package / 'static'} nor beside it: install tilemap again")


@pages.get("/")
def atlases() -> Response:
    """The page that lists the atlases."""
    listed = [(served, served.current()) for served in shelf()]
    page = render_template("list.html", atlases=[_card(served, opened) for served, opened in listed if opened])
    return answer(page.encode(), "text/html")


@pages.get("/atlases.json")
def atlas_list() -> Response:
    """Names, titles and views of the atlases: what can be looked at beside another."""
    opened = [(served.name, served.current()) for served in shelf()]
    listed = [{"name": name, **{key: at.info[key] for key in ("id", "title", "view")}} for name, at in opened if at]
    return json_answer(listed)


@pages.get("/list.css")
def list_style() -> Response:
    return answer((resources.files("tilemap.server") / "list.css").read_bytes(), "text/css")


@pages.get("/<atlas>")
def without_slash(atlas: str) -> Response:
    """To the frame; relative, because nobody knows under which path this server is seen."""
    opened_or_404(atlas)
    return redirect(f"./{quote(atlas, safe='')}/")  # type: ignore[return-value]


@pages.get("/<atlas>/")
def frame(atlas: str) -> Response:
    opened_or_404(atlas)
    return _frame_file("index.html")


@pages.get("/<atlas>/frame/<path:file>")
def frame_file(atlas: str, file: str) -> Response:
    opened_or_404(atlas)
    return _frame_file(file)


@pages.get("/<atlas>/atlas.json")
def description(atlas: str) -> Response:
    opened = opened_or_404(atlas)
    return answer(opened.text, "application/json", opened.etag)


@pages.get("/<atlas>/picture.png")
def picture(atlas: str) -> Response:
    """The whole view, small."""
    opened = opened_or_404(atlas)
    if opened.picture is None:
        opened.picture = picture_png(opened)
    return answer(opened.picture, "image/png", opened.etag)


def _frame_file(file: str) -> Response:
    path = safe_join(current_app.config["FRAME_FOLDER"], file)
    kind = KINDS.get(Path(file).suffix.lower())
    if path is None or kind is None or not Path(path).is_file():
        abort(404, "there is no such file here")
    return answer(Path(path).read_bytes(), kind)


def _card(served: Served, opened: Opened) -> dict[str, Any]:
    """What the list says about an atlas."""
    info, view = opened.info, opened.info["view"]
    slabs = len(info["slabs"]) - 1
    sheets = list(dict.fromkeys(sheet["title"] for epoch in info["epochs"] for sheet in epoch["sheets"]))
    counts = [epoch["catalogue"]["count"] for epoch in info["epochs"] if epoch["catalogue"]]
    facts = [
        ("wide", f"{view['u'][1] - view['u'][0]:.4g} {view['unit']}"),
        ("across", f"{info['pixels'][0]:,} pixels".replace(",", "\u202f")),
        ("deep", "one slab" if slabs == 1 else f"{slabs} slabs"),
    ]
    redshifts = [f"{epoch['redshift']:.2f}" for epoch in info["epochs"] if epoch["redshift"] is not None]
    if redshifts and view["coordinates"] == "comoving":
        facts.append(("redshift", ", ".join(redshifts)))
    if counts:
        facts.append(("objects", f"{sum(counts):,}".replace(",", "\u202f")))
    return {
        "address": f"./{quote(served.name, safe='')}/",
        "title": info["title"],
        "about": info["about"],
        "facts": facts,
        "sheets": sheets,
        "size": [side >> (info["levels"] - 1) for side in info["pixels"]],
    }
