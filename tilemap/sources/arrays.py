"""NumPy arrays: .npz files, or .npy files in a folder; each array is a dataset under its own name.

Arrays of one part lie side by side: those in one .npz, or the .npy files of one folder. Several .npz files, or several
folders, follow each other like the parts of a snapshot. Formats: the .npy format of NumPy's own documentation
(numpy.lib.format), versions 1 and 2, and zip.
"""

from __future__ import annotations

import zipfile
from collections.abc import Iterator, Sequence
from dataclasses import dataclass, field
from pathlib import Path
from typing import IO, Any, Protocol

import numpy as np

from tilemap.errors import InputError
from tilemap.quantities import suggestion
from tilemap.sources.reader import Dataset, Reader, Wanted, natural_order
from tilemap.sources.units import Stated


class StoredArray(Protocol):
    """An array on disk: what it is, and its rows a few at a time."""

    shape: tuple[int, ...]
    dtype: np.dtype[Any]

    def slices(self, size: int) -> Iterator[np.ndarray]:
        """At most `size` rows at a time, each in memory of its own."""


class NpyFile:
    """A .npy file, mapped into memory."""

    def __init__(self, path: Path) -> None:
        try:
            self._mapped = np.load(path, mmap_mode="r", allow_pickle=False)
        except (ValueError, OSError, EOFError) as error:
            raise InputError(
                f"{path}: not a whole .npy file of numbers ({error}): write it again with numpy.save"
            ) from error
        self.shape = self._mapped.shape
        self.dtype = self._mapped.dtype

    def slices(self, size: int) -> Iterator[np.ndarray]:
        for start in range(0, self.shape[0], size):
            # a copy: what is handed on can be written to, and does not read the disk behind the reader's back
            yield np.array(self._mapped[start : start + size])


class NpzMember:
    """One array inside a .npz file, read front to back without unpacking the whole."""

    def __init__(self, path: Path, name: str) -> None:
        self._path, self._name = path, name
        with zipfile.ZipFile(path) as archive, archive.open(name) as stream:
            self.shape, self._columns_first, self.dtype = self._head(stream)

    def _head(self, stream: IO[bytes]) -> tuple[tuple[int, ...], bool, np.dtype[Any]]:
        try:
            version = np.lib.format.read_magic(stream)
            read = np.lib.format.read_array_header_1_0 if version == (1, 0) else np.lib.format.read_array_header_2_0
            return read(stream)
        except ValueError as error:
            raise InputError(f"{self._path}: {self._name} is not an array of numbers ({error})") from error

    def slices(self, size: int) -> Iterator[np.ndarray]:
        if self._columns_first and len(self.shape) > 1:
            with np.load(self._path, allow_pickle=False) as archive:
                whole = archive[self._name.removesuffix(".npy")]
            for start in range(0, self.shape[0], size):
                yield np.array(whole[start : start + size])
            return
        try:
            with zipfile.ZipFile(self._path) as archive, archive.open(self._name) as stream:
                self._head(stream)
                row_bytes = int(np.prod(self.shape[1:], dtype=np.int64)) * self.dtype.itemsize
                for start in range(0, self.shape[0], size):
                    count = min(size, self.shape[0] - start)
                    data = bytearray(stream.read(count * row_bytes))
                    if start + count == self.shape[0]:
                        stream.read(1)  # the end has to be met for the checksum to be compared
                    if len(data) < count * row_bytes:
                        raise InputError(f"{self._path}: {self._name} ends after row {start}: write the file again")
                    yield np.frombuffer(data, dtype=self.dtype).reshape(count, *self.shape[1:])
        except (zipfile.BadZipFile, EOFError) as error:
            raise InputError(f"{self._path}: {self._name} is damaged ({error}): write the file again") from error


@dataclass
class ArrayReader(Reader):
    """Named arrays, in parts that follow each other."""

    states_units = False
    _arrays: list[dict[str, StoredArray]] = field(init=False, default_factory=list)

    def __post_init__(self) -> None:
        given, self.files = self.files, []
        folders: dict[Path, dict[str, StoredArray]] = {}
        for path in given:
            if path.is_dir():
                self._folder(path, folders)
            elif path.suffix.lower() == ".npz":
                self.files.append(path)
                self.parts.append(path.name)
                self._arrays.append(members_of(path))
            elif path.suffix.lower() == ".npy":
                self._add(path, folders)
            else:
                raise InputError(f"{path}: arrays come as .npy or .npz files, or a folder of .npy files")

    def _folder(self, folder: Path, folders: dict[Path, dict[str, StoredArray]]) -> None:
        inside = sorted(folder.glob("*.npy"), key=lambda path: natural_order(path.name))
        if not inside:
            raise InputError(f"{folder}: no .npy file is in this folder")
        for path in inside:
            self._add(path, folders)

    def _add(self, path: Path, folders: dict[Path, dict[str, StoredArray]]) -> None:
        if path.parent not in folders:
            folders[path.parent] = {}
            self.parts.append(str(path.parent))
            self._arrays.append(folders[path.parent])
        folders[path.parent][path.stem] = NpyFile(path)
        self.files.append(path)

    def names(self) -> list[str]:
        """The arrays of the first part."""
        return list(self._arrays[0])

    def look(self, name: str) -> Dataset:
        """Describe the array of that name in every part."""
        found = []
        for part, arrays in zip(self.parts, self._arrays, strict=True):
            if name not in arrays:
                raise InputError(
                    f"array {name} is not in {part}: {suggestion(name, arrays)} (there are {', '.join(arrays)})"
                )
            array = arrays[name]
            if len(array.shape) not in (1, 2):
                raise InputError(f"{part}: array {name} has {len(array.shape)} dimensions: one or two are wanted")
            found.append(array)
        widths = {array.shape[1] if len(array.shape) == 2 else None for array in found}
        if len(widths) > 1:
            raise InputError(f"array {name} has different numbers of columns in different parts")
        return Dataset(tuple(array.shape[0] for array in found), widths.pop(), found[0].dtype.kind, Stated())

    def blocks(self, part: int, wanted: Sequence[Wanted], size: int) -> Iterator[list[np.ndarray]]:
        """Rows of several arrays side by side; an array of which several columns are wanted is read once."""
        names = list(dict.fromkeys(name for name, _ in wanted))
        streams = [self._arrays[part][name].slices(size) for name in names]
        for pieces in zip(*streams, strict=True):
            by_name = dict(zip(names, pieces, strict=True))
            yield [by_name[name] if column is None else by_name[name][:, column] for name, column in wanted]


def members_of(path: Path) -> dict[str, StoredArray]:
    """The arrays of a .npz file by name; InputError where it is no whole zip file."""
    try:
        with zipfile.ZipFile(path) as archive:
            names = [name for name in archive.namelist() if name.endswith(".npy")]
        return {name.removesuffix(".npy"): NpzMember(path, name) for name in names}
    except (zipfile.BadZipFile, OSError, EOFError) as error:
        raise InputError(f"{path}: not a whole .npz file ({error}): write it again with numpy.savez") from error
