"""An atlas on disk in, everything that is wrong with it out: files, tiles, levels, totals.

Nothing is taken on trust. Files are compared with their checksums, and the numbers in them with each other, so that an
atlas whose checksums were made anew after it was damaged is found out too.
"""

from __future__ import annotations

import json
import math
import os
from collections.abc import Iterable, Iterator, Mapping
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import astropy.units as u
import numpy as np
from numpy.typing import NDArray

from tilemap.errors import InputError
from tilemap.progress import Report
from tilemap.pyramid.agree import mean_misfits, sum_misfits, total_bounds
from tilemap.pyramid.coding import Coding
from tilemap.pyramid.description import faults, read_description
from tilemap.pyramid.grid import TILE, level_shapes
from tilemap.pyramid.publish import CHECKSUMS, checksum_tree
from tilemap.pyramid.reader import ArrayReader, unpack_tile
from tilemap.pyramid.shards import DamagedError
from tilemap.pyramid.store import pack_tile
from tilemap.quantities import unit_named

TOTAL_TOLERANCE = 1e-6
"""Relative: how far the engine may be off in the mass it puts on an image (design.md, 5)."""


@dataclass(frozen=True)
class TilePlace:
    """Which tile: `slab` is a number or "whole"; row and column count tiles from the top left."""

    epoch: str
    sheet: str
    level: int
    slab: int | str
    row: int
    column: int

    def __str__(self) -> str:
        slab = "the whole" if self.slab == "whole" else f"slab {self.slab}"
        return f"sheet {self.sheet}, level {self.level}, {slab}, tile row {self.row}, column {self.column}"


@dataclass(frozen=True)
class Finding:
    """One thing that is wrong: the file or folder, relative to the atlas; what it is; the tile, where it is one."""

    path: str
    what: str
    tile: TilePlace | None = None

    def __str__(self) -> str:
        return f"{self.path}: {self.tile}: {self.what}" if self.tile else f"{self.path}: {self.what}"


def verify(path: str | os.PathLike[str], progress: Report | None = None) -> list[Finding]:
    """Check a whole atlas, on all cores.

    Parameters
    ----------
    path : path
        An atlas.
    progress : Report, optional
        Told of the phases "checksums" and "tiles".

    Returns
    -------
    list of Finding
        Empty for a sound atlas. Looked for are: files that are missing, that are too many, or that differ from
        `checksums.json`; descriptions in `atlas.json` that make no sense; arrays of the wrong size; shard indices and
        tiles whose own checksum is wrong; levels that are not the average of the one below; wholes that are not the
        sum of their slabs; sums that do not add up to the total of their slab. What cannot be is told from what
        rounding does by bounds that hold for certain (see agree.py).

    Raises
    ------
    InputError
        Where there is no atlas.
    """
    root = Path(path)
    described = read_description(root)
    report: Report = progress or (lambda phase, done, total: None)
    wrong = [Finding("atlas.json", what) for what in faults(described)]
    differing = _Files(root, report)
    tiles: list[Finding] = []
    if not wrong:
        with ThreadPoolExecutor(os.cpu_count()) as pool:
            tiles = list(_check_tiles(root, described, pool, report))
    # Files come first; where a differing shard is known by its tiles, these say it better.
    by_path = {finding.path for finding in tiles}
    files = [finding for finding in differing.findings() if finding.path not in by_path]
    return list(dict.fromkeys([*wrong, *files, *tiles]))


