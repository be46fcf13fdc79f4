"""The bytes of one shard file: tiles in, index out; and back.

After the Zarr v3 sharding codec (https://zarr-specs.readthedocs.io, codec "sharding_indexed" version 1.0): the tiles as
they are, then one (offset, length) for each place in row-major order as little-endian uint64, both 2^64 - 1 where there
is no tile, then the CRC32C (RFC 3720, appendix B.4) of that index as little-endian uint32.
"""

from __future__ import annotations

import struct
from collections.abc import Mapping

import google_crc32c
import numpy as np

from tilemap.errors import NotSoError

ABSENT = (1 << 64) - 1


class DamagedError(NotSoError):
    """Bytes of an atlas are not as they were written: one sentence that names the file, and the tile where it is known."""


def index_bytes(places: int) -> int:
    """How long the index of a shard of so many places is, its checksum included."""
    return 16 * places + 4


def pack_shard(tiles: Mapping[tuple[int, int], bytes], grid: tuple[int, int]) -> bytes:
    """A whole shard, its tiles in row-major order, so that equal tiles make equal files.

    Parameters
    ----------
    tiles : {(row, column) in the shard: packed tile}
    grid : (rows, columns) of places in the shard

    Raises
    ------
    ValueError
        Where a tile lies outside the grid.
    """
    index = np.full((*grid, 2), ABSENT, dtype="<u8")
    offset = 0
    parts: list[bytes] = []
    for place in sorted(tiles):
        if not (0 <= place[0] < grid[0] and 0 <= place[1] < grid[1]):
            raise ValueError(f"no place {place} in a shard of {grid[0]} x {grid[1]} tiles")
        index[place] = offset, len(tiles[place])
        offset += len(tiles[place])
        parts.append(tiles[place])
    table = index.tobytes()
    return b"".join([*parts, table, struct.pack("<I", google_crc32c.value(table))])


def read_index(end: bytes, size: int, places: int) -> list[tuple[int, int] | None]:
    """Where the tiles of a shard are.

    Parameters
    ----------
    end : bytes
        The last `index_bytes(places)` bytes of the file.
    size : int
        The length of the whole file.
    places : int

    Returns
    -------
    list of (offset, length), or None for an empty place; row-major

    Raises
    ------
    DamagedError
        Without the name of the file, which this does not know: too short, a wrong checksum, a tile beyond the end.
    """
    if size < index_bytes(places) or len(end) != index_bytes(places):
        raise DamagedError(f"is {size} bytes long, too short for the index of {places} tiles")
    table, stored = end[:-4], struct.unpack("<I", end[-4:])[0]
    if google_crc32c.value(table) != stored:
        raise DamagedError("has an index whose checksum is not right")
    room = size - index_bytes(places)
    index: list[tuple[int, int] | None] = []
    for offset, length in np.frombuffer(table, dtype="<u8").reshape(places, 2).tolist():
        if offset == ABSENT and length == ABSENT:
            index.append(None)
        elif offset + length > room:
            raise DamagedError(f"has an index that points beyond its end, to byte {offset + length} of {room}")
        else:
            index.append((offset, length))
    return index
