"""A species of the build file in, a plan of what is read for it out: every dataset found, measured, and given its conversion.

Nothing is read here but what the files say about their datasets.
"""

from __future__ import annotations

from dataclasses import dataclass

import astropy.units as u
import numpy as np
from numpy.typing import NDArray

from tilemap.buildfile import Field, Smoothing, Species
from tilemap.errors import InputError
from tilemap.sources import derived
from tilemap.sources.reader import Dataset, Reader
from tilemap.sources.units import NONE, Conversion, Moment, conversion


@dataclass(frozen=True)
class Column:
    """Where one role's numbers lie and how they become plain."""

    dataset: str
    column: int | None
    convert: Conversion


@dataclass(frozen=True)
class Derived:
    """A field: its columns and, where it is not one of them as it stands, the formula; and the unit of what comes out."""

    columns: tuple[Column, ...]
    unit: u.UnitBase
    formula: derived.Formula | None = None


@dataclass(frozen=True)
class Plan:
    """All that is read of a species; a plain number stands for a constant."""

    rows: tuple[int, ...]
    position: list[Column]
    mass: Column | float
    radius: Column | float | None
    fields: dict[str, Derived]


class Planner:
    """Plans species for one reader at one moment, seen along `sight`, a unit vector (3,) in x, y and z."""

    def __init__(self, reader: Reader, moment: Moment, sight: NDArray[np.float64]) -> None:
        self._reader = reader
        self._moment = moment
        self._sight = sight

    def plan(self, name: str, species: Species) -> Plan:
        """The plan for the species of that name; InputError naming the key at fault."""
        here = f"snapshot.species.{name}"
        position = self._position(f"{here}.position", species.position)
        rows = self._reader.look(position[0].dataset).rows
        mass: Column | float = 1.0
        if species.mass is not None:
            mass = self._mass(f"{here}.mass", species)
        radius = self._radius(f"{here}.smoothing", species.smoothing)
        fields = {field: self._field(f"{here}.fields.{field}", spec, species) for field, spec in species.fields.items()}
        for column in (*position, mass, radius, *(column for field in fields.values() for column in field.columns)):
            if isinstance(column, Column):
                self._same_length(position[0].dataset, column.dataset)
        return Plan(rows, position, mass, radius, fields)

    def _position(self, here: str, spec: Field) -> list[Column]:
        if spec.dataset is None or spec.column is not None:
            raise InputError(f"{here}: name a dataset of two or three columns, or two or three datasets of one")
        looks = [self._number_dataset(here, dataset) for dataset in spec.dataset]
        widths = [look.width for look in looks]
        if len(widths) == 1 and widths[0] not in (2, 3):
            found = "one column" if widths[0] is None else f"{widths[0]} columns"
            raise InputError(
                f"{here}: {spec.dataset[0]} has {found}, where a position has three (or two, on a flat chart)"
            )
        if len(widths) > 1 and any(width is not None for width in widths):
            raise InputError(f"{here}: of several datasets each must have one column, but {spec.dataset} have {widths}")
        return [
            Column(dataset, None, self._conversion(here, spec, look, dataset, "length"))
            for dataset, look in zip(spec.dataset, looks, strict=True)
        ]

    def _mass(self, here: str, species: Species) -> Column | float:
        mass = species.mass
        assert mass is not None
        if mass.constant is not None:
            return mass.constant
        if mass.table is not None:
            value, stated = self._reader.table_mass(mass.table)
            try:
                convert = conversion(mass, stated, self._moment, dataset=f"mass table entry {mass.table}", kind="mass")
            except InputError as error:
                raise InputError(f"{here}: {error}") from error
            return value * convert.factor
        return self._column(here, mass, "mass")

    def _radius(self, here: str, smoothing: Smoothing) -> Column | float | None:
        if smoothing.field is None:
            return smoothing.radius
        column = self._column(f"{here}.field", smoothing.field, "length")
        factor = 1.0
        if smoothing.means == "half":
            factor = 2.0
        elif smoothing.means == "fwhm":
            from tilemap.project.kernels import KERNELS

            factor = KERNELS[smoothing.kernel].support_over_fwhm
        return Column(column.dataset, column.column, Conversion(column.convert.factor * factor, column.convert.unit))

    def _field(self, here: str, spec: Field, species: Species) -> Derived:
        if spec.temperature_from is not None:
            energy = self._column(f"{here}.temperature_from", spec.temperature_from, "specific energy")
            if spec.electrons is not None:
                electrons = self._column(f"{here}.electrons", spec.electrons)
                if electrons.convert.unit != NONE:
                    raise InputError(
                        f"{here}.electrons: {electrons.dataset} is in {electrons.convert.unit}, where the number of free "
                        "electrons to a hydrogen nucleus is wanted"
                    )
                return Derived((energy, electrons), u.K, derived.temperature)
            factor = energy.convert.factor * derived.temperature_factor(spec.gas or "ionised")
            return Derived((Column(energy.dataset, energy.column, Conversion(factor, u.K)),), u.K)
        if spec.density_squared_from is not None:
            if species.mass is None:
                raise InputError(f"{here}.density_squared_from: the species has no mass to go with it: give its mass")
            density = self._column(f"{here}.density_squared_from", spec.density_squared_from, "density")
            factor = density.convert.factor * float((u.Msun * density.convert.unit).to(derived.SQUARED_DENSITY))
            density = Column(density.dataset, density.column, Conversion(factor, density.convert.unit))
            return Derived((density,), derived.SQUARED_DENSITY, derived.density_squared)
        if spec.line_of_sight is not None:
            columns = self._vector(f"{here}.line_of_sight", spec.line_of_sight)
            return Derived(columns, columns[0].convert.unit, derived.line_of_sight(self._sight))
        column = self._column(here, spec)
        return Derived((column,), column.convert.unit)

    def _vector(self, here: str, spec: Field) -> tuple[Column, ...]:
        """A vector in x, y and z: one dataset of three columns, or three of one."""
        if self._moment.angle is not None:
            raise InputError(f"{here}: a flat chart has no line of sight: name the field's own dataset")
        if spec.dataset is None or spec.column is not None:
            raise InputError(f"{here}: name a dataset of three columns, or three datasets of one")
        looks = [self._number_dataset(here, dataset) for dataset in spec.dataset]
        widths = [look.width or 1 for look in looks]
        if sum(widths) != 3 or len(widths) == 2:
            found = ", ".join(f"{dataset} has {width}" for dataset, width in zip(spec.dataset, widths, strict=True))
            raise InputError(f"{here}: a vector has three columns, one dataset of three or three of one: {found}")
        return tuple(
            Column(dataset, None, self._conversion(here, spec, look, dataset, None))
            for dataset, look in zip(spec.dataset, looks, strict=True)
        )

    def _column(self, here: str, spec: Field, kind: str | None = None) -> Column:
        if spec.dataset is None or len(spec.dataset) != 1:
            raise InputError(f"{here}: name one dataset, of one column")
        dataset = spec.dataset[0]
        look = self._number_dataset(here, dataset)
        column = spec.column
        if look.width is None:
            if column:
                raise InputError(f"{here}: {dataset} has one column, so column: {column} is not there")
            column = None
        elif look.width == 1:
            column = column or 0
        elif column is None:
            raise InputError(
                f"{here}: {dataset} has {look.width} columns: say which, {{dataset: {dataset}, column: 0}}"
            )
        if column is not None and look.width is not None and column >= look.width:
            raise InputError(
                f"{here}: {dataset} has {look.width} columns, 0 to {look.width - 1}: {column} is not there"
            )
        return Column(dataset, column, self._conversion(here, spec, look, dataset, kind))

    def _number_dataset(self, here: str, dataset: str) -> Dataset:
        try:
            look = self._reader.look(dataset)
        except InputError as error:
            raise InputError(f"{here}: {error}") from error
        if look.dtype_kind not in "fiub":
            raise InputError(f"{here}: {dataset} does not hold numbers: name another dataset")
        return look

    def _conversion(self, here: str, spec: Field, look: Dataset, dataset: str, kind: str | None) -> Conversion:
        try:
            unstated = not self._reader.states_units
            return conversion(spec, look.stated, self._moment, dataset=dataset, kind=kind, unstated=unstated)
        except InputError as error:
            raise InputError(f"{here}: {error}") from error

    def _same_length(self, first: str, second: str) -> None:
        pairs = zip(self._reader.parts, self._reader.look(first).rows, self._reader.look(second).rows, strict=True)
        for part, expected, found in pairs:
            if expected != found:
                raise InputError(
                    f"{part}: {second} has {found} rows and {first} {expected}: they must be the same particles"
                )
