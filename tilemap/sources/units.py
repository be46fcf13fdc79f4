"""What a file says about the unit of its numbers in, the factor to plain units out.

Plain units: comoving Mpc, Msun, km/s, K, km2/s2 (energy per mass), Msun/yr, none; anything else in cgs. h is removed.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any, Protocol

import astropy.units as u
import numpy as np

from tilemap.errors import InputError
from tilemap.quantities import KINDS, unit_named

NONE = u.dimensionless_unscaled
PLAIN: tuple[u.UnitBase, ...] = (u.Mpc, u.Msun, u.km / u.s, u.K, u.km**2 / u.s**2, u.Msun / u.yr)

# The first part of a dataset's name, where the file gives a factor to cgs without saying of what: (beginning, cgs unit).
_NAMED: tuple[tuple[str, u.UnitBase], ...] = (
    ("coordinate", u.cm),
    ("position", u.cm),
    ("smoothinglength", u.cm),
    ("mass", u.g),
    ("velocit", u.cm / u.s),
    ("densit", u.g / u.cm**3),
    ("internalenerg", u.cm**2 / u.s**2),
    ("specificinternalenerg", u.cm**2 / u.s**2),
    ("potential", u.cm**2 / u.s**2),
    ("pressure", u.g / u.cm / u.s**2),
    ("temperature", u.K),
    ("starformationrate", u.g / u.s),
    ("metallicit", NONE),
    ("metalmassfraction", NONE),
    ("elementabundance", NONE),
    ("elementmassfraction", NONE),
    ("electronabundance", NONE),
    ("particleid", NONE),
)


@dataclass(frozen=True)
class Stated:
    """What a file says: physical value = stored * factor * unit * scale_factor**a * h**h.

    `unit` is None where only a factor to cgs is given, `factor` None where the file says nothing at all;
    `a` and `h` are None where not said.
    """

    factor: float | None = None
    unit: u.UnitBase | None = None
    a: float | None = None
    h: float | None = None


@dataclass(frozen=True)
class Conversion:
    """plain = stored * factor, in `unit`."""

    factor: float
    unit: u.UnitBase

    def __call__(self, stored: np.ndarray) -> np.ndarray:
        """The numbers as float64 in the plain unit; the array itself where nothing changes."""
        if self.factor == 1.0:
            return np.asarray(stored, dtype=np.float64)
        return np.multiply(stored, self.factor, dtype=np.float64)


class Given(Protocol):
    """What the build file may say about a field, over what the file says."""

    @property
    def unit(self) -> str | None: ...
    @property
    def a(self) -> float | None: ...
    @property
    def h(self) -> float | None: ...


@dataclass(frozen=True)
class Moment:
    """What the exponents are applied to; None where unknown. `angle` is the unit of a flat chart."""

    a: float | None
    h: float | None
    angle: u.UnitBase | None = None


def stated_by_attributes(attributes: Mapping[str, Any]) -> Stated:
    """Read the unit of an HDF5 dataset from its attributes, in the three vocabularies that simulation codes write.

    A factor of 0 in the second is that code's habit for "no unit" and read as 1. A value that is stored as physical
    has no power of the scale factor left in it, whatever exponent stands beside.
    """
    number = {key: _number(attributes[key]) for key in attributes if _is_number(attributes[key])}
    factor = number.get("Conversion factor to CGS (not including cosmological corrections)")
    if factor is not None:
        physical = number.get("Value stored as physical", 0.0) != 0.0
        exponents = [number.get(f"U_{base} exponent") for base in "LMtTI"]
        a = 0.0 if physical else number.get("a-scale exponent")
        return Stated(factor, _cgs(exponents, (u.cm, u.g, u.s, u.K, u.A)), a, number.get("h-scale exponent"))
    factor = number.get("to_cgs")
    if factor is not None:
        exponents = [number.get(f"{base}_scaling") for base in ("length", "mass", "velocity")]
        unit = _cgs(exponents, (u.cm, u.g, u.cm / u.s))
        if factor == 0.0:
            factor, unit = 1.0, None if unit == NONE else unit
        return Stated(factor, unit, number.get("a_scaling"), number.get("h_scaling"))
    factor = number.get("CGSConversionFactor")
    if factor is not None:
        return Stated(factor or 1.0, None, number.get("aexp-scale-exponent"), number.get("h-scale-exponent"))
    return Stated()


def _cgs(exponents: list[float | None], bases: tuple[u.UnitBase, ...]) -> u.UnitBase | None:
    """The product of cgs bases to their exponents; None where the exponents are not there."""
    if all(power is None for power in exponents):
        return None
    unit = NONE
    for base, power in zip(bases, exponents, strict=True):
        if power:
            unit = unit * base ** (int(power) if float(power).is_integer() else float(power))
    return u.Unit(unit)


def _is_number(value: Any) -> bool:
    array = np.asarray(value)
    return array.size == 1 and array.dtype.kind in "fiub"


def _number(value: Any) -> float:
    return float(np.asarray(value).reshape(-1)[0])


def unit_by_name(dataset: str) -> u.UnitBase | None:
    """The cgs unit that a dataset of that name has in every code that we know of; None for other names."""
    last = dataset.rsplit("/", 1)[-1].replace("_", "").lower()
    return next((unit for beginning, unit in _NAMED if last.startswith(beginning)), None)


def conversion(
    given: Given, stated: Stated, moment: Moment, *, dataset: str, kind: str | None = None, unstated: bool = False
) -> Conversion:
    """Find the factor from stored numbers to plain units.

    With physical = stored * unit * a**A * h**B, a length becomes comoving by one power of a less.

    Parameters
    ----------
    given : Given
        Unit and exponents from the build file; each that is there stands above the file's.
    stated : Stated
        What the file says.
    moment : Moment
        Scale factor and h of the snapshot.
    dataset : str
        Its name, for messages and for the dimension where the file gives but a factor.
    kind : str, optional
        "length", "mass" or "specific energy", where the build file's key calls for it.
    unstated : bool
        Whether numbers without any unit are taken as Mpc, Msun or pure numbers (arrays and tables, which often
        cannot say), instead of being refused (snapshots, whose lengths are seldom in Mpc).

    Raises
    ------
    InputError
        Where the unit is missing, of another kind, or needs a redshift or an h that nothing tells.
    """
    if moment.angle is not None and kind == "length":
        kind = "angle"
    if given.unit is not None:
        factor, unit = 1.0, unit_named(given.unit)
    else:
        factor, unit = _stated_unit(stated, moment, dataset, kind, unstated)
    if isinstance(unit, u.UnrecognizedUnit):
        raise InputError(f"{dataset} carries the unknown unit {str(unit)!r}: give {{dataset: {dataset}, unit: ...}}")
    if kind is not None and not unit.is_equivalent(_wanted(kind, moment)):
        named = unit.to_string() or "a pure number"
        example = KINDS[kind][1]
        raise InputError(
            f"{dataset} is {named}, where a {kind} is wanted: name another dataset or give unit: {example}"
        )
    plain = _wanted(kind, moment) if kind in ("length", "angle") else plain_unit(unit, dataset)
    is_length = plain == u.Mpc
    a_power = _first(given.a, stated.a, 1.0 if is_length else 0.0) - (1.0 if is_length else 0.0)
    h_power = _first(given.h, stated.h, 0.0)
    factor *= float(unit.to(plain))
    if a_power and moment.angle is None:
        if moment.a is None:
            raise InputError(
                f"{dataset} has to be scaled by the scale factor, which no file says: give snapshot.redshift"
            )
        factor *= moment.a**a_power
    if h_power and moment.angle is None:
        if moment.h is None:
            raise InputError(f"{dataset} has to be scaled by h, which no file says: give snapshot.cosmology")
        factor *= moment.h**h_power
    return Conversion(tidy(factor), plain)


def _stated_unit(
    stated: Stated, moment: Moment, dataset: str, kind: str | None, unstated: bool
) -> tuple[float, u.UnitBase]:
    if stated.factor is not None:
        if stated.unit is not None:
            return stated.factor, stated.unit
        unit = KINDS[kind][0].cgs if kind is not None else unit_by_name(dataset)
        if unit is not None:
            # .cgs of a unit carries its scale, which the file's factor already holds
            return stated.factor, u.Unit(unit.decompose(bases=[u.cm, u.g, u.s, u.K, u.rad]) / unit.cgs.scale)
        if stated.factor == 1.0:
            return 1.0, NONE
        raise InputError(f"{dataset} has a factor to cgs but not of what: give {{dataset: {dataset}, unit: ...}}")
    if kind == "angle" and moment.angle is not None:
        return 1.0, moment.angle
    named = unit_by_name(dataset)
    if kind is None and (unstated or (named is not None and named in (NONE, u.K))):
        return 1.0, u.K if named == u.K else NONE
    if kind in ("length", "mass") and unstated:
        return 1.0, KINDS[kind][0]
    example = f"unit: {KINDS[kind][1]}" if kind else "unit: ..."
    exponents = ", a: 1, h: -1" if kind == "length" else ""
    raise InputError(f"{dataset} says no unit: give one, such as {{dataset: {dataset}, {example}{exponents}}}")


def _wanted(kind: str, moment: Moment) -> u.UnitBase:
    return moment.angle if kind == "angle" and moment.angle is not None else KINDS[kind][0]


def _first(*values: float | None) -> float:
    return next(value for value in values if value is not None)


def plain_unit(unit: u.UnitBase, dataset: str = "this") -> u.UnitBase:
    """The plain unit for numbers of that dimension: one of `PLAIN`, an angle as it is, or cgs."""
    for plain in PLAIN:
        if unit.is_equivalent(plain):
            return plain
    if unit.is_equivalent(NONE):
        return NONE
    if unit.is_equivalent(u.deg):
        return u.deg
    try:
        cgs = unit.cgs
    except (TypeError, ValueError, AttributeError) as error:
        raise InputError(f"{dataset}: unit {unit} cannot be brought to cgs: convert the numbers first") from error
    return u.Unit(cgs / cgs.scale)


def tidy(factor: float) -> float:
    """1 exactly where the factor is 1 within 1e-8: the last digits in which codes and tables disagree about a parsec."""
    return 1.0 if abs(factor - 1.0) < 1e-8 else factor
