"""Species and objects in, a snapshot in several HDF5 files and an ECSV table out, with the units that codes write."""

from __future__ import annotations

from pathlib import Path

import h5py
import numpy as np
from astropy import units as u
from astropy.table import Table

from tilemap.demo.field import Cosmos, Floats
from tilemap.demo.galaxies import Galaxies
from tilemap.demo.halos import Halos
from tilemap.demo.matter import Particles
from tilemap.demo.profiles import circular_speed, nfw_peak_speed

FILES = 4
TYPES = 6
CM_IN_KPC = 3.0856775814913673e21  # IAU 2012
GRAM_IN_MSUN = 1.988409870698051e33  # CODATA 2018 G and the IAU 2015 nominal solar mass parameter
SECONDS_IN_YEAR = 3.15576e7  # Julian
LIGHTEST_OBJECT = 5e9  # Msun

# dataset: (stored type, to cgs, power of a, power of h, powers of length, mass and velocity, description)
FIELDS: dict[str, tuple[str, float, float, float, tuple[int, int, int] | None, str]] = {
    "Coordinates": ("f4", CM_IN_KPC, 1, -1, (1, 0, 0), "comoving position in the box, kpc/h"),
    "Velocities": ("f4", 1e5, 0.5, 0, (0, 0, 1), "peculiar velocity over the root of the scale factor, km/s"),
    "Masses": ("f4", 1e10 * GRAM_IN_MSUN, 0, -1, (0, 1, 0), "mass, 1e10 Msun/h"),
    "ParticleIDs": ("u8", 1.0, 0, 0, (0, 0, 0), "number of the particle, unique over all species"),
    "SmoothingLength": ("f4", CM_IN_KPC, 1, -1, (1, 0, 0), "comoving radius at which the kernel ends, kpc/h"),
    "Temperature": ("f4", 1.0, 0, 0, None, "temperature, K"),
    "StarFormationRate": (
        "f4",
        GRAM_IN_MSUN / SECONDS_IN_YEAR,
        0,
        0,
        (-1, 1, 1),
        "mass turned into stars per time, Msun/yr",
    ),
}
COLUMNS = {"temperature": "Temperature", "star_formation": "StarFormationRate", "smoothing": "SmoothingLength"}


