"""The list of atlases, the frame's files and atlas.json: content, tags, relative addresses, safety."""

import gzip
import io
import json
import re
from html.parser import HTMLParser
from urllib.parse import urljoin

import numpy as np
import pytest
from atlas_maker import make_atlas
from PIL import Image
from werkzeug.middleware.dispatcher import DispatcherMiddleware
from werkzeug.test import Client

from tilemap.errors import InputError
from tilemap.server.app import make_app
from tilemap.server.pages import frame_folder


class References(HTMLParser):
    """Every address that a page refers to."""

    def __init__(self, page):
        super().__init__()
        self.found = []
        self.feed(page)

    def handle_starttag(self, tag, attributes):
        self.found += [value for name, value in attributes if name in ("href", "src") and not value.startswith("data:")]


def test_the_list_names_each_atlas_with_what_is_in_it(client):
    page = client.get("/").text
    assert client.get("/").mimetype == "text/html"
    for said in (
        "Invented &lt;field&gt; &amp; more",
        "Invented for tests.",
        "100 Mpc",
        "3 slabs",
        "0.50",
        "Gas",
        "200",
    ):
        assert said in page


def test_nothing_from_an_atlas_becomes_markup(client):
    assert "<field>" not in client.get("/").text


@pytest.mark.parametrize("path", ["/", "/field/"])
def test_every_address_on_a_page_is_relative_and_there(client, path):
    for reference in References(client.get(path).text).found:
        assert not re.match(r"[a-z]+:|/", reference)
        assert client.get(urljoin(f"http://host{path}", reference)).status_code == 200


@pytest.mark.parametrize("mount", ["/maps", "/user/someone/proxy/8750"])
def test_all_of_it_works_under_any_path(made_atlas, mount):
    client = Client(DispatcherMiddleware(lambda *_: [], {mount: make_app([made_atlas])}))
    page = f"http://host{mount}/"
    atlas = urljoin(page, References(client.get(page).text).found[-1])
    assert client.get(atlas).status_code == 200
    for below in ("atlas.json", "objects", "census", "picture.png", "tiles/00c0ffee00c0ffee/z0.50/gas/1/0/0/0"):
        assert client.get(urljoin(atlas, below)).status_code == 200


@pytest.mark.parametrize(("asked", "place"), [("/maps", "/maps/"), ("/maps/field", "/maps/field/")])
def test_an_address_without_its_last_slash_leads_relatively_to_the_one_with_it(made_atlas, asked, place):
    client = Client(DispatcherMiddleware(lambda *_: [], {"/maps": make_app([made_atlas])}))
    response = client.get(asked)
    assert response.status_code == 302
    assert response.headers["Location"].startswith("./")
    assert urljoin(f"http://host{asked}", response.headers["Location"]) == f"http://host{place}"


def test_the_frame_is_served_from_the_projects_own_files(client):
    assert client.get("/field/").data == (frame_folder() / "index.html").read_bytes()


def test_every_file_of_the_frame_is_served_with_its_kind(client):
    kinds = {".js": "text/javascript", ".css": "text/css", ".html": "text/html", ".svg": "image/svg+xml"}
    for file in frame_folder().rglob("*"):
        if file.suffix in kinds:
            response = client.get(f"/field/frame/{file.relative_to(frame_folder()).as_posix()}")
            assert (response.status_code, response.mimetype) == (200, kinds[file.suffix])
            assert response.data == file.read_bytes()


@pytest.mark.parametrize(
    "path",
    [
        "/field/frame/../../pyproject.toml",
        "/field/frame/%2e%2e/pyproject.toml",
        "/field/frame//etc/passwd",
        "/field/frame/nothing.js",
        "/field/frame/",
        "/field/pyproject.toml",
        "/field/checksums.json",
        "/forest/",
        "/forest",
        "/forest/atlas.json",
    ],
)
def test_nothing_else_is_served(client, path):
    response = client.get(path)
    assert response.status_code == 404
    assert list(json.loads(response.data)) == ["error"]


def test_a_page_can_ask_which_atlases_lie_beside_its_own(client, made_atlas):
    listed = client.get("/atlases.json").json
    stored = json.loads((made_atlas / "atlas.json").read_text())
    assert {"name": "field"} | {key: stored[key] for key in ("id", "title", "view")} in listed


def test_atlas_json_is_sent_as_it_is_stored(client, made_atlas):
    response = client.get("/field/atlas.json")
    assert response.data == (made_atlas / "atlas.json").read_bytes()
    assert response.mimetype == "application/json"


