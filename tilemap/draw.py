"""One species from its particles to the tiles of its sheets: read, route, draw region by region, code, halve.

Memory holds the species' particles, its coarse images, and one region for each worker; never an image at level 0.
"""

from __future__ import annotations

import threading
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from tilemap.buildfile import BuildFile
from tilemap.channels import Report, SheetPlan, SpeciesPlan
from tilemap.errors import InputError
from tilemap.project.camera import Camera
from tilemap.project.scatter import Buckets, Plan
from tilemap.project.smoothing import neighbour_radii
from tilemap.project.stamps import stamps_for
from tilemap.project.vcycle import Cycle
from tilemap.pyramid.coding import Coding
from tilemap.pyramid.grid import TILE
from tilemap.pyramid.peaks import PeakWriter
from tilemap.pyramid.reduce import halve, plane_sums
from tilemap.pyramid.writer import WHOLE, SheetWriter
from tilemap.runners.local import LocalRunner
from tilemap.sheets import describe_sheet
from tilemap.sources import Chunk, Source

CHUNK = 1 << 20
PERCENTILES = (1, 5, 25, 50, 75, 95, 99, 99.9)
SUMMARY_PX = 1024
"""Percentiles are those of the whole at the finest level that has no longer side."""


class SpeciesDrawing:
    """The way of one species through the engine.

    Parameters
    ----------
    build : BuildFile
    source : Source
    camera : Camera
    plan : Plan
    planes : SpeciesPlan
    runner : LocalRunner
    report : callable
        Called with (phase, done, total).
    """

    def __init__(
        self,
        build: BuildFile,
        source: Source,
        camera: Camera,
        plan: Plan,
        planes: SpeciesPlan,
        runner: LocalRunner,
        report: Report,
    ) -> None:
        self.build, self.source, self.camera, self.plan, self.planes = build, source, camera, plan, planes
        self.runner, self.report = runner, report
        self.smoothing = build.snapshot.species[planes.species].smoothing
        self.buckets = Buckets(camera, plan)
        self.cycle = Cycle(plan, len(planes.quantities), stamps_for(self.smoothing.kernel))
        self._lock = threading.Lock()

    def read(self) -> tuple[int, NDArray[np.float64]]:
        """Read every particle and route it; how many records there are, and the sum of each plane over them."""
        count, phase = self.source.count(self.planes.species), f"reading {self.planes.species}"
        records, sums = 0, np.zeros(len(self.planes.quantities))
        done = 0

        def route(chunk: Chunk) -> tuple[int, NDArray[np.int64], NDArray[np.float32], NDArray[np.float64]]:
            values, ranges = self.planes.planes(chunk)
            assert chunk.radius is not None
            return len(chunk), *self.buckets.route(*self.camera.see(chunk.position, chunk.radius, values)), ranges

        for length, starts, placed, ranges in self.runner.map(route, self._settled_chunks()):
            self.buckets.add(starts, placed)
            self.planes.widen(ranges)
            sums += placed[:, 3:].sum(axis=0, dtype=np.float64)
            records += len(placed)
            done += length
            self.report(phase, done, count)
        return records, sums * self.planes.scales

    def _settled_chunks(self) -> Iterator[Chunk]:
        for chunk in self._chunks():
            self.planes.settle(chunk)
            yield chunk

    def _chunks(self) -> Iterator[Chunk]:
        species, fields = self.planes.species, self.planes.fields
        chunks = self.source.chunks(species, fields, CHUNK)
        if self.smoothing.neighbours is None:
            yield from chunks
            return
        kept = list(chunks)
        self.report(f"finding the neighbours of {species}", 0, 1)
        position = np.concatenate([chunk.position for chunk in kept])
        box = self.source.facts.box if self.source.facts.periodic else None
        try:
            radii = neighbour_radii(position, self.smoothing.neighbours, box, self.runner)
        except InputError as error:
            raise InputError(f"snapshot.species.{species}: {error}") from error
        self.report(f"finding the neighbours of {species}", 1, 1)
        for chunk in kept:
            chunk.radius = radii[chunk.start : chunk.start + len(chunk)]
            yield chunk

    def write(self, folder: Path, sums: NDArray[np.float64]) -> list[dict[str, Any]]:
        """Draw everything that was read and write the species' sheets below `folder`; their entries in atlas.json."""
        plan, sheets = self.plan, self.planes.sheets
        pixels = plan.rows * plan.columns
        codings = [self.planes.coding(sheet, sums[sheet.plane] / pixels) for sheet in sheets]
        writers = [
            self._writer(sheet, folder, sheet.of_planes(coding, self.planes.scale(sheet)))
            for sheet, coding in zip(sheets, codings, strict=True)
        ]
        bases = [self.cycle.base(self.buckets, slab, self.runner) for slab in range(plan.slabs)]
        # What the regions leave behind: the image at level `local`, from which the coarser ones are halved.
        stacks = plan.slabs + (plan.slabs > 1)
        coarse = np.zeros((stacks, len(self.planes.quantities), *plan.size(plan.local)), dtype=np.float32)
        totals = np.zeros((plan.slabs, len(self.planes.quantities)))
        count = plan.regions[0] * plan.regions[1]
        phase = f"drawing {self.planes.species}"
        self.report(phase, 0, count)
        work = self.runner.map(lambda region: self._region(region, bases, writers, coarse, totals), range(count))
        for done, _ in enumerate(work, 1):
            self.report(phase, done, count)
        list(self.runner.map(lambda stack: self._coarser(stack, coarse[stack], writers), range(stacks)))
        entries = []
        for sheet, coding, writer in zip(sheets, codings, writers, strict=True):
            plane_totals = totals[:, sheet.plane] * self.planes.scales[sheet.plane]
            totals_here = [float(total) for total in plane_totals]
            entry = describe_sheet(self.build, sheet, coding, totals_here, self.planes.floor(sheet))
            if isinstance(writer, PeakWriter):
                entry |= _summary(coding.decode(writer.finish(SUMMARY_PX)).astype(np.float64))
            else:
                entry |= _summary(self._small(sheet, coarse[-1]))
            writer.close(entry)
            entries.append(entry)
        return entries

    def _writer(self, sheet: SheetPlan, folder: Path, coding: Coding) -> SheetWriter:
        given = folder / sheet.name, (self.plan.rows, self.plan.columns), self.plan.slabs, coding
        return PeakWriter(*given, self.plan.local) if sheet.sheet.kind == "peak" else SheetWriter(*given)

    def _region(
        self,
        region: int,
        bases: list[NDArray[np.float32]],
        writers: list[SheetWriter],
        coarse: NDArray[np.float32],
        totals: NDArray[np.float64],
    ) -> None:
        plan = self.plan
        whole: NDArray[np.float32] | None = None
        for slab in range(plan.slabs):
            image, drawn = self.cycle.region(self.buckets, bases[slab], region, slab)
            if drawn:
                sums = plane_sums(image)
                with self._lock:
                    totals[slab] += sums
                if plan.slabs > 1:
                    whole = image.copy() if whole is None else np.add(whole, image, out=whole)
            self._levels(region, slab, image if drawn else None, image.shape[1:], writers, coarse[slab])
        if plan.slabs > 1:
            self._levels(region, WHOLE, whole, image.shape[1:], writers, coarse[-1])

    def _levels(
        self,
        region: int,
        slab: int,
        image: NDArray[np.float32] | None,
        size: tuple[int, ...],
        writers: list[SheetWriter],
        coarse: NDArray[np.float32],
    ) -> None:
        """Code a region of one slab at the levels below `local`, and leave it at that level in `coarse`."""
        plan = self.plan
        row, column = divmod(region, plan.regions[1])
        rows, columns = size
        for level in range(plan.local):
            tiles = plan.region_px >> level
            corner = row * tiles // TILE, column * tiles // TILE
            for sheet, writer in zip(self.planes.sheets, writers, strict=True):
                if image is None:
                    writer.put_nothing(level, slab, corner, (rows, columns))
                else:
                    writer.put(level, slab, corner, self.planes.values(sheet, image))
            rows, columns = rows // 2, columns // 2
            image = None if image is None else halve(image)
        if image is not None:
            side = plan.region_px >> plan.local
            coarse[:, row * side : row * side + rows, column * side : column * side + columns] = image

    def _coarser(self, stack: int, image: NDArray[np.float32], writers: list[SheetWriter]) -> None:
        """Code one stack's image at level `local` and coarser."""
        plan = self.plan
        slab = stack if stack < plan.slabs else WHOLE
        for level in range(plan.local, plan.levels):
            for sheet, writer in zip(self.planes.sheets, writers, strict=True):
                writer.put(level, slab, (0, 0), self.planes.values(sheet, image))
            if level + 1 < plan.levels:
                image = halve(image)

    def _small(self, sheet: SheetPlan, image: NDArray[np.float32]) -> NDArray[np.float64]:
        """A sheet's values, in its unit, at the finest level from `local` on that is small enough for percentiles."""
        while max(image.shape[1:]) > SUMMARY_PX:
            image = halve(image)
        return self.planes.values(sheet, image).astype(np.float64) * (sheet.factor * self.planes.scale(sheet))


def _summary(values: NDArray[np.float64]) -> dict[str, Any]:
    """Percentiles and range of what is there, as `atlas.json` says them."""
    values = values[np.isfinite(values) & (values != 0)]
    if not len(values):
        return {"percentiles": {}, "range": None}
    points = np.percentile(values, PERCENTILES)
    return {
        "percentiles": {f"{p:g}": float(point) for p, point in zip(PERCENTILES, points, strict=True)},
        "range": [float(values.min()), float(values.max())],
    }
