"""A checked build file in, chunks of particles in plain units out, whatever kind of file they lie in."""

from __future__ import annotations

from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass
from functools import cached_property
from pathlib import Path

import astropy.units as u
import numpy as np

from tilemap.buildfile import BuildFile
from tilemap.cosmology import Cosmology, scale_factor
from tilemap.errors import InputError
from tilemap.quantities import suggestion, unit_named
from tilemap.sources.plan import Column, Derived, Plan, Planner
from tilemap.sources.reader import Header, Reader, Wanted
from tilemap.sources.units import NONE, Moment

_SHOWN = 5
Test = Callable[[np.ndarray], np.ndarray]


@dataclass(frozen=True)
class Facts:
    """What is known about the snapshot: `box` (3,) in comoving Mpc, None where there is none or for a flat chart."""

    box: np.ndarray | None
    redshift: float | None
    cosmology: Cosmology | None
    files: list[Path]
    periodic: bool


@dataclass
class Chunk:
    """Particles that follow each other in the snapshot, the first being number `start` of its species.

    position : float64 (n, 3), comoving Mpc (or the chart's unit); radius : float64 (n,), support radius in the same
    unit, None where it has to be found from neighbours; mass : float64 (n,), Msun (ones where the species has no
    mass); values : float64 (n,) for each field that was asked for.
    """

    start: int
    position: np.ndarray
    radius: np.ndarray | None
    mass: np.ndarray
    values: dict[str, np.ndarray]

    def __len__(self) -> int:
        return len(self.position)


class Source:
    """The particles of a snapshot.

    Everything that can be known without reading the particles is checked when it is made.

    Parameters
    ----------
    build : BuildFile
    reader : Reader
        The snapshot's files, opened by their kind.

    Raises
    ------
    InputError
        Datasets that are missing or of differing length, units that are missing or wrong, no redshift where one is
        needed. Bad numbers are found when the chunks are read.
    """

    def __init__(self, build: BuildFile, reader: Reader) -> None:
        self._build = build
        self._reader = reader
        self._header: Header = reader.header()
        planner = Planner(reader, self._moment, build.view.vectors[2])
        self._plans = {name: planner.plan(name, species) for name, species in build.snapshot.species.items()}
        self.facts  # noqa: B018 - a box that cannot be converted is found here, not in the middle of a build

    @cached_property
    def facts(self) -> Facts:
        """Box, redshift and cosmology: from the build file where it gives them, from the files where not."""
        snapshot = self._build.snapshot
        cosmology = self._header.cosmology
        if snapshot.cosmology is not None:
            cosmology = Cosmology(**snapshot.cosmology.model_dump())
        redshift = snapshot.redshift if snapshot.redshift is not None else self._header.redshift
        flat = self._build.view.flat
        box = None if flat else self._box()
        periodic = snapshot.periodic if snapshot.periodic is not None else box is not None
        if periodic and box is None:
            raise InputError("snapshot.periodic: no box is known to repeat: give snapshot.box, or periodic: false")
        return Facts(box, None if flat else redshift, None if flat else cosmology, self._reader.files, periodic)

    def _box(self) -> np.ndarray | None:
        if self._build.snapshot.box is not None:
            return np.array(self._build.snapshot.box, dtype=np.float64)
        if self._header.box is None:
            return None
        # codes write the box in the unit of the positions
        first = next(iter(self._plans.values()))
        return first.position[0].convert(self._header.box)

    @cached_property
    def _moment(self) -> Moment:
        if self._build.view.flat:
            return Moment(None, None, unit_named(self._build.view.unit, "angle"))
        snapshot = self._build.snapshot
        redshift = snapshot.redshift if snapshot.redshift is not None else self._header.redshift
        h = snapshot.cosmology.H0 / 100.0 if snapshot.cosmology is not None else self._header.h
        return Moment(None if redshift is None else scale_factor(redshift), h)

    def count(self, species: str) -> int:
        """How many particles of a species there are."""
        return sum(self._plan_of(species).rows)

    def unit(self, species: str, field: str) -> u.UnitBase:
        """The plain unit in which `chunks` gives a field, "mass" (Msun) or "count" (none)."""
        plan = self._plan_of(species)
        if field == "mass":
            return u.Msun
        if field == "count":
            return NONE
        return self._field_of(plan, species, field).unit

    def chunks(self, species: str, fields: Sequence[str] = (), size: int = 1 << 20) -> Iterator[Chunk]:
        """Every particle once, in the order of the files, at most `size` at a time.

        Parameters
        ----------
        species : str
        fields : sequence of str
            Which fields to read; "mass" and "count" (ones) may be among them.
        size : int

        Raises
        ------
        InputError
            For a position that is not finite, a radius that is not above zero, a mass below zero or a value that is
            not finite: how many there are in the whole species and where the first ones are.
        """
        plan = self._plan_of(species)
        derived = {name: self._field_of(plan, species, name) for name in fields if name not in ("mass", "count")}
        columns = [column for field in derived.values() for column in field.columns]
        roles = (*plan.position, plan.mass, plan.radius, *columns)
        wanted = list(dict.fromkeys((each.dataset, each.column) for each in roles if isinstance(each, Column)))
        start = 0
        for part, rows in enumerate(plan.rows):
            if rows == 0:
                continue
            for block in self._reader.blocks(part, wanted, size):
                stored = dict(zip(wanted, block, strict=True))
                chunk = _make_chunk(start, stored, plan, derived)
                if "mass" in fields:
                    chunk.values["mass"] = chunk.mass
                if "count" in fields:
                    chunk.values["count"] = np.ones(len(chunk))
                self._check(chunk, species, plan, derived)
                start += len(chunk)
                yield chunk

    def _plan_of(self, species: str) -> Plan:
        if species not in self._plans:
            raise InputError(f"there is no species {species!r}: {suggestion(species, self._plans)}")
        return self._plans[species]

    @staticmethod
    def _field_of(plan: Plan, species: str, field: str) -> Derived:
        if field not in plan.fields:
            near = suggestion(field, [*plan.fields, "mass", "count"])
            raise InputError(f"species {species!r} has no field {field!r}: {near}")
        return plan.fields[field]

    # Bad numbers: counted over the whole species, so that one run tells all.

    def _check(self, chunk: Chunk, species: str, plan: Plan, fields: dict[str, Derived]) -> None:
        if not _all_finite(chunk.position):
            self._refuse(species, plan, plan.position, np.isfinite, "a position that is not a finite number")
        if isinstance(plan.radius, Column) and chunk.radius is not None and not _all_radii(chunk.radius):
            self._refuse(
                species, plan, [plan.radius], _good_radius, "a smoothing length that is not above zero and finite"
            )
        if isinstance(plan.mass, Column) and not (chunk.mass.min() >= 0 and _all_finite(chunk.mass)):
            self._refuse(species, plan, [plan.mass], _good_mass, "a mass that is negative or not a finite number")
        for name, field in fields.items():
            if not _all_finite(chunk.values[name]):
                self._refuse(species, plan, list(field.columns), np.isfinite, f"a {name} that is not a finite number")

    def _refuse(self, species: str, plan: Plan, columns: list[Column], good: Test, what: str) -> None:
        count, start = 0, 0
        first: list[str] = []
        file = ""
        wanted = [(column.dataset, column.column) for column in columns]
        for part, rows in enumerate(plan.rows):
            for block in self._reader.blocks(part, wanted, 1 << 20) if rows else ():
                bad = np.zeros(len(block[0]), dtype=bool)
                for column, stored in zip(columns, block, strict=True):
                    fine = good(column.convert(stored))
                    bad |= ~(fine if fine.ndim == 1 else fine.all(axis=1))
                where = np.flatnonzero(bad)
                first += [str(start + row) for row in where[: _SHOWN - len(first)]]
                file = file or (self._reader.parts[part] if len(where) else "")
                count += len(where)
                start += len(bad)
        names = ", ".join(column.dataset for column in columns)
        where_text = f"particle {first[0]}" if count == 1 else f"the first are particles {', '.join(first)}"
        raise InputError(
            f"{file}: {names}: {count} of {start} {species} particles have {what} ({where_text}, counted from 0): "
            "mend or leave out these rows"
        )


