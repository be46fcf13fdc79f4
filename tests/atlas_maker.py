"""Float arrays in, a small but complete atlas folder out: for tests that need one without building it from particles.

`make_atlas` invents the arrays too: a filamentary gas with three slabs, its temperature, and stars in a few places.
"""

from __future__ import annotations

import json
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import astropy.units as u
import numpy as np
from numpy.typing import NDArray

from tilemap.pyramid.coding import Coding, LogCoding
from tilemap.pyramid.grid import TILE, level_shapes
from tilemap.pyramid.publish import write_checksums
from tilemap.pyramid.reader import ArrayReader
from tilemap.pyramid.reduce import halve
from tilemap.pyramid.store import create_array, create_group, pack_tile, write_shard

EPOCH = "z0.50"
SCALE_FACTOR = 1.0 / 1.5


@dataclass
class SheetData:
    """One sheet: `values` float32 (slabs, rows, columns) in `unit`, NaN where a mean has nothing; coding as the atlas's."""

    name: str
    kind: str
    values: NDArray[np.float32]
    unit: str
    weight: str | None = None
    coding: Coding = LogCoding(-28.0, 0.002)  # noqa: RUF009 - a frozen value
    quantity: str = "mass"
    species: str = "gas"
    total_unit: str = "Msun"
    area: str = "comoving"


def gaussian_field(shape: tuple[int, int], slope: float, seed: int) -> NDArray[np.float64]:
    """A periodic Gaussian random field of unit variance whose power falls as k^slope, smooth over 3 pixels."""
    rows, columns = shape
    k = np.hypot(np.fft.fftfreq(rows)[:, None] * rows, np.fft.rfftfreq(columns)[None] * columns)
    k[0, 0] = 1.0
    noise = np.fft.rfft2(np.random.default_rng(seed).standard_normal(shape))
    smooth_k = rows / (2 * np.pi * 3.0)
    amplitude = k ** (slope / 2) * np.exp(-0.5 * (k / smooth_k) ** 2)
    amplitude[0, 0] = 0.0
    field = np.fft.irfft2(noise * amplitude, shape)
    return field / field.std()


