"""Coded tiles in, Zarr v3 groups and arrays on disk out: `zarr.open` alone reads every level of them.

After the Zarr v3 core specification (https://zarr-specs.readthedocs.io), with its core codecs only, so that a browser
unpacks a tile with what it has. Reading is `ArrayReader`, in reader.py.
"""

from __future__ import annotations

import contextlib
import json
import os
import threading
from collections.abc import Mapping
from pathlib import Path
from typing import Any

import numpy as np
from isal import isal_zlib
from numpy.typing import NDArray

from tilemap.pyramid.grid import TILE, shard_shape
from tilemap.pyramid.reader import GZIP_MEMBER, ArrayReader
from tilemap.pyramid.shards import DamagedError, pack_shard

__all__ = ["ArrayReader", "DamagedError", "create_array", "create_group", "pack_tile", "write_shard"]

PART = ".part"
"""Ends the name of a file that is still being written; one left behind is from a build that was stopped."""

# Measured on the maps of builds/run32.yaml, one core (python tests/pyramid/measure.py): ISA-L level 2 makes 180 KiB of a
# tile at 550 MB/s, zlib level 1 the same 179 KiB at 107 MB/s; ISA-L level 1 185 KiB at 603, level 3 181 KiB at 371.
GZIP_LEVEL = 2


def create_group(folder: str | os.PathLike[str], attributes: Mapping[str, Any] | None = None) -> None:
    """Make `folder` (with its parents) a Zarr group with these attributes (JSON; no NaN)."""
    _write_json(Path(folder), {"zarr_format": 3, "node_type": "group", "attributes": dict(attributes or {})})


def create_array(
    folder: str | os.PathLike[str], shape: tuple[int, int, int], attributes: Mapping[str, Any] | None = None
) -> None:
    """Make `folder` (with its parents) an empty uint16 array.

    Parameters
    ----------
    folder : path
    shape : (slabs, rows, columns)
    attributes : JSON, optional
    """
    slabs, rows, columns = (int(n) for n in shape)
    little = {"name": "bytes", "configuration": {"endian": "little"}}
    sharding = {
        "chunk_shape": [1, TILE, TILE],
        # The level is for whoever writes here by other means; nothing that reads needs it.
        "codecs": [little, {"name": "gzip", "configuration": {"level": 1}}],
        "index_codecs": [little, {"name": "crc32c"}],
        "index_location": "end",
    }
    metadata = {
        "zarr_format": 3,
        "node_type": "array",
        "shape": [slabs, rows, columns],
        "data_type": "uint16",
        "chunk_grid": {"name": "regular", "configuration": {"chunk_shape": [1, *shard_shape((rows, columns))]}},
        "chunk_key_encoding": {"name": "default", "configuration": {"separator": "/"}},
        "fill_value": 0,
        "codecs": [{"name": "sharding_indexed", "configuration": sharding}],
        "attributes": dict(attributes or {}),
        "dimension_names": ["slab", "row", "column"],
    }
    _write_json(Path(folder), metadata)


def pack_tile(codes: NDArray[np.uint16]) -> bytes | None:
    """One tile as a gzip member (RFC 1952), the same bytes for the same codes; None where all are 0.

    Other threads run meanwhile.

    Parameters
    ----------
    codes : uint16 (512, 512)

    Raises
    ------
    ValueError
        Where shape or dtype is another.
    """
    if codes.shape != (TILE, TILE) or codes.dtype != np.uint16:
        raise ValueError(f"a tile is uint16 ({TILE}, {TILE}), not {codes.dtype} {codes.shape}")
    if not codes.any():
        return None
    return isal_zlib.compress(np.ascontiguousarray(codes, dtype="<u2"), GZIP_LEVEL, GZIP_MEMBER)


def write_shard(
    array_folder: str | os.PathLike[str],
    shard: tuple[int, int, int],
    tiles: Mapping[tuple[int, int], bytes | None],
    grid: tuple[int, int] | None = None,
) -> int:
    """Write one shard of an array, whole or not at all.

    Parameters
    ----------
    array_folder : path
    shard : (slab, shard row, shard column)
    tiles : {(row, column) in the shard: what `pack_tile` gave}
        None counts as not there. Without any tile no file is written, and one that is there is taken away.
    grid : (rows, columns) of tiles in a shard, optional
        Read from the array's metadata where it is not given.

    Returns
    -------
    int
        Bytes written.
    """
    folder = Path(array_folder)
    path = folder.joinpath("c", *(str(n) for n in shard))
    present = {place: tile for place, tile in tiles.items() if tile is not None}
    if not present:
        path.unlink(missing_ok=True)
        return 0
    data = pack_shard(present, grid or ArrayReader(folder).shard_grid)
    path.parent.mkdir(parents=True, exist_ok=True)
    write_whole(path, data)
    return len(data)


def _write_json(folder: Path, content: Mapping[str, Any]) -> None:
    folder.mkdir(parents=True, exist_ok=True)
    write_whole(folder / "zarr.json", json.dumps(content, indent=1, allow_nan=False).encode())


def write_whole(path: Path, data: bytes) -> None:
    """Write under another name and rename, so that `path` is never half a file."""
    part = path.with_name(f"{path.name}.{os.getpid()}.{threading.get_ident()}{PART}")
    try:
        part.write_bytes(data)
        part.replace(path)
    except BaseException:
        with contextlib.suppress(OSError):
            part.unlink()
        raise
