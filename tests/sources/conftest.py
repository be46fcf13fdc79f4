"""Small snapshots written with h5py as simulation codes write them, and build files that name them."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path

import h5py
import numpy as np
import pytest

from tilemap.buildfile import BuildFile, load, loads

ROOT = Path(__file__).parents[2]
KPC_CM = 3.0856775814913673e21  # IAU 2015 resolution B2 parsec
MSUN_G = 1.988409870698051e33  # IAU 2015 nominal GM over CODATA 2018 G


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


def first_words(a: float, h: float, factor: float, dims: dict[str, float], physical: int = 0) -> dict:
    """Unit attributes in the first vocabulary."""
    return {
        "Conversion factor to CGS (not including cosmological corrections)": np.array([factor]),
        "a-scale exponent": np.array([a], dtype="f4"),
        "h-scale exponent": np.array([h], dtype="f4"),
        "Value stored as physical": np.array([physical], dtype="u1"),
        **{f"U_{base} exponent": np.array([dims.get(base, 0.0)], dtype="f4") for base in "LMtTI"},
    }


def second_words(a: float, h: float, factor: float, length: float = 0, mass: float = 0, velocity: float = 0) -> dict:
    """Unit attributes in the second vocabulary."""
    return {
        "to_cgs": factor,
        "a_scaling": a,
        "h_scaling": h,
        "length_scaling": length,
        "mass_scaling": mass,
        "velocity_scaling": velocity,
    }


def third_words(a: float, h: float, factor: float) -> dict:
    """Unit attributes in the third vocabulary."""
    return {"CGSConversionFactor": factor, "aexp-scale-exponent": np.float32(a), "h-scale-exponent": np.float32(h)}
