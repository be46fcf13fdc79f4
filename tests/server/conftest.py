"""Small atlases to serve: one with two sheets' worth of tiles and a catalogue, shared by all tests that only read."""

import json
import shutil

import numpy as np
import pytest
from astropy.table import Table
from atlas_maker import make_atlas
from werkzeug.test import Client

from tilemap.buildfile import Catalogue
from tilemap.catalogue.ingest import ingest
from tilemap.server.app import make_app


@pytest.fixture(scope="session")
def made_atlas(tmp_path_factory):
    """An atlas with three slabs, 1024 pixels a side, and 200 objects; never written to."""
    folder = make_atlas(tmp_path_factory.mktemp("served") / "field.atlas", title="Invented <field> & more")
    rng = np.random.default_rng(5)
    table = Table({axis: rng.uniform(0, 100, 200) for axis in "xyz"})
    table["mass"] = 10 ** rng.uniform(8, 14, 200)
    table["name"] = [f"object {number}" for number in range(200)]
    table.write(folder.parent / "objects.fits")
    described = json.loads((folder / "atlas.json").read_text())
    section = Catalogue(file="objects.fits", position=["x", "y", "z"], unit="Mpc", id="name", rank="mass")
    described["epochs"][0]["catalogue"] = ingest(section, folder.parent, described["view"], folder)
    (folder / "atlas.json").write_text(json.dumps(described))
    return folder


@pytest.fixture(scope="session")
def client(made_atlas):
    return Client(make_app([made_atlas]))


@pytest.fixture
def own_atlas(made_atlas, tmp_path):
    """A copy that a test may damage."""
    return shutil.copytree(made_atlas, tmp_path / "own.atlas")
