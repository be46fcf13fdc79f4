"""What every kind of input offers to `source`: where datasets are, what is said about them, and their rows in blocks."""

from __future__ import annotations

import glob
import re
from abc import ABC, abstractmethod
from collections.abc import Iterable, Iterator, Sequence
from dataclasses import dataclass, field
from pathlib import Path

import numpy as np

from tilemap.cosmology import Cosmology
from tilemap.errors import InputError
from tilemap.quantities import nearest
from tilemap.sources.units import Stated

KIND_BY_SUFFIX = {
    ".hdf5": "hdf5",
    ".h5": "hdf5",
    ".hdf": "hdf5",
    ".npy": "arrays",
    ".npz": "arrays",
    ".fits": "table",
    ".fit": "table",
    ".fits.gz": "table",
    ".vot": "table",
    ".votable": "table",
    ".xml": "table",
    ".ecsv": "table",
    ".csv": "table",
}

Wanted = tuple[str, int | None]


@dataclass(frozen=True)
class Dataset:
    """One dataset over all parts: rows in each part, columns (None where it has one dimension), numpy kind, unit."""

    rows: tuple[int, ...]
    width: int | None
    dtype_kind: str
    stated: Stated


@dataclass(frozen=True)
class Header:
    """What the files say about the whole snapshot; None where they do not. The box is as stored, not converted."""

    box: np.ndarray | None = None
    redshift: float | None = None
    h: float | None = None
    cosmology: Cosmology | None = None


@dataclass
class Reader(ABC):
    """The files of one snapshot, opened by one kind of library.

    `wanted` names the datasets that will be asked for (None: any). `parts` are the names, for messages, of the pieces
    that follow each other; `files` all that is read.
    """

    files: list[Path]
    wanted: list[str] | None
    parts: list[str] = field(init=False, default_factory=list)
    states_units = True

    @abstractmethod
    def names(self) -> list[str]:
        """The datasets that can be looked at."""

    @abstractmethod
    def look(self, name: str) -> Dataset:
        """Describe a dataset without reading it; InputError naming those that are there."""

    @abstractmethod
    def blocks(self, part: int, wanted: Sequence[Wanted], size: int) -> Iterator[list[np.ndarray]]:
        """Rows of several (dataset, column) of one part side by side, at most `size` at a time, as stored."""

    def header(self) -> Header:
        """What is said about the whole snapshot; arrays and tables say nothing."""
        return Header()

    def table_mass(self, index: int) -> tuple[float, Stated]:
        """An entry of the mass table in the header, as stored, and its unit."""
        raise InputError(f"{self.parts[0]} has no table of masses ({index} is asked for): give a dataset or a constant")


def find_files(patterns: Iterable[str], folder: Path) -> list[Path]:
    """The files that names and globs stand for, relative to `folder`; each glob in the order of its part numbers.

    Raises
    ------
    InputError
        For a name that is not there, or a glob that matches nothing.
    """
    found: dict[Path, None] = {}
    for pattern in patterns:
        path = folder / Path(pattern).expanduser()
        if path.exists():
            found[path] = None
        elif glob.has_magic(pattern):
            matches = sorted(glob.glob(str(path), recursive=True), key=natural_order)
            if not matches:
                raise InputError(f"no file matches {pattern} in {path.parent}")
            found.update(dict.fromkeys(map(Path, matches)))
        else:
            near = nearest(path.name, [each.name for each in path.parent.iterdir()]) if path.parent.is_dir() else None
            hint = f"did you mean {near}?" if near else f"looked in {path.parent}"
            raise InputError(f"file {pattern} is not there: {hint}")
    return list(found)


def natural_order(name: str) -> list[tuple[int, int, str]]:
    """A sort key that puts run.2 before run.10."""
    return [(0, int(piece), "") if piece.isdigit() else (1, 0, piece) for piece in re.split(r"(\d+)", name)]


def kind_of(path: Path) -> str:
    """hdf5, arrays or table, from the suffix (a folder holds arrays); InputError for other suffixes."""
    if path.is_dir():
        return "arrays"
    suffixes = [suffix.lower() for suffix in path.suffixes]
    for suffix in ("".join(suffixes[-2:]), *suffixes[-1:]):
        if suffix in KIND_BY_SUFFIX:
            return KIND_BY_SUFFIX[suffix]
    raise InputError(f"{path.name}: no kind of file is known for this suffix: give kind: hdf5, arrays or table")
