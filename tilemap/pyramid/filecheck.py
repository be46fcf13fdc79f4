"""The files of an atlas and its checksums in, those that are missing, too many or different out."""

from __future__ import annotations

import json
from collections.abc import Iterator
from pathlib import Path

from tilemap.errors import InputError
from tilemap.pyramid.findings import Finding, shard_named, whose
from tilemap.pyramid.publish import CHECKSUMS, checksum_tree
from tilemap.pyramid.reader import ArrayReader, unpack_tile
from tilemap.pyramid.shards import DamagedError
from tilemap.pyramid.store import pack_tile


def check_files(root: Path) -> Iterator[Finding]:
    """Compare every file below `root` with `checksums.json`."""
    try:
        then = json.loads((root / CHECKSUMS).read_bytes())
    except FileNotFoundError:
        yield Finding(CHECKSUMS, "is missing")
        return
    except ValueError as error:
        yield Finding(CHECKSUMS, f"is not JSON: {error}")
        return
    if not isinstance(then, dict):
        yield Finding(CHECKSUMS, "does not list checksums by file")
        return
    now = checksum_tree(root)
    for name in sorted({*then, *now}):
        if name not in now:
            yield Finding(name, f"is missing{whose(name)}")
        elif name not in then:
            yield Finding(name, "is not among the checksums: it does not belong to this atlas")
        elif then[name] != now[name]:
            yield from _differing(root, name)


def _differing(root: Path, name: str) -> list[Finding]:
    """Which tiles of a shard are not the bytes that packing their codes gives; the shard, where that says nothing."""
    found: list[Finding] = []
    shard = shard_named(name)
    packed = 0
    if shard is not None:
        try:
            reader = ArrayReader(root / shard.folder)
            for place, tile in shard.tiles(reader):
                blob = reader.blob(*place)
                if blob is not None:
                    packed += 1
                    if pack_tile(unpack_tile(blob)) != blob:
                        found.append(Finding(name, "its bytes are not as they were written", tile))
        except (DamagedError, InputError):
            found = []
    # Where no tile at all is as it would be packed now, another version packed them, and the test says nothing.
    if found and (len(found) < packed or packed == 1):
        return found
    return [Finding(name, f"differs from its checksum{whose(name)}")]
