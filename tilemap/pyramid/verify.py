"""An atlas on disk in, everything that is wrong with it out: files, tiles, levels, totals.

Nothing is taken on trust. Files are compared with their checksums, and the numbers in them with each other, so that an
atlas whose checksums were made anew after it was damaged is found out too.
"""

from __future__ import annotations

import math
import os
from collections.abc import Iterable, Iterator, Mapping
from concurrent.futures import ThreadPoolExecutor
from pathlib import Path
from typing import Any

import astropy.units as u

from tilemap.errors import InputError
from tilemap.progress import Report
from tilemap.pyramid.coding import Coding
from tilemap.pyramid.description import faults, read_description
from tilemap.pyramid.filecheck import check_files
from tilemap.pyramid.findings import Finding, TilePlace
from tilemap.pyramid.grid import level_shapes
from tilemap.pyramid.levelcheck import Checked, Stack, checks_of
from tilemap.pyramid.publish import CHECKSUMS
from tilemap.pyramid.reader import ArrayReader
from tilemap.quantities import unit_named

__all__ = ["Finding", "TilePlace", "pixel_area", "verify"]

TOTAL_TOLERANCE = 1e-6
"""Relative: how far the engine may be off in the mass it puts on an image (README.md, What the numbers mean)."""


def verify(path: str | os.PathLike[str], progress: Report | None = None) -> list[Finding]:
    """Check a whole atlas, on all cores.

    Parameters
    ----------
    path : path
        An atlas.
    progress : Report, optional
        Told of the phases "checksums" and "tiles".

    Returns
    -------
    list of Finding
        Empty for a sound atlas. Looked for are: files that are missing, that are too many, or that differ from
        `checksums.json`; descriptions in `atlas.json` that make no sense; arrays of the wrong size; shard indices and
        tiles whose own checksum is wrong; levels that are not the average of the one below; wholes that are not the
        sum of their slabs; sums that do not add up to the total of their slab. What cannot be is told from what
        rounding does by bounds that hold for certain (see agree.py).

    Raises
    ------
    InputError
        Where there is no atlas, and no `checksums.json` that says that there was one.
    """
    root = Path(path)
    try:
        described = read_description(root)
    except InputError as error:
        if not (root / CHECKSUMS).exists():
            raise
        return [
            Finding("atlas.json", str(error)),
            *check_files(root),
        ]  # an atlas once, and damaged where it says what it is
    report: Report = progress or (lambda phase, done, total: None)
    wrong = [Finding("atlas.json", what) for what in faults(described)]
    report("checksums", 0, 1)
    files = list(check_files(root))
    report("checksums", 1, 1)
    tiles: list[Finding] = []
    if not wrong:
        with ThreadPoolExecutor(os.cpu_count()) as pool:
            tiles = list(_check_tiles(root, described, pool, report))
    # Where the tiles say what is wrong with a file that is there, its checksum need not.
    told = {finding.path for finding in tiles}
    files = [finding for finding in files if finding.path not in told or not (root / finding.path).exists()]
    return list(dict.fromkeys([*wrong, *files, *tiles]))


def _check_tiles(
    root: Path, described: Mapping[str, Any], pool: ThreadPoolExecutor, report: Report
) -> Iterator[Finding]:
    stacks: list[Stack] = []
    for epoch in described["epochs"]:
        made = list(_open_epoch(root, described, epoch))
        for stack in made:
            yield from stack.found
        stacks += [stack for stack in made if not stack.found]
    tasks = [(stack, *task) for stack in stacks for task in checks_of(stack, _whole_of(stack, stacks))]
    totals: dict[tuple[int, int], Checked] = {}
    report("tiles", 0, len(tasks))
    results = pool.map(lambda task: task[2](), tasks)
    for done, ((stack, slab, _), checked) in enumerate(zip(tasks, results, strict=True), start=1):
        yield from checked.found
        if not stack.whole and stack.sheet["kind"] in ("sum", "peak"):
            total = totals.setdefault((id(stack), slab), Checked())
            total.least += checked.least
            total.most += checked.most
            total.found += checked.found
        report("tiles", done, len(tasks))
    by_id = {id(stack): stack for stack in stacks}
    scale = {epoch["name"]: epoch.get("scale_factor") for epoch in described["epochs"]}
    for (key, slab), total in totals.items():
        # A slab with a damaged tile cannot add up, and the tile has been named.
        if not any(finding.tile is None or finding.tile.level == 0 for finding in total.found):
            yield from _total_finding(by_id[key], slab, total, described, scale[by_id[key].epoch])


