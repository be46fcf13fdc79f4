"""How what is wrong with an atlas is told: which file, which tile, what."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass

from tilemap.pyramid.reader import ArrayReader


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


@dataclass(frozen=True)
class ShardPlace:
    """Which shard: the array's folder and what it is of; `at` is (slab, shard row, shard column)."""

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


def shard_named(name: str) -> ShardPlace | None:
    """What shard a path within an atlas is, if it is one: <epoch>/<sheet>/[whole/]<level>/c/<slab>/<row>/<column>."""
    parts = name.split("/")
    if len(parts) < 7 or parts[-4] != "c" or not all(part.isdecimal() for part in (parts[-5], *parts[-3:])):
        return None
    slab, row, column = (int(part) for part in parts[-3:])
    folder = "/".join(parts[:-4])
    return ShardPlace(folder, parts[0], parts[1], int(parts[-5]), parts[2] == "whole", (slab, row, column))


def whose(name: str) -> str:
    shard = shard_named(name)
    if shard is None:
        return ""
    slab, row, column = shard.at
    which = "the whole" if shard.whole else f"slab {slab}"
    return f" (sheet {shard.sheet}, level {shard.level}, {which}, shard row {row}, column {column})"
