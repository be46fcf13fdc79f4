"""Rows of numbers in, chunk by chunk, sorted by key; out, all rows of a key: held in memory, or spilled to a scratch folder.

A run is one chunk's rows. Spilled, it is a file of rows, and a file that says where each key begins, which is written last:
a run is whole or not there.
"""

from __future__ import annotations

import io
import os
from collections.abc import Iterator, Mapping
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from tilemap.pyramid.store import write_whole

GROUP = 1 << 21
"""Most rows that `groups` gives at once, but for a single piece that is larger. No setting changes it, so that sums are
added in the same order whatever memory there is."""


class Runs:
    """Rows by key, in the order in which they came.

    Parameters
    ----------
    keys : int
        Keys are 0 to keys - 1.
    width : int
        Numbers in a row.
    folder : Path, optional
        Where runs are spilled to; without one they are held in memory. Runs that are there already are taken over.
    dtype : numpy dtype
    """

    def __init__(self, keys: int, width: int, folder: Path | None = None, dtype: type = np.float32) -> None:
        self.width, self.folder, self.dtype = width, folder, np.dtype(dtype)
        self.counts = np.zeros(keys, dtype=np.int64)
        self._starts: list[NDArray[np.int64]] = []
        self._held: list[NDArray] = []
        self.notes: list[dict[str, NDArray]] = []
        if folder is not None:
            folder.mkdir(parents=True, exist_ok=True)
            while (path := self._path(len(self._starts), "npz")).exists():
                with np.load(path) as index:
                    notes = {name: index[name] for name in index.files}
                self._take_in(notes.pop("starts"), notes)

    def __len__(self) -> int:
        return len(self._starts)

    def add(self, starts: NDArray[np.int64], rows: NDArray, notes: Mapping[str, NDArray] | None = None) -> None:
        """Take in one run.

        Parameters
        ----------
        starts : int64 (keys + 1,)
            Where the rows of each key begin.
        rows : (n, width)
        notes : arrays by name, optional
            Kept with the run, and found again in `notes` when it is taken over.
        """
        notes = dict(notes or {})
        if self.folder is None:
            self._held.append(rows)
        else:
            number = len(self._starts)
            with open(self._path(number, "rows"), "wb") as file:
                file.write(np.ascontiguousarray(rows, dtype=self.dtype).data)
            part = self._path(number, "part.npz")
            np.savez(part, starts=starts, **notes)  # type: ignore[arg-type]
            part.rename(self._path(number, "npz"))
        self._take_in(starts, notes)

    def pieces(self, key: int) -> Iterator[NDArray]:
        """The rows of a key, run by run, (n, width) each."""
        for number, starts in enumerate(self._starts):
            first, last = int(starts[key]), int(starts[key + 1])
            if last > first:
                yield self._held[number][first:last] if self.folder is None else self._read(number, first, last)

    def groups(self, key: int) -> Iterator[list[NDArray]]:
        """The same in lists of at most `GROUP` rows together, or of one piece."""
        group: list[NDArray] = []
        rows = 0
        for piece in self.pieces(key):
            if group and rows + len(piece) > GROUP:
                yield group
                group, rows = [], 0
            group.append(piece)
            rows += len(piece)
        if group:
            yield group

    def _read(self, number: int, first: int, last: int) -> NDArray:
        size = self.width * self.dtype.itemsize
        with open(self._path(number, "rows"), "rb") as file:
            file.seek(first * size)
            return np.fromfile(file, dtype=self.dtype, count=(last - first) * self.width).reshape(-1, self.width)

    def _path(self, number: int, ending: str) -> Path:
        assert self.folder is not None
        return self.folder / f"{number:06d}.{ending}"

    def _take_in(self, starts: NDArray[np.int64], notes: dict[str, NDArray]) -> None:
        self._starts.append(starts)
        self.counts += np.diff(starts)
        self.notes.append(notes)


class ImageFile:
    """A stack of images on scratch disk, written and read by windows; zero where nothing was written.

    Parameters
    ----------
    path : Path
        A file that is there already is taken over.
    shape : (stacks, channels, rows, columns)
    dtype : numpy dtype
    """

    def __init__(self, path: Path, shape: tuple[int, int, int, int], dtype: type = np.float32) -> None:
        self.shape, self.dtype = shape, np.dtype(dtype)
        self._file = open(path, "r+b" if path.exists() else "w+b")
        os.ftruncate(self._file.fileno(), int(np.prod(shape, dtype=np.int64)) * self.dtype.itemsize)

    def close(self) -> None:
        self._file.close()

    def write(self, stack: int, corner: tuple[int, int], image: NDArray) -> None:
        """Put an image (channels, rows, columns) with its first pixel at `corner`."""
        image = np.ascontiguousarray(image, dtype=self.dtype)
        for place, lines in self._lines(stack, corner, image):
            left = memoryview(lines.data).cast("B")
            while len(left):
                done = os.pwrite(self._file.fileno(), left, place)
                left, place = left[done:], place + done

    def read(self, stack: int, corner: tuple[int, int], size: tuple[int, int]) -> NDArray:
        """The window (channels, rows, columns) of this size whose first pixel is at `corner`."""
        image = np.empty((self.shape[1], *size), dtype=self.dtype)
        for place, lines in self._lines(stack, corner, image):
            left = memoryview(lines.data).cast("B")
            while len(left):
                done = os.preadv(self._file.fileno(), [left], place)
                left, place = left[done:], place + done
        return image

    def _lines(self, stack: int, corner: tuple[int, int], image: NDArray) -> Iterator[tuple[int, NDArray]]:
        """What lies together in the file: its place there, and the part of the image."""
        _, channels, rows, columns = self.shape
        step = self.dtype.itemsize
        for channel in range(channels):
            first = ((stack * channels + channel) * rows + corner[0]) * columns + corner[1]
            if image.shape[2] == columns:
                yield step * first, image[channel].reshape(-1)
                continue
            for row in range(image.shape[1]):
                yield step * (first + row * columns), image[channel, row]


def save_pack(path: Path, **arrays: NDArray) -> None:
    """Write arrays by name into one file, whole or not at all."""
    content = io.BytesIO()
    np.savez(content, **arrays)  # type: ignore[arg-type]
    write_whole(path, content.getvalue())


def load_pack(path: Path) -> dict[str, NDArray] | None:
    """What `save_pack` wrote; None where it did not."""
    if not path.exists():
        return None
    with np.load(path) as pack:
        return {name: pack[name] for name in pack.files}
