"""The demo, phase by phase, beside numpy.histogram2d of the same particles on the same grid.

Both run in processes of their own, so that each one's peak of memory is its own.
"""

from __future__ import annotations

import json
import os
import resource
import subprocess
import sys
import tempfile
import time
from collections.abc import Iterator
from pathlib import Path

from run import Figure, figure

COMPARED = "numpy.histogram2d of the same particles, weighted by mass, on the same grid, in the same run"


def demo_build() -> Iterator[Figure]:
    with tempfile.TemporaryDirectory(prefix="tilemap-bench-") as folder:
        invented = _in_process("invent", folder)
        plain = _in_process("plain", folder)
        cold = _in_process("build", folder)
        build = _in_process("build", folder)
        for phase, seconds in build["phases"].items():
            yield figure(f"first/{phase}", seconds / plain["seconds"], "ratio", COMPARED, seconds=round(seconds, 2))
        yield figure(
            "first/invent",
            invented["seconds"] / plain["seconds"],
            "ratio",
            COMPARED,
            seconds=round(invented["seconds"], 2),
        )
        yield figure(
            "first/build",
            build["seconds"] / plain["seconds"],
            "ratio",
            COMPARED,
            seconds=round(build["seconds"], 2),
            particles=plain["particles"],
        )
        yield figure(
            "first/compile",
            cold["seconds"] / build["seconds"],
            "ratio",
            "the same build once more, with numba's cache filled",
        )
        yield figure("first/peak_gib", build["peak_gib"], "GiB", f"{plain['peak_gib']:.2f} GiB: {COMPARED}")


def _in_process(what: str, folder: str) -> dict:
    # A cache of numba's own to each run of the bench: the first build compiles, whatever was compiled here before.
    environment = {**os.environ, "NUMBA_CACHE_DIR": str(Path(folder) / "numba")}
    command = [sys.executable, __file__, what, folder]
    done = subprocess.run(command, check=True, stdout=subprocess.PIPE, text=True, env=environment)
    return json.loads(done.stdout.splitlines()[-1])


def _invent(folder: Path) -> dict:
    from tilemap import demo

    start = time.perf_counter()
    demo.make(folder)
    return {"seconds": time.perf_counter() - start}


def _build(folder: Path) -> dict:
    from tilemap.build_atlas import build_atlas

    phases: dict[str, float] = {}
    start = last = time.perf_counter()

    def note(phase: str, done: float, total: float) -> None:
        nonlocal last
        now = time.perf_counter()
        phases[phase] = phases.get(phase, 0.0) + now - last
        last = now

    build_atlas(folder / "marram.yaml", folder / "marram.atlas", progress=note)
    return {"seconds": time.perf_counter() - start, "phases": phases}


def _plain(folder: Path) -> dict:
    import numpy as np

    from tilemap import buildfile
    from tilemap.sources import open_source

    build = buildfile.load(folder / "marram.yaml")
    source = open_source(build)
    side = float(source.facts.box[0])  # type: ignore[index]
    seconds, particles = 0.0, 0
    for species in build.snapshot.species:
        chunks = list(source.chunks(species))
        position = np.concatenate([chunk.position for chunk in chunks])
        mass = np.concatenate([chunk.mass for chunk in chunks])
        start = time.perf_counter()
        np.histogram2d(position[:, 0], position[:, 1], bins=build.view.pixels, range=[[0, side]] * 2, weights=mass)
        seconds += time.perf_counter() - start
        particles += len(position)
    return {"seconds": seconds, "particles": particles}


if __name__ == "__main__":
    answer = {"invent": _invent, "build": _build, "plain": _plain}[sys.argv[1]](Path(sys.argv[2]))
    answer["peak_gib"] = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 2**20
    print(json.dumps(answer))
