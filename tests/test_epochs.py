"""Several epochs in one atlas: one view, each its own files, moment, sheets and objects."""

from __future__ import annotations

from pathlib import Path

import duckdb
import numpy as np
import pytest
from build_maker import BOX, changed, description, particles, write_build

import tilemap
from tilemap.build_atlas import build_atlas
from tilemap.errors import InputError
from tilemap.pyramid.verify import verify

EPOCHS = [{"files": "early.npz", "redshift": 2.0}, {"files": "late.npz", "redshift": 0.5, "name": "late"}]
CATALOGUE = {"file": "late.csv", "position": ["x", "y", "z"], "unit": "Mpc", "rank": "m"}


def built(folder: Path, epochs: list | None = None, **values: object):
    """An atlas of 600 particles at redshift 2 and of 300 others at 0.5."""
    common = {"snapshot__files": None, "snapshot__redshift": None, "epochs": epochs or EPOCHS}
    build = changed(description(), **common | values)
    path = write_build(folder, build)
    np.savez(folder / "early.npz", **particles(600, 1))
    np.savez(folder / "late.npz", **particles(300, 2))
    for name, rows in (("early", "1,1,1,5\n"), ("late", "2,2,2,7\n3,3,3,8\n")):
        (folder / f"{name}.csv").write_text("x,y,z,m\n" + rows)
    return tilemap.open(build_atlas(path, folder / "small.atlas"))


@pytest.fixture(scope="module")
def atlas(tmp_path_factory):
    epochs = [EPOCHS[0] | {"catalogue": "early.csv"}, EPOCHS[1]]
    return built(tmp_path_factory.mktemp("epochs"), epochs, catalogue=CATALOGUE)


def test_epochs_stand_in_their_order_with_their_names_and_moments(atlas):
    assert atlas.epochs == ("z2.00", "late")
    moments = [(epoch["redshift"], epoch["scale_factor"]) for epoch in atlas.info["epochs"]]
    assert moments == [(2.0, pytest.approx(1 / 3)), (0.5, pytest.approx(2 / 3))]


def test_what_is_built_verifies(atlas):
    assert verify(atlas.path) == []


@pytest.mark.parametrize(("epoch", "seed", "count"), [("z2.00", 1, 600), ("late", 2, 300)])
def test_each_epoch_has_the_particles_of_its_own_files(atlas, epoch, seed, count):
    given = particles(count, seed)
    expected = np.histogram(given["position"][:, 2], [0, BOX / 2, BOX], weights=given["mass"])[0]
    assert atlas.sheet("gas", epoch)["totals"] == pytest.approx(expected, rel=1e-6)
    piece = atlas.read("gas", epoch=epoch)
    assert piece.values.sum(dtype=float) * (BOX * 1000 / 512) ** 2 == pytest.approx(given["mass"].sum(), rel=3e-4)


def test_an_epoch_of_several_has_the_sheets_that_it_has_alone(atlas, tmp_path):
    alone = tilemap.open(
        build_atlas(
            write_build(tmp_path, changed(description(), snapshot__redshift=0.5), particles(300, 2)),
            tmp_path / "a.atlas",
        )
    )
    for sheet in atlas.sheets:
        assert np.array_equal(atlas.read(sheet, epoch="late").values, alone.read(sheet).values, equal_nan=True)


def test_each_epoch_has_its_own_objects(atlas):
    counted = []
    for epoch in atlas.info["epochs"]:
        path = str(atlas.path / epoch["catalogue"]["file"])
        counted.append(duckdb.execute("SELECT count(*), max(m) FROM read_parquet(?)", [path]).fetchone())
    assert counted == [(1, 5), (2, 8)]


def test_areas_are_proper_at_the_moment_of_each_epoch(tmp_path):
    atlas = built(tmp_path, sheets__gas__area="proper")
    for epoch, mass in (("z2.00", particles(600, 1)["mass"].sum()), ("late", particles(300, 2)["mass"].sum())):
        a = atlas.epoch(epoch)["scale_factor"]
        total = atlas.read("gas", epoch=epoch).values.sum(dtype=float) * (a * BOX * 1000 / 512) ** 2
        assert total == pytest.approx(mass, rel=3e-4)


