"""The Marram volume from end to end: a seed in, a folder with snapshot, object catalogue and build file out."""

from __future__ import annotations

import json
import os
import shutil
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import scipy.fft

from tilemap.cosmology import Cosmology
from tilemap.demo import discs
from tilemap.demo.field import Cosmos, Spectrum, gaussian_field
from tilemap.demo.galaxies import Galaxies, make_galaxies
from tilemap.demo.gas import crossing_speed, settle_gas, smoothing_radius
from tilemap.demo.halos import Halos, find_halos
from tilemap.demo.matter import Particles, draw, settle_dark, softened
from tilemap.demo.mesh import deposit, evolve, gather, lattice
from tilemap.demo.write import write_objects, write_snapshot
from tilemap.errors import InputError

VERSION = 1  # of what is made from a seed: counts up when the same seed gives other particles
SEED = 2
BOX = 30.0  # comoving Mpc
REDSHIFT = 1.0
LATTICE = 128  # points a side at scale 1
DARK_PER_POINT = 1.6
GAS_PER_POINT = 1.7
COLD_GAS = 380_000
STARS = 550_000

Progress = Callable[[str, float, float], None]


@dataclass
class Volume:
    """All that is invented from a seed, before it is written."""

    cosmos: Cosmos
    halos: Halos
    galaxies: Galaxies
    species: dict[int, Particles]


def invent(seed: int = SEED, scale: float = 1.0, progress: Progress | None = None) -> Volume:
    """Invent the volume in memory.

    Parameters
    ----------
    seed : int
    scale : float
        Share of the full number of particles, above 0 and up to 1; the box stays, its detail goes.
    progress : callable, optional
        Told (phase, done, total).
    """
    if not 0.0 < scale <= 1.0:
        raise InputError(f"scale is {scale}: it must be above 0 and at most 1")

    def tell(done: float) -> None:
        if progress is not None:
            progress("inventing the Marram volume", min(done, 1.0), 1.0)

    tell(0.0)
    cosmos = Cosmos()
    a = 1.0 / (1.0 + REDSHIFT)
    n = max(16, 2 * scipy.fft.next_fast_len(round(LATTICE * np.cbrt(scale) / 2), real=True))
    rng = np.random.default_rng([VERSION, seed])
    modes = gaussian_field(n, BOX, Spectrum(cosmos), rng)
    displacement, velocity = evolve(modes, BOX, cosmos, a, tell=lambda share: tell(0.45 * share))
    # From dx/dD to peculiar km/s: a dD/dt = a D f H.
    velocity *= np.float32(a * cosmos.growth(a) * cosmos.growth_rate(a) * 100.0 * cosmos.h * cosmos.expansion(a))
    halos = find_halos(modes, displacement, velocity, BOX, cosmos, REDSHIFT)
    tell(0.6)
    age = Cosmology(100.0 * cosmos.h, cosmos.omega_m, cosmos.omega_l).age_gyr(REDSHIFT)
    galaxies = make_galaxies(halos, REDSHIFT, age, cosmos, rng)

    cells = lattice(n) * np.float32(2.0) + displacement * np.float32(2.0 * n / BOX)
    contrast = deposit(cells, 2 * n) * np.float32(8.0) - np.float32(1.0)
    fineness = np.where(gather(contrast, cells) < 2.0, 2, 4).astype(np.uint8).reshape(n, n, n)
    held = halos.owner >= 0
    fineness[held] = np.where(halos.mass[halos.owner[held]] > 1e12, 8, 4)
    crossing = crossing_speed(cells * np.float32(0.5), velocity, n)

    moved = [np.ascontiguousarray(displacement[:, axis]).reshape(n, n, n) for axis in range(3)]
    speeds = [np.ascontiguousarray(velocity[:, axis]).reshape(n, n, n) for axis in range(3)]
    mass = cosmos.mean_density * BOX**3
    dark_mass, gas_mass = mass * (1.0 - cosmos.baryon_share), mass * cosmos.baryon_share
    dark = draw(fineness, DARK_PER_POINT, 0.0, halos, moved, speeds, BOX, dark_mass, rng)
    settle_dark(dark, halos, BOX, a, rng)
    thin = draw(fineness, GAS_PER_POINT, 0.37, halos, softened(moved, 1.0), softened(speeds, 1.0), BOX, gas_mass, rng)
    hot = settle_gas(thin, halos, galaxies, softened([contrast], 1.2)[0], crossing, BOX, a, rng)
    tell(0.75)

    share = (n / LATTICE) ** 3
    cold = discs.cold_gas(galaxies, halos, int(COLD_GAS * share), a, rng)
    gas = Particles.joined(hot, cold)
    gas.extra["smoothing"] = smoothing_radius(gas.position, BOX).astype(np.float32)
    species = {
        0: gas,
        1: Particles(dark.position, dark.velocity, dark.mass, {}),
        4: discs.stars(galaxies, halos, int(STARS * share), a, BOX, rng),
        5: discs.black_holes(galaxies, halos),
    }
    tell(1.0)
    return Volume(cosmos, halos, galaxies, species)