@pytest.mark.parametrize(
    "path",
    [
        "/",
        "/list.css",
        "/atlases.json",
        "/field/",
        "/field/frame/view.js",
        "/field/atlas.json",
        "/field/picture.png",
        "/field/objects",
    ],
)
def test_what_may_change_is_asked_for_again_and_sent_only_when_changed(client, path):
    first = client.get(path)
    assert (first.status_code, first.headers["Cache-Control"]) == (200, "no-cache")
    again = client.get(path, headers={"If-None-Match": first.headers["ETag"]})
    assert (again.status_code, again.data) == (304, b"")


@pytest.mark.parametrize("path", ["/", "/field/", "/field/atlas.json", "/field/picture.png"])
def test_pages_answer_head(client, path):
    got, head = client.get(path), client.head(path)
    assert (head.status_code, head.data) == (200, b"")
    assert head.headers["Content-Length"] == got.headers["Content-Length"]


@pytest.mark.parametrize("path", ["/", "/field/", "/field/atlas.json", "/field/objects?limit=x", "/nothing"])
def test_no_script_or_style_can_come_from_elsewhere(client, path):
    headers = client.get(path).headers
    assert headers["X-Content-Type-Options"] == "nosniff"
    policy = dict(rule.split(" ", 1) for rule in headers["Content-Security-Policy"].split("; "))
    assert policy["default-src"] == policy["style-src"] == "'self'"
    assert "unsafe" not in headers["Content-Security-Policy"]


@pytest.mark.parametrize("path", ["/", "/field/"])
def test_pages_hold_no_script_or_style_of_their_own(client, path):
    # What the policy above would make the browser drop without a word.
    page = client.get(path).text
    assert not re.search(r"<script(?![^>]*\ssrc=)", page)
    assert not re.search(r"<style|\sstyle=|\son[a-z]+=", page)


def test_the_small_picture_shows_the_whole_view(client):
    picture = np.asarray(Image.open(io.BytesIO(client.get("/field/picture.png").data)).convert("L"), dtype=float)
    assert picture.shape == (512, 512)
    assert picture.std() > 10  # there is something to see
    # The invented gas leaves the lower left corner empty: 40 of 1024 rows, a quarter of the columns.
    assert picture[-19:, :127].max() < picture[100:400, 200:400].mean()


def test_atlases_of_one_name_are_told_apart(made_atlas, tmp_path):
    second = make_atlas(tmp_path / "field.atlas", columns=512, rows=512, slabs=1, title="Second")
    client = Client(make_app([made_atlas, second]))
    titles = [client.get(f"/{name}/atlas.json").json["title"] for name in ("field", "field-2")]
    assert titles == ["Invented <field> & more", "Second"]
    assert "2 atlases" in client.get("/").text


def test_the_same_atlas_given_twice_is_listed_once(made_atlas):
    assert "One atlas" in Client(make_app([made_atlas, f"{made_atlas}/"])).get("/").text


def test_an_atlas_may_not_hide_the_servers_own_files(tmp_path):
    folder = make_atlas(tmp_path / "list.css", columns=512, rows=512, slabs=1)
    client = Client(make_app([folder]))
    assert client.get("/list.css").mimetype == "text/css"
    assert client.get("/list.css-2/atlas.json").status_code == 200


@pytest.mark.parametrize("paths", [[], ["nowhere"], ["."]])
def test_what_is_no_atlas_is_refused_at_the_start(tmp_path, monkeypatch, paths):
    monkeypatch.chdir(tmp_path)
    with pytest.raises(InputError):
        make_app(paths)


@pytest.mark.parametrize("path", ["/field/frame/view.js", "/field/atlas.json", "/field/objects?limit=200"])
def test_long_text_travels_packed_for_those_who_can_unpack_it(client, path):
    plain = client.get(path)
    packed = client.get(path, headers={"Accept-Encoding": "gzip, deflate, br"})
    assert "Content-Encoding" not in plain.headers
    assert packed.headers["Content-Encoding"] == "gzip" and gzip.decompress(packed.data) == plain.data
    assert plain.headers["Vary"] == packed.headers["Vary"] == "Accept-Encoding"
    assert plain.headers["ETag"] != packed.headers["ETag"]
    again = client.get(path, headers={"Accept-Encoding": "gzip", "If-None-Match": packed.headers["ETag"]})
    assert again.status_code == 304


def test_who_refuses_packed_text_gets_it_plain(client):
    response = client.get("/field/atlas.json", headers={"Accept-Encoding": "gzip;q=0, identity"})
    assert "Content-Encoding" not in response.headers
