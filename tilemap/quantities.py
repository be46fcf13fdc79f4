"""Text with units in ("1.5e6 Msun", "30 arcmin"), numbers and astropy units out, with sentences for what does not parse."""

from __future__ import annotations

import difflib
import math
import re
import warnings
from collections.abc import Iterable

import astropy.units as u
import numpy as np

from tilemap.errors import InputError

COMMON_UNITS = (
    "Mpc kpc pc AU km m cm Msun kg g K km/s yr Myr Gyr s erg J Lsun mag deg arcmin arcsec rad mas percent count".split()
)

# What a kind of number is called, the unit that shows its dimension, and one to give as an example.
KINDS: dict[str, tuple[u.UnitBase, str]] = {
    "length": (u.Mpc, "kpc"),
    "mass": (u.Msun, "Msun"),
    "angle": (u.deg, "deg"),
    "specific energy": (u.km**2 / u.s**2, "km2/s2"),
    "density": (u.g / u.cm**3, "g/cm3"),
}

_HUBBLE = re.compile(r"(?<![A-Za-z_])(h|little_?h)(?![A-Za-z_])")


def nearest(word: str, known: Iterable[str]) -> str | None:
    """The known word most like `word` (capitals ignored), or None where none is alike."""
    lowered = {name.lower(): name for name in known}
    close = difflib.get_close_matches(str(word).lower(), list(lowered), n=1, cutoff=0.6)
    return lowered[close[0]] if close else None


def suggestion(word: str, known: Iterable[str]) -> str:
    """A clause that helps: "the nearest is X", or all that is known where nothing is alike."""
    names = list(known)
    close = nearest(word, names)
    if close is not None:
        return f"the nearest known is {close!r}"
    return f"known here: {', '.join(names)}" if names else "none is known here"


def span(low: float, high: float) -> str:
    """ "low to high", to six digits, or as many more as it takes to tell the two apart and show how wide the range is."""
    size, width = max(abs(low), abs(high)), abs(high - low)
    digits = 6 if width == 0 else min(max(6, math.ceil(math.log10(size / width)) + 3), 17)
    return f"{low:.{digits}g} to {high:.{digits}g}"


def unit_named(text: str, kind: str | None = None) -> u.UnitBase:
    """The astropy unit written in `text`.

    Parameters
    ----------
    text : str
        Any unit that astropy reads; a leading number scales it ("1e10 Msun").
    kind : str, optional
        A key of `KINDS`: the unit must have that dimension.

    Raises
    ------
    InputError
        Where the unit is unknown, is of another kind, or holds an h (which would be hours).
    """
    example = f", such as {KINDS[kind][1]}" if kind else ""
    if _HUBBLE.search(text):
        raise InputError(f"unit {text!r}: h would be read as hours: leave it out and give its exponent beside, h: -1")
    try:
        with warnings.catch_warnings():
            warnings.simplefilter("ignore", u.UnitsWarning)
            unit = u.Unit(text)
    except (ValueError, TypeError) as error:
        raise InputError(f"unknown unit {text!r}: {_unit_advice(text) or 'write a unit' + example}") from error
    if isinstance(unit, u.StructuredUnit) or not isinstance(unit, u.UnitBase):
        raise InputError(f"unit {text!r} is not a plain unit: convert the numbers first")
    if kind and not unit.is_equivalent(KINDS[kind][0]):
        article = "an" if kind[0] in "aeiou" else "a"
        raise InputError(f"unit {text!r} is not {article} {kind}: write a unit of {kind}{example}")
    return unit


def _unit_advice(text: str) -> str | None:
    """For the first word in the text that is no unit: the nearest that is, or what comoving units are here."""
    for word in re.findall(r"(?<![\d.])[A-Za-z_]+", text):
        try:
            u.Unit(word)
        except ValueError:
            if word[0] in "cp" and word[1:] in ("kpc", "Mpc", "pc", "m", "cm"):
                return f"write {word[1:]}; comoving or proper is said by a: {1 if word[0] == 'c' else 0}"
            close = nearest(word, COMMON_UNITS)
            return f"the nearest known to {word!r} is {close!r}" if close else None
    return None


def split_quantity(text: str) -> tuple[float, str] | None:
    """("1.5e6 Msun") -> (1.5e6, "Msun"); the unit is empty where there is none; None where no number leads the text."""
    first, _, rest = text.strip().partition(" ")
    match = re.fullmatch(r"([-+]?(?:\d+\.?\d*|\.\d+)(?:[eE][-+]?\d+)?)(.*)", first)
    if match is None:
        return None
    return float(match[1]), f"{match[2]} {rest}".strip()


def number_in(value: object, unit: u.UnitBase, kind: str) -> float:
    """A number, or text "number unit", as a number in `unit`.

    Raises
    ------
    InputError
        Where it is neither, is not finite, or its unit is not of that `kind` (a key of `KINDS`).
    """
    if isinstance(value, str):
        parts = split_quantity(value)
        if parts is None:
            raise InputError(
                f"{value!r} is not a {kind}: write a number, or a number and a unit, such as 5 {KINDS[kind][1]}"
            )
        number, text = parts
        if text:
            number = float((number * unit_named(text, kind)).to_value(unit))
    elif isinstance(value, int | float) and not isinstance(value, bool):
        number = float(value)
    else:
        raise InputError(
            f"{value!r} is not a {kind}: write a number, or a number and a unit, such as 5 {KINDS[kind][1]}"
        )
    if not np.isfinite(number):
        raise InputError(f"{value!r} is not a finite number")
    return number
