"""Finished float values of one sheet in, coded tiles in shards out, in whatever order they come."""

from __future__ import annotations

import threading
from collections.abc import Iterable, Iterator
from pathlib import Path
from typing import Any, NamedTuple

import numpy as np
from numpy.typing import NDArray

from tilemap.pyramid.coding import Coding
from tilemap.pyramid.grid import TILE, level_shapes, shard_shape, tile_grid
from tilemap.pyramid.store import PART, create_array, create_group, pack_tile, write_shard

Shard = tuple[int, int, int, int]
"""Level, slab, row and column."""


class WaitingTile(NamedTuple):
    """A packed tile, and where it belongs; None where there is nothing."""

    level: int
    slab: int
    row: int
    column: int
    packed: bytes | None


WHOLE = -1
"""In place of a slab's number: the stack of one that holds all slabs together."""


class SheetWriter:
    """The arrays of one sheet, every level, slabs and whole.

    Safe to call from several threads. A shard is written when its last tile has come; until then its packed tiles are
    kept, so pieces that lie together should come together. Shards that are in the folder already stay as they are.

    Parameters
    ----------
    folder : Path
        The sheet's folder; made here.
    shape : (rows, columns) at level 0
    slabs : int
    coding : Coding
    """

    def __init__(self, folder: Path, shape: tuple[int, int], slabs: int, coding: Coding) -> None:
        self.folder = folder
        self.slabs = slabs
        self.coding = coding
        self.shapes = level_shapes(*shape)
        self._lock = threading.Lock()
        self._waiting: dict[Shard, dict[tuple[int, int], bytes | None]] = {}
        self._empty: dict[Shard, dict[tuple[int, int], bytes | None]] = {}
        self._there = set(self._written())
        self._describe({})

    def _written(self) -> Iterator[Shard]:
        """The shards that an earlier, stopped build has written."""
        for stack, whole in ((self.folder, False), (self.folder / "whole", self.slabs > 1)):
            for path in stack.glob("[0-9]*/c/*/*/*"):
                if not path.name.endswith(PART):
                    level, (slab, row, column) = int(path.parts[-5]), map(int, path.parts[-3:])
                    yield level, WHOLE if whole else slab, row, column

    def put(self, level: int, slab: int, corner: tuple[int, int], values: NDArray[np.float32]) -> None:
        """Take in a piece of an image: whole tiles, or what is left of them at the right and lower edge.

        Parameters
        ----------
        level : int
        slab : int, or WHOLE
        corner : (row, column) in tiles
        values : float32 (rows, columns), in the sheet's unit
        """
        for row, column, piece in _tiles(values, corner):
            self._put_tile(level, slab, row, column, self.coding.encode(piece))

    def _put_codes(self, level: int, slab: int, corner: tuple[int, int], codes: NDArray[np.uint16]) -> None:
        """The same as `put`, of codes."""
        for row, column, piece in _tiles(codes, corner):
            self._put_tile(level, slab, row, column, piece)

    def _put_tile(self, level: int, slab: int, row: int, column: int, codes: NDArray[np.uint16]) -> None:
        if codes.shape != (TILE, TILE):
            tile = np.zeros((TILE, TILE), dtype=np.uint16)
            tile[: codes.shape[0], : codes.shape[1]] = codes
            codes = tile
        self._add(level, slab, row, column, pack_tile(codes))

    def put_nothing(self, level: int, slab: int, corner: tuple[int, int], shape: tuple[int, int]) -> None:
        """The same for a piece of (rows, columns) pixels in which there is nothing."""
        for i in range(-(-shape[0] // TILE)):
            for j in range(-(-shape[1] // TILE)):
                self._add(level, slab, corner[0] + i, corner[1] + j, None)

    def _add(self, level: int, slab: int, row: int, column: int, tile: bytes | None) -> None:
        across = tuple(side // TILE for side in shard_shape(self.shapes[level]))
        shard = (level, slab, row // across[0], column // across[1])
        if shard in self._there:
            return
        grid = tile_grid(self.shapes[level])
        expected = min(across[0], grid[0] - shard[2] * across[0]) * min(across[1], grid[1] - shard[3] * across[1])
        with self._lock:
            tiles = self._waiting.setdefault(shard, {})
            tiles[row % across[0], column % across[1]] = tile
            if len(tiles) < expected:
                return
        stack, deep = (self.folder / "whole", 0) if slab == WHOLE and self.slabs > 1 else (self.folder, max(slab, 0))
        write_shard(stack / str(level), (deep, shard[2], shard[3]), tiles, (across[0], across[1]))
        with self._lock:  # until the shard is there, its tiles are waiting; of an empty one there will be no file
            del self._waiting[shard]
            self._there.add(shard)
            if not any(tiles.values()):
                self._empty[shard] = tiles

    def waiting(self, rows: range, columns: range) -> list[WaitingTile]:
        """Tiles whose shards are not complete, or are no files as they are empty, of those that lie within rows and columns
        of tiles of the finest level."""
        with self._lock:
            found = []
            for (level, slab, shard_row, shard_column), tiles in [*self._waiting.items(), *self._empty.items()]:
                across = tuple(side // TILE for side in shard_shape(self.shapes[level]))
                for (i, j), tile in tiles.items():
                    row, column = shard_row * across[0] + i, shard_column * across[1] + j
                    if row << level in rows and column << level in columns:
                        found.append(WaitingTile(level, slab, row, column, tile))
        return found

    def take_up(self, tiles: Iterable[WaitingTile]) -> None:
        """Take in what `waiting` gave when an earlier, stopped build wrote here."""
        for tile in tiles:
            self._add(*tile)

    def close(self, attributes: dict) -> None:
        """Give the sheet its description; every tile must have come."""
        if self._waiting:
            level, slab, row, column = next(iter(self._waiting))
            raise RuntimeError(
                f"{self.folder}: the shard {row}, {column} of level {level}, slab {slab} is not complete"
            )
        self._describe(attributes)

    def _describe(self, attributes: dict) -> None:
        stacks = [(self.folder, self.slabs)] + ([(self.folder / "whole", 1)] if self.slabs > 1 else [])
        for stack, deep in stacks:
            create_group(stack, attributes)
            for level, size in enumerate(self.shapes):
                create_array(stack / str(level), (deep, *size), attributes)


def _tiles(pixels: NDArray[Any], corner: tuple[int, int]) -> Iterator[tuple[int, int, NDArray[Any]]]:
    """Row and column of each tile that an image with this corner touches, and what it has of it."""
    for i in range(-(-pixels.shape[0] // TILE)):
        for j in range(-(-pixels.shape[1] // TILE)):
            piece = pixels[i * TILE : (i + 1) * TILE, j * TILE : (j + 1) * TILE]
            yield corner[0] + i, corner[1] + j, piece
