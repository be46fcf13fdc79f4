"""One species from its buckets to the tiles of its sheets: draw region by region, code, halve.

Memory holds a coarse image, and one region for each worker; never an image at level 0. What the coarse levels need, and
which regions are done, is in the scratch folder, so that a build that was stopped goes on where it was.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from tilemap.buildfile import BuildFile
from tilemap.channels import Report, SheetPlan, SpeciesPlan
from tilemap.project.scatter import Buckets, Plan
from tilemap.project.splat import MARGIN
from tilemap.project.stamps import stamps_for
from tilemap.project.vcycle import Cycle
from tilemap.pyramid.coding import Coding
from tilemap.pyramid.grid import SHARD, TILE
from tilemap.pyramid.peaks import PeakWriter
from tilemap.pyramid.reduce import halve, plane_sums
from tilemap.pyramid.writer import WHOLE, SheetWriter, WaitingTile
from tilemap.runners.local import LocalRunner
from tilemap.sheets import describe_sheet
from tilemap.spill import ImageFile, load_pack, save_pack

PERCENTILES = (1, 5, 25, 50, 75, 95, 99, 99.9)
SUMMARY_PX = 1024
"""Percentiles are those of the whole at the finest level that has no longer side."""


AHEAD = 8
"""Regions that may be done while another's turn is not over: they differ in what is in them."""
PIXEL_NS, RECORD_NS = 8.0, 100.0
"""What drawing takes for each pixel of each slab and for each record, about: for progress that goes on evenly."""


