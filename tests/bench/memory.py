"""Builds larger than memory: the peak of a build that was told how much it may use, and what spilling costs.

The folder for scratch is the one that `tempfile` gives: set TMPDIR to one with 60 GB free.
"""

from __future__ import annotations

import contextlib
import re
import subprocess
import sys
import tempfile
import time
from collections.abc import Iterator
from pathlib import Path

from crowd import write_crowd
from run import Figure, figure


def built(build: Path, out: Path, memory: str) -> tuple[float, float]:
    """Build with the command in a process of its own; seconds, and the peak of its resident memory in GiB.

    The peak is asked of the system while the process lives: what it says of one that has ended counts what the parent held
    when it was started.
    """
    start, gib = time.perf_counter(), 0.0
    arguments = ["-m", "tilemap", "build", str(build), "--out", str(out), "--memory", memory]
    process = subprocess.Popen([sys.executable, *arguments], stdout=subprocess.DEVNULL)
    while process.poll() is None:
        with contextlib.suppress(OSError):
            found = re.search(r"VmHWM:\s+(\d+) kB", Path(f"/proc/{process.pid}/status").read_text())
            gib = max(gib, int(found[1]) / 2**20 if found else 0.0)
        time.sleep(0.05)
    if process.returncode:
        raise RuntimeError(f"the build ended with {process.returncode}")
    return time.perf_counter() - start, gib


def peak() -> Iterator[Figure]:
    """Peak resident memory of a build of 100 million particles, 32768 x 32768 pixels, 4 slabs, that may use 4 GiB."""
    with tempfile.TemporaryDirectory(prefix="tilemap-bench-") as name:
        build = write_crowd(Path(name), 100_000_000, 32768, 4)
        seconds, gib = built(build, Path(name) / "crowd.atlas", "4GiB")
        yield figure(
            "memory/peak_gib",
            gib,
            "GiB",
            "at most 4: --memory 4GiB; all threads of one process",
            seconds=round(seconds),
        )


def spill() -> Iterator[Figure]:
    """The time of a build with its particles on scratch disk over that of the same build in memory."""
    with tempfile.TemporaryDirectory(prefix="tilemap-bench-") as name:
        build = write_crowd(Path(name), 20_000_000, 16384, 4)
        best = {"1GiB": (float("inf"), 0.0), "16GiB": (float("inf"), 0.0)}
        for _ in range(3):
            for memory in best:
                best[memory] = min(best[memory], built(build, Path(name) / "crowd.atlas", memory))
        yield figure(
            "memory/spill",
            best["1GiB"][0] / best["16GiB"][0],
            "ratio",
            "the same build of 20 000 000 particles, 16384 x 16384, 4 slabs with --memory 16GiB, in time",
            seconds=round(best["1GiB"][0], 1),
            peak_gib=round(best["1GiB"][1], 2),
        )
