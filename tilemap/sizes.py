"""Sizes of memory as people write them in, bytes out."""

from __future__ import annotations

import re
from pathlib import Path

from tilemap.errors import InputError

BYTES = {"": 1, "B": 1} | {
    prefix + suffix: factor**power
    for power, prefix in enumerate("KMGT", start=1)
    for suffix, factor in (("B", 1000), ("iB", 1024))
}


def half_of_free() -> int | None:
    """Half of the memory that this machine has free, in bytes; None where the system does not say (Linux does)."""
    try:
        text = Path("/proc/meminfo").read_text(encoding="ascii")
    except OSError:
        return None
    found = re.search(r"MemAvailable:\s+(\d+) kB", text)
    return int(found[1]) * 512 if found else None


def byte_count(size: int | str) -> int:
    """Bytes in a size such as 4GiB, 500 MB or 1.5e9; a number is bytes already.

    Raises
    ------
    InputError
        If it is not a positive size.
    """
    found = re.fullmatch(r"\s*([0-9.]+(?:[eE][0-9]+)?)\s*([A-Za-z]*)\s*", str(size))
    try:
        count = int(float(found[1]) * BYTES[found[2]]) if found else 0
    except (KeyError, ValueError):
        count = 0
    if count < 1:
        raise InputError(f"--memory {size}: expected a size such as 4GiB or 500MB")
    return count
