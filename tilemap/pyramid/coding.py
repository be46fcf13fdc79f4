"""Float values in, 16-bit codes out, and back: the two codings of an atlas, each a small frozen value.

Code 0 is "nothing here". Codes 1 to 65535 stand at equal steps, in log10 of the value or in the value itself.
"""

from __future__ import annotations

import math
from abc import ABC, abstractmethod
from collections.abc import Mapping
from dataclasses import dataclass, field
from functools import lru_cache
from typing import Any, ClassVar

import numpy as np
from numba import njit
from numpy.typing import ArrayLike, NDArray

from tilemap.errors import InputError

TOP_CODE = 65535
ROUNDING_STEPS = 0.52
"""The furthest, in steps, that an encoded value may lie from its code: half a step, and what arithmetic adds."""

FLOAT_NOISE = 1e-6
"""Relative: what a few float32 additions and a division before the encoding may do, some 5 roundings of 6e-8, twice over."""

SMALLEST_STEP_DEX = 1e-5
"""Below this the float32 logarithm would no longer be good to 0.02 of a step."""

# log2(m) = (m - 1) P(m - 1) for m in [1, 2): P of degree 8 interpolates at the Chebyshev nodes of [0, 1], which is
# within a factor of 2 of the best polynomial (Trefethen 2013, Approximation Theory and Approximation Practice, ch. 16).
# Largest error 2.6e-8 on 10^5 points; tests/pyramid/test_coding.py makes them again.
LOG2_POLYNOMIAL = (
    1.4426949917298633,
    -0.7213395131455262,
    0.48067888958949984,
    -0.3582990695742736,
    0.27522121226268376,
    -0.19623895175607226,
    0.11183207376218021,
    -0.04194500882618038,
    0.007395402112248414,
)
_C0, _C1, _C2, _C3, _C4, _C5, _C6, _C7, _C8 = (np.float32(c) for c in LOG2_POLYNOMIAL)

_ZERO, _HALF, _ONE, _TOP = np.float32(0.0), np.float32(0.5), np.float32(1.0), np.float32(TOP_CODE)
_SHIFT32, _FRACTION32, _BIAS32, _UNITY32 = np.int32(23), np.int32(0x7FFFFF), np.int32(127), np.int32(0x3F800000)
_INFINITE32 = np.int32(0x7F800000)
_SHIFT64, _BIAS64, _INFINITE64 = np.int64(52), np.int64(1023), np.int64(0x7FF0000000000000)


@njit(inline="always")
def _log_code(exponent, fraction, scale, offset):
    """Code and a half, of which the whole part is wanted, from log2 = exponent + log2(1 + fraction); 0 below code 1."""
    x = fraction
    p = (((((((_C8 * x + _C7) * x + _C6) * x + _C5) * x + _C4) * x + _C3) * x + _C2) * x + _C1) * x + _C0
    code = exponent * scale + (p * x * scale + offset) + _HALF
    code = min(code, _TOP)
    return code if code >= _ONE else _ZERO


# Numbers are taken apart by their bits (IEEE 754), so that the loops hold no call and no branch and LLVM makes vector
# instructions of them: 20 to 40 times faster than log10 one by one. Signed bits put all that is negative, or zero,
# at or below zero, and NaN above infinity.
@njit(nogil=True, cache=True, error_model="numpy")
def _encode_log32(bits, codes, lowest_exponent, scale, offset):
    for i in range(bits.size):
        b = bits[i]
        exponent = np.float32((b >> _SHIFT32) - _BIAS32 - lowest_exponent)
        fraction = np.int32((b & _FRACTION32) | _UNITY32).view(np.float32) - _ONE
        code = _log_code(exponent, fraction, scale, offset)
        code = code if b > np.int32(0) else _ZERO
        code = code if b < _INFINITE32 else _TOP
        code = code if b <= _INFINITE32 else _ZERO
        codes[i] = np.uint16(np.int32(code))


@njit(nogil=True, cache=True, error_model="numpy")
def _encode_log64(bits, codes, lowest_exponent, scale, offset):
    for i in range(bits.size):
        b = bits[i]
        exponent = np.float32(np.int32(b >> _SHIFT64) - np.int32(_BIAS64) - lowest_exponent)
        # The 23 leading bits of the fraction: 1.2e-7 of the value, 5e-8 dex.
        fraction = np.int32((np.int32(b >> np.int64(29)) & _FRACTION32) | _UNITY32).view(np.float32) - _ONE
        code = _log_code(exponent, fraction, scale, offset)
        code = code if b > np.int64(0) else _ZERO
        code = code if b < _INFINITE64 else _TOP
        code = code if b <= _INFINITE64 else _ZERO
        codes[i] = np.uint16(np.int32(code))


