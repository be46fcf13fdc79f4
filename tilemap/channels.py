"""Particles in, what they add to planes out; and back: how the planes of a species become the values of its sheets.

A sum is one plane. A mean is two, its numerator and its weight, kept apart until they are divided, last and at every
level; a dispersion has the numerator of the squares besides. Sheets that need the same plane share it.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from tilemap.buildfile import Sheet
from tilemap.errors import InputError
from tilemap.pyramid.coding import Coding, LinearCoding, LogCoding
from tilemap.sources import Chunk

Report = Callable[[str, float, float], None]
"""Told of progress: (phase, done, total)."""

LOG_ROOM_DEX = 40.0
"""How far below the mean of a log sheet its lowest code lies; at step 0.002 there are 91 dex above. Nothing that a
single-precision image holds of a particle's kernel is cut off, and nothing is clipped."""
LINEAR_STEPS = 65000
LARGEST_BITS = 30
"""The largest of the first particles adds about 2^30 to a plane: single precision then holds 10^29 times as much, and
10^-47 of it. A luminosity in erg/s as it is would be past its end."""
FLOOR = 2e-3
"""A dispersion is the small difference of two large numbers: below this share of the largest value, counted from near
the mean of all, single precision is what one sees."""


@dataclass(frozen=True)
class Plane:
    """One image that is drawn: the sum of an extensive field, times the averaged field or its square where there is one."""

    extensive: str
    averaged: str | None = None
    squared: bool = False


