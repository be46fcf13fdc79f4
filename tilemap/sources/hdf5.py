"""HDF5 snapshots in one file or many, with the header groups and unit attributes that simulation codes write."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import astropy.units as u
import h5py
import numpy as np

from tilemap.cosmology import Cosmology
from tilemap.errors import InputError
from tilemap.quantities import suggestion
from tilemap.sources.reader import Dataset, Header, Reader, Wanted
from tilemap.sources.units import Stated, stated_by_attributes

# Where codes write the facts, and under which names.
FACT_GROUPS = ("Cosmology", "Header", "Parameters")
NAMES = {
    "redshift": ("Redshift",),
    "a": ("Scale-factor", "ExpansionFactor"),
    "Om0": ("Omega_m", "Omega0", "OmegaMatter"),
    "Ode0": ("Omega_lambda", "OmegaLambda"),
    "h": ("h", "HubbleParam"),
    "Tcmb0": ("T_CMB_0 [K]",),
    "parts": ("NumFilesPerSnapshot",),
    "cosmological": ("Cosmological run",),
    "time": ("Time",),
}


def open_file(path: Path) -> h5py.File:
    """Open for reading; InputError that tells a truncated file from one that is not HDF5."""
    try:
        # nothing is written, so no lock: shared file systems often refuse them
        return h5py.File(path, "r", locking=False)
    except OSError as error:
        if "truncated" in str(error):
            raise InputError(f"{path}: this HDF5 file is truncated: copy it again from where it was written") from error
        if not path.is_file():
            raise InputError(f"{path} is not a file: name the HDF5 files of the snapshot") from error
        raise InputError(f"{path}: not an HDF5 file, or damaged at its beginning ({_short(error)})") from error


def _short(error: Exception) -> str:
    return " ".join(str(error).split())[:120]


@dataclass(frozen=True)
class _InPart:
    rows: int
    width: int | None
    dtype_kind: str


@dataclass
class Hdf5Reader(Reader):
    """One snapshot in HDF5. Each file is opened once to look, and once for each species that is read."""

    _seen: dict[str, list[_InPart | None]] = field(init=False, default_factory=dict)
    _stated: dict[str, Stated] = field(init=False, default_factory=dict)
    _header: Header = field(init=False, default_factory=Header)
    _there: dict[str, list[str]] = field(init=False, default_factory=dict)
    _mass_table: tuple[np.ndarray, Stated] | None = field(init=False, default=None)

    def __post_init__(self) -> None:
        self.parts = [path.name for path in self.files]
        self._seen = {name: [] for name in self.wanted or ()}
        first: dict[str, float] = {}
        for path in self.files:
            with open_file(path) as file:
                facts = scalar_facts(file)
                if not first:
                    first = facts
                    self._header = read_header(file)
                self._same_snapshot(path, first, facts)
                self._survey(path, file)

    def _same_snapshot(self, path: Path, first: dict[str, float], facts: dict[str, float]) -> None:
        parts = int(first.get("parts", 1))
        missing = parts - len(self.files)
        if missing > 0:
            raise InputError(
                f"{path}: the snapshot says that it is in {parts} files, but only {len(self.files)} found: "
                f"{missing} {'is' if missing == 1 else 'are'} missing"
            )
        if missing < 0 and "parts" in first:
            raise InputError(
                f"{path}: the snapshot says that it is in {parts} {'file' if parts == 1 else 'files'}, but "
                f"{len(self.files)} are named: name the files of one snapshot only"
            )
        if abs(facts.get("redshift", 0.0) - first.get("redshift", 0.0)) > 1e-6 * (1.0 + first.get("redshift", 0.0)):
            raise InputError(
                f"{path} is at redshift {facts.get('redshift')}, {self.files[0].name} at {first.get('redshift')}: "
                "name the files of one snapshot only"
            )

    def _survey(self, path: Path, file: h5py.File) -> None:
        for group, item in file.items():
            if isinstance(item, h5py.Group):
                names = dict.fromkeys([*self._there.get(group, []), *_datasets_in(item)])
                self._there[group] = list(names)
            else:
                self._there.setdefault("", []).append(group)
        for name in self.wanted or ():
            item = file.get(name)
            if not isinstance(item, h5py.Dataset):
                self._seen[name].append(None)
                continue
            if item.ndim not in (1, 2):
                raise InputError(f"{path}: {name} has {item.ndim} dimensions: one or two are wanted")
            width = None if item.ndim == 1 else int(item.shape[1])
            self._seen[name].append(_InPart(int(item.shape[0]), width, item.dtype.kind))
            if name not in self._stated or (self._stated[name] == Stated() and item.shape[0]):
                self._stated[name] = stated_by_attributes(item.attrs)
        if self._mass_table is None and "Header" in file and "MassTable" in file["Header"].attrs:
            table = np.atleast_1d(np.asarray(file["Header"].attrs["MassTable"], dtype=np.float64))
            self._mass_table = table, _mass_unit(file)

    def names(self) -> list[str]:
        """The wanted datasets that are there."""
        return [name for name, seen in self._seen.items() if any(seen)]

    def look(self, name: str) -> Dataset:
        """Describe a dataset; a part without it has no rows of it."""
        seen = self._seen[name]
        present = [each for each in seen if each is not None]
        if not present:
            raise InputError(self._not_there(name))
        if len({each.width for each in present}) > 1:
            raise InputError(f"{name} has different numbers of columns in different files: name one snapshot only")
        rows = tuple(0 if each is None else each.rows for each in seen)
        return Dataset(rows, present[0].width, present[0].dtype_kind, self._stated[name])

    def _not_there(self, name: str) -> str:
        where = self.files[0].name if len(self.files) == 1 else f"{self.files[0].name} and the other parts"
        group, _, last = name.strip("/").partition("/")
        if last and group in self._there:
            known = self._there[group]
            if not known:
                return f"dataset {name} is not in {where}: group {group} is empty"
            near = suggestion(last, known)
            listed = "" if near.startswith("known here") else f" (there are {', '.join(known)})"
            return f"dataset {name} is not in {where}: in {group} {near}{listed}"
        groups = [each for each, inside in self._there.items() if inside]
        return f"dataset {name} is not in {where}: groups with datasets are {', '.join(groups) or 'none'}"

    def header(self) -> Header:
        """Box, redshift and cosmology of the first part."""
        return self._header

    def table_mass(self, index: int) -> tuple[float, Stated]:
        """Entry `index` of the header's MassTable, which holds the mass of species whose particles all weigh the same."""
        if self._mass_table is None:
            return super().table_mass(index)
        table, stated = self._mass_table
        if index >= len(table):
            raise InputError(f"{self.parts[0]}: MassTable has entries 0 to {len(table) - 1}: {index} is not there")
        if not table[index] > 0:
            listed = ", ".join(f"{entry:g}" for entry in table)
            raise InputError(
                f"{self.parts[0]}: entry {index} of MassTable is {table[index]:g} (it holds {listed}): name a dataset"
            )
        return float(table[index]), stated

    def blocks(self, part: int, wanted: Sequence[Wanted], size: int) -> Iterator[list[np.ndarray]]:
        """Slices of the datasets, read straight from the file."""
        path = self.files[part]
        with open_file(path) as file:
            datasets = [(file[name], column) for name, column in wanted]
            rows = datasets[0][0].shape[0]
            for start in range(0, rows, size):
                stop = min(start + size, rows)
                block = []
                for dataset, column in datasets:
                    try:
                        block.append(dataset[start:stop] if column is None else dataset[start:stop, column])
                    except OSError as error:
                        raise InputError(
                            f"{path}: rows {start} to {stop - 1} of {dataset.name.strip('/')} cannot be read: "
                            f"the file is truncated or damaged ({_short(error)})"
                        ) from error
                yield block


