"""One pyramid of coded tiles in, the tiles that cannot be right out: each against those it was made of."""

from __future__ import annotations

from collections.abc import Callable, Iterator, Mapping
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from tilemap.pyramid.agree import dispersion_misfits, mean_misfits, sum_misfits, total_bounds
from tilemap.pyramid.coding import Coding
from tilemap.pyramid.findings import Finding, TilePlace, whose
from tilemap.pyramid.grid import TILE
from tilemap.pyramid.reader import ArrayReader, unpack_tile
from tilemap.pyramid.shards import DamagedError


@dataclass
class Stack:
    """One pyramid of a sheet, of its slabs or of the whole, and what is needed to read it."""

    root: Path
    epoch: str
    sheet: Mapping[str, Any]
    whole: bool
    levels: list[ArrayReader]
    coding: Coding
    weight: Stack | None = None
    mean: Stack | None = None
    found: list[Finding] = field(default_factory=list)

    def place(self, level: int, slab: int, row: int, column: int) -> TilePlace:
        """The name of a tile."""
        return TilePlace(self.epoch, self.sheet["name"], level, "whole" if self.whole else slab, row, column)

    def path(self, level: int, slab: int, row: int, column: int) -> str:
        """The file that a tile is in, relative to the atlas."""
        reader = self.levels[level]
        shard = reader.shard_path(slab, row // reader.shard_grid[0], column // reader.shard_grid[1])
        return shard.relative_to(self.root).as_posix()

    def codes(self, level: int, slab: int, row: int, column: int, found: list[Finding]) -> NDArray[np.uint16]:
        """The tile; where it is damaged, that is put down and `_Unreadable` raised."""
        path = self.path(level, slab, row, column)
        try:
            blob = self.levels[level].blob(slab, row, column)
        except DamagedError as error:
            found.append(Finding(path, f"{error.__cause__ or error}{whose(path)}"))
            raise _Unreadable from error
        try:
            return _NONE if blob is None else unpack_tile(blob)
        except DamagedError as error:
            found.append(Finding(path, str(error), self.place(level, slab, row, column)))
            raise _Unreadable from error


class _Unreadable(Exception):
    """A tile that a check needs is damaged, which has been put down."""


_NONE = np.zeros((TILE, TILE), dtype=np.uint16)


@dataclass
class Checked:
    """What a check found, and between which two numbers the pixels of level 0 that it saw add up."""

    found: list[Finding] = field(default_factory=list)
    least: float = 0.0
    most: float = 0.0


Check = Callable[[], Checked]


def checks_of(stack: Stack, slabs: Stack | None) -> Iterator[tuple[int, Check]]:
    """(slab, what to call) for every check of a pyramid; together they read each of its tiles."""
    for level in range(1, len(stack.levels)):
        rows, columns = stack.levels[level].tiles
        for slab in range(stack.levels[0].shape[0]):
            for row in range(rows):
                for column in range(columns):
                    yield slab, _Average(stack, level, slab, row, column)
    if len(stack.levels) == 1:
        for slab in range(stack.levels[0].shape[0]):
            yield slab, _Single(stack, slab)
    if slabs is not None:
        level = min(1, len(stack.levels) - 1)
        for row in range(stack.levels[level].tiles[0]):
            for column in range(stack.levels[level].tiles[1]):
                yield 0, _Whole(stack, slabs, level, row, column)


@dataclass(frozen=True)
class _Average:
    """Is a tile the average (or what its kind of sheet keeps) of the four below it? Adds up level 0 in passing."""

    stack: Stack
    level: int
    slab: int
    row: int
    column: int

    def __call__(self) -> Checked:
        checked, stack = Checked(), self.stack
        try:
            coarse = stack.codes(self.level, self.slab, self.row, self.column, checked.found)
        except _Unreadable:
            coarse = None
        try:
            parts = self._parts(stack, checked, count=self.level == 1)
        except _Unreadable:
            return checked
        if coarse is None:
            return checked
        if stack.sheet["kind"] == "peak":
            misfits = _peak_misfits(coarse, parts)
        elif stack.weight is None:
            misfits = sum_misfits(coarse, parts, stack.coding, 0.25) if coarse.any() or parts.any() else 0
        else:
            try:
                misfits = _weighed_misfits(
                    stack,
                    coarse,
                    parts,
                    (self.level, self.slab, self.row, self.column),
                    lambda s: self._parts(s, Checked()),
                )
            except _Unreadable:
                return checked
        if misfits:
            path = stack.path(self.level, self.slab, self.row, self.column)
            what = f"{_pixels(misfits)} not the {_mean_word(stack)} of level {self.level - 1}"
            checked.found.append(Finding(path, what, stack.place(self.level, self.slab, self.row, self.column)))
        return checked

    def _parts(self, stack: Stack, checked: Checked, count: bool = False) -> NDArray[np.uint16]:
        """The four pixels below every pixel: uint16 (4, 512, 512)."""
        parts = np.zeros((4, TILE, TILE), dtype=np.uint16)
        below = stack.levels[self.level - 1].tiles
        half = TILE // 2
        unreadable = False
        for i in range(2):
            for j in range(2):
                row, column = 2 * self.row + i, 2 * self.column + j
                if row >= below[0] or column >= below[1]:
                    continue
                try:
                    codes = stack.codes(self.level - 1, self.slab, row, column, checked.found)
                except _Unreadable:
                    unreadable = True
                    continue
                if count:
                    least, most = total_bounds(codes, stack.coding)
                    checked.least += least
                    checked.most += most
                quarter = parts[:, i * half : (i + 1) * half, j * half : (j + 1) * half]
                for k in range(4):
                    quarter[k] = codes[k // 2 :: 2, k % 2 :: 2]
        if unreadable:
            raise _Unreadable
        return parts


@dataclass(frozen=True)
class _Single:
    """The one tile of a pyramid of one level: does it unpack, and what does it add up to?"""

    stack: Stack
    slab: int

    def __call__(self) -> Checked:
        checked = Checked()
        try:
            codes = self.stack.codes(0, self.slab, 0, 0, checked.found)
        except _Unreadable:
            return checked
        checked.least, checked.most = total_bounds(codes, self.stack.coding)
        return checked


@dataclass(frozen=True)
class _Whole:
    """Is a tile of the whole the sum of the slabs, or what its kind of sheet makes of them? One level says it for all."""

    stack: Stack
    slabs: Stack
    level: int
    row: int
    column: int

    def __call__(self) -> Checked:
        checked, stack = Checked(), self.stack
        try:
            whole = stack.codes(self.level, 0, self.row, self.column, checked.found)
            parts = self._parts(self.slabs)
            if stack.sheet["kind"] == "peak":
                misfits = _peak_misfits(whole, parts)
            elif stack.weight is None:
                misfits = sum_misfits(whole, parts, stack.coding, 1.0)
            else:
                misfits = _weighed_misfits(
                    stack, whole, parts, (self.level, 0, self.row, self.column), lambda s: self._parts(s), self.slabs
                )
        except _Unreadable:
            return checked
        if misfits:
            path = stack.path(self.level, 0, self.row, self.column)
            word = {"mean": "weighted mean", "peak": "highest"}.get(stack.sheet["kind"], stack.sheet["kind"])
            what = f"{_pixels(misfits)} not the {word} of the slabs"
            checked.found.append(Finding(path, what, stack.place(self.level, 0, self.row, self.column)))
        return checked

    def _parts(self, stack: Stack) -> NDArray[np.uint16]:
        count = stack.levels[self.level].shape[0]
        # A damaged tile of a slab is put down by the check of its own pyramid.
        return np.stack([stack.codes(self.level, slab, self.row, self.column, []) for slab in range(count)])


def _peak_misfits(whole: NDArray[np.uint16], parts: NDArray[np.uint16]) -> int:
    """How many pixels are not the highest of their parts: to the code, for codes grow with the value."""
    return int(np.count_nonzero(whole != parts.max(axis=0)))


def _weighed_misfits(
    stack: Stack,
    whole: NDArray[np.uint16],
    parts: NDArray[np.uint16],
    place: tuple[int, int, int, int],
    parts_of: Callable[[Stack], NDArray[np.uint16]],
    below: Stack | None = None,
) -> int:
    """How many pixels cannot be the mean, or the dispersion, of their parts.

    `place` is (level, slab, row, column) of the whole; the parts are of the stack `below`, where that is another one.
    """
    below = below or stack
    assert stack.weight is not None and below.weight is not None
    weights = parts_of(below.weight)
    if stack.mean is None or below.mean is None:
        return mean_misfits(whole, parts, weights, stack.coding, below.weight.coding)
    codings = stack.coding, stack.mean.coding, below.weight.coding
    about = stack.mean.codes(*place, [])
    return dispersion_misfits(whole, about, parts, parts_of(below.mean), weights, *codings, stack.sheet["floor"])


def _pixels(count: int) -> str:
    return f"{count} pixels are" if count > 1 else "1 pixel is"


def _mean_word(stack: Stack) -> str:
    if stack.weight is None:
        return "highest" if stack.sheet["kind"] == "peak" else "average"
    word = "average" if stack.mean is None else "dispersion"
    return f"{word}, weighted by {stack.sheet['weight']},"
