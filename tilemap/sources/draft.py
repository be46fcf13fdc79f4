"""Particle files in, the text of a build file out that makes a first atlas of them; what had to be guessed says so."""

from __future__ import annotations

import os
import re
from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path

import astropy.units as u
import numpy as np

from tilemap.sources.guess import MOST_PARTICLES, guess_smoothing
from tilemap.sources.reader import natural_order
from tilemap.sources.survey import Seen, SeenGroup, Survey, part_globs, survey

# Which number codes give to which species (common practice, no source).
_SPECIES = {0: "gas", 1: "dark", 2: "dark2", 3: "dark3", 4: "stars", 5: "holes"}
_TITLES = {"gas": "Gas", "dark": "Dark matter", "stars": "Stars", "holes": "Black holes"}
_ACROSS = [("x", "y", "z"), ("posx", "posy", "posz"), ("xmpc", "ympc", "zmpc"), ("pos0", "pos1", "pos2")]
_ON_SKY = [("ra", "dec"), ("ra", "de"), ("glon", "glat"), ("l", "b"), ("lon", "lat"), ("radeg", "decdeg"), ("x", "y")]
_TILE = 512


@dataclass(frozen=True)
class _Draft:
    """One species as it is written: its name, its lines, whether it weighs anything and has a temperature."""

    name: str
    count: int
    lines: list[str]
    has_mass: bool
    has_temperature: bool
    position: list[Seen]


def draft(files: Sequence[str | Path], folder: str | Path = ".") -> str:
    """Write a build file for particle files.

    Parameters
    ----------
    files : sequence of str or Path
        Files of one kind; globs are allowed.
    folder : str or Path
        Where the build file will stand: file names are written relative to it.

    Returns
    -------
    str
        YAML; lines that rest on a guess end in a comment that says what to check.

    Raises
    ------
    InputError
        Files that are missing or damaged.
    """
    seen = survey(files)
    species = [each for group in seen.groups if (each := _species(seen, group)) is not None]
    lines = ["# Drafted from the files. What had to be guessed says: check.", f"title: {_title(seen)}", ""]
    lines += ["snapshot:", f"  files: [{', '.join(_quoted(name) for name in _file_names(seen.files, Path(folder)))}]"]
    flat = bool(species) and _lies_flat(species[0].position)
    lines += _snapshot_lines(seen, flat)
    if not species:
        return "\n".join([*lines, *_nothing_found(seen)]) + "\n"
    lines += ["  species:", *(line for each in species for line in each.lines)]
    lines += ["", *_view_lines(seen, species, flat), "", *_sheet_lines(species, flat)]
    return "\n".join(lines) + "\n"


def _title(seen: Survey) -> str:
    stem = re.sub(r"[._-]?(\*|\d+)?$", "", seen.files[0].name.split(".")[0]) or "Snapshot"
    redshift = seen.header.redshift
    return stem.replace("_", " ").capitalize() + (f" at redshift {redshift:.2f}" if redshift is not None else "")


def _quoted(text: str) -> str:
    return '"' + text.replace("\\", "\\\\").replace('"', '\\"') + '"'


def _file_names(files: list[Path], folder: Path) -> list[str]:
    """Names relative to a folder; numbered parts as one glob where it matches just these."""
    if len(files) > 1:
        for pattern in part_globs(files[0].name):
            if sorted(files[0].parent.glob(pattern), key=lambda path: natural_order(path.name)) == files:
                return [os.path.relpath(files[0].parent / pattern, folder)]
    return [os.path.relpath(path, folder) for path in files]


def _snapshot_lines(seen: Survey, flat: bool) -> list[str]:
    lines = []
    if seen.header.box is None and not flat:
        lines.append("  periodic: false   # the files name no box: check; where there is one, write box: 100 Mpc")
    if seen.kind == "hdf5" and seen.header.redshift is None:
        lines.append("  redshift: 0   # the files do not say: check")
    if seen.kind == "hdf5" and seen.header.h is None:
        lines.append("  cosmology: {H0: 67.7, Om0: 0.31, Ode0: 0.69}   # the files do not say: check")
    return lines


def _nothing_found(seen: Survey) -> list[str]:
    names = ", ".join(each.name for group in seen.groups for each in group.datasets)
    return [
        "  species:   # no positions were found: write which datasets hold them",
        "    stuff:",
        f"      position: [x, y, z]   # there are: {names}",
        "sheets:",
        "  stuff: {title: Count, species: stuff, sum: count, unit: 1/kpc2}",
    ]