def build_file() -> Path:
    """The build file of the volume: beside this module in an installed wheel, in ``builds/`` in a checkout."""
    here = Path(__file__).resolve().parent
    for path in (here / "marram.yaml", here.parents[1] / "builds" / "marram.yaml"):
        if path.is_file():
            return path
    raise InputError(f"{here / 'marram.yaml'} is missing: install tilemap again")


def make(
    folder: str | os.PathLike[str], seed: int = SEED, progress: Progress | None = None, scale: float = 1.0
) -> Path:
    """Make the Marram volume in `folder`: ``snapshot/marram.*.hdf5``, ``objects.ecsv`` and ``marram.yaml``.

    What is there whole, of the same version, seed and scale, is left alone.

    Parameters
    ----------
    folder : path
        Made where it is not there.
    seed, scale, progress
        See :func:`invent`.

    Returns
    -------
    Path
        The build file in `folder`.

    Raises
    ------
    InputError
        If `scale` is out of range, or the folder cannot be written.
    """
    folder = Path(folder)
    target = folder / build_file().name
    label = folder / "snapshot" / "made.json"
    wanted: dict[str, object] = {"version": VERSION, "seed": seed, "scale": scale}
    try:
        if _is_whole(label, wanted, folder):
            shutil.copyfile(build_file(), target)
            return target
        volume = invent(seed, scale, progress)
        if progress is not None:
            progress("writing the snapshot", 0.0, 1.0)
        snapshot, draft = folder / "snapshot", folder / "snapshot.part"
        shutil.rmtree(draft, ignore_errors=True)
        draft.mkdir(parents=True)
        paths = write_snapshot(draft, volume.species, BOX, REDSHIFT, volume.cosmos, seed)
        write_objects(folder / "objects.ecsv", volume.halos, volume.galaxies, BOX, REDSHIFT)
        wanted["files"] = {path.name: path.stat().st_size for path in paths}
        (draft / label.name).write_text(json.dumps(wanted))
        shutil.rmtree(snapshot, ignore_errors=True)
        draft.rename(snapshot)
        shutil.copyfile(build_file(), target)
        if progress is not None:
            progress("writing the snapshot", 1.0, 1.0)
    except OSError as error:
        raise InputError(f"{folder}: the volume cannot be written there ({error}): name another folder") from error
    return target


def _is_whole(label: Path, wanted: dict[str, object], folder: Path) -> bool:
    """Whether a volume made as `wanted` lies in `folder`, every file at its full length."""
    try:
        made = json.loads(label.read_text())
        files = made.pop("files")
        return (
            made == wanted
            and (folder / "objects.ecsv").is_file()
            and all((label.parent / name).stat().st_size == size for name, size in files.items())
        )
    except (FileNotFoundError, json.JSONDecodeError, KeyError, AttributeError):
        return False
