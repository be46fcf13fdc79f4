"""A table of objects and a view in, the atlas's Parquet file and its description out.

Positions become comoving Mpc (or the chart's own unit), are turned into (u, v, depth), and the rows that fall inside
the view are written along a space-filling curve with every column they came with.
"""

from __future__ import annotations

import errno
import json
import os
from collections.abc import Sequence
from pathlib import Path
from typing import TYPE_CHECKING, Any

import duckdb
import numpy as np
from astropy import units

from tilemap.catalogue.curve import curve_order
from tilemap.catalogue.tables import Column, free_name, read_columns
from tilemap.errors import InputError
from tilemap.project.images import images_seen
from tilemap.quantities import unit_named

if TYPE_CHECKING:
    from tilemap.buildfile import Catalogue

FILE = "objects.parquet"
# What this project adds to each row; the frame and the queries use these, never the input's own position columns.
PLACE = ("tilemap_row", "tilemap_u", "tilemap_v", "tilemap_depth", "tilemap_size")
ROW_GROUP = 8192  # rows; small groups let a query about a small window skip most of a large file
ALONG = {"z": (0, 1, 2), "x": (1, 2, 0), "y": (2, 0, 1)}  # (u, v, depth) as columns of (x, y, z)


def ingest(
    catalogue: Catalogue, folder: Path, view: dict[str, Any], out: Path, place: str = "catalogue"
) -> dict[str, Any]:
    """Write ``objects.parquet`` into a folder of an atlas and describe it.

    Parameters
    ----------
    catalogue
        The build file's section: `file`, `position` (2 or 3 column names), `unit`, `id`, `size`, `rank`.
    folder
        What a relative `file` is relative to.
    view
        The `view` object of atlas.json: ``along`` (None and ``vectors`` where the camera is turned), ``u``, ``v``,
        ``depth`` ranges in ``unit``, ``periodic``, ``box``.
    out
        The atlas folder being built.
    place
        The folder in it; each epoch of several needs its own.

    Returns
    -------
    The ``catalogue`` entry of atlas.json: count, outside, file, id, rank, size and the columns with unit, type, min, max.

    Raises
    ------
    InputError
        For a missing or unreadable table, columns that are not there (names those that are), a unit that is not a
        length, positions that are not finite (names the rows, counted from 1), or a rank that is not numeric.
    """
    path = Path(folder) / catalogue.file
    columns = read_columns(path)
    by_name = {column.name: column for column in columns}
    length = units.Unit(view["unit"])

    def column(name: str, role: str, numeric: bool = True) -> Column:
        if name not in by_name:
            raise InputError(f"catalogue {path}: no column {name!r} for {role}; there are {', '.join(by_name)}")
        if numeric and not by_name[name].is_number:
            raise InputError(f"catalogue {path}: column {name!r} for {role} holds text; it has to hold numbers")
        return by_name[name]

    def lengths(name: str, role: str) -> np.ndarray:
        found = column(name, role)
        # The build file has the last word on positions; a size has its own unit where the table says one.
        text = (catalogue.unit or found.unit) if role == "position" else (found.unit or catalogue.unit)
        if not text:
            raise InputError(
                f"catalogue {path}: column {name!r} for {role} says no unit; "
                f"add one to the build file, such as `unit: {view['unit']}` under catalogue"
            )
        return found.values.astype(np.float64) * _factor(text, length, f"catalogue {path}: column {name!r}")

    places = [lengths(name, "position") for name in catalogue.position]
    _refuse_bad_rows(path, catalogue.position, places)
    rows = np.arange(1, len(places[0]) + 1)
    u, v, depth = _image_axes(places, view, path)
    if view.get("along", "z") is None:
        rows, u, v, depth = _nearest_images(places, view)
    elif view.get("periodic") and view.get("box"):
        box = [view["box"][axis] for axis in ALONG[view["along"]]]
        rows, u, v, depth = _images(rows, (u, v, depth), view, box)
    else:
        inside = _inside(u, view["u"]) & _inside(v, view["v"]) & _inside(depth, view["depth"])
        rows, u, v, depth = rows[inside], u[inside], v[inside], depth[inside]

    size = lengths(catalogue.size, "size") if catalogue.size else np.full(len(places[0]), np.nan)
    column(catalogue.rank, "rank")
    if catalogue.id:
        column(catalogue.id, "id", numeric=False)

    order = curve_order(u, v)
    source = rows[order] - 1
    taken = {name.casefold() for name in PLACE}
    kept = [Column(free_name(each.name, taken), each.values[source], each.unit) for each in columns]
    renamed = {each.name: new.name for each, new in zip(columns, kept, strict=True)}
    numbers = (rows[order], u[order], v[order], depth[order], size[source])
    placed = [Column(name, values, "") for name, values in zip(PLACE, numbers, strict=True)]
    file = f"{place}/{FILE}"
    _write(Path(out) / file, placed + kept)
    return {
        "file": file,
        "count": len(source),
        "outside": len(places[0]) - len(np.unique(source)),
        "id": renamed[catalogue.id] if catalogue.id else None,
        "rank": renamed[catalogue.rank],
        "size": renamed[catalogue.size] if catalogue.size else None,
        "columns": [_describe(each) for each in kept],
    }


def _factor(text: str, length: Any, where: str) -> float:
    """What to multiply numbers in the unit `text` by to have them in `length`."""
    try:
        unit = unit_named(text)
    except InputError:
        unit = None
    if unit is None or not unit.is_equivalent(length):
        raise InputError(
            f"{where}: unit {text!r} cannot be turned into {length}; write `unit:` under catalogue, "
            f"with a number before it where one is needed, such as 1.477 {length}"
        )
    return float(unit.to(length))


