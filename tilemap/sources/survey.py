"""Any particle files in, what is in them out: groups, datasets, units, a sample of the values; nothing is decided here."""

from __future__ import annotations

import re
from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path

import h5py
import numpy as np

from tilemap.errors import InputError
from tilemap.sources.arrays import ArrayReader
from tilemap.sources.hdf5 import Hdf5Reader, open_file, scalar_facts
from tilemap.sources.reader import Header, Reader, find_files, kind_of, natural_order
from tilemap.sources.tables import TableReader
from tilemap.sources.units import Stated

SAMPLE_ROWS = 1 << 16
_KERNEL_WORDS = {
    "cubic": "cubic",
    "quartic": "quartic",
    "quintic": "quintic",
    "c2": "wendland-c2",
    "c4": "wendland-c4",
    "c6": "wendland-c6",
}


@dataclass(frozen=True)
class Seen:
    """One dataset: its full name, shape over all parts, unit, range of a sample (None for text), description."""

    name: str
    rows: int
    width: int | None
    dtype: str
    stated: Stated
    range: tuple[float, float] | None
    description: str

    @property
    def last(self) -> str:
        """The name without its group."""
        return self.name.rsplit("/", 1)[-1]


@dataclass(frozen=True)
class SeenGroup:
    """Datasets that belong together, and the mass that the header gives their particles (as stored), if any."""

    name: str
    rows: int
    datasets: list[Seen]
    table_mass: float | None = None

    def find(self, *beginnings: str) -> Seen | None:
        """The first dataset whose name begins so (capitals and underscores ignored), in the order asked for."""
        for beginning in beginnings:
            for seen in self.datasets:
                if seen.last.replace("_", "").lower().startswith(beginning):
                    return seen
        return None


@dataclass(frozen=True)
class Survey:
    """All that was found."""

    files: list[Path]
    kind: str
    groups: list[SeenGroup]
    header: Header
    kernel: str | None
    reader: Reader


def survey(files: Sequence[str | Path]) -> Survey:
    """Look into files of one kind (globs allowed); the missing parts of a snapshot are looked for beside the one named.

    Raises
    ------
    InputError
        Files that are missing, damaged, or of a kind that is not known.
    """
    found = find_files([str(each) for each in files], Path())
    if not found:
        raise InputError("no file is named: give one or more")
    kinds = {kind_of(path) for path in found}
    if len(kinds) > 1:
        raise InputError(f"these files are of different kinds ({', '.join(sorted(kinds))}): probe one kind at a time")
    kind = kinds.pop()
    if kind == "hdf5":
        return _survey_hdf5(_with_siblings(found))
    reader = ArrayReader(found, []) if kind == "arrays" else TableReader(found, None)
    names = reader.names()
    datasets = [_seen(reader, name, "") for name in names]
    rows = max((seen.rows for seen in datasets), default=0)
    return Survey(reader.files, kind, [SeenGroup("", rows, datasets)], Header(), None, reader)


def _with_siblings(files: list[Path]) -> list[Path]:
    """All parts of a snapshot of which some are named: the same name with another number in the same place."""
    with open_file(files[0]) as file:
        parts = int(scalar_facts(file).get("parts", 1))
    if len(files) >= parts:
        return files
    for pattern in part_globs(files[0].name):
        beside = sorted(files[0].parent.glob(pattern), key=lambda path: natural_order(path.name))
        if len(beside) == parts:
            return beside
    return files


def part_globs(name: str) -> list[str]:
    """Globs for the other parts of a numbered file: each number in its name, the last first, as an asterisk."""
    return [name[: match.start()] + "*" + name[match.end() :] for match in re.finditer(r"\d+", name)][::-1]


def _survey_hdf5(files: list[Path]) -> Survey:
    names: dict[str, None] = {}
    descriptions: dict[str, str] = {}
    kernel = None
    for path in files:
        with open_file(path) as file:
            for name in _dataset_names(file):
                names[name] = None
                descriptions.setdefault(
                    name, _text(file[name].attrs.get("Description", file[name].attrs.get("description")))
                )
            kernel = kernel or _kernel_said(file)
    reader = Hdf5Reader(files, list(names))
    groups: dict[str, list[Seen]] = {}
    for name in names:
        group, _, _ = name.rpartition("/")
        groups.setdefault(group, []).append(_seen(reader, name, descriptions[name]))
    found = [
        SeenGroup(group, max(seen.rows for seen in inside), inside, _table_mass(reader, group))
        for group, inside in groups.items()
    ]
    return Survey(files, "hdf5", found, reader.header(), kernel, reader)


def _dataset_names(file: h5py.File) -> list[str]:
    """Datasets of one or two dimensions at the top and one group below, where snapshots keep particles."""
    names = []
    for name, item in file.items():
        inside = (
            {f"{name}/{last}": each for last, each in item.items()} if isinstance(item, h5py.Group) else {name: item}
        )
        names += [each for each, it in inside.items() if isinstance(it, h5py.Dataset) and it.ndim in (1, 2)]
    return names


def _text(value: object) -> str:
    return value.decode(errors="replace") if isinstance(value, bytes) else str(value) if value is not None else ""


def _kernel_said(file: h5py.File) -> str | None:
    """The kernel's name where a group of the file states it as an attribute."""
    for group in file.values():
        said = _text(group.attrs.get("Kernel function")).lower()
        for word, kernel in _KERNEL_WORDS.items():
            if re.search(rf"\b{word}\b", said):
                return kernel
    return None


def _table_mass(reader: Reader, group: str) -> float | None:
    match = re.fullmatch(r"PartType(\d+)", group)
    try:
        return reader.table_mass(int(match[1]))[0] if match else None
    except InputError:
        return None


def _seen(reader: Reader, name: str, description: str) -> Seen:
    look = reader.look(name)
    samples: list[np.ndarray] = []
    if look.dtype_kind in "fiub":
        for part in [part for part, rows in enumerate(look.rows) if rows][:3]:
            samples.append(next(iter(reader.blocks(part, [(name, None)], SAMPLE_ROWS)))[0])
    finite = [sample[np.isfinite(sample)] for sample in samples]
    finite = [sample for sample in finite if sample.size]
    ends = (float(min(s.min() for s in finite)), float(max(s.max() for s in finite))) if finite else None
    dtype = (
        samples[0].dtype.newbyteorder("=").name
        if samples
        else {"S": "text", "U": "text", "O": "text"}.get(look.dtype_kind, "other")
    )
    return Seen(name, sum(look.rows), look.width, dtype, look.stated, ends, " ".join(description.split()))
