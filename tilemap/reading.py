"""One species' particles from the files to buckets: read, found a radius where they have none, routed.

What has been read is noted beside it, so that a build that was stopped need not read it again.
"""

from __future__ import annotations

import shutil
from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from tilemap.budget import Budget
from tilemap.buildfile import BuildFile
from tilemap.channels import Report, SpeciesPlan
from tilemap.errors import InputError
from tilemap.project.camera import Camera
from tilemap.project.scatter import Buckets, Plan
from tilemap.project.smoothing import Neighbours
from tilemap.runners.local import LocalRunner
from tilemap.sources import Chunk, Source
from tilemap.spill import Runs, load_pack, save_pack


@dataclass
class Reading:
    """The way of one species from its files to its buckets.

    Parameters
    ----------
    build : BuildFile
    source : Source
    camera : Camera
    plan : Plan
    planes : SpeciesPlan
        Its ranges, scales and shifts are filled.
    budget : Budget
    runner : LocalRunner
    report : callable
        Called with (phase, done, total).
    work : Path
        Scratch folder of the species.
    """

    build: BuildFile
    source: Source
    camera: Camera
    plan: Plan
    planes: SpeciesPlan
    budget: Budget
    runner: LocalRunner
    report: Report
    work: Path

    def read(self) -> tuple[Buckets, NDArray[np.float64]]:
        """Read every particle and route it; its buckets, and the sum of each plane over all records.

        Raises
        ------
        InputError
            As `Source.chunks` and `Neighbours.radii` do.
        """
        folder = None if self.budget.held else self.work / "records"
        runs = Runs(self.plan.buckets, 3 + len(self.planes.quantities), folder)
        buckets = Buckets(self.camera, self.plan, runs)
        known, sums = load_pack(self.work / "read.npz"), np.zeros(len(self.planes.quantities))
        if known is not None and len(runs) == known["chunks"]:
            self.planes.take_up(known)
            self.planes.ranges = known["ranges"]
            return buckets, known["sums"] * self.planes.scales
        taken = len(runs)
        for note in runs.notes:
            sums += note["sums"]
            self.planes.widen(note["ranges"])
            self.planes.take_up(note)
        count, done, phase = sum(map(self.source.count, self.planes.parts)), 0, f"reading {self.planes.species}"
        self.report(phase, 0, count)

        def route(piece: tuple[int, Chunk]) -> tuple[int, tuple[NDArray, NDArray] | None, NDArray[np.float64]]:
            number, chunk = piece
            if number < taken:
                return len(chunk), None, np.empty(0)
            values, ranges = self.planes.planes(chunk)
            assert chunk.radius is not None
            return len(chunk), buckets.route(*self.camera.see(chunk.position, chunk.radius, values)), ranges

        chunks = 0
        for length, routed, ranges in self.runner.map(route, self._settled_chunks()):
            chunks += 1
            if routed is not None:
                added = routed[1][:, 3:].sum(axis=0, dtype=np.float64)
                runs.add(*routed, {"sums": added, "ranges": ranges, **self.planes.state()})
                self.planes.widen(ranges)
                sums += added
            done += length
            self.report(phase, done, count)
        state = {"sums": sums, "ranges": self.planes.ranges, "chunks": np.array(chunks), **self.planes.state()}
        save_pack(self.work / "read.npz", **state)
        return buckets, sums * self.planes.scales

    def _settled_chunks(self) -> Iterator[tuple[int, Chunk]]:
        for number, chunk in enumerate(chunk for species in self.planes.parts for chunk in self._chunks(species)):
            self.planes.settle(chunk)
            yield number, chunk

    def _chunks(self, species: str) -> Iterator[Chunk]:
        neighbours = self.build.snapshot.species[species].smoothing.neighbours
        if neighbours is None:
            yield from self.source.chunks(species, self.planes.fields, self.budget.chunk)
            return
        search = self._search(species, neighbours)
        for chunk in self.source.chunks(species, self.planes.fields, self.budget.chunk):
            chunk.radius = search.radii(chunk.start, len(chunk))
            yield chunk

    def _search(self, species: str, neighbours: int) -> Neighbours:
        count, phase, done = (
            self.source.count(species),
            f"finding the neighbours of {species}",
            self.work / f"found {species}.npz",
        )
        box = self.source.facts.box if self.source.facts.periodic else None
        search = Neighbours(count, neighbours, box, self.budget.chunk, lambda *what: self._fresh(species, *what))
        known = load_pack(done)
        if known is not None and not self.budget.held:
            found = Runs(-(-count // self.budget.chunk), 2, self.work / f"radii {species}", np.float64)
            if found.counts.sum() == count:
                search.take_up(found, float(known["smallest"]))
                return search
        try:
            search.find(lambda: self._positions(species), self.runner, lambda done: self.report(phase, done, count))
        except InputError as error:
            raise InputError(f"snapshot.species.{species}: {error}") from error
        if not self.budget.held:
            save_pack(done, smallest=np.array(search.smallest))
            shutil.rmtree(self.work / f"cells {species}")
        return search

    def _fresh(self, species: str, name: str, keys: int, width: int) -> Runs:
        """Empty runs of float64."""
        folder = None if self.budget.held else self.work / f"{name} {species}"
        if folder is not None:
            shutil.rmtree(folder, ignore_errors=True)
        return Runs(keys, width, folder, np.float64)

    def _positions(self, species: str) -> Iterator[NDArray[np.float64]]:
        for chunk in self.source.chunks(species, (), self.budget.chunk):
            yield chunk.position