class _Files:
    """Compares the files of an atlas with its checksums."""

    def __init__(self, root: Path, report: Report) -> None:
        self.root = root
        report("checksums", 0, 1)
        self.now = checksum_tree(root)
        report("checksums", 1, 1)

    def findings(self) -> Iterator[Finding]:
        try:
            then = json.loads((self.root / CHECKSUMS).read_bytes())
        except FileNotFoundError:
            yield Finding(CHECKSUMS, "is missing")
            return
        except ValueError as error:
            yield Finding(CHECKSUMS, f"is not JSON: {error}")
            return
        if not isinstance(then, dict):
            yield Finding(CHECKSUMS, "does not list checksums by file")
            return
        for name in sorted({*then, *self.now}):
            if name not in self.now:
                yield Finding(name, f"is missing{_whose(name)}")
            elif name not in then:
                yield Finding(name, "is not among the checksums: it does not belong to this atlas")
            elif then[name] != self.now[name]:
                yield from self._differing(name)

    def _differing(self, name: str) -> Iterator[Finding]:
        """Which tiles of a shard are not the bytes that packing their codes gives; the shard, where that says nothing."""
        shard = _shard_named(name)
        found: list[Finding] = []
        packed = 0
        if shard is not None:
            try:
                reader = ArrayReader(self.root / shard.folder)
                for place, tile in shard.tiles(reader):
                    blob = reader.blob(*place)
                    packed += blob is not None
                    if blob is not None and pack_tile(unpack_tile(blob)) != blob:
                        found.append(Finding(name, "its bytes are not as they were written", tile))
            except (DamagedError, InputError):
                found = []
        # Where no tile is as it would be packed now, another version packed them, and the test says nothing.
        yield from found if len(found) < max(packed, 2) else [Finding(name, f"differs from its checksum{_whose(name)}")]


@dataclass(frozen=True)
class _Shard:
    folder: str
    epoch: str
    sheet: str
    level: int
    whole: bool
    at: tuple[int, int, int]

    def tiles(self, reader: ArrayReader) -> Iterator[tuple[tuple[int, int, int], TilePlace]]:
        slab, shard_row, shard_column = self.at
        rows, columns = reader.shard_grid
        for row in range(shard_row * rows, min((shard_row + 1) * rows, reader.tiles[0])):
            for column in range(shard_column * columns, min((shard_column + 1) * columns, reader.tiles[1])):
                shown = "whole" if self.whole else slab
                yield (slab, row, column), TilePlace(self.epoch, self.sheet, self.level, shown, row, column)


def _shard_named(name: str) -> _Shard | None:
    """What shard a path within an atlas is, if it is one: <epoch>/<sheet>/[whole/]<level>/c/<slab>/<row>/<column>."""
    parts = name.split("/")
    if len(parts) < 7 or parts[-4] != "c" or not all(part.isdecimal() for part in (parts[-5], *parts[-3:])):
        return None
    slab, row, column = (int(part) for part in parts[-3:])
    folder = "/".join(parts[:-4])
    return _Shard(folder, parts[0], parts[1], int(parts[-5]), parts[2] == "whole", (slab, row, column))


def _whose(name: str) -> str:
    shard = _shard_named(name)
    if shard is None:
        return ""
    slab, row, column = shard.at
    which = "the whole" if shard.whole else f"slab {slab}"
    return f" (sheet {shard.sheet}, level {shard.level}, {which}, shard row {row}, column {column})"


