"""An outline drawn on an atlas in, what lies inside it out: area, mean, spread and total of a sheet.

Pixels on the outline count by the part of them that lies inside, exactly. Where the outline is so large that the finest
pixels would be too many, a coarser level is read, and the answer says which.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import astropy.units as u
import numpy as np
from numpy.typing import ArrayLike, NDArray

from tilemap.errors import InputError
from tilemap.pyramid.combine import LEAST_WEIGHT
from tilemap.quantities import span, unit_named

if TYPE_CHECKING:
    from tilemap.atlas import Atlas

MOST_POINTS = 1000
MOST_PIXELS = 1 << 22
"""In the rectangle around an outline; 2048 x 2048 pixels take some 0.3 s for all slabs together on two cores."""


@dataclass(frozen=True)
class Inside:
    """What lies inside an outline.

    Attributes
    ----------
    area : float
        Of the part within the view, in the square of the view's unit. What an outline that crosses itself goes round
        twice counts once.
    outside : float
        Share of the outline's area that lies outside the view, and does not count.
    mean, spread : float
        In `unit`. Of a sum sheet: the mean of its pixels over area, and their standard deviation about it. Of a mean or
        dispersion sheet: the same with each pixel weighted by its weight sheet too, over the pixels that have a value.
        NaN where nothing is there.
    unit : str
    total : float
        Of a sum sheet, its own: surface density times area, summed. Of a mean or a
        dispersion: that of its weight. NaN for peaks.
    total_unit : str
    total_of : str
        The sheet that `total` is of.
    together : float or None
        Of a dispersion sheet: the dispersion of all that is inside about its common mean. Of a sheet of peaks: the
        highest of the pixels that it touches. None of others.
    level : int
        Of the pyramid, that was read.
    pixel : float
        Side of its pixels, in the view's unit.
    """

    area: float
    outside: float
    mean: float
    spread: float
    unit: str
    total: float
    total_unit: str
    total_of: str
    together: float | None
    level: int
    pixel: float


def coverage(points: ArrayLike, rows: int, columns: int) -> NDArray[np.float64]:
    """How much of each pixel lies inside a polygon, 0 to 1.

    Parameters
    ----------
    points : (points, 2)
        Corners (x, y) in pixels, x along columns and y along rows, from the outer corner of pixel (0, 0).
    rows, columns : int

    Returns
    -------
    float64 (rows, columns)

    Notes
    -----
    Each edge is cut where it crosses from pixel to pixel; a piece adds the signed area between itself and the far end of
    its row (Green's theorem), so that running sums along rows are winding numbers averaged over pixels: exact. Their
    size is cut at one; only pixels in which parts of opposite winding meet, where an outline crosses itself, are not exact.
    """
    corners = np.asarray(points, dtype=np.float64)
    winding = np.zeros((rows, columns + 1))
    for start, end in zip(corners, np.roll(corners, -1, axis=0), strict=True):
        step = end - start
        if step[1] == 0:
            continue
        cuts = [np.array([0.0, 1.0])]
        for axis, size in ((0, columns), (1, rows)):
            if step[axis] != 0:
                low, high = sorted((start[axis], end[axis]))
                lines = np.arange(max(0, math.ceil(low)), min(size, math.floor(high)) + 1)
                cuts.append((lines - start[axis]) / step[axis])
        t = np.unique(np.clip(np.concatenate(cuts), 0.0, 1.0))
        x, y = (start + t[:, None] * step).T
        row = np.floor((y[1:] + y[:-1]) / 2).astype(np.int64)
        # Beyond the left side an edge counts for the whole row, beyond the right side for nothing.
        x = np.clip((x[1:] + x[:-1]) / 2, 0, columns)
        column = np.minimum(x.astype(np.int64), columns - 1)
        rise = np.diff(y)
        here = (row >= 0) & (row < rows)
        row, column, x, rise = row[here], column[here], x[here], rise[here]
        np.add.at(winding, (row, column), rise * (column + 1 - x))
        np.add.at(winding, (row, column + 1), rise * (x - column))
    return np.clip(np.abs(np.cumsum(winding, axis=1)[:, :columns]), 0.0, 1.0)


def inside(
    atlas: Atlas,
    sheet: str,
    outline: Sequence[Sequence[float]] | ArrayLike,
    slabs: int | slice | None = None,
    epoch: str | None = None,
) -> Inside:
    """What lies inside an outline; see :meth:`tilemap.atlas.Atlas.inside`."""
    described = atlas.sheet(sheet, epoch)
    corners = _corners(outline)
    view = atlas.info["view"]
    finest = (view["u"][1] - view["u"][0]) / atlas.info["pixels"][0]
    # From here on in finest pixels, x with u and y downwards, as rows are counted.
    x, y = (corners[:, 0] - view["u"][0]) / finest, (view["v"][1] - corners[:, 1]) / finest
    low = np.floor([max(x.min(), 0), max(y.min(), 0)])
    high = np.ceil(np.minimum([x.max(), y.max()], atlas.info["pixels"]))
    beyond = InputError(
        f"the outline is u {span(*_ends(corners[:, 0]))}, v {span(*_ends(corners[:, 1]))}, outside the view, which is "
        f"u {span(*view['u'])}, v {span(*view['v'])} {view['unit']}"
    )
    if (high <= low).any():
        raise beyond
    level = max(0, math.ceil(math.log(np.prod(high - low) / MOST_PIXELS, 4)))
    level = min(level, atlas.info["levels"] - 1)
    side = 2.0**level
    low, high = np.floor(low / side).astype(int), np.ceil(high / side).astype(int)
    columns, rows = (high - low).tolist()
    share = coverage(np.stack([x / side - low[0], y / side - low[1]], axis=1), rows, columns)
    if share.sum() < 1e-12:  # rounding
        raise beyond
    pixel = finest * side
    window: dict[str, Any] = {
        "centre": (view["u"][0] + (low[0] + high[0]) / 2 * pixel, view["v"][1] - (low[1] + high[1]) / 2 * pixel),
        "width": columns * pixel,
        "height": rows * pixel,
        "pixels": columns,
        "slabs": slabs,
        "epoch": epoch,
    }
    values = atlas.read(sheet, **window).values.astype(np.float64)
    there = np.isfinite(values)
    values = np.where(there, values, 0.0)
    if described["weight"]:
        dense = np.nan_to_num(atlas.read(described["weight"], **window).values.astype(np.float64))
        weight = np.where(there, np.maximum(dense, LEAST_WEIGHT), 0.0) * share
        of = atlas.sheet(described["weight"], epoch)
    else:
        dense, weight, of = values, share, described
    mean, spread = _moments(values, weight)
    together = None
    if described["kind"] == "dispersion":
        about = _moments(np.nan_to_num(atlas.read(described["mean"], **window).values.astype(np.float64)), weight)[1]
        # What the pixels are about their own means, and these means about the common one.
        together = math.hypot(about, mean, spread)
    area = float(share.sum()) * pixel**2
    total, total_unit = _total(atlas, of, float((dense * share).sum()) * pixel**2, epoch)
    if described["kind"] == "peak":
        total = math.nan  # the highest of several pixels add up to nothing
        together = float(values[share > 0].max())
    within = min(x.min(), y.min()) >= 0 and (np.array([x.max(), y.max()]) <= atlas.info["pixels"]).all()
    return Inside(
        area=area,
        outside=0.0 if within else max(1 - area / _whole_area(x * finest, y * finest), 0.0),
        mean=mean,
        spread=spread,
        unit=described["unit"],
        total=total,
        total_unit=total_unit,
        total_of=of["name"],
        together=together,
        level=level,
        pixel=pixel,
    )


def _corners(outline: Any) -> NDArray[np.float64]:
    try:
        corners = np.asarray(outline, dtype=np.float64)
    except (TypeError, ValueError):
        raise InputError("an outline is a list of places (u, v), in numbers") from None
    if corners.ndim != 2 or corners.shape[1] != 2 or not 3 <= len(corners) <= MOST_POINTS:
        raise InputError(f"an outline is a list of 3 to {MOST_POINTS} places (u, v)")
    if not np.isfinite(corners).all():
        raise InputError("an outline is a list of places (u, v): one of them is no finite number")
    # What is less than a hundred-millionth of the square around it is rounding.
    if _whole_area(corners[:, 0], corners[:, 1]) <= 1e-8 * np.ptp(corners, axis=0).max() ** 2:
        raise InputError("the outline goes round nothing: its places lie on one line")
    return corners


def _whole_area(x: NDArray[np.float64], y: NDArray[np.float64], cells: int = 256) -> float:
    """Area of a polygon wherever it lies: on a grid of any fineness the parts of pixels add up to it."""
    size = max(np.ptp(x), np.ptp(y)) / cells
    if not size > 0:
        return 0.0
    points = np.stack([x - x.min(), y - y.min()], axis=1) / size
    return float(coverage(points, cells, cells).sum()) * size**2


def _moments(values: NDArray[np.float64], weight: NDArray[np.float64]) -> tuple[float, float]:
    """Weighted mean, and standard deviation about it."""
    whole = weight.sum()
    if not whole > 0:
        return math.nan, math.nan
    mean = (weight * values).sum() / whole
    return float(mean), float(math.sqrt((weight * (values - mean) ** 2).sum() / whole))


def _total(atlas: Atlas, sheet: dict[str, Any], summed: float, epoch: str | None) -> tuple[float, str]:
    """A sum over area, in the sheet's unit times the square of the view's, as the sheet's own totals are written."""
    factor = atlas.epoch(epoch)["scale_factor"] if sheet["area"] == "proper" else 1.0
    found = summed * factor**2 * unit_named(sheet["unit"]) * atlas.unit**2
    named = sheet["total_unit"]
    wanted = found.unit.decompose() if named is None else u.Unit(named)
    return float(found.to_value(wanted)), str(wanted) if named is None else named


def _ends(values: NDArray[np.float64]) -> tuple[float, float]:
    return float(values.min()), float(values.max())
