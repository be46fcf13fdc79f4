"""What lies inside an outline, over HTTP: the numbers that Python gives, and one line for bad questions."""

import dataclasses
import json

import pytest
from werkzeug.test import Client

import tilemap
from tilemap.server.app import make_app

OUTLINE = [(20.5, 30.25), (64.0, 31.5), (40.125, 70.0)]
TEXT = ",".join(f"{u}:{v}" for u, v in OUTLINE)


@pytest.mark.parametrize(
    ("sheet", "query", "slabs"),
    [
        ("gas", "", None),
        ("gas", "&slabs=0:2", slice(0, 2)),
        ("temperature", "&slabs=1:2&epoch=z0.50", slice(1, 2)),
        ("temperature", "", None),
    ],
)
def test_the_numbers_are_those_of_the_atlas(client, made_atlas, sheet, query, slabs):
    answer = client.get(f"/field/inside?sheet={sheet}&outline={TEXT}{query}")
    assert answer.json == dataclasses.asdict(tilemap.open(made_atlas).inside(sheet, OUTLINE, slabs))


def test_a_mean_of_nothing_is_null(client):
    # The gas ends 40 pixels from the bottom in the left quarter.
    answer = client.get("/field/inside?sheet=temperature&outline=2:1,8:1,8:3")
    assert (answer.json["mean"], answer.json["spread"], answer.json["total"]) == (None, None, 0)


@pytest.mark.parametrize(
    ("query", "said"),
    [
        ("sheet=gas", "outline"),
        ("sheet=gas&outline=1:2,3:4", "3 to 1000"),
        ("sheet=gas&outline=1:2,3:4,here", "'here'"),
        ("sheet=gas&outline=1:2,3:4,5:nan", "finite"),
        ("sheet=gas&outline=1:2,3:4,5:6:7", "5:6:7"),
        ("sheet=gas&outline=101:2,103:4,105:1", "outside the view"),
        (f"sheet=dust&outline={TEXT}", "no sheet 'dust'"),
        (f"outline={TEXT}", "no sheet"),
        (f"sheet=gas&epoch=z9&outline={TEXT}", "no epoch 'z9'"),
        (f"sheet=gas&slabs=2:1&outline={TEXT}", "slabs"),
        (f"sheet=gas&slabs=0:4&outline={TEXT}", "0:3"),
        (f"sheet=gas&slabs=all&outline={TEXT}", "slabs"),
    ],
)
def test_a_bad_question_is_answered_in_one_line(client, query, said):
    answer = client.get(f"/field/inside?{query}")
    assert answer.status_code == 400
    error = json.loads(answer.data)["error"]
    assert said in error and "\n" not in error


def test_a_damaged_tile_under_the_outline_is_said_to_be_damaged(own_atlas):
    shard = own_atlas / "z0.50" / "gas" / "whole" / "0" / "c" / "0" / "0" / "0"
    data = bytearray(shard.read_bytes())
    data[2000:2600] = bytes(600)
    shard.write_bytes(data)
    answer = Client(make_app([own_atlas])).get("/own/inside?sheet=gas&outline=0:0,100:0,100:100,0:100")
    assert answer.status_code == 502 and "tilemap verify" in answer.json["error"]
