"""Particles for the benches of the engine: clustered as in the demo, with the radii that 48 neighbours would give.

Half lie in spheres whose density falls as r^-2 between a core and an edge, of every size; half follow a lognormal field. Both
have a known local density, so radii need no search for neighbours: the sphere of radius R holds 48 of them.
"""

from __future__ import annotations

from pathlib import Path

import numpy as np
from numpy.typing import NDArray

SIDE_MPC = 30.0
NEIGHBOURS = 48
BUILD_FILE = """\
title: Crowd
snapshot:
  files: [crowd.hdf5]
  box: {side}
  redshift: 0
  cosmology: {{H0: 70, Om0: 0.3, Ode0: 0.7}}
  species:
    gas:
      position: {{dataset: gas/position, unit: Mpc}}
      mass: {{dataset: gas/mass, unit: Msun}}
      smoothing: {{field: {{dataset: gas/radius, unit: Mpc}}, means: support, kernel: cubic}}
view: {{along: z, pixels: {pixels}, slabs: {slabs}}}
sheets:
  gas: {{species: gas, sum: mass, unit: Msun/kpc2}}
"""


def crowd(count: int, seed: int = 7) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Positions float64 (count, 3) in a periodic box of SIDE_MPC, and support radii float64 (count,), in Mpc."""
    random = np.random.default_rng(seed)
    in_halos = count // 2
    field, density = _lognormal(random, 96)
    cell = random.choice(field.size, size=count - in_halos, p=field.ravel() / field.sum())
    place = np.stack(np.unravel_index(cell, field.shape), axis=1) + random.random((count - in_halos, 3))
    spread = place * (SIDE_MPC / field.shape[0])
    spread_density = density.ravel()[cell] * (count - in_halos) / SIDE_MPC**3
    sizes = random.pareto(1.0, size=max(1, in_halos // 2000)) + 1.0
    members = random.multinomial(in_halos, sizes / sizes.sum())
    edges = 0.05 * members ** (1 / 3) * (1e7 / count) ** (1 / 3)
    centres = spread[random.integers(0, len(spread), len(sizes))]
    halo = np.repeat(np.arange(len(sizes)), members)
    edge = edges[halo]
    core = 0.002 * edge
    # Mass within r of 1 / (r^2 + core^2): r - core arctan(r / core); its inverse is close to linear beyond the core.
    r = core + (edge - core) * random.random(in_halos)
    way = random.normal(size=(in_halos, 3))
    way /= np.linalg.norm(way, axis=1)[:, None]
    held = centres[halo] + r[:, None] * way
    held_density = members[halo] / (4 * np.pi * r**2 * (edge - core))
    position = np.concatenate([spread, held]) % SIDE_MPC
    local = np.concatenate([spread_density, held_density])
    radius = (3 * NEIGHBOURS / (4 * np.pi * local)) ** (1 / 3)
    order = random.permutation(count)
    return position[order], radius[order]


def _lognormal(random: np.random.Generator, cells: int) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """A lognormal field of power k^-2 on a grid, normed to a mean of one; twice, as weights and as density."""
    k = np.sqrt(sum(axis**2 for axis in np.meshgrid(*[np.fft.fftfreq(cells, 1 / cells)] * 3, indexing="ij")))
    k[0, 0, 0] = np.inf
    noise = np.fft.fftn(random.normal(size=(cells,) * 3)) / k
    field = np.fft.ifftn(noise).real
    field = np.exp(1.3 * field / field.std())
    field /= field.mean()
    return field, field


PIECE = 10_000_000
"""Particles made at a time; more are several crowds in one box, with radii that shrink as they fill it."""


def write_crowd(folder: Path, count: int, pixels: int, slabs: int = 1) -> Path:
    """An HDF5 snapshot of `count` particles and its build file in `folder`; the build file's path."""
    import h5py

    if not (folder / "crowd.hdf5").exists():
        with h5py.File(folder / "crowd.hdf5", "w") as file:
            positions = file.create_dataset("gas/position", (count, 3), np.float64)
            radii = file.create_dataset("gas/radius", (count,), np.float32)
            for seed, start in enumerate(range(0, count, PIECE), 7):
                stop = min(start + PIECE, count)
                positions[start:stop], radius = crowd(stop - start, seed)
                radii[start:stop] = radius * ((stop - start) / count) ** (1 / 3)
            file["gas/mass"] = np.full(count, 1e6, dtype=np.float32)
    build = folder / f"crowd-{pixels}-{slabs}.yaml"
    build.write_text(BUILD_FILE.format(side=SIDE_MPC, pixels=pixels, slabs=slabs), encoding="utf-8")
    return build