@njit(nogil=True, cache=True, error_model="numpy")
def _encode_linear(values, codes, low, steps_per_unit):
    # In float64: at code 65535, float32 would be off by 0.01 of a step and more where low is far from zero.
    for i in range(values.size):
        value = np.float64(values[i])
        code = (value - low) * steps_per_unit + 1.5
        code = min(max(code, 1.0), 65535.0)
        codes[i] = np.uint16(np.int32(code if value == value else 0.0))


@njit(nogil=True, cache=True)
def _look_up(codes, table, values):
    for i in range(codes.size):
        values[i] = table[codes[i]]


class Coding(ABC):
    """What the codings share. A coding is a frozen value; `CODINGS` holds the classes by name."""

    name: ClassVar[str]
    low: float
    step: float
    nothing: float

    def _key(self) -> tuple[Any, ...]:
        # NaN differs from itself; two codings for which nothing is NaN do not.
        return (self.name, self.low, self.step, None if math.isnan(self.nothing) else self.nothing)

    def __eq__(self, other: object) -> bool:
        return isinstance(other, Coding) and self._key() == other._key()

    def __hash__(self) -> int:
        return hash(self._key())

    def encode(self, values: ArrayLike) -> NDArray[np.uint16]:
        """Nearest codes of `values` (any shape; float32 and float64 as they are, all else by way of float64)."""
        array = np.asarray(values)
        if array.dtype not in (np.float32, np.float64) or not array.dtype.isnative:
            array = array.astype(np.float64)
        codes = np.empty(array.shape, dtype=np.uint16)
        self._encode_into(np.ascontiguousarray(array).reshape(-1), codes.reshape(-1))
        return codes

    def decode(self, codes: ArrayLike) -> NDArray[np.float32]:
        """Values of `codes` (uint16, any shape), in the sheet's unit; code 0 becomes `nothing`."""
        array = np.ascontiguousarray(np.asarray(codes), dtype=np.uint16)
        values = np.empty(array.shape, dtype=np.float32)
        _look_up(array.reshape(-1), self.table(), values.reshape(-1))
        return values

    def table(self) -> NDArray[np.float32]:
        """The value of every code: float32 (65536,), read-only. What float32 cannot hold is infinite, or zero."""
        return _table(self)

    def bounds(self) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
        """For every code, between which two values that which was encoded lay: two float64 (65536,), read-only.

        Codes at the ends also stand for what was clipped to them, so a bound may be infinite; code 0 says "nothing",
        which counts as zero, and in log coding anything from zero to half a step below the lowest value.
        """
        return _bounds(self)

    def attributes(self) -> dict[str, Any]:
        """What `atlas.json` says of the coding: its name, `low` and `step`."""
        return {"coding": self.name, "low": self.low, "step": self.step}

    @staticmethod
    def from_attributes(attributes: Mapping[str, Any]) -> LogCoding | LinearCoding:
        """The coding of a sheet, from its description in `atlas.json` or in its Zarr group.

        `nothing` is not written down, it follows: 0 for a sum in log coding (where there is nothing, the surface
        density is zero), NaN for every mean and dispersion (there is no temperature where there is no gas) and in
        linear coding.

        Raises
        ------
        InputError
            Where the coding is unknown, or its numbers are missing or of no use.
        """
        name = attributes.get("coding")
        if name not in CODINGS:
            raise InputError(f"unknown coding {name!r}: the codings are {' and '.join(CODINGS)}")
        try:
            low, step = float(attributes["low"]), float(attributes["step"])
        except (KeyError, TypeError, ValueError) as error:
            raise InputError(f"a {name} coding needs the numbers low and step; found {dict(attributes)}") from error
        if name == "log":
            return LogCoding(low, step, nothing=math.nan if attributes.get("kind") in ("mean", "dispersion") else 0.0)
        return LinearCoding(low, step)

    @abstractmethod
    def _encode_into(self, values: NDArray[Any], codes: NDArray[np.uint16]) -> None:
        """Write the codes of one line of values."""

    @abstractmethod
    def _exact(self, steps: NDArray[np.float64]) -> NDArray[np.float64]:
        """Values that lie so many steps above the lowest."""


