"""Speeds and sizes behind the choices of this room: python tests/pyramid/measure.py [ATLAS...] prints one JSON object a line."""

from __future__ import annotations

import json
import sys
import time
import zlib
from collections.abc import Callable
from pathlib import Path
from typing import Any

import numpy as np
from isal import isal_zlib

sys.path.insert(0, str(Path(__file__).resolve().parents[1]))

from atlas_maker import gaussian_field

from tilemap.atlas import Atlas
from tilemap.pyramid.coding import LinearCoding, LogCoding
from tilemap.pyramid.reader import unpack_tile
from tilemap.pyramid.reduce import halve
from tilemap.pyramid.store import pack_tile

CODING = LogCoding(-28.0)


def seconds(function: Callable[..., Any], arguments: list[Any], repeat: int = 3) -> float:
    """Best CPU time of some runs, for all arguments together: of this thread, so that a busy machine changes little."""
    function(arguments[0])
    best = float("inf")
    for _ in range(repeat):
        start = time.thread_time()
        for argument in arguments:
            function(argument)
        best = min(best, time.thread_time() - start)
    return best


def main() -> None:
    """Print the figures."""
    maps = [(10.0 ** (5 + gaussian_field((512, 512), -3.2, seed))).astype(np.float32) for seed in range(8)]
    pixels = sum(image.size for image in maps)
    codes = [CODING.encode(image) for image in maps]
    for name, function, arguments in (
        ("encode log", CODING.encode, maps),
        ("encode linear", LinearCoding(-1e7, 500.0).encode, maps),
        ("numpy.log10 alone", np.log10, maps),
        ("decode", CODING.decode, codes),
        ("halve", halve, maps),
    ):
        speed = pixels / seconds(function, arguments) / 1e6
        print(json.dumps({"what": name, "Mpixel/s": round(speed)}))
    for path in sys.argv[1:]:
        measure_packing(path)


def measure_packing(path: str) -> None:
    """Print how small and how fast the tiles of the finest level of an atlas's sheets can be packed."""
    atlas = Atlas(path)
    tiles = []
    for sheet in atlas.sheets:
        reader = atlas.reader(atlas.epochs[0], sheet, 0, whole=True)
        places = np.random.default_rng(1).permutation(list(np.ndindex(reader.tiles)))
        tiles += [reader.codes(0, *place).copy() for place in places[:12]]
    megabytes = sum(tile.nbytes for tile in tiles) / 1e6
    packers: dict[str, Callable[[Any], bytes]] = {
        f"ISA-L {level}": lambda tile, level=level: isal_zlib.compress(tile, level, 31) for level in range(4)
    }
    packers |= {f"zlib {level}": lambda tile, level=level: zlib.compress(tile, level, 31) for level in (1, 6)}
    for name, packer in packers.items():
        kib = sum(len(packer(tile)) for tile in tiles) / len(tiles) / 1024
        line = {
            "atlas": path,
            "pack": name,
            "KiB/tile": round(kib, 1),
            "MB/s": round(megabytes / seconds(packer, tiles)),
        }
        print(json.dumps(line))
    packed = [blob for tile in tiles if (blob := pack_tile(tile)) is not None]
    unpacked = len(packed) * tiles[0].nbytes / 1e6
    print(json.dumps({"atlas": path, "unpack": "as read", "MB/s": round(unpacked / seconds(unpack_tile, packed))}))


if __name__ == "__main__":
    main()