def _species(seen: Survey, group: SeenGroup) -> _Draft | None:
    position = _position(group)
    if not position or group.rows == 0:
        return None
    name = _species_name(seen, group)
    flat = _lies_flat(position)
    field = _field if seen.kind == "hdf5" else _plain_field
    lines = [f"    {name}:   # {group.rows:,} particles"]
    where, note = field(position[0], "kpc, a: 1, h: -1")
    where = where if len(position) == 1 else _listed(position)
    lines.append(f"      position: {where}{note}")
    mass = group.find("mass")
    has_mass = mass is not None or bool(group.table_mass)
    if mass is not None:
        where, note = field(mass, '"1e10 Msun", h: -1')
        lines.append(f"      mass: {where}{note}")
    elif group.table_mass:
        index = int(re.sub(r"\D", "", group.name))
        if _mass_unit_known(seen, index):
            lines.append(f"      mass: {{table: {index}}}")
        else:
            lines.append(
                f'      mass: {{table: {index}, unit: "1e10 Msun", h: -1}}   # the files do not say the unit: check'
            )
    lines.append(f"      smoothing: {_smoothing(seen, group, position, flat)}")
    temperature = group.find("temperature")
    energy = group.find("internalenerg", "specificinternalenerg")
    if temperature is not None:
        where, note = field(temperature, "K")
        lines += ["      fields:", f"        temperature: {where}{note}"]
    elif energy is not None:
        where, note = field(energy, "km2/s2")
        electrons = group.find("electronabundance")
        how = "gas: ionised"
        if electrons is not None:
            how = f"electrons: {_name(electrons)}"
        else:
            note = note or "   # ionised or neutral: check"
        lines += ["      fields:", f"        temperature: {{temperature_from: {where}, {how}}}{note}"]
    return _Draft(name, group.rows, lines, has_mass, temperature is not None or energy is not None, position)


def _name(seen: Seen) -> str:
    return seen.name if re.fullmatch(r"[A-Za-z_][\w./-]*", seen.name) else _quoted(seen.name)


def _listed(position: list[Seen]) -> str:
    return f"[{', '.join(_name(each) for each in position)}]"


def _field(seen: Seen, unit: str) -> tuple[str, str]:
    """A dataset by name; where the file says no unit, with the usual one (common practice) and a comment."""
    if seen.stated.factor is not None:
        return _name(seen), ""
    return f"{{dataset: {_name(seen)}, unit: {unit}}}", "   # the file does not say the unit: check"


def _plain_field(seen: Seen, unit: str) -> tuple[str, str]:
    """The same for arrays and tables, whose bare numbers are taken as Mpc, Msun or pure numbers."""
    note = "" if seen.stated.factor is not None else "   # the file does not say the unit: check"
    return _name(seen), note


def _mass_unit_known(seen: Survey, index: int) -> bool:
    return seen.reader.table_mass(index)[1].factor is not None


def _species_name(seen: Survey, group: SeenGroup) -> str:
    number = re.fullmatch(r"PartType(\d+)", group.name)
    if number:
        return _SPECIES.get(int(number[1]), f"type{number[1]}")
    word = group.name or seen.files[0].stem.split(".")[0]
    return re.sub(r"[^a-z0-9_-]+", "-", word.lower()).strip("-_") or "particles"


def _position(group: SeenGroup) -> list[Seen]:
    """The dataset of positions, or the two or three columns of them."""
    for beginning in ("coordinate", "position", "pos", "xyz"):
        whole = group.find(beginning)
        if whole is not None and whole.width in (2, 3):
            return [whole]
    by_name = {
        re.sub(r"[^a-z0-9]", "", each.last.lower()): each for each in group.datasets if each.range and not each.width
    }
    for names in [*_ACROSS, *_ON_SKY]:
        if all(name in by_name for name in names):
            return [by_name[name] for name in names]
    return []


def _lies_flat(position: list[Seen]) -> bool:
    """Whether these are two angles, or two numbers of which the file does not say what they are."""
    two = len(position) == 2 or position[0].width == 2
    unit = position[0].stated.unit
    return two and (unit is None or not unit.is_equivalent(u.Mpc))


def _smoothing(seen: Survey, group: SeenGroup, position: list[Seen], flat: bool) -> str:
    smoothing = group.find("smoothinglength", "hsml", "supportradius", "smoothing")
    if smoothing is None:
        if flat:
            return f"{{radius: {_span(position) / 1000:.3g}, kernel: cubic}}   # how wide a dot is drawn: as you like"
        return "{neighbours: 48, kernel: cubic}"
    found = _guessed(seen, group, position, smoothing)
    where = _field(smoothing, "kpc, a: 1, h: -1")[0] if seen.kind == "hdf5" else _name(smoothing)
    if found is not None:
        means, kernel = found
        note = "   # found from the densities in the files"
    else:
        text = smoothing.description.lower()
        means = "fwhm" if "fwhm" in text else "half" if "half" in text else "support"
        kernel = seen.kernel or "cubic"
        unsure = [] if means != "support" or "support" in text else ["what it means"]
        unsure += [] if seen.kernel else ["the kernel"]
        note = f"   # check {' and '.join(unsure)}" if unsure else ""
    return f"{{field: {where}, means: {means}, kernel: {kernel}}}{note}"