def test_the_provenance_has_the_files_of_every_epoch(atlas):
    assert [each["file"] for each in atlas.info["provenance"]["inputs"]] == [
        "early.npz", "early.csv", "late.npz", "late.csv",
    ]  # fmt: skip


def test_the_server_gives_objects_and_tiles_of_each_epoch(atlas):
    from werkzeug.test import Client

    from tilemap.server.app import make_app

    client = Client(make_app([atlas.path]))
    for epoch, count in (("z2.00", 1), ("late", 2)):
        asked = f"/small/objects?u0=0&u1=8&v0=0&v1=8&limit=10&epoch={epoch}"
        assert len(client.get(asked).json["objects"]) == count
        assert client.get(f"/small/tiles/{atlas.info['id']}/{epoch}/gas/0/whole/0/0").status_code == 200


@pytest.mark.parametrize(
    ("epochs", "values", "said"),
    [
        ([EPOCHS[0], EPOCHS[0]], {}, r"epochs: 2 are called z2\.00: give each a name: of its own"),
        (EPOCHS, {"snapshot__files": "small.npz"}, r"snapshot\.files: the epochs name their files"),
        ([{"redshift": 1}], {}, r"epochs\.0\.files: this key is missing"),
        ([{"files": "nowhere.npz"}], {}, r"nowhere\.npz"),
        (
            [{"files": "early.npz", "shift": 1}],
            {},
            r"epochs\.0\.shift: unknown key 'shift': the nearest known is 'redshift'",
        ),
        (
            [EPOCHS[0] | {"catalogue": "early.csv"}],
            {},
            r"epochs\.0\.catalogue: no section catalogue says what its columns",
        ),
    ],
)
def test_epochs_that_make_no_sense_are_refused(tmp_path, epochs, values, said):
    with pytest.raises(InputError, match=said):
        built(tmp_path, epochs, **values)
    assert not (tmp_path / "small.atlas").exists()


def test_boxes_of_two_sizes_need_a_view_that_says_where_it_is(tmp_path):
    import h5py

    sizes = {"a": 10.0, "b": 12.0}
    for name, side in sizes.items():
        with h5py.File(tmp_path / f"{name}.hdf5", "w") as file:
            header = {"Redshift": side - 9.0, "BoxSize": side, "HubbleParam": 0.7, "Omega0": 0.3, "OmegaLambda": 0.7}
            file.create_group("Header").attrs.update(header)
            file["G/X"] = np.random.default_rng(1).random((50, 3)) * side
    text = """
title: Two boxes
snapshot:
  species:
    gas: {position: {dataset: G/X, unit: Mpc, a: 1}, smoothing: {radius: 0.1}}
epochs: [{files: a.hdf5}, {files: b.hdf5}]
view: VIEW
sheets: {gas: {species: gas, sum: count, unit: 1/kpc2}}
"""
    (tmp_path / "two.yaml").write_text(text.replace("VIEW", "{pixels: 512}"))
    with pytest.raises(
        InputError, match=r"the view of z1\.00 is u 0 to 10, and that of z3\.00 0 to 12.*give view\.centre"
    ):
        build_atlas(tmp_path / "two.yaml", tmp_path / "two.atlas")
    (tmp_path / "two.yaml").write_text(text.replace("VIEW", "{pixels: 512, centre: [5, 5, 5], width: 4, depth: 4}"))
    assert tilemap.open(build_atlas(tmp_path / "two.yaml", tmp_path / "two.atlas")).epochs == ("z1.00", "z3.00")


def test_a_build_file_without_files_and_epochs_is_told_of_both(tmp_path):
    path = write_build(tmp_path, changed(description(), snapshot__files=None))
    with pytest.raises(
        InputError, match=r"snapshot\.files: this key is missing: name the particle files, or list epochs"
    ):
        build_atlas(path, tmp_path / "small.atlas")