def _datasets_in(group: h5py.Group) -> list[str]:
    return [name for name, item in group.items() if isinstance(item, h5py.Dataset)]


def scalar_facts(file: h5py.File) -> dict[str, float]:
    """Every fact of `NAMES` that the file states as one number."""
    facts: dict[str, float] = {}
    for group in FACT_GROUPS:
        attributes = file[group].attrs if group in file else {}
        for fact, names in NAMES.items():
            for name in names:
                if fact not in facts and name in attributes and (name != "h" or group == "Cosmology"):
                    value = np.asarray(attributes[name])
                    if value.size == 1 and value.dtype.kind in "fiub":
                        facts[fact] = float(value.reshape(-1)[0])
    return facts


def read_header(file: h5py.File) -> Header:
    """Box (as stored), redshift, h and cosmology; a run that is not cosmological has none, and redshift 0."""
    facts = scalar_facts(file)
    h = facts.get("h") or None
    if facts.get("cosmological", 1.0) == 0.0:
        return Header(_box(file), 0.0, h, None)
    cosmology = None
    if h is not None and facts.get("Om0", 0.0) > 0 and "Ode0" in facts:
        cosmology = Cosmology(100.0 * h, facts["Om0"], facts["Ode0"], facts.get("Tcmb0", 0.0))
    redshift = facts.get("redshift")
    # Time is the scale factor in cosmological runs of codes that write no other, a time in code units elsewhere
    a = facts.get("a", facts.get("time") if cosmology is not None else None)
    if redshift is None and a is not None and 0.0 < a <= 1.0:
        redshift = 1.0 / a - 1.0
    return Header(_box(file), redshift, h, cosmology)


def _box(file: h5py.File) -> np.ndarray | None:
    for group in ("Header", "Parameters"):
        value: Any = file[group].attrs.get("BoxSize") if group in file else None
        if value is not None:
            sides = np.atleast_1d(np.asarray(value, dtype=np.float64))
            if sides.size in (1, 3) and np.all(sides > 0):
                return np.ones(3) * sides
    return None


def _mass_unit(file: h5py.File) -> Stated:
    """The unit of the mass table: that of any dataset of masses, of the group of units, or of the code's parameters."""
    for group in file.values():
        if isinstance(group, h5py.Group) and isinstance(group.get("Masses"), h5py.Dataset):
            stated = stated_by_attributes(group["Masses"].attrs)
            if stated.factor is not None:
                return stated
    if "Units" in file and "Unit mass in cgs (U_M)" in file["Units"].attrs:
        value = np.asarray(file["Units"].attrs["Unit mass in cgs (U_M)"]).reshape(-1)[0]
        return Stated(float(value), u.g, 0.0, 0.0)
    for group_name in ("Header", "Parameters"):
        if group_name in file and "UnitMass_in_g" in file[group_name].attrs:
            # the codes that write this parameter keep masses per h
            return Stated(float(file[group_name].attrs["UnitMass_in_g"]), u.g, 0.0, -1.0)
    return Stated()
