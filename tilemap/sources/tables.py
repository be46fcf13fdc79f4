"""Tables by astropy: FITS (mapped, a slice at a time), VOTable, ECSV and CSV (read whole); columns are the datasets.

A FITS column in another extension than the first table is named extension/column.
"""

from __future__ import annotations

import warnings
from abc import ABC, abstractmethod
from collections.abc import Iterable, Iterator, Sequence
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import astropy.units as u
import numpy as np
from astropy.io import fits
from astropy.table import Table

from tilemap.errors import InputError
from tilemap.quantities import suggestion
from tilemap.sources.reader import Dataset, Reader, Wanted
from tilemap.sources.units import Stated

FITS_SUFFIXES = (".fits", ".fit", ".gz")


@dataclass(frozen=True)
class ColumnFacts:
    """What a table says about one of its columns."""

    rows: int
    width: int | None
    dtype_kind: str
    stated: Stated


class OneTable(ABC):
    """One table in one file."""

    @abstractmethod
    def names(self) -> list[str]:
        """The columns of the table, in its order."""

    @abstractmethod
    def look(self, name: str) -> ColumnFacts | None:
        """What is known about a column; None where it is not there."""

    @abstractmethod
    def blocks(self, names: list[str], size: int) -> Iterator[dict[str, np.ndarray]]:
        """Rows of several columns, at most `size` at a time; blanks are NaN."""


class FitsTable(OneTable):
    """The tables of a FITS file, whose columns are read slice by slice from the mapped file."""

    def __init__(self, path: Path) -> None:
        self._path = path
        self._place: dict[str, tuple[int, str]] = {}
        self._facts: dict[str, ColumnFacts] = {}
        self._plain: list[str] = []
        try:
            with warnings.catch_warnings():
                warnings.simplefilter("ignore")
                warnings.filterwarnings("error", message=".*truncated.*")
                with fits.open(path, memmap=True) as file:
                    for index, hdu in enumerate(file):
                        if isinstance(hdu, fits.BinTableHDU | fits.TableHDU):
                            self._learn(index, hdu)
        except (OSError, Warning, fits.VerifyError, TypeError, ValueError) as error:
            reason = "this FITS file is truncated" if "truncated" in str(error) else "not a FITS file that can be read"
            raise InputError(f"{path}: {reason} ({' '.join(str(error).split())[:120]})") from error
        if not self._facts:
            raise InputError(f"{path}: this FITS file holds no whole table: it may be truncated, or hold pictures only")

    def _learn(self, index: int, hdu: Any) -> None:
        for column in hdu.columns:
            dtype = hdu.columns.dtype[column.name]
            kind = dtype.base.kind
            if isinstance(hdu, fits.TableHDU):
                kind = "S" if column.format.startswith("A") else "f"
            width = int(np.prod(dtype.shape)) if dtype.shape else None
            facts = ColumnFacts(int(hdu.header["NAXIS2"]), width, kind, _stated(column.unit))
            names = [f"{hdu.name or index}/{column.name}"]
            if not self._plain or index == self._place[self._plain[0]][0]:
                self._plain.append(column.name)
                names.append(column.name)
            for name in names:
                self._place[name], self._facts[name] = (index, column.name), facts

    def names(self) -> list[str]:
        """The columns of the first table by their own names, those of others with the extension's before."""
        first = self._place[self._plain[0]][0]
        return self._plain + [name for name, (index, _) in self._place.items() if index != first]

    def look(self, name: str) -> ColumnFacts | None:
        """What is known about a column; None where it is not there."""
        return self._facts.get(name)

    def blocks(self, names: list[str], size: int) -> Iterator[dict[str, np.ndarray]]:
        """Slices of the mapped file."""
        with fits.open(self._path, memmap=True) as file:
            places = {name: self._place[name] for name in names}
            for start in range(0, self._facts[names[0]].rows, size):
                # slicing the rows first keeps scaled columns from being converted whole
                pieces = {
                    index: file[index].data[start : start + size] for index in {index for index, _ in places.values()}
                }
                yield {name: np.array(pieces[index].field(column)) for name, (index, column) in places.items()}