@dataclass(frozen=True)
class Unit:
    """Regions that together fill the finest level's shards: they are done together, or not at all."""

    number: int
    regions: list[int]
    rows: range
    columns: range

    @staticmethod
    def all_of(plan: Plan) -> list[Unit]:
        """Every unit of an image; `rows` and `columns` are those of its tiles at the finest level."""
        side = max(1, SHARD // plan.region_px)
        down, across = plan.regions
        tiles = side * plan.region_px // TILE
        corners = [(i, j) for i in range(0, down, side) for j in range(0, across, side)]
        return [
            Unit(
                number,
                [r * across + c for r in range(i, min(i + side, down)) for c in range(j, min(j + side, across))],
                range(i // side * tiles, (i // side + 1) * tiles),
                range(j // side * tiles, (j // side + 1) * tiles),
            )
            for number, (i, j) in enumerate(corners)
        ]


class SpeciesDrawing:
    """The way of one species through the engine.

    Parameters
    ----------
    build : BuildFile
    plan : Plan
    planes : SpeciesPlan
        As reading has left it.
    buckets : Buckets
    runner : LocalRunner
    report : callable
        Called with (phase, done, total).
    work : Path
        Scratch folder of the species.
    """

    def __init__(
        self,
        build: BuildFile,
        plan: Plan,
        planes: SpeciesPlan,
        buckets: Buckets,
        runner: LocalRunner,
        report: Report,
        work: Path,
    ) -> None:
        self.build, self.plan, self.planes, self.buckets, self.work = build, plan, planes, buckets, work
        self.runner, self.report = runner, report
        channels = len(planes.quantities)
        # Species that are drawn together have one kernel.
        kernel = build.snapshot.species[planes.parts[0]].smoothing.kernel
        self.cycle = Cycle(plan, channels, stamps_for(kernel))
        rows, columns = plan.size(plan.local)
        self.bases = ImageFile(work / "bases", (plan.slabs, channels, rows + 2 * MARGIN, columns + 2 * MARGIN))
        # What the regions leave behind: the image at level `local`, from which the coarser ones are halved.
        self.stacks = plan.slabs + (plan.slabs > 1)
        self.coarse = ImageFile(work / "coarse", (self.stacks, channels, rows, columns))
        self._files = [self.bases, self.coarse]
        regions = range(plan.regions[0] * plan.regions[1])
        self._done, self._all = 0.0, self._cost_of_bases(range(plan.slabs)) + sum(map(self._cost, regions))

    def write(self, folder: Path, sums: NDArray[np.float64]) -> list[dict[str, Any]]:
        """Draw everything that was read and write the species' sheets below `folder`; their entries in atlas.json."""
        plan, sheets = self.plan, self.planes.sheets
        pixels = plan.rows * plan.columns
        codings = [self.planes.coding(sheet, sums[sheet.plane] / pixels) for sheet in sheets]
        writers = [
            self._writer(sheet, folder, sheet.of_planes(coding, self.planes.scale(sheet)))
            for sheet, coding in zip(sheets, codings, strict=True)
        ]
        self._advance(0.0)
        self._draw_bases()
        totals = np.zeros((plan.slabs, len(self.planes.quantities)))
        for unit in self._draw_units(writers):
            totals += unit
        for stack in range(self.stacks):
            self._coarser(stack, writers)
        entries = []
        for sheet, coding, writer in zip(sheets, codings, writers, strict=True):
            plane_totals = totals[:, sheet.plane] * self.planes.scales[sheet.plane]
            totals_here = [float(total) for total in plane_totals]
            entry = describe_sheet(self.build, sheet, coding, totals_here, self.planes.floor(sheet))
            if isinstance(writer, PeakWriter):
                entry |= _summary(coding.decode(writer.finish(SUMMARY_PX)).astype(np.float64))
            else:
                entry |= _summary(self._small(sheet))
            writer.close(entry)
            entries.append(entry)
        for file in self._files:
            file.close()
        return entries

    def _writer(self, sheet: SheetPlan, folder: Path, coding: Coding) -> SheetWriter:
        plan = self.plan
        given = folder / sheet.name, (plan.rows, plan.columns), plan.slabs, coding
        if sheet.sheet.kind != "peak":
            return SheetWriter(*given)
        coarse = ImageFile(self.work / f"peak {sheet.name}", (plan.slabs, 1, *plan.size(plan.local)), np.uint16)
        self._files.append(coarse)
        return PeakWriter(*given, coarse, plan.local)

    def _cost(self, region: int) -> float:
        """Nanoseconds that a region takes, about."""
        plan = self.plan
        records = sum(
            self.buckets.count(region, slab, level) for slab in range(plan.slabs) for level in range(plan.local)
        )
        _, size = self.cycle.window(region)
        pixels = (size[0] - 2 * MARGIN) * (size[1] - 2 * MARGIN) << 2 * plan.local
        return PIXEL_NS * pixels * self.stacks + RECORD_NS * records

    def _cost_of_bases(self, slabs: range) -> float:
        levels = range(self.plan.local, self.plan.top + 1)
        return RECORD_NS * sum(self.buckets.count(-1, slab, level) for slab in slabs for level in levels)

    def _advance(self, cost: float) -> None:
        """Report progress in pixels, each of which costs the same."""
        self._done += cost
        pixels = self.plan.rows * self.plan.columns * self.plan.slabs
        share = min(1.0, self._done / self._all) if self._all else 1.0
        self.report(f"drawing {self.planes.species}", round(pixels * share), pixels)

    def _draw_bases(self) -> None:
        """Draw the images at level `local`, of every slab, into their file."""
        for slab in range(self.plan.slabs):
            mark = self.work / f"base-{slab}"
            if not mark.exists():
                self.bases.write(slab, (0, 0), self.cycle.base(self.buckets, slab, self.runner))
                mark.touch()
            self._advance(self._cost_of_bases(range(slab, slab + 1)))

    def _draw_units(self, writers: list[SheetWriter]) -> Iterator[NDArray[np.float64]]:
        """The sum of each slab's planes (slabs, planes) over each unit, drawn now or by a build that was stopped."""
        units = Unit.all_of(self.plan)
        done = {unit.number for unit in units if self._pack(unit).exists()}
        regions = [region for unit in units if unit.number not in done for region in unit.regions]
        drawn = self.runner.map(lambda region: self._region(region, writers), regions, ahead=AHEAD)
        for unit in units:
            pack = load_pack(self._pack(unit)) if unit.number in done else None
            if pack is not None:
                _take_up(pack, writers)
                self._advance(sum(map(self._cost, unit.regions)))
                yield pack["totals"]
                continue
            totals = np.zeros((self.plan.slabs, len(self.planes.quantities)))
            for region in unit.regions:
                totals += next(drawn)
                self._advance(self._cost(region))
            waiting = [writer.waiting(unit.rows, unit.columns) for writer in writers]
            save_pack(self._pack(unit), totals=totals, **_packed(waiting))
            yield totals

    def _pack(self, unit: Unit) -> Path:
        return self.work / f"unit-{unit.number:06d}.npz"

    def _region(self, region: int, writers: list[SheetWriter]) -> NDArray[np.float64]:
        """Draw, code and halve a region; the sum of each slab's planes."""
        plan = self.plan
        totals = np.zeros((plan.slabs, len(self.planes.quantities)))
        corner, size = self.cycle.window(region)
        whole: NDArray[np.float32] | None = None
        for slab in range(plan.slabs):
            image, drawn = self.cycle.region(self.buckets, self.bases.read(slab, corner, size), region, slab)
            if drawn:
                totals[slab] = plane_sums(image)
                if plan.slabs > 1:
                    whole = image.copy() if whole is None else np.add(whole, image, out=whole)
            self._levels(region, slab, image if drawn else None, image.shape[1:], writers)
        if plan.slabs > 1:
            self._levels(region, WHOLE, whole, image.shape[1:], writers)
        return totals

    def _levels(
        self,
        region: int,
        slab: int,
        image: NDArray[np.float32] | None,
        size: tuple[int, ...],
        writers: list[SheetWriter],
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
            self.coarse.write(slab % self.stacks, (row * side, column * side), image)

    def _coarser(self, stack: int, writers: list[SheetWriter]) -> None:
        """Code one stack's image at level `local` and coarser."""
        plan = self.plan
        slab = stack if stack < plan.slabs else WHOLE
        image = self.coarse.read(stack, (0, 0), plan.size(plan.local))
        for level in range(plan.local, plan.levels):

            def put(row: int, level: int = level, image: NDArray[np.float32] = image) -> None:
                lines = image[:, row * TILE : (row + 1) * TILE]
                for sheet, writer in zip(self.planes.sheets, writers, strict=True):
                    writer.put(level, slab, (row, 0), self.planes.values(sheet, lines))

            list(self.runner.map(put, range(-(-image.shape[1] // TILE))))
            if level + 1 < plan.levels:
                image = halve(image)

    def _small(self, sheet: SheetPlan) -> NDArray[np.float64]:
        """A sheet's values, in its unit, at the finest level from `local` on that is small enough for percentiles."""
        image = self.coarse.read(self.stacks - 1, (0, 0), self.plan.size(self.plan.local))
        while max(image.shape[1:]) > SUMMARY_PX:
            image = halve(image)
        return self.planes.values(sheet, image).astype(np.float64) * (sheet.factor * self.planes.scale(sheet))


def _packed(waiting: list[list[WaitingTile]]) -> dict[str, NDArray]:
    """Tiles of several sheets as arrays: where each belongs and how long it is (-1 where there is nothing), and all bytes."""
    rows, parts = [], []
    for sheet, tiles in enumerate(waiting):
        for *place, packed in tiles:
            rows.append((sheet, *place, -1 if packed is None else len(packed)))
            parts.append(packed or b"")
    return {
        "places": np.array(rows, dtype=np.int64).reshape(-1, 6),
        "bytes": np.frombuffer(b"".join(parts), dtype=np.uint8),
    }


def _take_up(pack: dict[str, NDArray], writers: list[SheetWriter]) -> None:
    """Give writers the tiles back that `_packed` packed."""
    data, start = pack["bytes"].tobytes(), 0
    for sheet, level, slab, row, column, length in pack["places"].tolist():
        packed = None if length < 0 else data[start : start + length]
        start += max(length, 0)
        writers[sheet].take_up([WaitingTile(level, slab, row, column, packed)])


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