def make_sheets(columns: int = 1024, rows: int = 1024, slabs: int = 3, seed: int = 1) -> list[SheetData]:
    """Invented gas (sum), temperature (mean weighted by gas) and stars (sum, mostly empty)."""
    shape = (slabs, rows, columns)
    gas = np.empty(shape, dtype=np.float32)
    temperature = np.empty(shape, dtype=np.float32)
    stars = np.zeros(shape, dtype=np.float32)
    rng = np.random.default_rng(seed)
    y, x = np.mgrid[-24:25, -24:25]
    for slab in range(slabs):
        depth = gaussian_field((rows, columns), -3.2, 100 * seed + slab)
        gas[slab] = 10.0 ** (4.5 + 1.1 * depth)
        temperature[slab] = 10.0 ** (4.6 + 0.5 * depth + 0.2 * gaussian_field((rows, columns), -2.5, 999 * seed + slab))
        # A corner without gas, so that a mean has a place with nothing.
        gas[slab, rows - 40 :, : columns // 4] = 0.0
        # Stars lie in the last tile row only, at the densest places.
        for _ in range(6):
            row, column = rng.integers(rows - 400, rows - 60), rng.integers(30, columns - 30)
            blob = 10.0 ** rng.uniform(6, 9) * np.clip(1 - np.hypot(x, y) / rng.uniform(4, 22), 0, None) ** 2
            stars[slab, row - 24 : row + 25, column - 24 : column + 25] += blob.astype(np.float32)
    temperature[gas == 0] = np.nan
    return [
        SheetData("gas", "sum", gas, "Msun / kpc2"),
        SheetData("temperature", "mean", temperature, "K", weight="gas", quantity="temperature"),
        SheetData("stars", "sum", stars, "Msun / kpc2", species="stars"),
    ]


def make_atlas(
    folder: str | Path, columns: int = 1024, rows: int = 1024, slabs: int = 3, seed: int = 1, **more: Any
) -> Path:
    """Write the invented sheets as an atlas; `more` goes to `write_atlas`."""
    return write_atlas(folder, make_sheets(columns, rows, slabs, seed), **more)


def write_atlas(
    folder: str | Path,
    sheets: list[SheetData],
    *,
    width: float = 100.0,
    box: tuple[float, float, float] | None = (100.0, 100.0, 100.0),
    title: str = "Invented field",
    atlas_id: str = "00c0ffee00c0ffee",
) -> Path:
    """Write `sheets` as a whole atlas of one epoch, with checksums; a weight comes before the sheets that need it."""
    root = Path(folder)
    slabs, rows, columns = sheets[0].values.shape
    pixel = width / columns
    height = rows * pixel
    create_group(root)
    create_group(root / EPOCH)
    given = {sheet.name: sheet for sheet in sheets}
    described = [_write_sheet(root, sheet, given, pixel) for sheet in sheets]
    edges = np.linspace(0.0, 100.0, slabs + 1)
    atlas = {
        "format": "tilemap-atlas",
        "version": 1,
        "id": atlas_id,
        "title": title,
        "about": "Invented for tests.",
        "tile": TILE,
        "levels": len(level_shapes(rows, columns)),
        "pixels": [columns, rows],
        "view": {
            "along": "z",
            "axes": ["x", "y", "z"],
            "u": [0.0, width],
            "v": [0.0, height],
            "depth": [0.0, 100.0],
            "unit": "Mpc",
            "coordinates": "comoving",
            "periodic": box is not None,
            "box": list(box) if box else None,
        },
        "slabs": edges.tolist(),
        "epochs": [
            {
                "name": EPOCH,
                "redshift": 0.5,
                "scale_factor": SCALE_FACTOR,
                "age_gyr": 8.62,
                "kpc_per_arcsec_comoving": 9.27,
                "kpc_per_arcsec_proper": 6.18,
                "cosmology": {"H0": 67.7, "Om0": 0.31, "Ode0": 0.69},
                "sheets": described,
                "catalogue": None,
            }
        ],
        "provenance": {"build_file": "", "versions": {}, "inputs": [], "built": "2025-01-01T00:00:00+00:00"},
    }
    (root / "atlas.json").write_text(json.dumps(atlas, indent=1))
    write_checksums(root)
    return root


def add_epoch(folder: str | Path, sheets: list[SheetData], name: str, redshift: float) -> Path:
    """Write `sheets` as a further epoch of an atlas that `write_atlas` wrote."""
    root = Path(folder)
    atlas = json.loads((root / "atlas.json").read_text())
    create_group(root / name)
    pixel = (atlas["view"]["u"][1] - atlas["view"]["u"][0]) / atlas["pixels"][0]
    given = {sheet.name: sheet for sheet in sheets}
    described = [_write_sheet(root, sheet, given, pixel, name, 1 / (1 + redshift)) for sheet in sheets]
    more = {"name": name, "redshift": redshift, "scale_factor": 1 / (1 + redshift), "sheets": described}
    atlas["epochs"].append(atlas["epochs"][0] | more | {"age_gyr": 13.8, "catalogue": None})
    (root / "atlas.json").write_text(json.dumps(atlas, indent=1))
    write_checksums(root)
    return root


def pyramid_of(sheet: SheetData, given: dict[str, SheetData], whole: bool) -> list[NDArray[np.float64]]:
    """The sheet's values level by level, in float64, each (slabs, rows, columns); NaN where a mean has nothing."""
    values = sheet.values.astype(np.float64)
    there = np.isfinite(values).astype(np.float64)
    if sheet.kind == "sum":
        upper, lower = np.nan_to_num(values, nan=0.0), np.ones_like(values)
    else:
        assert sheet.weight is not None
        lower = given[sheet.weight].values.astype(np.float64)
        upper = np.nan_to_num(values, nan=0.0) * lower
        there = (lower > 0).astype(np.float64)
    if whole:
        upper, there = upper.sum(axis=0, keepdims=True), there.sum(axis=0, keepdims=True)
        lower = lower[:1] if sheet.kind == "sum" else lower.sum(axis=0, keepdims=True)
    levels = []
    for level in range(len(level_shapes(*values.shape[1:]))):
        if level:
            upper, lower, there = halve(upper), halve(lower), halve(there)
        levels.append(np.divide(upper, lower, out=np.full_like(upper, np.nan), where=there > 0))
    return levels


def write_array(folder: Path, codes: NDArray[np.uint16]) -> None:
    """Write all codes (slabs, rows, columns) of an array that `create_array` made, tile by tile."""
    reader = ArrayReader(folder)
    assert codes.shape == reader.shape
    rows, columns = reader.shard_grid
    for slab in range(codes.shape[0]):
        shards: dict[tuple[int, int], dict[tuple[int, int], bytes | None]] = {}
        for row in range(reader.tiles[0]):
            for column in range(reader.tiles[1]):
                tile = np.zeros((TILE, TILE), dtype=np.uint16)
                part = codes[slab, row * TILE : (row + 1) * TILE, column * TILE : (column + 1) * TILE]
                tile[: part.shape[0], : part.shape[1]] = part
                shards.setdefault((row // rows, column // columns), {})[row % rows, column % columns] = pack_tile(tile)
        for place, tiles in shards.items():
            write_shard(folder, (slab, *place), tiles, reader.shard_grid)


def write_levels(folder: Path, levels: list[NDArray[np.float64]], coding: Coding) -> None:
    """Write the arrays of all levels below `folder`."""
    for level, values in enumerate(levels):
        create_array(folder / str(level), values.shape)
        write_array(folder / str(level), coding.encode(values))


def _write_sheet(
    root: Path,
    sheet: SheetData,
    given: dict[str, SheetData],
    pixel: float,
    epoch: str = EPOCH,
    scale_factor: float = SCALE_FACTOR,
) -> dict[str, Any]:
    folder = root / epoch / sheet.name
    levels = pyramid_of(sheet, given, whole=False)
    slabs = sheet.values.shape[0]
    whole = pyramid_of(sheet, given, whole=True) if slabs > 1 else levels
    coarse = whole[-1][np.isfinite(whole[-1]) & (sheet.coding.encode(whole[-1]) > 0)]
    at = (1, 5, 25, 50, 75, 95, 99, 99.9)
    described: dict[str, Any] = {
        "name": sheet.name,
        "title": sheet.name.capitalize(),
        "kind": sheet.kind,
        "species": sheet.species,
        "quantity": sheet.quantity,
        "weight": sheet.weight,
        **sheet.coding.attributes(),
        "unit": sheet.unit,
        "area": sheet.area,
        "total": None,
        "total_unit": None,
        "totals": None,
        "percentiles": {f"{p:g}": float(np.percentile(coarse, p)) for p in at},
        "range": [float(coarse.min()), float(coarse.max())],
    }
    if sheet.kind == "sum":
        area = (pixel * u.Mpc * (scale_factor if sheet.area == "proper" else 1.0)) ** 2
        per_pixel = (area * u.Unit(sheet.unit)).to_value(u.Unit(sheet.total_unit))
        totals = np.nansum(levels[0], axis=(1, 2)) * per_pixel
        described |= {"total": float(totals.sum()), "total_unit": sheet.total_unit, "totals": totals.tolist()}
    create_group(folder, described)
    write_levels(folder, levels, sheet.coding)
    if slabs > 1:
        create_group(folder / "whole")
        write_levels(folder / "whole", whole, sheet.coding)
    return described
