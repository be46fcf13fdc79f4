"""Objects over HTTP: JSON for good questions, one line for bad ones."""

import json

import pytest
from atlas_maker import make_atlas
from werkzeug.test import Client

from tilemap.server.app import make_app


def test_objects_of_a_window_come_heaviest_first(client):
    found = client.get("/field/objects?u0=10&u1=60&v0=0&v1=80&d0=0&d1=50&limit=5").json
    ranks = [each["rank"] for each in found["objects"]]
    assert len(ranks) == 5 < found["in_view"]
    assert ranks == sorted(ranks, reverse=True)
    assert all(10 <= each["u"] <= 60 and 0 <= each["v"] <= 80 and 0 <= each["depth"] <= 50 for each in found["objects"])


def test_without_bounds_the_whole_view_is_meant(client):
    assert client.get("/field/objects").json["in_view"] == 200


def test_the_brush_is_on_the_rank_column(client):
    found = client.get("/field/objects?lo=1e10&hi=1e12").json
    assert 0 < found["in_view"] < 200
    assert all(1e10 <= each["columns"]["mass"] <= 1e12 for each in found["objects"])


def test_an_object_has_all_that_a_marker_and_a_list_need(client):
    first = client.get("/field/objects?limit=1").json["objects"][0]
    assert set(first) == {"row", "u", "v", "depth", "size", "rank", "id", "columns"}
    assert first["id"] == first["columns"]["name"]


def test_the_census_counts_a_column_in_the_window_and_in_all(client):
    found = client.get("/field/census?u0=0&u1=50&column=mass&bins=10").json
    assert (found["column"], found["log"], len(found["edges"])) == ("mass", True, 11)
    assert sum(found["whole"]) == 200
    assert sum(found["in_view"]) == client.get("/field/objects?u0=0&u1=50").json["in_view"]


def test_the_census_is_of_the_rank_unless_another_column_is_named(client):
    assert client.get("/field/census").json["column"] == "mass"


@pytest.mark.parametrize(
    ("query", "said"),
    [
        ("objects?u0=left", "u0"),
        ("objects?u1=nan", "u1"),
        ("objects?d0=inf", "d0"),
        ("objects?u0=5&u1=4", "u0"),
        ("objects?limit=-1", "limit"),
        ("objects?limit=1.5", "limit"),
        ("objects?limit=1000000", "limit"),
        ("objects?lo=heavy", "lo"),
        ("census?bins=0", "bins"),
        ("census?bins=9999999999999999999999", "bins"),
        ("census?column=name", "name"),
        ("census?column=nothing", "nothing"),
        ("census?column=mass%22;DROP", "mass"),
        ("census?v0=%27", "v0"),
    ],
)
def test_a_bad_question_is_answered_in_one_line(client, query, said):
    response = client.get(f"/field/{query}")
    assert response.status_code == 400
    answer = json.loads(response.data)
    assert list(answer) == ["error"] and said in answer["error"] and "\n" not in answer["error"]


@pytest.mark.parametrize("path", ["/field/objects?epoch=z9", "/forest/objects", "/forest/census"])
def test_a_catalogue_that_is_not_there_is_not_found(client, path):
    assert client.get(path).status_code == 404


def test_an_atlas_without_a_catalogue_says_so(tmp_path):
    client = Client(make_app([make_atlas(tmp_path / "bare.atlas", columns=512, rows=512, slabs=1)]))
    response = client.get("/bare/objects")
    assert (response.status_code, response.json["error"]) == (404, "this atlas has no catalogue")


@pytest.mark.parametrize("harm", ["cut", "gone"])
def test_a_damaged_catalogue_is_said_to_be_damaged(own_atlas, harm):
    file = own_atlas / "catalogue" / "objects.parquet"
    if harm == "gone":
        file.unlink()
    else:
        file.write_bytes(file.read_bytes()[:200])
    client = Client(make_app([own_atlas]))
    response = client.get("/own/objects")
    assert response.status_code == 502 and "tilemap verify" in response.json["error"]
    assert client.get("/own/atlas.json").status_code == 200


def test_objects_can_only_be_read(client):
    response = client.post("/field/objects")
    assert response.status_code == 405 and list(response.json) == ["error"]
