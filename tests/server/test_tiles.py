"""Tiles over HTTP: the stored bytes, the right caches, and clear refusals."""

import gzip
import json
import threading

import numpy as np
import pytest
import zarr
from werkzeug.test import Client

from tilemap.server.app import make_app

ID = "00c0ffee00c0ffee"  # what atlas_maker gives
TILE = f"/field/tiles/{ID}/z0.50/gas/0/1/0/1"


def codes(response):
    return np.frombuffer(gzip.decompress(response.data), dtype="<u2").reshape(512, 512)


def error(response):
    assert response.mimetype == "application/json"
    return json.loads(response.data)["error"]


def test_a_tile_unpacks_to_what_zarr_reads(client, made_atlas):
    stored = zarr.open_array(made_atlas / "z0.50" / "gas" / "0", mode="r")[1, :512, 512:1024]
    assert np.array_equal(codes(client.get(TILE)), stored)


def test_the_sum_of_all_slabs_is_a_tile_too(client, made_atlas):
    stored = zarr.open_array(made_atlas / "z0.50" / "gas" / "whole" / "1", mode="r")[0]
    assert np.array_equal(codes(client.get(f"/field/tiles/{ID}/z0.50/gas/1/whole/0/0")), stored)


def test_a_tile_is_plain_bytes_that_no_client_unpacks_by_itself(client):
    response = client.get(TILE)
    assert response.headers["Content-Type"] == "application/octet-stream"
    assert "Content-Encoding" not in response.headers
    assert int(response.headers["Content-Length"]) == len(response.data)


def test_a_tile_may_be_kept_for_good(client):
    assert client.get(TILE).headers["Cache-Control"] == "max-age=31536000, immutable"


def test_head_gives_the_headers_of_get_and_no_bytes(client):
    got, head = client.get(TILE), client.head(TILE)
    assert (head.status_code, head.data) == (200, b"")
    assert dict(head.headers) == dict(got.headers)


@pytest.mark.parametrize("form", ["{}", "W/{}", '"other", {}', "*"])
def test_a_tile_that_the_page_has_is_not_sent_again(client, form):
    # RFC 9110, section 13.1.2: a list, weak comparison, or any.
    tag = client.get(TILE).headers["ETag"]
    response = client.get(TILE, headers={"If-None-Match": form.format(tag)})
    assert (response.status_code, response.data, response.headers["ETag"]) == (304, b"", tag)


def test_a_tile_known_under_another_tag_is_sent(client):
    assert client.get(TILE, headers={"If-None-Match": '"other"'}).status_code == 200


def test_an_empty_tile_has_no_content_and_may_be_kept(client):
    response = client.get(f"/field/tiles/{ID}/z0.50/stars/0/0/0/0")
    assert (response.status_code, response.data) == (204, b"")
    assert "immutable" in response.headers["Cache-Control"]


def test_a_tile_of_another_build_is_gone(client):
    response = client.get(TILE.replace(ID, "0123456789abcdef"))
    assert response.status_code == 410
    assert "atlas.json" in error(response)


@pytest.mark.parametrize(
    "place",
    [
        "z0.50/gas/0/0/0/2",
        "z0.50/gas/0/0/2/0",
        "z0.50/gas/0/3/0/0",
        "z0.50/gas/2/0/0/0",
        "z0.50/gas/1/0/0/1",
        "z0.50/gas/-1/0/0/0",
        "z0.50/gas/0/0/0/-1",
        "z0.50/gas/0/all/0/0",
        "z0.50/gas/0/0/0/1.0",
        "z0.50/gas/0/0/0/²",
        "z0.50/gas/0/0/0/99999999999999999999",
        "z0.50/gas/0/0/0",
        "z0.50/gas/0/0/0/0/0",
        "z0.50/water/0/0/0/0",
        "z9/gas/0/0/0/0",
        "../../../atlas.json",
        "z0.50/../gas/0/0/0/0",
        "",
    ],
)
def test_a_place_that_is_not_there_is_not_found(client, place):
    response = client.get(f"/field/tiles/{ID}/{place}")
    assert response.status_code == 404
    assert error(response)
    assert response.headers["Cache-Control"] == "no-store"