@dataclass(frozen=True, eq=False)
class LogCoding(Coding):
    """value = 10^(low + step (code - 1)): for values that are never negative.

    Zero, negative and NaN become code 0, and so does what is more than half a step below `low`; values above the top
    are clipped to code 65535.

    Parameters
    ----------
    low : float
        log10 of the value of code 1, in the sheet's unit; from -300 to 300.
    step : float
        dex; the rounding error of a value is at most 10^(step / 2) - 1, 0.23 % for 0.002.
    nothing : float
        What code 0 decodes to: 0 in sums, NaN in means.

    Raises
    ------
    InputError
        Where low or step is out of bounds.
    """

    low: float
    step: float = 0.002
    nothing: float = 0.0
    name: ClassVar[str] = "log"

    def __post_init__(self) -> None:
        if not -300.0 <= self.low <= 300.0:
            raise InputError(f"log coding: low is {self.low}; it is a log10 and must lie between -300 and 300")
        if not SMALLEST_STEP_DEX <= self.step <= 1.0:
            raise InputError(f"log coding: step is {self.step} dex; it must lie between {SMALLEST_STEP_DEX} and 1")

    def _encode_into(self, values: NDArray[Any], codes: NDArray[np.uint16]) -> None:
        # Subnormal numbers have no exponent of their own. In float64 none is as large as 1e-300.
        if values.dtype == np.float32 and self.low - self.step < math.log10(float(np.finfo(np.float32).tiny)):
            values = values.astype(np.float64)
        # Exponents are counted from that of the lowest value: then no number in the sum is far above 65535, and
        # float32 holds it to 0.004.
        lowest = math.floor(self.low / math.log10(2.0))
        scale = math.log10(2.0) / self.step
        offset = 1.0 + (lowest * math.log10(2.0) - self.low) / self.step
        if values.dtype == np.float32:
            _encode_log32(values.view(np.int32), codes, np.int32(lowest), np.float32(scale), np.float32(offset))
        else:
            _encode_log64(values.view(np.int64), codes, np.int32(lowest), np.float32(scale), np.float32(offset))

    def _exact(self, steps: NDArray[np.float64]) -> NDArray[np.float64]:
        with np.errstate(over="ignore"):
            return np.power(10.0, self.low + self.step * steps)


@dataclass(frozen=True, eq=False)
class LinearCoding(Coding):
    """value = low + step (code - 1): for signed values, such as velocities.

    NaN becomes code 0, and code 0 becomes NaN; values outside are clipped to codes 1 and 65535.

    Parameters
    ----------
    low, step : float
        In the sheet's unit; step above zero.

    Raises
    ------
    InputError
        Where low is not finite or step not above zero.
    """

    low: float
    step: float
    nothing: float = field(default=math.nan, init=False)
    name: ClassVar[str] = "linear"

    def __post_init__(self) -> None:
        if not math.isfinite(self.low):
            raise InputError(f"linear coding: low is {self.low}; it must be a finite number")
        if not (self.step > 0.0 and math.isfinite(self.step)):
            raise InputError(f"linear coding: step is {self.step}; it must be a finite number above zero")

    def _encode_into(self, values: NDArray[Any], codes: NDArray[np.uint16]) -> None:
        _encode_linear(values, codes, self.low, 1.0 / self.step)

    def _exact(self, steps: NDArray[np.float64]) -> NDArray[np.float64]:
        return self.low + self.step * steps


CODINGS: dict[str, type[LogCoding] | type[LinearCoding]] = {"log": LogCoding, "linear": LinearCoding}


@lru_cache(maxsize=64)
def _table(coding: Coding) -> NDArray[np.float32]:
    with np.errstate(over="ignore"):
        table = coding._exact(np.arange(-1.0, TOP_CODE)).astype(np.float32)
    table[0] = coding.nothing
    table.flags.writeable = False
    return table


@lru_cache(maxsize=64)
def _bounds(coding: Coding) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    steps = np.arange(-1.0, TOP_CODE)
    low, high = coding._exact(steps - ROUNDING_STEPS), coding._exact(steps + ROUNDING_STEPS)
    with np.errstate(invalid="ignore"):
        low, high = low - FLOAT_NOISE * np.abs(low), high + FLOAT_NOISE * np.abs(high)
    low[0] = 0.0
    high[0] = high[0] if isinstance(coding, LogCoding) else 0.0
    if isinstance(coding, LinearCoding):
        low[1] = -math.inf
    high[TOP_CODE] = math.inf
    low.flags.writeable = high.flags.writeable = False
    return low, high