@dataclass
class _Stack:
    """One pyramid of a sheet, of its slabs or of the whole, and what is needed to read it."""

    root: Path
    epoch: str
    sheet: Mapping[str, Any]
    whole: bool
    levels: list[ArrayReader]
    coding: Coding
    weight: _Stack | None = None
    found: list[Finding] = field(default_factory=list)

    def place(self, level: int, slab: int, row: int, column: int) -> TilePlace:
        return TilePlace(self.epoch, self.sheet["name"], level, "whole" if self.whole else slab, row, column)

    def path(self, level: int, slab: int, row: int, column: int) -> str:
        reader = self.levels[level]
        shard = reader.shard_path(slab, row // reader.shard_grid[0], column // reader.shard_grid[1])
        return shard.relative_to(self.root).as_posix()

    def codes(self, level: int, slab: int, row: int, column: int, found: list[Finding]) -> NDArray[np.uint16]:
        """The tile; where it is damaged, that is put down and `_Unreadable` raised."""
        path = self.path(level, slab, row, column)
        try:
            blob = self.levels[level].blob(slab, row, column)
        except DamagedError as error:
            found.append(Finding(path, f"{error.__cause__ or error}{_whose(path)}"))
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
class _Checked:
    found: list[Finding] = field(default_factory=list)
    least: float = 0.0
    most: float = 0.0


def _check_tiles(
    root: Path, described: Mapping[str, Any], pool: ThreadPoolExecutor, report: Report
) -> Iterator[Finding]:
    stacks: list[_Stack] = []
    for epoch in described["epochs"]:
        made = list(_open_epoch(root, described, epoch))
        for stack in made:
            yield from stack.found
        stacks += [stack for stack in made if not stack.found]
    tasks = [(stack, *task) for stack in stacks for task in _tasks(stack, _whole_of(stack, stacks))]
    totals: dict[tuple[int, int], _Checked] = {}
    report("tiles", 0, len(tasks))
    results = pool.map(lambda task: task[2](), tasks)
    for done, ((stack, slab, _), checked) in enumerate(zip(tasks, results, strict=True), start=1):
        yield from checked.found
        if not stack.whole and stack.sheet["kind"] == "sum":
            total = totals.setdefault((id(stack), slab), _Checked())
            total.least += checked.least
            total.most += checked.most
            total.found += checked.found
        report("tiles", done, len(tasks))
    by_id = {id(stack): stack for stack in stacks}
    scale = {epoch["name"]: epoch.get("scale_factor") for epoch in described["epochs"]}
    for (key, slab), total in totals.items():
        # A slab with a damaged tile cannot add up, and the tile has been named.
        if not any(finding.tile is None or finding.tile.level == 0 for finding in total.found):
            yield from _total_finding(by_id[key], slab, total, described, scale[by_id[key].epoch])


def _open_epoch(root: Path, described: Mapping[str, Any], epoch: Mapping[str, Any]) -> Iterator[_Stack]:
    """Every pyramid of an epoch, with what is wrong with its arrays."""
    columns, rows = described["pixels"]
    slabs = len(described["slabs"]) - 1
    opened: dict[tuple[str, bool], _Stack] = {}
    for sheet in sorted(epoch["sheets"], key=lambda sheet: sheet["kind"] == "mean"):
        for whole in (False, True) if slabs > 1 else (False,):
            stack = _Stack(root, epoch["name"], sheet, whole, [], Coding.from_attributes(sheet))
            opened[sheet["name"], whole] = stack
            folder = f"{epoch['name']}/{sheet['name']}" + ("/whole" if whole else "")
            if not (root / folder / "zarr.json").is_file():
                stack.found.append(Finding(f"{folder}/zarr.json", "is missing: no Zarr group here"))
            for level, shape in enumerate(level_shapes(rows, columns)):
                try:
                    reader = ArrayReader(root / folder / str(level))
                except InputError as error:
                    stack.found.append(Finding(f"{folder}/{level}/zarr.json", str(error)))
                    continue
                stack.levels.append(reader)
                expected = (1 if whole else slabs, *shape)
                if reader.shape != expected:
                    what = f"its shape is {reader.shape}, and {expected} was expected"
                    stack.found.append(Finding(f"{folder}/{level}/zarr.json", what))
            if sheet["kind"] == "mean":
                stack.weight = opened[sheet["weight"], whole]
                if stack.weight.found:
                    stack.found.append(
                        Finding(folder, f"cannot be checked, for its weight {sheet['weight']} is damaged")
                    )
            yield stack


def _whole_of(stack: _Stack, stacks: Iterable[_Stack]) -> _Stack | None:
    """For the pyramid of a whole, that of its slabs."""
    if not stack.whole:
        return None
    same = (s for s in stacks if not s.whole and s.epoch == stack.epoch and s.sheet["name"] == stack.sheet["name"])
    return next(same, None)


def _tasks(stack: _Stack, slabs: _Stack | None) -> Iterator[tuple[int, Any]]:
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
    """Is a tile the average of the four below it? Adds up level 0 in passing."""

    stack: _Stack
    level: int
    slab: int
    row: int
    column: int

    def __call__(self) -> _Checked:
        checked, stack = _Checked(), self.stack
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
        if stack.weight is None:
            misfits = sum_misfits(coarse, parts, stack.coding, 0.25) if coarse.any() or parts.any() else 0
        else:
            try:
                weights = self._parts(stack.weight, _Checked())
            except _Unreadable:
                return checked
            misfits = mean_misfits(coarse, parts, weights, stack.coding, stack.weight.coding)
        if misfits:
            path = stack.path(self.level, self.slab, self.row, self.column)
            what = f"{misfits} pixels are not the {_mean_word(stack)} of level {self.level - 1}"
            checked.found.append(Finding(path, what, stack.place(self.level, self.slab, self.row, self.column)))
        return checked

    def _parts(self, stack: _Stack, checked: _Checked, count: bool = False) -> NDArray[np.uint16]:
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

    stack: _Stack
    slab: int

    def __call__(self) -> _Checked:
        checked = _Checked()
        try:
            codes = self.stack.codes(0, self.slab, 0, 0, checked.found)
        except _Unreadable:
            return checked
        checked.least, checked.most = total_bounds(codes, self.stack.coding)
        return checked


@dataclass(frozen=True)
class _Whole:
    """Is a tile of the whole the sum, or the weighted mean, of the slabs? One level says it for all."""

    stack: _Stack
    slabs: _Stack
    level: int
    row: int
    column: int

    def __call__(self) -> _Checked:
        checked, stack = _Checked(), self.stack
        try:
            whole = stack.codes(self.level, 0, self.row, self.column, checked.found)
            parts = self._parts(self.slabs)
            if stack.weight is None or self.slabs.weight is None:
                misfits = sum_misfits(whole, parts, stack.coding, 1.0)
            else:
                weights = self._parts(self.slabs.weight)
                misfits = mean_misfits(whole, parts, weights, stack.coding, stack.weight.coding)
        except _Unreadable:
            return checked
        if misfits:
            path = stack.path(self.level, 0, self.row, self.column)
            what = f"{misfits} pixels are not the {'sum' if stack.weight is None else 'weighted mean'} of the slabs"
            checked.found.append(Finding(path, what, stack.place(self.level, 0, self.row, self.column)))
        return checked

    def _parts(self, stack: _Stack) -> NDArray[np.uint16]:
        count = stack.levels[self.level].shape[0]
        # A damaged tile of a slab is put down by the check of its own pyramid.
        return np.stack([stack.codes(self.level, slab, self.row, self.column, []) for slab in range(count)])


def _mean_word(stack: _Stack) -> str:
    return "average" if stack.weight is None else f"average, weighted by {stack.sheet['weight']},"


def _total_finding(
    stack: _Stack, slab: int, bounds: _Checked, described: Mapping[str, Any], scale_factor: float | None
) -> Iterator[Finding]:
    """What is said when the pixels of a slab cannot add up to its total."""
    sheet, view = stack.sheet, described["view"]
    path = f"{stack.epoch}/{sheet['name']}/0"
    try:
        area = pixel_area(described, sheet, scale_factor)
        factor = float((unit_named(sheet["unit"]) * area).to(unit_named(sheet["total_unit"])).value)
    except (u.UnitConversionError, InputError, TypeError) as error:
        what = f"{sheet['unit']} over an area in {view['unit']}2 gives no {sheet['total_unit']}: {error}"
        yield Finding("atlas.json", f"epoch {stack.epoch}: sheet {sheet['name']}: {what}")
        return
    total = float(sheet["totals"][slab])
    noise = TOTAL_TOLERANCE * abs(total)
    if not (bounds.least * factor - noise <= total <= bounds.most * factor + noise) or math.isnan(total):
        least, most = bounds.least * factor, bounds.most * factor
        what = f"slab {slab} adds up to {least:.6g} to {most:.6g} {sheet['total_unit']}, and its total is {total:.6g}"
        yield Finding(path, what)


def pixel_area(described: Mapping[str, Any], sheet: Mapping[str, Any], scale_factor: float | None) -> u.Quantity:
    """The area of one pixel of level 0, as the sheet counts it: comoving, or proper at the epoch's scale factor."""
    view = described["view"]
    columns, rows = described["pixels"]
    side_u = (view["u"][1] - view["u"][0]) / columns
    side_v = (view["v"][1] - view["v"][0]) / rows
    proper = float(scale_factor) ** 2 if sheet.get("area") == "proper" and scale_factor is not None else 1.0
    return side_u * side_v * proper * unit_named(view["unit"]) ** 2