def write_snapshot(
    folder: Path, species: dict[int, Particles], box: float, redshift: float, cosmos: Cosmos, seed: int
) -> list[Path]:
    """Write ``marram.0.hdf5`` and so on into `folder`, which exists.

    Parameters
    ----------
    species : dict from particle type to particles
        0 gas, 1 dark matter, 4 stars, 5 black holes.
    box : float
        Side in comoving Mpc.
    """
    a = 1.0 / (1.0 + redshift)
    stored: dict[int, dict[str, np.ndarray]] = {}
    first_id = 1
    for kind, particles in species.items():
        side = np.float32(box * 1e3 * cosmos.h)
        coordinates = (particles.position % box * (1e3 * cosmos.h)).astype(np.float32)
        # Rounding to 32 bits may land on the far wall, which is the near one.
        coordinates[coordinates >= side] = 0.0
        columns: dict[str, np.ndarray] = {
            "Coordinates": coordinates,
            "Velocities": particles.velocity / np.float32(np.sqrt(a)),
            "Masses": particles.mass * (cosmos.h / 1e10),
            "ParticleIDs": np.arange(first_id, first_id + len(particles)),
        }
        first_id += len(particles)
        for name, values in particles.extra.items():
            columns[COLUMNS[name]] = values * (1e3 * cosmos.h) if name == "smoothing" else values
        stored[kind] = columns

    total = [len(species[kind]) if kind in species else 0 for kind in range(TYPES)]
    paths = []
    for part in range(FILES):
        path = folder / f"marram.{part}.hdf5"
        with h5py.File(path, "w") as file:
            here = [0] * TYPES
            for kind, columns in stored.items():
                cut = slice(total[kind] * part // FILES, total[kind] * (part + 1) // FILES)
                here[kind] = cut.stop - cut.start
                group = file.create_group(f"PartType{kind}")
                for name, values in columns.items():
                    _write_dataset(group, name, values[cut])
            _write_header(file, part, here, total, box, redshift, cosmos, seed)
        paths.append(path)
    return paths


def _write_dataset(group: h5py.Group, name: str, values: np.ndarray) -> None:
    kind, to_cgs, a_power, h_power, powers, text = FIELDS[name]
    dataset = group.create_dataset(name, data=values.astype(kind, copy=False))
    dataset.attrs["to_cgs"] = to_cgs
    dataset.attrs["a_scaling"] = float(a_power)
    dataset.attrs["h_scaling"] = float(h_power)
    if powers is not None:  # kelvin is no product of these three
        for base, power in zip(("length", "mass", "velocity"), powers, strict=True):
            dataset.attrs[f"{base}_scaling"] = float(power)
    dataset.attrs["description"] = text


def _write_header(
    file: h5py.File,
    part: int,
    here: list[int],
    total: list[int],
    box: float,
    redshift: float,
    cosmos: Cosmos,
    seed: int,
) -> None:
    header = file.create_group("Header").attrs
    header["BoxSize"] = box * 1e3 * cosmos.h
    header["Redshift"] = redshift
    header["Time"] = 1.0 / (1.0 + redshift)
    header["HubbleParam"] = cosmos.h
    header["Omega0"] = cosmos.omega_m
    header["OmegaLambda"] = cosmos.omega_l
    header["OmegaBaryon"] = cosmos.omega_b
    header["NumFilesPerSnapshot"] = FILES
    header["NumPart_ThisFile"] = np.array(here, np.int32)
    header["NumPart_Total"] = np.array(total, np.uint32)
    header["NumPart_Total_HighWord"] = np.zeros(TYPES, np.uint32)
    header["MassTable"] = np.zeros(TYPES)
    header["ThisFile"] = part
    units = file.create_group("Units").attrs
    units["UnitLength_in_cm"] = CM_IN_KPC
    units["UnitMass_in_g"] = 1e10 * GRAM_IN_MSUN
    units["UnitVelocity_in_cm_per_s"] = 1e5
    origin = file.create_group("Origin").attrs
    origin["Volume"] = "Marram: invented, made from a seed"
    origin["Seed"] = seed


def write_objects(path: Path, halos: Halos, galaxies: Galaxies, box: float, redshift: float) -> Table:
    """Write the halos above `LIGHTEST_OBJECT` and their galaxies to `path` as ECSV, heaviest first; the table as written."""
    keep = np.flatnonzero(halos.mass >= LIGHTEST_OBJECT)
    centre = halos.centre[keep] % box % box
    speed = circular_speed(halos.mass[keep], halos.radius[keep], 1.0 / (1.0 + redshift))
    row_of = np.full(len(halos) + 1, 0)
    row_of[keep] = np.arange(1, len(keep) + 1)
    names = invented_names(centre, box)
    table = Table(
        {
            "id": np.arange(1, len(keep) + 1),
            "name": names,
            "x": centre[:, 0] * u.Mpc,
            "y": centre[:, 1] * u.Mpc,
            "z": centre[:, 2] * u.Mpc,
            "halo_mass": halos.mass[keep] * u.Msun,
            "radius": halos.radius[keep] * u.Mpc,
            "stellar_mass": galaxies.stars[keep] * u.Msun,
            "cold_gas_mass": galaxies.cold_gas[keep] * u.Msun,
            "star_formation_rate": galaxies.star_formation[keep] * u.Msun / u.yr,
            "peak_speed": nfw_peak_speed(speed, halos.concentration[keep]) * u.km / u.s,
            "black_hole_mass": galaxies.black_hole[keep] * u.Msun,
            "disc_scale": np.where(galaxies.stars[keep] > 0, galaxies.disc[keep] * 1e3, 0.0) * u.kpc,
            "host": row_of[np.where(halos.host[keep] >= 0, halos.host[keep], len(halos))],
        }
    )
    about = {
        "id": "number, heaviest halo first",
        "name": "region of the volume and rank in it",
        "halo_mass": "all matter inside radius; what the tides have left of a halo inside another",
        "radius": "comoving, holds 200 times the mean matter density",
        "peak_speed": "highest circular speed of the halo",
        "disc_scale": "comoving scale length of the star disc",
        "host": "id of the halo in which this one moves, 0 for none",
    }
    for name, text in about.items():
        table[name].info.description = text
    for name in table.colnames:
        if table[name].dtype.kind == "f":
            table[name] = np.array([float(f"{value:.7g}") for value in table[name].value]) * table[name].unit
            table[name].info.description = about.get(name)
    table.meta["volume"] = "Marram: invented, made from a seed"
    table.write(path, format="ascii.ecsv", overwrite=True)
    return table


_HEADS = (
    "Bra",
    "Del",
    "Esk",
    "Fen",
    "Har",
    "Kel",
    "Lun",
    "Mor",
    "Nor",
    "Oss",
    "Quil",
    "Ros",
    "Sel",
    "Tor",
    "Ul",
    "Wen",
)
_TAILS = ("ast", "ey", "holm", "ik", "mere", "ness", "or", "wick")
_REGIONS = 4  # regions along each axis


def invented_names(centre: Floats, box: float) -> list[str]:
    """Name every object after its region, one of 64 blocks of the box, and its rank among the region's objects.

    `centre` (k, 3) in Mpc is in order of rank. Names are sounds, chosen by the block's number.
    """
    block = np.minimum((centre * (_REGIONS / box)).astype(int), _REGIONS - 1)
    seen: dict[str, int] = {}
    names = []
    for i, j, k in block.tolist():
        # A head for every column along the line of sight, so that what is drawn together sounds alike; 16 and 8 give
        # every block a pair of its own.
        region = _HEADS[(5 * (4 * i + j)) % 16] + _TAILS[k + 4 * ((i + j) % 2)]
        seen[region] = seen.get(region, 0) + 1
        names.append(f"{region} {seen[region]}")
    return names
