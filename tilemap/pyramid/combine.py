"""Tiles of some slabs in, new pixels out: sums added up, means weighted, dispersions put together about the
common mean, the highest taken of peaks."""

from __future__ import annotations

import math
import os
from collections.abc import Iterator
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass
from itertools import islice
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy import sparse

from tilemap.pyramid.coding import Coding
from tilemap.pyramid.grid import TILE
from tilemap.pyramid.reader import ArrayReader
from tilemap.pyramid.resample import Canvas, Peaks, tiles_used

LEAST_WEIGHT = 1e-200
"""Stands in for a weight that was too low to be written: it counts only where nothing heavier lies in the pixel."""

TILES_AT_ONCE = 16
"""Decoded and waiting to be added: 16 MiB of values, and as much of weights."""

Tile = tuple[int, int, int]


@dataclass(frozen=True)
class Coded:
    """One array with the coding of its sheet."""

    reader: ArrayReader
    coding: Coding


def combine(
    sheet: Coded,
    weight: Coded | None,
    slabs: tuple[int, ...],
    rows: sparse.csc_matrix,
    columns: sparse.csc_matrix,
    mean: Coded | None = None,
    peak: bool = False,
) -> NDArray[np.float32]:
    """New pixels of several slabs together.

    Parameters
    ----------
    sheet : Coded
    weight : Coded, optional
        Of the same level, for a mean or a dispersion; a sum has none.
    slabs : tuple of int
    rows, columns : sparse float64 (new, old)
        How much of each old pixel a new one takes, as `resample.overlaps` gives it.
    mean : Coded, optional
        Of the same level, for a dispersion: what it is about.
    peak : bool
        Whether the highest is wanted, of pixels and of slabs.

    Returns
    -------
    float32 (new rows, new columns)
        For a sum, the slabs' averages over the new pixels, added; for a mean, the average of weight times value over
        that of the weight; for a dispersion s about means m with weights w, that about the mean M of all,
        sqrt(sum w (s^2 + m^2) / sum w - M^2); for a peak, the highest of what a new pixel touches. NaN where nothing is, but 0 for a sum in log coding.
    """
    if peak:
        return _highest(sheet, slabs, rows, columns)
    # What decodes to NaN is not there; a sum in log coding is there everywhere, if only as zero.
    everywhere = not math.isnan(sheet.coding.nothing)
    upper, lower, first = Canvas(rows, columns), Canvas(rows, columns), Canvas(rows, columns)
    places = _places(sheet.reader if mean is None else mean.reader, slabs, rows, columns)
    with ThreadPoolExecutor(os.cpu_count()) as pool:
        while batch := list(islice(places, TILES_AT_ONCE)):
            for (_, row, column), values, counts, means in pool.map(
                lambda place: _take(sheet, weight, mean, place), batch
            ):
                at = row * TILE, column * TILE
                if everywhere:
                    upper.add(values, *at)
                    continue
                if means is not None:
                    first.add(means * counts, *at)
                    values = values.astype(np.float64) ** 2 + means**2
                upper.add(np.where(counts > 0, values, 0.0) * counts, *at)
                lower.add(counts, *at)
    if everywhere:
        return upper.values.astype(np.float32)
    there = lower.values > 0
    divisor = lower.values if weight is not None else np.ones_like(lower.values)
    values = np.divide(upper.values, divisor, out=np.full_like(upper.values, np.nan), where=there)
    if mean is not None:
        middle = np.divide(first.values, divisor, out=np.zeros_like(first.values), where=there)
        values = np.sqrt(np.maximum(values - middle**2, 0.0))
    return values.astype(np.float32)


def _highest(
    sheet: Coded, slabs: tuple[int, ...], rows: sparse.csc_matrix, columns: sparse.csc_matrix
) -> NDArray[np.float32]:
    peaks = Peaks(rows, columns)
    for slab, row, column in _places(sheet.reader, slabs, rows, columns):
        peaks.add(sheet.coding.decode(sheet.reader.codes(slab, row, column)), row * TILE, column * TILE)
    # Tiles that are empty were left out.
    return np.where(np.isnan(peaks.values), sheet.coding.nothing, peaks.values).astype(np.float32)


def _take(
    sheet: Coded, weight: Coded | None, mean: Coded | None, place: Tile
) -> tuple[Tile, NDArray[Any], NDArray[Any], NDArray[np.float64] | None]:
    """A tile's values, how much each counts (its weight, or 1 in a sum; 0 where nothing is), and for a dispersion the
    means that it is about."""
    values = sheet.coding.decode(sheet.reader.codes(*place))
    there, means = ~np.isnan(values), None
    if weight is None:
        return place, values, there, None
    if mean is not None:
        # In log coding a dispersion too low to be written is code 0; where there is a mean, it is there.
        means = mean.coding.decode(mean.reader.codes(*place)).astype(np.float64)
        there = ~np.isnan(means)
        values, means = np.nan_to_num(values, nan=0.0), np.nan_to_num(means, nan=0.0)
    heavy = np.nan_to_num(weight.coding.decode(weight.reader.codes(*place)).astype(np.float64), nan=0.0)
    return place, values, np.where(there, np.maximum(heavy, LEAST_WEIGHT), 0.0), means


def _places(
    reader: ArrayReader, slabs: tuple[int, ...], rows: sparse.csc_matrix, columns: sparse.csc_matrix
) -> Iterator[Tile]:
    """The tiles that are needed; those that are empty add nothing and are left out."""
    for row in tiles_used(rows, TILE):
        for column in tiles_used(columns, TILE):
            for slab in slabs:
                if reader.locate(slab, row, column) is not None:
                    yield slab, row, column