def _make_chunk(start: int, stored: dict[Wanted, np.ndarray], plan: Plan, fields: dict[str, Derived]) -> Chunk:
    def numbers(column: Column) -> np.ndarray:
        return column.convert(stored[column.dataset, column.column])

    position = _three_columns([numbers(column) for column in plan.position])
    count = len(position)
    radius: np.ndarray | None = None
    if isinstance(plan.radius, Column):
        radius = numbers(plan.radius)
    elif plan.radius is not None:
        radius = np.full(count, plan.radius)
    mass = numbers(plan.mass) if isinstance(plan.mass, Column) else np.full(count, plan.mass)
    values = {}
    for name, field in fields.items():
        read = [numbers(column) for column in field.columns]
        values[name] = read[0] if field.formula is None else field.formula(mass, *read)
    return Chunk(start, position, radius, mass, values)


def _three_columns(pieces: list[np.ndarray]) -> np.ndarray:
    """Positions as one C-ordered (n, 3); a missing third coordinate is 0."""
    if len(pieces) == 1 and pieces[0].shape[1] == 3:
        return np.ascontiguousarray(pieces[0])
    flat = [piece[:, axis] for piece in pieces for axis in range(piece.shape[1])] if len(pieces) == 1 else pieces
    position = np.zeros((len(flat[0]), 3))
    for axis, coordinate in enumerate(flat):
        position[:, axis] = coordinate
    return position


def _all_finite(numbers: np.ndarray) -> bool:
    # one pass without a mask: any NaN or infinity survives a sum; the mask is made only where the sum is not finite
    with np.errstate(over="ignore", invalid="ignore"):
        return bool(np.isfinite(numbers.sum())) or bool(np.isfinite(numbers).all())


def _all_radii(radius: np.ndarray) -> bool:
    return bool(radius.min() > 0 and radius.max() < np.inf)


def _good_radius(radius: np.ndarray) -> np.ndarray:
    return (radius > 0) & np.isfinite(radius)


def _good_mass(mass: np.ndarray) -> np.ndarray:
    return (mass >= 0) & np.isfinite(mass)