def test_an_atlas_that_is_not_there_is_not_found(client):
    assert client.get(TILE.replace("/field/", "/forest/")).status_code == 404


@pytest.mark.parametrize("method", ["POST", "PUT", "DELETE", "OPTIONS"])
def test_a_tile_can_only_be_read(client, method):
    response = client.open(TILE, method=method)
    assert (response.status_code, response.headers["Allow"]) == (405, "GET, HEAD")


@pytest.mark.parametrize("harm", ["cut", "index"])
def test_a_damaged_tile_is_named_and_the_others_are_still_served(own_atlas, harm):
    shard = next((own_atlas / "z0.50" / "gas" / "0" / "c" / "1").glob("*/*"))
    data = bytearray(shard.read_bytes())
    if harm == "cut":
        del data[100:]
    else:
        data[-20] ^= 1
    shard.write_bytes(data)
    client = Client(make_app([own_atlas]))
    damaged = client.get(TILE.replace("/field/", "/own/"))
    assert damaged.status_code == 502
    assert "tilemap verify" in error(damaged) and "\n" not in error(damaged)
    assert damaged.headers["Cache-Control"] == "no-store"
    assert client.get(f"/own/tiles/{ID}/z0.50/gas/0/0/0/1").status_code == 200


def test_a_build_published_meanwhile_is_served_under_its_own_id_only(own_atlas):
    client = Client(make_app([own_atlas]))
    old, new = f"/own/tiles/{ID}/z0.50/gas/0/1/0/1", "/own/tiles/fedcba9876543210/z0.50/gas/0/1/0/1"
    assert (client.get(old).status_code, client.get(new).status_code) == (200, 410)
    described = json.loads((own_atlas / "atlas.json").read_text()) | {"id": "fedcba9876543210"}
    (own_atlas / "new.json").write_text(json.dumps(described))
    (own_atlas / "new.json").replace(own_atlas / "atlas.json")
    assert (client.get(old).status_code, client.get(new).status_code) == (410, 200)


def test_an_atlas_taken_away_is_not_found_until_it_is_back(own_atlas):
    client = Client(make_app([own_atlas]))
    tile = TILE.replace("/field/", "/own/")
    aside = own_atlas.with_name("aside")
    own_atlas.rename(aside)
    away = client.get(tile).status_code
    aside.rename(own_atlas)
    assert (away, client.get(tile).status_code) == (404, 200)


def test_an_atlas_of_one_slab_serves_it_as_the_whole(tmp_path):
    from atlas_maker import make_atlas

    client = Client(make_app([make_atlas(tmp_path / "thin.atlas", columns=512, rows=512, slabs=1)]))
    whole, slab = (client.get(f"/thin/tiles/{ID}/z0.50/gas/0/{which}/0/0") for which in ("whole", 0))
    assert whole.status_code == 200 and whole.data == slab.data


def test_a_name_beyond_ascii_works(own_atlas):
    named = own_atlas.rename(own_atlas.with_name("Sjön & 50%.atlas"))
    client = Client(make_app([named]))
    path = f"/Sj%C3%B6n%20&%2050%25/tiles/{ID}/z0.50/gas/0/1/0/1"
    assert client.get(path).status_code == 200


def test_many_threads_get_each_the_tile_they_asked_for(made_atlas):
    app = make_app([made_atlas])
    places = [(slab, row, column) for slab in range(3) for row in range(2) for column in range(2)]
    expected = {
        place: zarr.open_array(made_atlas / "z0.50" / "gas" / "0", mode="r")[
            place[0], place[1] * 512 : place[1] * 512 + 512, place[2] * 512 : place[2] * 512 + 512
        ]
        for place in places
    }
    wrong = []

    def ask(start):
        client = Client(app)
        for number in range(24):
            place = places[(start + number) % len(places)]
            response = client.get(f"/field/tiles/{ID}/z0.50/gas/0/{'/'.join(map(str, place))}")
            if response.status_code != 200 or not np.array_equal(codes(response), expected[place]):
                wrong.append(place)

    threads = [threading.Thread(target=ask, args=(start,)) for start in range(8)]
    for thread in threads:
        thread.start()
    for thread in threads:
        thread.join()
    assert wrong == []
