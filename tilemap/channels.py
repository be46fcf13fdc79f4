"""Sheets in, planes to draw out; and back: how the planes of a species become the values of its sheets.

A sum is one plane. A mean is two, its numerator and its weight, kept apart until they are divided, last and at every
level. Sheets that need the same plane share it.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass, field
from typing import Any

import astropy.units as u
import numpy as np
from numpy.typing import NDArray

from tilemap.buildfile import BuildFile, Sheet
from tilemap.errors import InputError
from tilemap.pyramid.coding import Coding, LinearCoding, LogCoding
from tilemap.sources import Chunk, Source

LOG_ROOM_DEX = 40.0
"""How far below the mean of a log sheet its lowest code lies; at step 0.002 there are 91 dex above. Nothing that a
single-precision image holds of a particle's kernel is cut off, and nothing is clipped."""
LINEAR_STEPS = 65000


@dataclass(frozen=True)
class SheetPlan:
    """How one sheet is made from the planes of its species.

    Attributes
    ----------
    name : str
    sheet : Sheet
    plane : int
        The sum, or the numerator of the mean.
    weight : int or None
        The plane that a mean is divided by.
    factor : float
        From plane per pixel to the sheet's unit.
    total_unit : str
        Unit of the plane's own sum: what `totals` are in.
    """

    name: str
    sheet: Sheet
    plane: int
    weight: int | None
    factor: float
    total_unit: str

    def of_planes(self, coding: Coding) -> Coding:
        """The coding that gives `values` the codes that `coding` gives the same in the sheet's unit."""
        if isinstance(coding, LogCoding):
            return LogCoding(coding.low - math.log10(self.factor), coding.step, coding.nothing)
        return LinearCoding(coding.low / self.factor, coding.step / self.factor)

    def values(self, planes: NDArray[np.float32]) -> NDArray[np.float32]:
        """What is coded, float32 (rows, columns), from planes (channels, rows, columns): the sheet's values over
        `factor`, NaN where a mean has no weight."""
        if self.weight is None:
            return planes[self.plane]
        weight = planes[self.weight]
        values = np.full(weight.shape, np.nan, dtype=np.float32)
        return np.divide(planes[self.plane], weight, out=values, where=weight > 0)


@dataclass
class SpeciesPlan:
    """The planes that a species needs, and the sheets made from them.

    Attributes
    ----------
    species : str
    quantities : list of (str, str or None)
        For each plane what is summed: (extensive field, None), or (weight field, averaged field).
    sheets : list of SheetPlan
    ranges : float64 (planes, 2)
        Smallest and largest value of the averaged field, over particles of positive weight; filled while reading.
    """

    species: str
    quantities: list[tuple[str, str | None]]
    sheets: list[SheetPlan]
    ranges: NDArray[np.float64] = field(default_factory=lambda: np.empty((0, 2)))

    def __post_init__(self) -> None:
        self.ranges = np.tile([np.inf, -np.inf], (len(self.quantities), 1))

    @property
    def fields(self) -> list[str]:
        """The fields to read, mass and count left out."""
        names = {name for pair in self.quantities for name in pair if name not in (None, "mass", "count")}
        return sorted(str(name) for name in names)

    def planes(self, chunk: Chunk) -> tuple[NDArray[np.float32], NDArray[np.float64]]:
        """What each particle adds to each plane, float32 (n, planes); and the ranges met, float64 (planes, 2)."""
        out = np.empty((len(chunk), len(self.quantities)), dtype=np.float32)
        ranges = np.tile([np.inf, -np.inf], (len(self.quantities), 1))
        for plane, (extensive, averaged) in enumerate(self.quantities):
            amount = _field(chunk, extensive)
            if averaged is not None:
                value = _field(chunk, averaged)
                counted = value[amount > 0]
                if len(counted):
                    ranges[plane] = counted.min(), counted.max()
                amount = amount * value
            out[:, plane] = amount
        return out, ranges

    def widen(self, ranges: NDArray[np.float64]) -> None:
        """Take in the ranges that `planes` met."""
        self.ranges[:, 0] = np.minimum(self.ranges[:, 0], ranges[:, 0])
        self.ranges[:, 1] = np.maximum(self.ranges[:, 1], ranges[:, 1])

    def coding(self, plan: SheetPlan, mean_per_pixel: float) -> Coding:
        """The coding of a sheet, once its values are known to lie where they do.

        Parameters
        ----------
        plan : SheetPlan
        mean_per_pixel : float
            Of the sum's plane over all slabs.

        Raises
        ------
        InputError
            Where a log sheet has negative values, or a linear sum has no step.
        """
        sheet, low_high = plan.sheet, self.ranges[plan.plane] * plan.factor
        if sheet.coding == "log":
            step = sheet.step or 0.002
            if plan.weight is None:
                centre = mean_per_pixel * plan.factor
                return LogCoding(_floor_log(centre) - min(LOG_ROOM_DEX, 30000 * step), step)
            if low_high[0] < 0:
                raise InputError(
                    f"sheet {plan.name}: {sheet.mean} goes down to {low_high[0]:.6g} {sheet.unit}, and log coding holds "
                    "positive values only: write coding: linear"
                )
            lowest = low_high[0] if 0 < low_high[0] < np.inf else max(low_high[1], 1e-30) * 1e-12
            return LogCoding(_floor_log(lowest), step, nothing=math.nan)
        if plan.weight is None:
            if sheet.step is None:
                raise InputError(f"sheet {plan.name}: a sum in linear coding needs step, in {sheet.unit}")
            return LinearCoding(-32767 * sheet.step, sheet.step)
        low, high = low_high if np.isfinite(low_high).all() else (0.0, 1.0)
        return LinearCoding(float(low), sheet.step or float((high - low) / LINEAR_STEPS or abs(low) * 1e-6 or 1.0))


