"""A few particles and a few words in, a snapshot of arrays and its build file out: for tests that build atlases."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import yaml

BOX = 8.0


def particles(count: int = 600, seed: int = 1) -> dict[str, np.ndarray]:
    """Positions in a box of 8 Mpc, radii, masses, temperatures over four decades and velocities of both signs."""
    rng = np.random.default_rng(seed)
    return {
        "position": rng.random((count, 3)) * BOX,
        "radius": 10 ** rng.uniform(-2.5, 0, count),
        "mass": 10 ** rng.uniform(6, 9, count),
        "temperature": 10 ** rng.uniform(3, 7, count),
        "velocity": rng.normal(0, 200, count),
    }


def description() -> dict:
    """The build file of `particles` as a dictionary: gas, its temperature and velocity, 512 pixels, 2 slabs."""
    return {
        "title": "Small box",
        "about": "Made for tests.",
        "snapshot": {
            "files": ["small.npz"],
            "box": BOX,
            "redshift": 1.0,
            "cosmology": {"H0": 70, "Om0": 0.3, "Ode0": 0.7},
            "species": {
                "gas": {
                    "position": "position",
                    "mass": "mass",
                    "smoothing": {"field": "radius", "means": "support", "kernel": "cubic"},
                    "fields": {
                        "temperature": {"dataset": "temperature", "unit": "K"},
                        "velocity": {"dataset": "velocity", "unit": "km/s"},
                    },
                }
            },
        },
        "view": {"along": "z", "pixels": 512, "slabs": 2},
        "sheets": {
            "gas": {"species": "gas", "sum": "mass", "unit": "Msun/kpc2"},
            "temperature": {"species": "gas", "mean": "temperature", "weight": "gas", "unit": "K"},
            "velocity": {"species": "gas", "mean": "velocity", "weight": "gas", "unit": "km/s", "coding": "linear"},
        },
    }


def write_build(folder: Path, build: dict | None = None, arrays: dict[str, np.ndarray] | None = None) -> Path:
    """Write snapshot and build file into a folder; the build file's path."""
    np.savez(folder / "small.npz", **(arrays or particles()))
    path = folder / "small.yaml"
    path.write_text(yaml.safe_dump(build or description(), sort_keys=False), encoding="utf-8")
    return path


def changed(build: dict, **values: object) -> dict:
    """The same description with keys set or, where the value is None, taken out; `view__pixels=1024` is view.pixels."""
    import copy

    build = copy.deepcopy(build)
    for path, value in values.items():
        *above, last = path.split("__")
        place = build
        for key in above:
            place = place.setdefault(key, {})
        if value is None:
            place.pop(last, None)
        else:
            place[last] = copy.deepcopy(value)
    return build
