"""A table file in, plain named columns out: one-dimensional arrays of numbers or text, each with its unit.

astropy reads the file; what Parquet and a page cannot show as it is (vectors, times, lists) is spread out or written as
text here, so that no column is lost.
"""

from __future__ import annotations

import re
import warnings
from dataclasses import dataclass
from pathlib import Path

import numpy as np
from astropy.table import Table
from astropy.table.serialize import represent_mixins_as_columns

from tilemap.errors import InputError

FORMATS = {
    ".ecsv": "ascii.ecsv",
    ".csv": "ascii.csv",
    ".vot": "votable",
    ".votable": "votable",
    ".xml": "votable",
    ".fits": "fits",
    ".fit": "fits",
}
# astropy's long names for solar units, and the short ones that this project shows everywhere
SOLAR = re.compile(r"\bsol(Mass|Lum|Rad)\b")
SHORT = {"Mass": "Msun", "Lum": "Lsun", "Rad": "Rsun"}


@dataclass(frozen=True)
class Column:
    """One column: `values` is (n,) of float, integer or object (text, None where missing); `unit` is "" where none."""

    name: str
    values: np.ndarray
    unit: str

    @property
    def is_number(self) -> bool:
        return self.values.dtype.kind in "iuf"


def read_columns(path: Path) -> list[Column]:
    """Read every column of an ECSV, VOTable, FITS or CSV table.

    Vector columns become one column a component (``spin_0``, ``spin_1``, ...). Masked numbers become NaN. Names that
    differ only in case from an earlier one get a trailing underscore, because SQL does not tell them apart.

    Raises
    ------
    InputError
        If the file is missing, has a suffix that is not a table's, cannot be read, or holds no rows.
    """
    if not path.is_file():
        raise InputError(f"catalogue {path}: there is no such file")
    suffix = (path.suffixes[-2] if path.suffix == ".gz" and len(path.suffixes) > 1 else path.suffix).lower()
    if suffix not in FORMATS:
        raise InputError(
            f"catalogue {path}: expected a table ending in {', '.join(FORMATS)}, found {suffix or 'none'!r}"
        )
    try:
        with warnings.catch_warnings():
            warnings.simplefilter("ignore")  # astropy warns about units and keywords that do not matter here
            table = represent_mixins_as_columns(Table.read(path, format=FORMATS[suffix]))
    except Exception as failure:  # every reader has its own family of exceptions
        reason = str(failure).strip().splitlines()[0] if str(failure).strip() else type(failure).__name__
        raise InputError(f"catalogue {path}: cannot be read as {FORMATS[suffix]}: {reason}") from failure
    if len(table) == 0:
        raise InputError(f"catalogue {path}: the table has no rows")
    columns: list[Column] = []
    taken: set[str] = set()
    for name in table.colnames:
        for plain in _plain_columns(str(name), table[name]):
            columns.append(Column(free_name(plain.name, taken), plain.values, plain.unit))
    return columns


def free_name(name: str, taken: set[str]) -> str:
    """`name`, with underscores added until it differs from every `taken` one in more than case; joins `taken`."""
    while name.casefold() in taken:
        name += "_"
    taken.add(name.casefold())
    return name


def unit_text(unit: object) -> str:
    """A unit as this project writes it: astropy's generic form with Msun, Lsun and Rsun for the solar ones."""
    if unit is None:
        return ""
    to_string = getattr(unit, "to_string", None)
    return SOLAR.sub(lambda found: SHORT[found[1]], to_string() if to_string else str(unit))


def _plain_columns(name: str, column: object) -> list[Column]:
    unit = unit_text(getattr(column, "unit", None))
    values = column if isinstance(column, np.ndarray) else np.asarray(column)
    if values.ndim > 1:
        flat = values.reshape(len(values), -1)
        return [Column(f"{name}_{part}", _plain(flat[:, part]), unit) for part in range(flat.shape[1])]
    return [Column(name, _plain(values), unit)]


def _plain(values: np.ndarray) -> np.ndarray:
    masked = np.ma.getmaskarray(values) if isinstance(values, np.ma.MaskedArray) else None
    plain = np.asarray(np.ma.getdata(values))
    kind = plain.dtype.kind
    if kind == "b":
        plain, kind = plain.astype(np.int8), "i"
    if kind in "iuf":
        plain = plain.astype(plain.dtype.newbyteorder("="))  # FITS is big-endian
        if masked is not None and masked.any():
            # Integers beyond 2**53 would lose digits as floats: those columns keep None for what is missing, as text.
            if kind != "f" and np.abs(plain[~masked].astype(np.float64)).max(initial=0) > 2**53:
                return _text(plain, masked)
            plain = np.where(masked, np.nan, plain.astype(np.result_type(plain, np.float32)))
        return plain
    return _text(plain, masked)


def _text(plain: np.ndarray, masked: np.ndarray | None) -> np.ndarray:
    text = np.empty(len(plain), dtype=object)
    for place, value in enumerate(plain.tolist()):
        if (masked is not None and masked[place]) or value is None:
            continue
        text[place] = value.decode("utf-8", "replace").rstrip() if isinstance(value, bytes) else str(value)
    return text
