"""Single values of a build file: what is written in, plain numbers and checked text out, each an annotated type.

Lengths come out in the unit of the view, which the validation is told in its context. What is wrong is a ValueError
with what would be right; `buildcheck` puts the key before it.
"""

from __future__ import annotations

import itertools
import math
from typing import Annotated, Any

import astropy.units as u
import pydantic
from pydantic import BeforeValidator, ValidationInfo

from tilemap.errors import InputError
from tilemap.quantities import nearest, number_in, unit_named

KERNEL_NAMES = ("cubic", "quartic", "quintic", "wendland-c2", "wendland-c4", "wendland-c6")
TILE = 512


def _length(value: Any, info: ValidationInfo) -> float:
    unit: u.UnitBase = (info.context or {}).get("unit", u.Mpc)
    return _sayable(number_in, value, unit, "length" if unit.is_equivalent(u.Mpc) else "angle")


def _positive_length(value: Any, info: ValidationInfo) -> float:
    number = _length(value, info)
    if number <= 0:
        raise ValueError(f"{value!r}: it must be above zero")
    return number


def _mass(value: Any) -> float:
    number = _sayable(number_in, value, u.Msun, "mass")
    if number < 0:
        raise ValueError(f"{value!r}: a mass may not be negative")
    return number


def _unit_text(value: Any) -> Any:
    if isinstance(value, str):
        _sayable(unit_named, value)
    return value


def _sayable(function: Any, *arguments: Any) -> Any:
    """Call, with InputError turned into the ValueError that pydantic collects together with the key path."""
    try:
        return function(*arguments)
    except InputError as error:
        raise ValueError(str(error)) from error


def _kernel(value: Any) -> Any:
    if value not in KERNEL_NAMES:
        close = nearest(str(value), KERNEL_NAMES)
        hint = f"the nearest is {close!r}; " if close else ""
        raise ValueError(f"unknown kernel {value!r}: {hint}the kernels are {', '.join(KERNEL_NAMES)}")
    return value


def _one_or_more(value: Any) -> Any:
    return [value] if isinstance(value, str | int | float) else value


def _box(value: Any, info: ValidationInfo) -> Any:
    sides = value if isinstance(value, list | tuple) else [value] * 3
    if len(sides) != 3:
        raise ValueError(f"{len(sides)} sides are given: a box has one length or three")
    return tuple(_positive_length(side, info) for side in sides)


def _centre(value: Any, info: ValidationInfo) -> Any:
    if not isinstance(value, list | tuple) or len(value) not in (2, 3):
        raise ValueError(f"{value!r}: write three lengths, [x, y, z], or two for a flat chart")
    return tuple(_length(number, info) for number in [*value, 0.0][:3])


def _direction(value: Any) -> tuple[float, ...]:
    numbers = value if isinstance(value, list | tuple) else []
    if len(numbers) != 3 or not all(isinstance(n, int | float) and not isinstance(n, bool) for n in numbers):
        raise ValueError(f"{value!r}: write a direction as three numbers, [x, y, z], such as [1, 1, 0]")
    length = math.sqrt(sum(float(n) ** 2 for n in numbers))
    if not 0.0 < length < math.inf:
        raise ValueError(f"{value!r} is no direction: at least one of the numbers must not be zero, and all be finite")
    return tuple(float(n) / length for n in numbers)


def _slabs(value: Any, info: ValidationInfo) -> Any:
    if isinstance(value, list | tuple):
        edges = tuple(_length(edge, info) for edge in value)
        if len(edges) < 2:
            raise ValueError("a list of slab edges needs at least two of them")
        for lower, upper in itertools.pairwise(edges):
            if upper <= lower:
                raise ValueError(f"slab edges must increase, but {upper:g} follows {lower:g}")
        return edges
    if isinstance(value, bool) or not isinstance(value, int) or value < 1:
        raise ValueError(f"{value!r}: write a count of slabs (1 or more) or a list of increasing depth edges")
    return value


def _pixels(value: Any) -> Any:
    if isinstance(value, bool) or not isinstance(value, int):
        raise ValueError(f"{value!r}: write a whole number of pixels, a multiple of {TILE}")
    if value < TILE or value % TILE:
        raise ValueError(f"{value} is not a multiple of {TILE}: the nearest is {max(1, round(value / TILE)) * TILE}")
    return value


PositiveLength = Annotated[float, BeforeValidator(_positive_length)]
UnitText = Annotated[str, BeforeValidator(_unit_text)]
Name = Annotated[str, pydantic.Field(pattern=r"^[A-Za-z0-9][A-Za-z0-9._-]*$")]
Texts = Annotated[list[str], BeforeValidator(_one_or_more)]
MassNumber = Annotated[float, BeforeValidator(_mass)]
KernelName = Annotated[str, BeforeValidator(_kernel)]
Box = Annotated[tuple[float, float, float], BeforeValidator(_box)]
Centre = Annotated[tuple[float, float, float], BeforeValidator(_centre)]
Direction = Annotated[tuple[float, float, float], BeforeValidator(_direction)]
Pixels = Annotated[int, BeforeValidator(_pixels)]
Slabs = Annotated[int | tuple[float, ...], BeforeValidator(_slabs)]
