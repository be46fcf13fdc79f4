"""One array of an atlas on disk in, its tiles out: where they lie, their stored bytes, their codes."""

from __future__ import annotations

import json
import os
import struct
from functools import lru_cache
from pathlib import Path
from typing import Any

import numpy as np
from isal import isal_zlib
from numpy.typing import NDArray

from tilemap.errors import InputError
from tilemap.pyramid.grid import TILE, tile_grid
from tilemap.pyramid.shards import DamagedError, index_bytes, read_index

INDICES_KEPT = 1024
"""Shard indices held by one reader: 64 tiles each make it about 10 MB at most."""

GZIP_MEMBER = 31
"""zlib's "window bits" for a deflate stream in a gzip member (RFC 1952)."""

TILE_BYTES = TILE * TILE * 2

Place = tuple[Path, int, int]


class ArrayReader:
    """Reads the tiles of one array; its metadata once, at the start. May be used from many threads at once.

    Parameters
    ----------
    folder : path
        Of a level, as `create_array` makes it.

    Attributes
    ----------
    shape : (slabs, rows, columns) in pixels
    tiles : (rows, columns) of tiles
    shard_grid : (rows, columns) of tiles in a shard
    attributes : dict

    Raises
    ------
    InputError
        Where there is no array, or one of another make than an atlas has.
    """

    def __init__(self, folder: str | os.PathLike[str]) -> None:
        self.folder = Path(folder)
        metadata = _metadata(self.folder)
        slabs, rows, columns = metadata["shape"]
        _, shard_rows, shard_columns = metadata["chunk_grid"]["configuration"]["chunk_shape"]
        self.shape: tuple[int, int, int] = (slabs, rows, columns)
        self.tiles = tile_grid((rows, columns))
        self.shard_grid: tuple[int, int] = (shard_rows // TILE, shard_columns // TILE)
        self.attributes: dict[str, Any] = metadata.get("attributes", {})
        self._index = lru_cache(maxsize=INDICES_KEPT)(self._read_index)

    def locate(self, slab: int, row: int, column: int) -> Place | None:
        """Where a tile's bytes are: (path, offset, length), or None where the tile is empty.

        Parameters
        ----------
        slab, row, column : int
            `row` and `column` count tiles from the top left.

        Raises
        ------
        InputError
            Where the array has no such place.
        DamagedError
            Where the shard's index is damaged.
        """
        if not (0 <= slab < self.shape[0] and 0 <= row < self.tiles[0] and 0 <= column < self.tiles[1]):
            raise InputError(
                f"{self.folder}: no tile at slab {slab}, row {row}, column {column}: there are {self.shape[0]} slabs, "
                f"{self.tiles[0]} rows and {self.tiles[1]} columns of tiles, each counted from 0"
            )
        rows, columns = self.shard_grid
        return self._index(slab, row // rows, column // columns)[(row % rows) * columns + column % columns]

    def blob(self, slab: int, row: int, column: int) -> bytes | None:
        """The tile as stored, a gzip member, or None where it is empty; raises as `locate` does."""
        place = self.locate(slab, row, column)
        if place is None:
            return None
        path, offset, length = place
        with path.open("rb", buffering=0) as file:
            data = os.pread(file.fileno(), length, offset)
        if len(data) != length:
            raise DamagedError(f"{path} ends within a tile: {len(data)} bytes at {offset} instead of {length}")
        return data

    def codes(self, slab: int, row: int, column: int) -> NDArray[np.uint16]:
        """The tile unpacked: uint16 (512, 512), read-only; raises as `locate` does, and for a tile that does not unpack."""
        blob = self.blob(slab, row, column)
        if blob is None:
            return _EMPTY
        try:
            return unpack_tile(blob)
        except DamagedError as error:
            raise DamagedError(f"{self.folder}: the tile at slab {slab}, row {row}, column {column} {error}") from error

    def shard_path(self, slab: int, shard_row: int, shard_column: int) -> Path:
        """Where a shard's file is, or would be."""
        return self.folder / "c" / str(slab) / str(shard_row) / str(shard_column)

    def _read_index(self, slab: int, shard_row: int, shard_column: int) -> list[Place | None]:
        path = self.shard_path(slab, shard_row, shard_column)
        places = self.shard_grid[0] * self.shard_grid[1]
        try:
            with path.open("rb", buffering=0) as file:
                size = os.fstat(file.fileno()).st_size
                length = index_bytes(places)
                end = os.pread(file.fileno(), length, max(0, size - length))
        except FileNotFoundError:
            return [None] * places
        try:
            return [place and (path, *place) for place in read_index(end, size, places)]
        except DamagedError as error:
            raise DamagedError(f"{path} {error}") from error


def unpack_tile(blob: bytes) -> NDArray[np.uint16]:
    """The codes in a packed tile: uint16 (512, 512), read-only.

    Raises
    ------
    DamagedError
        Where it is no whole gzip member, its checksum is wrong, or it is not a tile's worth of codes.
    """
    try:
        data = isal_zlib.decompress(blob, GZIP_MEMBER)
    except isal_zlib.error as error:  # type: ignore[misc]  # its stub calls the class an instance
        raise DamagedError(f"does not unpack: {error}") from error
    if len(data) != TILE_BYTES:
        raise DamagedError(f"unpacks to {len(data)} bytes, and {TILE_BYTES} were expected")
    # The member ends with its CRC-32 and length (RFC 1952, 2.3.1); looked at here too, so that nothing may follow them.
    if blob[-8:] != struct.pack("<II", isal_zlib.crc32(data), TILE_BYTES):
        raise DamagedError("does not end with the checksum of what it unpacks to")
    return np.frombuffer(data, dtype="<u2").astype(np.uint16, copy=False).reshape(TILE, TILE)


def _metadata(folder: Path) -> dict[str, Any]:
    """The array's zarr.json, checked to be of the one make that tiles are read from."""
    path = folder / "zarr.json"
    try:
        metadata = json.loads(path.read_bytes())
    except FileNotFoundError:
        raise InputError(f"{folder} is not an array of an atlas: it has no zarr.json") from None
    except ValueError as error:
        raise InputError(f"{path} is not JSON: {error}") from error
    try:
        (sharding,) = metadata["codecs"]
        inner = sharding["configuration"]
        good = (
            metadata["node_type"] == "array"
            and metadata["data_type"] == "uint16"
            and metadata["chunk_key_encoding"]["name"] == "default"
            and sharding["name"] == "sharding_indexed"
            and inner["chunk_shape"] == [1, TILE, TILE]
            and [codec["name"] for codec in inner["codecs"]] == ["bytes", "gzip"]
            and [codec["name"] for codec in inner["index_codecs"]] == ["bytes", "crc32c"]
            and inner.get("index_location", "end") == "end"
            and len(metadata["shape"]) == len(metadata["chunk_grid"]["configuration"]["chunk_shape"]) == 3
            and metadata["chunk_grid"]["configuration"]["chunk_shape"][0] == 1
        )
    except (KeyError, TypeError, ValueError):
        good = False
    if not good:
        raise InputError(
            f"{path}: not an array of an atlas, which is uint16 (slab, row, column), tiles of {TILE} pixels, "
            "packed by bytes and gzip, in shards with their index at the end"
        )
    return metadata


_EMPTY = np.zeros((TILE, TILE), dtype=np.uint16)
_EMPTY.flags.writeable = False