def _image_axes(
    places: list[np.ndarray], view: dict[str, Any], path: Path
) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """(u, v, depth) of positions given as (x, y, z), or as (u, v) on a chart without depth."""
    if len(places) == 2 and view.get("along", "z") is not None:
        middle = 0.5 * (view["depth"][0] + view["depth"][1])
        return places[0], places[1], np.full(len(places[0]), middle)
    if len(places) != 3:
        wanted = "2 or 3" if view.get("along", "z") is not None else "3"
        raise InputError(f"catalogue {path}: position needs {wanted} column names, found {len(places)}")
    u, v, depth = (places[axis] for axis in ALONG[view["along"] or "z"])
    return u, v, depth


def _nearest_images(
    places: list[np.ndarray], view: dict[str, Any]
) -> tuple[np.ndarray, np.ndarray, np.ndarray, np.ndarray]:
    """For a turned camera, rows and places (u, v, depth): of each object's images in the view the one nearest its centre.

    Turned, one object may be seen at several places that have nothing to do with each other; it counts once.
    """
    sides = tuple((float(low), float(high)) for low, high in (view["u"], view["v"], view["depth"]))
    box = np.array(view["box"], dtype=np.float64) if view.get("periodic") else None
    position = np.column_stack(places).astype(np.float64)
    seen, which = images_seen(position, np.zeros(len(position)), np.array(view["vectors"]), sides, 0.0, box)  # type: ignore[arg-type]
    inside = _inside(seen[:, 0], sides[0]) & _inside(seen[:, 1], sides[1])
    seen, which = seen[inside], which[inside]
    far = ((seen - np.mean(sides, axis=1)) ** 2).sum(axis=1)
    order = np.lexsort((far, which))
    first = order[np.unique(which[order], return_index=True)[1]]
    return which[first] + 1, seen[first, 0], seen[first, 1], seen[first, 2]


def _refuse_bad_rows(path: Path, names: Sequence[str], places: Sequence[np.ndarray]) -> None:
    bad = np.flatnonzero(~np.all([np.isfinite(place) for place in places], axis=0))
    if len(bad):
        first = ", ".join(str(row + 1) for row in bad[:5]) + (", ..." if len(bad) > 5 else "")
        raise InputError(
            f"catalogue {path}: {len(bad)} of {len(places[0])} rows have no finite position in {', '.join(names)}: "
            f"row {first} (counted from 1); every object needs one"
        )


def _inside(place: np.ndarray, limits: Sequence[float]) -> np.ndarray:
    return (place >= limits[0]) & (place < limits[1])


def _images(
    rows: np.ndarray, places: tuple[np.ndarray, np.ndarray, np.ndarray], view: dict[str, Any], box: Sequence[float]
) -> tuple[np.ndarray, np.ndarray, np.ndarray, np.ndarray]:
    """Every periodic image inside the view; a view wider than the box shows an object more than once, as it does gas."""
    found: list[np.ndarray] = list(places)
    for axis, key in enumerate(("u", "v", "depth")):
        low, high = view[key]
        first = low + np.mod(found[axis] - low, box[axis])
        first[first >= low + box[axis]] = low  # a hair below the edge, rounded onto the far one
        # Depth goes round once, as for particles: nothing is summed twice into a slab.
        repeats = 1 if key == "depth" else max(1, int(np.ceil((high - low) / box[axis] - 1e-9)))
        rows = np.tile(rows, repeats)
        spread = [np.tile(place, repeats) for place in found]
        spread[axis] = np.concatenate([first + step * box[axis] for step in range(repeats)])
        inside = _inside(spread[axis], (low, high))
        rows, found = rows[inside], [place[inside] for place in spread]
    u, v, depth = found
    return rows, u, v, depth


def _describe(column: Column) -> dict[str, Any]:
    described: dict[str, Any] = {"name": column.name, "unit": column.unit, "type": "text", "min": None, "max": None}
    if column.is_number:
        described["type"] = "number"
        finite = column.values[np.isfinite(column.values)]
        if len(finite):
            described["min"], described["max"] = finite.min().item(), finite.max().item()
    return described


def _write(path: Path, columns: list[Column]) -> None:
    """Write columns as Parquet, their units as JSON under the file's metadata key "units"."""
    path.parent.mkdir(parents=True, exist_ok=True)
    # Numbered names while DuckDB scans the arrays: its own rules for names must not touch the input's.
    arrays = {f"c{place}": column.values for place, column in enumerate(columns)}
    chosen = ", ".join(f"c{place} AS {quoted(column.name)}" for place, column in enumerate(columns))
    metadata = json.dumps({column.name: column.unit for column in columns if column.unit})
    with duckdb.connect(config={"autoinstall_known_extensions": False}) as connection:
        connection.register("arrays", arrays)
        connection.execute("SET preserve_insertion_order = true")
        try:
            connection.execute(
                f"COPY (SELECT {chosen} FROM arrays) TO ? (FORMAT parquet, COMPRESSION zstd, ROW_GROUP_SIZE {ROW_GROUP}, "
                "KV_METADATA {units: ?})",
                [str(path), metadata],
            )
        except duckdb.IOException as failure:  # a full disk, mostly: said in the way that everything else says it
            full = os.strerror(errno.ENOSPC) in str(failure)
            raise OSError(errno.ENOSPC if full else errno.EIO, str(failure).splitlines()[0], str(path)) from failure


def quoted(name: str) -> str:
    """A column name as an SQL identifier."""
    return '"' + name.replace('"', '""') + '"'
