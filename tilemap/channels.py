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
LARGEST_BITS = 30
"""The largest of the first particles adds about 2^30 to a plane: single precision then holds 10^29 times as much, and
10^-47 of it. A luminosity in erg/s as it is would be past its end."""


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

    def of_planes(self, coding: Coding, scale: float) -> Coding:
        """The coding that gives `values` the codes that `coding` gives the same in the sheet's unit."""
        factor = self.factor * scale
        if isinstance(coding, LogCoding):
            return LogCoding(coding.low - math.log10(factor), coding.step, coding.nothing)
        return LinearCoding(coding.low / factor, coding.step / factor)

    def values(self, planes: NDArray[np.float32]) -> NDArray[np.float32]:
        """What is coded, float32 (rows, columns), from planes (channels, rows, columns): the sheet's values over
        `factor` and scale, NaN where a mean has no weight."""
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
        Smallest and largest value of the averaged field, over particles of positive weight, or of the summed one;
        filled while reading. Masses and counts, which are not negative, are left out.
    scales : float64 (planes,)
        Powers of two that planes are divided by, so that single precision holds what is in them; see `settle`.
    """

    species: str
    quantities: list[tuple[str, str | None]]
    sheets: list[SheetPlan]
    ranges: NDArray[np.float64] = field(default_factory=lambda: np.empty((0, 2)))
    scales: NDArray[np.float64] = field(default_factory=lambda: np.empty(0))

    def __post_init__(self) -> None:
        self.ranges = np.tile([np.inf, -np.inf], (len(self.quantities), 1))
        self.scales = np.ones(len(self.quantities))
        self._settled = np.zeros(len(self.quantities), dtype=bool)

    @property
    def fields(self) -> list[str]:
        """The fields to read, mass and count left out."""
        names = {name for pair in self.quantities for name in pair if name not in (None, "mass", "count")}
        return sorted(str(name) for name in names)

    def settle(self, chunk: Chunk) -> None:
        """Settle the scales by the first chunk that is not zero; call before `planes`, from one thread.

        Powers of two change no bit of what is drawn, so the chunk does not matter.
        """
        for plane in map(int, np.flatnonzero(~self._settled)):
            largest = np.abs(self._amount(chunk, plane)[0]).max(initial=0.0)
            if 0 < largest < np.inf:
                self.scales[plane] = 2.0 ** (math.frexp(largest)[1] - LARGEST_BITS)
                self._settled[plane] = True

    def scale(self, sheet: SheetPlan) -> float:
        """What the sheet's `values` have to be multiplied by, besides its factor."""
        below = 1.0 if sheet.weight is None else self.scales[sheet.weight]
        return float(self.scales[sheet.plane] / below)

    def values(self, sheet: SheetPlan, planes: NDArray[np.float32]) -> NDArray[np.float32]:
        """What is coded of a sheet: its `values`, means held to the range of what they average.

        They cannot leave it but by rounding: two planes divided are good to 1e-6, and a range may be narrower.
        """
        values = sheet.values(planes)
        if sheet.weight is None:
            return values
        low, high = (self.ranges[sheet.plane] / self.scale(sheet)).astype(np.float32)
        return np.clip(values, low, high, out=values)

    def _amount(self, chunk: Chunk, plane: int) -> tuple[NDArray[np.float64], NDArray[np.float64] | None]:
        """What each particle adds to a plane, unscaled; and the values whose range matters."""
        extensive, averaged = self.quantities[plane]
        amount = _field(chunk, extensive)
        if averaged is None:
            return amount, None if extensive in ("mass", "count") else amount
        value = _field(chunk, averaged)
        return amount * value, value[amount > 0]

    def planes(self, chunk: Chunk) -> tuple[NDArray[np.float32], NDArray[np.float64]]:
        """What each particle adds to each plane, float32 (n, planes); and the ranges met, float64 (planes, 2)."""
        out = np.empty((len(chunk), len(self.quantities)), dtype=np.float32)
        ranges = np.tile([np.inf, -np.inf], (len(self.quantities), 1))
        for plane in range(len(self.quantities)):
            amount, ranged = self._amount(chunk, plane)
            if ranged is not None and len(ranged):
                ranges[plane] = ranged.min(), ranged.max()
            np.multiply(amount, 1.0 / self.scales[plane], out=out[:, plane], casting="same_kind")
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
            if self.ranges[plan.plane, 0] < 0:
                more = "" if plan.weight is not None else f", and a step in {sheet.unit}"
                raise InputError(
                    f"sheet {plan.name}: {sheet.sum or sheet.mean} goes down to {self.ranges[plan.plane, 0]:.6g} "
                    f"{plan.total_unit}, and log coding holds positive values only: write coding: linear{more}"
                )
            if plan.weight is None:
                centre = mean_per_pixel * plan.factor
                return LogCoding(_floor_log(centre) - min(LOG_ROOM_DEX, 30000 * step), step)
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
