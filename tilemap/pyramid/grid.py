"""The sizes of a pyramid: how many levels an image has, and how each is cut into tiles and shards."""

from __future__ import annotations

from tilemap.errors import InputError

TILE = 512
SHARD = 4096


def level_shapes(rows: int, columns: int) -> list[tuple[int, int]]:
    """(rows, columns) of every level, the finest first, each half of the one before, until both sides are at most a tile.

    Raises
    ------
    InputError
        Where a side is not a whole number of tiles, or cannot be halved exactly so often.
    """
    for side, what in ((rows, "rows"), (columns, "columns")):
        if side < TILE or side % TILE:
            raise InputError(f"an image of {side} {what}: it must be a multiple of {TILE} pixels each way")
    shapes = [(rows, columns)]
    while max(shapes[-1]) > TILE:
        if shapes[-1][0] % 2 or shapes[-1][1] % 2:
            factor = 2 ** level_count(max(rows, columns))
            raise InputError(
                f"an image of {columns} columns and {rows} rows cannot be halved down to one tile: "
                f"both must be multiples of {max(factor, TILE)} pixels"
            )
        shapes.append((shapes[-1][0] // 2, shapes[-1][1] // 2))
    return shapes


def level_count(longer_side: int) -> int:
    """How often a side must be halved to fit in one tile."""
    return max(0, (-(-longer_side // TILE) - 1).bit_length())


def tile_grid(shape: tuple[int, int]) -> tuple[int, int]:
    """Rows and columns of tiles that cover an image of `shape` = (rows, columns) pixels."""
    return -(-shape[0] // TILE), -(-shape[1] // TILE)


def shard_shape(shape: tuple[int, int]) -> tuple[int, int]:
    """(rows, columns) in pixels of the shards of an image: its sides rounded up to whole tiles, 4096 at most."""
    across = tile_grid(shape)
    return min(SHARD, across[0] * TILE), min(SHARD, across[1] * TILE)


def shard_grid(shape: tuple[int, int]) -> tuple[int, int]:
    """Rows and columns of shards that cover an image of `shape` = (rows, columns) pixels."""
    side = shard_shape(shape)
    return -(-shape[0] // side[0]), -(-shape[1] // side[1])