class WholeTable(OneTable):
    """VOTable, ECSV or CSV: the wanted columns are kept in memory."""

    def __init__(self, path: Path, wanted: Iterable[str] | None = None) -> None:
        table = read_table(path)
        self._names = list(table.colnames)
        keep = self._names if wanted is None else [name for name in self._names if name in set(wanted)]
        self._facts = {name: _column_facts(table[name]) for name in keep}
        self._columns = {name: _filled(table[name]) for name in keep}

    def names(self) -> list[str]:
        """The columns in the table's order."""
        return self._names

    def look(self, name: str) -> ColumnFacts | None:
        """What is known about a column; None where it is not there."""
        return self._facts.get(name)

    def blocks(self, names: list[str], size: int) -> Iterator[dict[str, np.ndarray]]:
        """Slices of what is in memory."""
        for start in range(0, self._facts[names[0]].rows, size):
            yield {name: self._columns[name][start : start + size].copy() for name in names}


def read_table(path: Path) -> Table:
    """Read a VOTable, ECSV or CSV whole; a .csv that begins as ECSV is read as such.

    Raises
    ------
    InputError
        What the format's reader found wrong.
    """
    suffix = path.suffix.lower()
    try:
        with warnings.catch_warnings():
            warnings.simplefilter("ignore")
            if suffix in (".vot", ".votable", ".xml"):
                from astropy.io.votable import parse

                return parse(path).get_first_table().to_table(use_names_over_ids=True)
            with open(path, "rb") as file:
                is_ecsv = file.read(64).lstrip(b"# ").startswith(b"%ECSV")
            return Table.read(path, format="ascii.ecsv" if is_ecsv else "ascii.csv")
    except Exception as error:  # each reader of astropy has its own kinds of error, all of them about the file
        kind = {".ecsv": "ECSV", ".csv": "CSV"}.get(suffix, "VOTable")
        raise InputError(f"{path}: not {kind} that can be read ({' '.join(str(error).split())[:160]})") from error


def _column_facts(column: Any) -> ColumnFacts:
    width = int(column.shape[1]) if column.ndim == 2 else None
    return ColumnFacts(len(column), width, column.dtype.kind, _stated(column.unit))


def _filled(column: Any) -> np.ndarray:
    """The plain numbers; masked ones are NaN, so that they are counted as missing like any other."""
    if np.ma.isMaskedArray(column) and column.dtype.kind in "fiub":
        return np.ma.filled(column.astype(np.float64), np.nan)
    return np.asarray(column)


def _stated(unit: Any) -> Stated:
    """The unit that a column carries: as astropy writes it, or as the FITS standard (version 4.0, section 4.3) does."""
    if unit is None or str(unit).strip() == "":
        return Stated()
    if isinstance(unit, str):
        for format_name in (None, "fits"):
            parsed = u.Unit(unit, format=format_name, parse_strict="silent")
            if not isinstance(parsed, u.UnrecognizedUnit):
                return Stated(1.0, parsed)
        return Stated(1.0, u.Unit(unit, parse_strict="silent"))
    return Stated(1.0, unit)


@dataclass
class TableReader(Reader):
    """Tables that follow each other, each in its own file."""

    states_units = False
    _tables: list[OneTable] = field(init=False, default_factory=list)

    def __post_init__(self) -> None:
        self.parts = [path.name for path in self.files]
        self._tables = [open_table(path, self.wanted) for path in self.files]

    def names(self) -> list[str]:
        """The columns of the first part."""
        return self._tables[0].names()

    def look(self, name: str) -> Dataset:
        """Describe the column of that name in every part."""
        found = []
        for part, table in zip(self.parts, self._tables, strict=True):
            facts = table.look(name)
            if facts is None:
                listed = ", ".join(table.names())
                near = suggestion(name, table.names())
                listed = "" if near.startswith("known here") else f" (there are {listed})"
                raise InputError(f"column {name} is not in {part}: {near}{listed}")
            found.append(facts)
        if len({(facts.width, facts.stated) for facts in found}) > 1:
            raise InputError(f"column {name} has another shape or unit in some of the files: {', '.join(self.parts)}")
        return Dataset(tuple(facts.rows for facts in found), found[0].width, found[0].dtype_kind, found[0].stated)

    def blocks(self, part: int, wanted: Sequence[Wanted], size: int) -> Iterator[list[np.ndarray]]:
        """Rows of several columns side by side."""
        names = list(dict.fromkeys(name for name, _ in wanted))
        for piece in self._tables[part].blocks(names, size):
            yield [piece[name] if column is None else piece[name][:, column] for name, column in wanted]


def open_table(path: Path, wanted: Iterable[str] | None = None) -> OneTable:
    """A table by its suffix; of formats that are read whole only the `wanted` columns are kept (all for None)."""
    if path.suffix.lower() in FITS_SUFFIXES:
        return FitsTable(path)
    return WholeTable(path, wanted)
