"""What `atlas.json` says in, what is wrong with it out, as sentences."""

from __future__ import annotations

import itertools
import json
from collections.abc import Iterator, Mapping
from pathlib import Path
from typing import Any

import astropy.units as u

from tilemap.errors import InputError
from tilemap.pyramid.coding import Coding
from tilemap.pyramid.grid import TILE, level_shapes
from tilemap.pyramid.publish import FORMAT
from tilemap.quantities import unit_named

VERSION = 1

_NUMBER = (int, float)
_TOP: dict[str, Any] = {
    "id": str,
    "title": str,
    "tile": int,
    "levels": int,
    "pixels": list,
    "view": dict,
    "slabs": list,
    "epochs": list,
}
_SHEET: dict[str, Any] = {"name": str, "kind": str, "coding": str, "low": _NUMBER, "step": _NUMBER, "unit": str}


def read_description(folder: Path) -> dict[str, Any]:
    """The contents of an atlas's `atlas.json`, seen to be of a make that this version reads.

    Raises
    ------
    InputError
        Where `folder` is no atlas, or one of a version that is not known here.
    """
    path = folder / "atlas.json"
    if not folder.exists():
        raise InputError(f"{folder}: there is no such folder")
    try:
        described = json.loads(path.read_bytes())
    except (FileNotFoundError, NotADirectoryError):
        raise InputError(f"{folder} is not an atlas: it has no atlas.json") from None
    except ValueError as error:
        raise InputError(f"{path} is not JSON: {error}") from error
    if not isinstance(described, dict) or described.get("format") != FORMAT:
        raise InputError(f"{folder} is not an atlas: its atlas.json does not say {FORMAT!r} for its format")
    if described.get("version") != VERSION:
        raise InputError(
            f"{folder} is an atlas of version {described.get('version')!r}, and this tilemap reads version {VERSION}"
        )
    return described


def faults(described: Mapping[str, Any]) -> list[str]:
    """All that is missing from a description, of the wrong kind, or at odds with the rest of it; best none."""
    found = list(_lacking(described, _TOP, ""))
    if found:
        return found
    try:
        found += _geometry_faults(described)
        for epoch in described["epochs"]:
            found += _epoch_faults(epoch, len(described["slabs"]) - 1)
    except (KeyError, TypeError, ValueError, AttributeError, IndexError) as error:
        found.append(f"something in it is missing or of the wrong kind: {error!r}")
    if not described["epochs"]:
        found.append("it has no epochs")
    return found


def _lacking(part: Mapping[str, Any], needed: Mapping[str, Any], where: str) -> Iterator[str]:
    for key, kind in needed.items():
        if key not in part:
            yield f"{where}{key} is missing"
        elif not isinstance(part[key], kind) or (isinstance(part[key], bool) and kind is not bool):
            yield f"{where}{key} is {part[key]!r}, which is not what belongs there"


def _geometry_faults(described: Mapping[str, Any]) -> Iterator[str]:
    if described["tile"] != TILE:
        yield f"tile is {described['tile']}, and tiles are {TILE} pixels"
    columns, rows = described["pixels"]
    try:
        levels = len(level_shapes(rows, columns))
    except InputError as error:
        yield str(error)
    else:
        if described["levels"] != levels:
            yield f"levels is {described['levels']}, and {columns} x {rows} pixels make {levels}"
    view = described["view"]
    for axis in ("u", "v", "depth"):
        low, high = view[axis]
        if not low < high:
            yield f"view.{axis} is [{low}, {high}], which is no interval"
    unit_named(view["unit"])
    if len(view["axes"]) != 3:
        yield f"view.axes is {view['axes']}, and there are 3"
    if view.get("box") is not None and len(view["box"]) != 3:
        yield f"view.box is {view['box']}, and there are 3 sides"
    edges = described["slabs"]
    if len(edges) < 2 or any(not a < b for a, b in itertools.pairwise(edges)):
        yield f"slabs is {edges}, and must be rising edges of depth"


def _epoch_faults(epoch: Mapping[str, Any], slabs: int) -> Iterator[str]:
    where = f"epoch {epoch['name']}: "
    names = {sheet.get("name"): sheet for sheet in epoch["sheets"]}
    if not names:
        yield f"{where}it has no sheets"
    for sheet in epoch["sheets"]:
        lacking = list(_lacking(sheet, _SHEET, f"{where}sheet {sheet.get('name')}: "))
        if lacking:
            yield from lacking
            continue
        at = f"{where}sheet {sheet['name']}: "
        try:
            Coding.from_attributes(sheet)
            unit = unit_named(sheet["unit"])
        except InputError as error:
            yield f"{at}{error}"
            continue
        if sheet["kind"] in ("mean", "dispersion"):
            needed = {"weight": "sum"} if sheet["kind"] == "mean" else {"weight": "sum", "mean": "mean"}
            for role, kind in needed.items():
                if names.get(sheet.get(role), {}).get("kind") != kind:
                    yield f"{at}its {role} is {sheet.get(role)!r}, which is no {kind} sheet of this epoch"
        elif sheet["kind"] in ("sum", "peak"):
            yield from _total_faults(sheet, unit, slabs, at)
        else:
            yield f"{at}kind is {sheet['kind']!r}, and must be sum, mean, dispersion or peak"


def _total_faults(sheet: Mapping[str, Any], unit: u.UnitBase, slabs: int, at: str) -> Iterator[str]:
    totals, total = sheet.get("totals"), sheet.get("total")
    if not isinstance(totals, list) or len(totals) != slabs:
        yield f"{at}totals is {totals!r}, and must hold a number for each of the {slabs} slabs"
    elif not isinstance(total, _NUMBER) or abs(sum(totals) - total) > 1e-6 * sum(abs(t) for t in totals):
        yield f"{at}total is {total!r}, and the totals of the slabs add up to {sum(totals)}"
    if not isinstance(sheet.get("total_unit"), str):
        yield f"{at}total_unit is missing"