def _open_epoch(root: Path, described: Mapping[str, Any], epoch: Mapping[str, Any]) -> Iterator[Stack]:
    """Every pyramid of an epoch, with what is wrong with its arrays."""
    columns, rows = described["pixels"]
    slabs = len(described["slabs"]) - 1
    opened: dict[tuple[str, bool], Stack] = {}
    # What a sheet needs comes before it.
    for sheet in sorted(epoch["sheets"], key=lambda sheet: bool(sheet.get("weight")) + bool(sheet.get("mean"))):
        for whole in (False, True) if slabs > 1 else (False,):
            stack = Stack(root, epoch["name"], sheet, whole, [], Coding.from_attributes(sheet))
            opened[sheet["name"], whole] = stack
            folder = f"{epoch['name']}/{sheet['name']}" + ("/whole" if whole else "")
            if not (root / folder / "zarr.json").is_file():
                stack.found.append(Finding(f"{folder}/zarr.json", "is missing: no Zarr group here"))
            for level, shape in enumerate(level_shapes(rows, columns)):
                try:
                    reader = ArrayReader(root / folder / str(level))
                except InputError as error:
                    stack.found.append(Finding(f"{folder}/{level}/zarr.json", str(error)))
                    continue
                stack.levels.append(reader)
                expected = (1 if whole else slabs, *shape)
                if reader.shape != expected:
                    what = f"its shape is {reader.shape}, and {expected} was expected"
                    stack.found.append(Finding(f"{folder}/{level}/zarr.json", what))
            for role in ("weight", "mean"):
                if sheet.get(role):
                    needed = opened[sheet[role], whole]
                    setattr(stack, role, needed)
                    if needed.found:
                        what = f"cannot be checked, for its {role} {sheet[role]} is damaged"
                        stack.found.append(Finding(folder, what))
            yield stack


def _whole_of(stack: Stack, stacks: Iterable[Stack]) -> Stack | None:
    """For the pyramid of a whole, that of its slabs."""
    if not stack.whole:
        return None
    same = (s for s in stacks if not s.whole and s.epoch == stack.epoch and s.sheet["name"] == stack.sheet["name"])
    return next(same, None)


def _total_finding(
    stack: Stack, slab: int, bounds: Checked, described: Mapping[str, Any], scale_factor: Any
) -> Iterator[Finding]:
    """What is said when the pixels of a slab cannot add up to its total."""
    sheet, view = stack.sheet, described["view"]
    path = f"{stack.epoch}/{sheet['name']}/0"
    try:
        area = pixel_area(described, sheet, scale_factor)
        factor = float((unit_named(sheet["unit"]) * area).to(unit_named(sheet["total_unit"])).value)
    except (u.UnitConversionError, InputError, TypeError) as error:
        what = f"{sheet['unit']} over an area in {view['unit']}2 gives no {sheet['total_unit']}: {error}"
        yield Finding("atlas.json", f"epoch {stack.epoch}: sheet {sheet['name']}: {what}")
        return
    total = float(sheet["totals"][slab])
    noise = TOTAL_TOLERANCE * abs(total)
    if not (bounds.least * factor - noise <= total <= bounds.most * factor + noise) or math.isnan(total):
        least, most = bounds.least * factor, bounds.most * factor
        what = f"slab {slab} adds up to {least:.6g} to {most:.6g} {sheet['total_unit']}, and its total is {total:.6g}"
        yield Finding(path, what)


def pixel_area(described: Mapping[str, Any], sheet: Mapping[str, Any], scale_factor: Any) -> u.Quantity:
    """The area of one pixel of level 0, as the sheet counts it: comoving, or proper at the epoch's scale factor (a number then)."""
    view = described["view"]
    columns, rows = described["pixels"]
    side_u = (view["u"][1] - view["u"][0]) / columns
    side_v = (view["v"][1] - view["v"][0]) / rows
    proper = float(scale_factor) ** 2 if sheet.get("area") == "proper" else 1.0
    return side_u * side_v * proper * unit_named(view["unit"]) ** 2
