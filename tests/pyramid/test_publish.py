"""Publishing: whole or not there."""

import hashlib
import json

import pytest
from atlas_maker import make_atlas

from tilemap.errors import InputError
from tilemap.pyramid.publish import check_target, checksum_tree, publish


@pytest.fixture
def scratch(tmp_path):
    return make_atlas(tmp_path / ".scratch", columns=512, rows=512, slabs=1)


def test_a_published_atlas_is_at_its_target_and_no_longer_in_scratch(tmp_path, scratch):
    target = publish(scratch, tmp_path / "a.atlas")
    assert [path.name for path in tmp_path.iterdir()] == [target.name] == ["a.atlas"]


def test_every_file_has_its_checksum(tmp_path, scratch):
    target = publish(scratch, tmp_path / "a.atlas")
    listed = json.loads((target / "checksums.json").read_text())
    files = {p.relative_to(target).as_posix(): p for p in target.rglob("*") if p.is_file()}
    del files["checksums.json"]
    assert listed == {name: hashlib.sha256(path.read_bytes()).hexdigest() for name, path in files.items()}


def test_an_older_atlas_is_replaced(tmp_path, scratch):
    old = make_atlas(tmp_path / "a.atlas", columns=512, rows=512, slabs=1, title="Old one")
    publish(scratch, old)
    assert json.loads((old / "atlas.json").read_text())["title"] == "Invented field"
    assert [path.name for path in tmp_path.iterdir()] == ["a.atlas"]


def test_an_empty_folder_gives_way(tmp_path, scratch):
    (tmp_path / "a.atlas").mkdir()
    publish(scratch, tmp_path / "a.atlas")
    assert (tmp_path / "a.atlas" / "atlas.json").exists()


def test_a_folder_that_is_no_atlas_is_left_alone(tmp_path, scratch):
    (tmp_path / "thesis").mkdir()
    (tmp_path / "thesis" / "chapter.tex").write_text("years")
    with pytest.raises(InputError, match="is not an atlas"):
        publish(scratch, tmp_path / "thesis")
    assert (tmp_path / "thesis" / "chapter.tex").read_text() == "years"


def test_what_was_not_published_stays_in_scratch(tmp_path, scratch):
    (tmp_path / "file").write_text("x")
    with pytest.raises(InputError):
        publish(scratch, tmp_path / "file")
    assert (scratch / "atlas.json").exists()


def test_a_target_in_a_folder_that_is_not_there_is_refused_before_any_work(tmp_path):
    with pytest.raises(InputError, match="no folder"):
        check_target(tmp_path / "nowhere" / "a.atlas")


def test_what_is_not_an_atlas_is_not_published(tmp_path):
    (tmp_path / "s").mkdir()
    with pytest.raises(InputError, match="is not an atlas"):
        publish(tmp_path / "s", tmp_path / "a.atlas")


def test_files_that_were_never_finished_are_not_published(tmp_path, scratch):
    (scratch / "z0.50" / "gas" / "0" / "zarr.json.17.1.part").write_text("{")
    target = publish(scratch, tmp_path / "a.atlas")
    assert not list(target.rglob("*.part"))


def test_checksums_do_not_depend_on_how_many_threads_make_them(scratch):
    assert checksum_tree(scratch, workers=1) == checksum_tree(scratch, workers=4)
