"""Small snapshots written with h5py as simulation codes write them, and build files that name them."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path

import h5py
import numpy as np
import pytest

from tilemap.buildfile import BuildFile, load, loads

ROOT = Path(__file__).parents[2]


@pytest.fixture(scope="session")
def run32() -> BuildFile:
    return load(ROOT / "builds" / "run32.yaml")


@pytest.fixture
def write_part(tmp_path: Path) -> Callable[..., Path]:
    """Write one HDF5 part: a dictionary of dataset path to (array, attributes), and of group to attributes."""

    def write(name: str, datasets: dict, groups: dict | None = None) -> Path:
        path = tmp_path / name
        with h5py.File(path, "w") as file:
            for group, attributes in (groups or {}).items():
                file.require_group(group).attrs.update(attributes)
            for dataset, (values, attributes) in datasets.items():
                file.create_dataset(dataset, data=np.asarray(values)).attrs.update(attributes)
        return path

    return write


GAS = """
      position: PartType0/Coordinates
      mass: PartType0/Masses
      smoothing: {field: PartType0/SmoothingLength, means: support, kernel: cubic}
"""


@pytest.fixture
def describe(tmp_path: Path) -> Callable[..., BuildFile]:
    """A build file for files in the test's folder; `species` is the YAML below species.gas, `more` below snapshot."""

    def describe(files: str = "part.*.hdf5", species: str = GAS, more: str = "", view: str = "{}") -> BuildFile:
        text = (
            f"title: T\nsnapshot:\n  files: ['{files}']\n{more}\n  species:\n    gas:\n      {species.strip()}\n"
            f"view: {view}\nsheets:\n  gas: {{species: gas, sum: count, unit: 1/kpc2}}\n"
        )
        return loads(text, tmp_path / "build.yaml")

    return describe