@dataclass(frozen=True)
class SheetPlan:
    """How one sheet is made from the planes of its species.

    Attributes
    ----------
    name : str
    sheet : Sheet
    plane : int
        The sum, or the numerator of the mean, or that of the mean of squares.
    weight : int or None
        The plane that a mean is divided by.
    factor : float
        From plane per pixel to the sheet's unit.
    total_unit : str
        Unit of the plane's own sum: what `totals` are in.
    mean : int or None
        For a dispersion, the numerator of the mean that it is about.
    """

    name: str
    sheet: Sheet
    plane: int
    weight: int | None
    factor: float
    total_unit: str
    mean: int | None = None

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
        Its name; the names of several that are drawn together, joined by +.
    quantities : list of Plane
    sheets : list of SheetPlan
    parts : tuple of str
        The species that are drawn together; one, mostly.
    ranges : float64 (planes, 2)
        Smallest and largest value of the averaged field, over particles of positive weight, or of the summed one;
        filled while reading. Masses and counts, which are not negative, are left out.
    scales : float64 (planes,)
        Powers of two that planes are divided by, so that single precision holds what is in them; see `settle`.
    shifts : float64 (planes,)
        What is taken off the averaged field where a dispersion is wanted, so that little cancels; see `settle`.
    """

    species: str
    quantities: list[Plane]
    sheets: list[SheetPlan]
    parts: tuple[str, ...] = ()
    ranges: NDArray[np.float64] = field(default_factory=lambda: np.empty((0, 2)))
    scales: NDArray[np.float64] = field(default_factory=lambda: np.empty(0))
    shifts: NDArray[np.float64] = field(default_factory=lambda: np.empty(0))

    def __post_init__(self) -> None:
        self.parts = self.parts or (self.species,)
        self.shifts = np.zeros(len(self.quantities))
        self._shifted: dict[tuple[str, str | None], bool] = {
            (plane.extensive, plane.averaged): False for plane in self.quantities if plane.squared
        }
        self.ranges = np.tile([np.inf, -np.inf], (len(self.quantities), 1))
        self.scales = np.ones(len(self.quantities))
        self._settled = np.zeros(len(self.quantities), dtype=bool)

    @property
    def fields(self) -> list[str]:
        """The fields to read, mass and count left out."""
        names = {name for plane in self.quantities for name in (plane.extensive, plane.averaged)}
        return sorted(str(name) for name in names - {None, "mass", "count"})

    def settle(self, chunk: Chunk) -> None:
        """Settle scales and shifts by the first chunk that is not zero; call before `planes`, from one thread.

        Powers of two change no bit of what is drawn, so the chunk does not matter. A shift is the chunk's mean, rounded
        so coarsely that most chunks would give the same.
        """
        for pair in [pair for pair, settled in self._shifted.items() if not settled]:
            self._settle_shift(chunk, *pair)
        for plane in map(int, np.flatnonzero(~self._settled)):
            largest = np.abs(self._amount(chunk, plane)[0]).max(initial=0.0)
            if 0 < largest < np.inf:
                self.scales[plane] = 2.0 ** (math.frexp(largest)[1] - LARGEST_BITS)
                self._settled[plane] = True

    def _settle_shift(self, chunk: Chunk, extensive: str, averaged: str | None) -> None:
        weight, value = _field(chunk, extensive), _field(chunk, str(averaged))
        if not weight.sum() > 0:
            return
        mean = float(np.average(value, weights=weight))
        spread = math.sqrt(float(np.average((value - mean) ** 2, weights=weight)))
        grain = 2.0 ** (math.frexp(spread)[1] - 1) if spread > 0 else 0.0
        shift = round(mean / grain) * grain if grain else mean
        for number, plane in enumerate(self.quantities):
            if (plane.extensive, plane.averaged) == (extensive, averaged):
                self.shifts[number] = shift
        self._shifted[extensive, averaged] = True

    def state(self) -> dict[str, NDArray]:
        """What is settled so far, for `take_up`."""
        shifted = np.array([*self._shifted.values()], dtype=bool)
        return {"scales": self.scales, "shifts": self.shifts, "settled": self._settled, "shifted": shifted}

    def take_up(self, state: dict[str, NDArray]) -> None:
        """Settle as an earlier, stopped build did."""
        self.scales, self.shifts, self._settled = (state[name].copy() for name in ("scales", "shifts", "settled"))
        self._shifted = dict(zip(self._shifted, state["shifted"].tolist(), strict=True))

    def scale(self, sheet: SheetPlan) -> float:
        """What the sheet's `values` have to be multiplied by, besides its factor."""
        below = 1.0 if sheet.weight is None else self.scales[sheet.weight]
        return float(self.scales[sheet.plane if sheet.mean is None else sheet.mean] / below)

    def floor(self, sheet: SheetPlan) -> float | None:
        """For a dispersion, what is not to be told from zero, in the sheet's unit."""
        if sheet.mean is None or not np.isfinite(self.ranges[sheet.mean]).all():
            return None
        return float(FLOOR * np.abs(self.ranges[sheet.mean] - self.shifts[sheet.mean]).max() * sheet.factor)

    def values(self, sheet: SheetPlan, planes: NDArray[np.float32]) -> NDArray[np.float32]:
        """What is coded of a sheet: its `values`, means held to the range of what they average.

        They cannot leave it but by rounding: two planes divided are good to 1e-6, and a range may be narrower.
        """
        if sheet.mean is not None:
            return self._spread(sheet, sheet.mean, planes)
        values = sheet.values(planes)
        if sheet.weight is None:
            return values
        scale = self.scale(sheet)
        if self.shifts[sheet.plane]:
            values += np.float32(self.shifts[sheet.plane] / scale)
        low, high = (self.ranges[sheet.plane] / scale).astype(np.float32)
        return np.clip(values, low, high, out=values)

    def _spread(self, sheet: SheetPlan, mean: int, planes: NDArray[np.float32]) -> NDArray[np.float32]:
        """The square root of the mean of squares less the square of the mean, in units of the mean's plane."""
        assert sheet.weight is not None
        weight = planes[sheet.weight]
        there = weight > 0
        first = np.divide(planes[mean], weight, out=np.full(weight.shape, np.nan, dtype=np.float32), where=there)
        values = np.divide(planes[sheet.plane], weight, out=np.zeros(weight.shape, dtype=np.float32), where=there)
        # A product of powers of two: exact.
        values *= np.float32(self.scales[sheet.plane] * self.scales[sheet.weight] / self.scales[mean] ** 2)
        values -= first * first
        # No more than half the range lies between a value and the mean (Popoviciu 1935, Mathematica 9, 129).
        most = np.float32(self._half_range(sheet) / self.scale(sheet))
        return np.minimum(np.sqrt(np.maximum(values, 0, out=values), out=values), most, out=values)

    def _half_range(self, sheet: SheetPlan) -> float:
        low, high = self.ranges[sheet.plane]
        return float((high - low) / 2) if np.isfinite(high - low) else 0.0

    def _amount(self, chunk: Chunk, plane: int) -> tuple[NDArray[np.float64], NDArray[np.float64] | None]:
        """What each particle adds to a plane, unscaled; and the values whose range matters."""
        what = self.quantities[plane]
        amount = _field(chunk, what.extensive)
        if what.averaged is None:
            return amount, None if what.extensive in ("mass", "count") else amount
        value = _field(chunk, what.averaged)
        shifted = value - self.shifts[plane] if self.shifts[plane] else value
        return amount * (shifted**2 if what.squared else shifted), value[amount > 0]

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
        if plan.mean is not None:
            half = self._half_range(plan) * plan.factor
            if sheet.coding == "log":
                return LogCoding(_floor_log(half * 1e-6), sheet.step or 0.002, nothing=math.nan)
            return LinearCoding(0.0, sheet.step or half / LINEAR_STEPS or 1.0)
        if sheet.coding == "log":
            step = sheet.step or 0.002
            if self.ranges[plan.plane, 0] < 0:
                more = "" if plan.weight is not None else f", and a step in {sheet.unit}"
                raise InputError(
                    f"sheet {plan.name}: {sheet.summed or sheet.mean} goes down to {self.ranges[plan.plane, 0]:.6g} "
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