def _floor_log(value: float) -> float:
    return float(math.floor(math.log10(value))) if value > 0 else 0.0


def _field(chunk: Chunk, name: str) -> NDArray[np.float64]:
    if name == "mass":
        return chunk.mass
    if name == "count":
        return np.ones(len(chunk))
    return chunk.values[name]


def plan_species(build: BuildFile, source: Source, pixel: float) -> list[SpeciesPlan]:
    """One plan for each species that a sheet draws, in the order of the build file.

    Parameters
    ----------
    build : BuildFile
    source : Source
    pixel : float
        Side of a pixel in the view's unit.

    Raises
    ------
    InputError
        Where a sheet's unit does not fit what it projects.
    """
    plans = []
    names = dict.fromkeys(sheet.species for sheet in build.sheets.values())
    for species in names:
        sheets = {name: sheet for name, sheet in build.sheets.items() if sheet.species == species}
        quantities: list[tuple[str, str | None]] = []

        def plane(pair: tuple[str, str | None], quantities: list[tuple[str, str | None]] = quantities) -> int:
            if pair not in quantities:
                quantities.append(pair)
            return quantities.index(pair)

        made = []
        for name, sheet in sheets.items():
            if sheet.sum is not None:
                number, weight = plane((sheet.sum, None)), None
            else:
                weighting = build.sheets[str(sheet.weight)].sum
                assert weighting is not None and sheet.mean is not None
                weight, number = plane((weighting, None)), plane((weighting, sheet.mean))
            factor, total_unit = _factor(build, source, name, sheet, pixel)
            made.append(SheetPlan(name, sheet, number, weight, factor, total_unit))
        plans.append(SpeciesPlan(species, quantities, made))
    return plans


def _factor(build: BuildFile, source: Source, name: str, sheet: Sheet, pixel: float) -> tuple[float, str]:
    unit = u.Unit(sheet.unit)
    plain = source.unit(sheet.species, str(sheet.sum or sheet.mean))
    per = plain
    if sheet.sum is not None:
        side = pixel * u.Unit(build.view.unit)
        if sheet.area == "proper":
            redshift = source.facts.redshift
            if redshift is None:
                raise InputError(f"sheet {name}: area is proper, and the redshift is not known: give snapshot.redshift")
            side = side / (1.0 + redshift)
        per = plain / side**2
    try:
        factor = float((1.0 * per).to_value(unit))
    except u.UnitConversionError:
        area = "kpc2" if not build.view.flat else f"{build.view.unit}2"
        named = str(plain) or "no unit of its own"
        raise InputError(
            f"{build.path}: sheets.{name}.unit is {sheet.unit}: {sheet.sum or sheet.mean} of {sheet.species} has {named}, "
            + (f"so a sum needs one such as {plain / u.Unit(area)}" if sheet.sum else "or one like it: write that, ")
            + ("" if sheet.sum else f"or say in snapshot.species.{sheet.species}.fields what unit the field is in")
        ) from None
    return factor, str(plain) if plain != u.dimensionless_unscaled else ""


Report = Callable[[str, float, float], None]


def describe_sheet(plan: SheetPlan, coding: Coding, totals: list[float]) -> dict[str, Any]:
    """The entry of a sheet in atlas.json, without what only the finished pyramid knows (percentiles and range)."""
    sheet = plan.sheet
    return {
        "name": plan.name,
        "title": sheet.title or plan.name.replace("_", " ").replace("-", " ").capitalize(),
        "kind": "sum" if plan.weight is None else "mean",
        "species": sheet.species,
        "quantity": sheet.sum or sheet.mean,
        "weight": sheet.weight,
        **coding.attributes(),
        "unit": u.Unit(sheet.unit).to_string(),
        "area": sheet.area,
        "total": sum(totals) if plan.weight is None else None,
        "total_unit": plan.total_unit if plan.weight is None else None,
        "totals": totals if plan.weight is None else None,
    }