def _guessed(seen: Survey, group: SeenGroup, position: list[Seen], smoothing: Seen) -> tuple[str, str] | None:
    """The smoothing convention that the snapshot's own densities show, where it is small enough to ask."""
    mass, density = group.find("mass"), group.find("densit")
    if mass is None or density is None or len(position) != 1 or group.rows > MOST_PARTICLES or position[0].width != 3:
        return None
    parts: list[list[np.ndarray]] = []
    wanted: list[tuple[str, int | None]] = [(each.name, None) for each in (position[0], mass, smoothing, density)]
    looks = [seen.reader.look(name) for name, _ in wanted]
    if len({look.rows for look in looks}) > 1 or any(look.width is not None for look in looks[1:]):
        return None
    if len({(look.stated.factor, look.stated.a, look.stated.h) for look in (looks[0], looks[2])}) > 1:
        return None
    for part, rows in enumerate(looks[0].rows):
        if rows:
            parts += list(seen.reader.blocks(part, wanted, MOST_PARTICLES))
    columns = [np.concatenate(pieces).astype(np.float64) for pieces in zip(*parts, strict=True)]
    if not all(np.isfinite(column).all() for column in columns) or not (columns[2] > 0).all():
        return None
    return guess_smoothing(columns[0], columns[1], columns[2], columns[3], seen.header.box)


def _span(position: list[Seen]) -> float:
    return max(each.range[1] - each.range[0] for each in position if each.range) or 1.0


def _view_lines(seen: Survey, species: list[_Draft], flat: bool) -> list[str]:
    across = max(each.count for each in species) ** (1 / 3)
    pixels = int(np.clip(2 ** round(np.log2(64 * across)), 2 * _TILE, 32 * _TILE))
    lines = ["view:"]
    if flat:
        ends = [each.range for each in species[0].position if each.range]
        if len(ends) == 1:
            ends = ends * 2
        unit = species[0].position[0].stated.unit or u.deg
        text = unit.to_string() if unit.is_equivalent(u.deg) else "deg"
        centre = ", ".join(f"{(low + high) / 2:.6g}" for low, high in ends)
        width = 1.02 * max(high - low for low, high in ends)
        return [
            *lines,
            f"  unit: {text}",
            f"  centre: [{centre}]",
            f"  width: {width:.6g}",
            "  pixels: 4096",
            "  slabs: 1",
        ]
    lines.append("  along: z")
    if seen.header.box is None:
        lines += _view_of_sample(seen, species[0])
    return [*lines, f"  pixels: {pixels}", f"  slabs: {int(np.clip(round(across / 8), 1, 32))}"]


def _view_of_sample(seen: Survey, species: _Draft) -> list[str]:
    """Centre and width around the first rows, in Mpc, where no box says how large the volume is."""
    if len(species.position) == 1:
        name = species.position[0].name
        part = next(part for part, rows in enumerate(seen.reader.look(name).rows) if rows)
        sample = next(iter(seen.reader.blocks(part, [(name, None)], 1 << 16)))[0]
        ends = list(zip(sample.min(axis=0), sample.max(axis=0), strict=True))
    else:
        ends = [each.range for each in species.position if each.range]
    stated = species.position[0].stated
    unit = stated.unit if stated.unit is not None and stated.unit.is_equivalent(u.Mpc) else None
    known = 1.0 if seen.kind != "hdf5" else 1e-3
    if unit is not None:
        known = float(unit.to(u.Mpc)) * (stated.factor or 1.0)
    centre = ", ".join(f"{known * (low + high) / 2:.6g}" for low, high in ends)
    width = 1.02 * known * max(high - low for low, high in ends)
    note = "   # around the first particles: check"
    return [f"  centre: [{centre}]{note}", f"  width: {width:.6g}", f"  depth: {width:.6g}"]


def _sheet_lines(species: list[_Draft], flat: bool) -> list[str]:
    area = "deg2" if flat else "kpc2"
    lines = ["sheets:"]
    for each in species:
        title = _TITLES.get(each.name, each.name.capitalize())
        what = f"sum: mass, unit: Msun/{area}" if each.has_mass else f"sum: count, unit: 1/{area}"
        lines.append(f"  {each.name}: {{title: {title}, species: {each.name}, {what}}}")
        if each.has_temperature:
            name = f"{each.name}-temperature"
            lines.append(
                f"  {name}: {{title: {title} temperature, species: {each.name}, mean: temperature, weight: {each.name}, unit: K}}"
            )
    return lines
