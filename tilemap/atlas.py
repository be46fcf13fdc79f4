"""A published atlas in, numbers out: measured pieces with unit and WCS, and the readers of its tiles.

Lengths are comoving Mpc, or the unit of a flat chart. Values of a piece stand as an image is looked at: row 0 is the
top, where v is largest; u grows with the column.
"""

from __future__ import annotations

import math
import os
from dataclasses import dataclass
from functools import lru_cache
from pathlib import Path
from typing import Any, TypeAlias

import astropy.units as u
import numpy as np
from astropy.wcs import WCS
from numpy.typing import ArrayLike, NDArray

from tilemap.errors import InputError
from tilemap.outline import Inside, inside
from tilemap.pyramid.coding import Coding
from tilemap.pyramid.combine import Coded, combine
from tilemap.pyramid.description import faults, read_description
from tilemap.pyramid.reader import ArrayReader
from tilemap.pyramid.resample import overlaps
from tilemap.quantities import number_in, span, suggestion, unit_named

MOST_PIXELS = 16384**2
"""The largest piece, in pixels: 1 GiB of values, and some 4 GiB while they are put together."""

Length: TypeAlias = float | str | u.Quantity


@dataclass(frozen=True, eq=False)
class Piece:
    """A measured piece of a sheet.

    Attributes
    ----------
    values : float32 (rows, columns)
        Row 0 is the top, where v is largest. NaN outside the view, and where a mean has nothing.
    unit : astropy unit
    wcs : astropy.wcs.WCS
        Linear axes u and v of `values` as they stand: `wcs.pixel_to_world(column, row)`, counted from 0, is (u, v) of a
        pixel's centre. Its step in v is therefore negative; a FITS viewer shows the array upside down unless it minds that.
    centre : (u, v)
    width, height : float
        As read: whole pixels.
    sheet, epoch : str
    slabs : tuple of int
    level : int
        Of the pyramid, that it was read from.
    """

    values: NDArray[np.float32]
    unit: u.UnitBase
    wcs: WCS
    centre: tuple[float, float]
    width: float
    height: float
    sheet: str
    epoch: str
    slabs: tuple[int, ...]
    level: int


@dataclass(frozen=True)
class _Window:
    """What is to be read: new pixels, by where the first begins and how wide each is, in pixels of a level."""

    level: int
    left: float
    top: float
    step: float
    rows: int
    columns: int


class Atlas:
    """A published atlas, open for reading; may be used from many threads at once.

    Parameters
    ----------
    path : path
        The atlas's folder.

    Attributes
    ----------
    path : Path
    info : dict
        The contents of `atlas.json`.
    epochs : tuple of str
    sheets : tuple of str
        Of the first epoch.

    Raises
    ------
    InputError
        Where there is no atlas, its version is not known, or `atlas.json` makes no sense.
    """

    def __init__(self, path: str | os.PathLike[str]) -> None:
        self.path = Path(path)
        self.info: dict[str, Any] = read_description(self.path)
        wrong = faults(self.info)
        if wrong:
            raise InputError(f"{self.path / 'atlas.json'}: {wrong[0]}")
        self.epochs: tuple[str, ...] = tuple(epoch["name"] for epoch in self.info["epochs"])
        self.sheets: tuple[str, ...] = tuple(sheet["name"] for sheet in self.info["epochs"][0]["sheets"])
        self._reader = lru_cache(maxsize=None)(self._open)

    def __repr__(self) -> str:
        return f"<Atlas {self.info['title']!r}: {', '.join(self.sheets)}>"

    @property
    def slab_count(self) -> int:
        """How many slabs every sheet has."""
        return len(self.info["slabs"]) - 1

    @property
    def unit(self) -> u.UnitBase:
        """The unit of lengths in the view."""
        return unit_named(self.info["view"]["unit"])

    def epoch(self, name: str | None = None) -> dict[str, Any]:
        """What `atlas.json` says of an epoch; the name may be left out where there is only one.

        Raises
        ------
        InputError
            Where there is no such epoch, or several and none is named.
        """
        if name is None:
            if len(self.epochs) > 1:
                raise InputError(f"{self.path} has several epochs; name one of {', '.join(self.epochs)}")
            return self.info["epochs"][0]
        for epoch in self.info["epochs"]:
            if epoch["name"] == name:
                return epoch
        raise InputError(f"{self.path} has no epoch {name!r}: {suggestion(name, self.epochs)}")

    def sheet(self, name: str, epoch: str | None = None) -> dict[str, Any]:
        """What `atlas.json` says of a sheet.

        Raises
        ------
        InputError
            Where there is no such sheet or epoch.
        """
        sheets = self.epoch(epoch)["sheets"]
        for sheet in sheets:
            if sheet["name"] == name:
                return sheet
        raise InputError(f"{self.path} has no sheet {name!r}: {suggestion(name, [s['name'] for s in sheets])}")

    def coding(self, sheet: str, epoch: str | None = None) -> Coding:
        """How the numbers of a sheet are coded."""
        return Coding.from_attributes(self.sheet(sheet, epoch))

    def reader(self, epoch: str, sheet: str, level: int, whole: bool = False) -> ArrayReader:
        """The reader of one array's tiles; the same one at every call.

        Parameters
        ----------
        epoch, sheet : str
        level : int
            0 is the finest.
        whole : bool
            All slabs together, in one slab of number 0; in an atlas of one slab that is the slab itself.

        Raises
        ------
        InputError
            Where there is no such epoch, sheet or level.
        """
        return self._reader(epoch, sheet, level, whole)

    def _open(self, epoch: str, sheet: str, level: int, whole: bool) -> ArrayReader:
        self.sheet(sheet, epoch)
        if not 0 <= level < self.info["levels"]:
            raise InputError(f"{self.path} has no level {level}: they go from 0 to {self.info['levels'] - 1}")
        folder = self.path / epoch / sheet
        if whole and self.slab_count > 1:
            folder = folder / "whole"
        return ArrayReader(folder / str(level))

    def read(
        self,
        sheet: str,
        centre: tuple[Length, Length] | None = None,
        width: Length | None = None,
        height: Length | None = None,
        slabs: int | slice | None = None,
        pixels: int | None = None,
        epoch: str | None = None,
    ) -> Piece:
        """A piece of a sheet, in numbers.

        Parameters
        ----------
        sheet : str
        centre : (u, v), optional
            Numbers in the unit of the view (comoving Mpc), text with a unit ("250 kpc") or astropy quantities. The
            centre of the view where it is left out.
        width, height : length, optional
            As above. The width of the view where it is left out; the height is as the width, or the view's own where
            neither is given.
        slabs : int or slice, optional
            One slab, or those that the slice takes; counted from 0, negative from the end. All, where it is left out.
            Slabs are summed; means are weighted by their weight sheet; dispersions are put together about the common
            mean; of a sheet of peaks the highest is taken, of slabs and of pixels.
        pixels : int, optional
            Columns of the piece, so that a pixel is width / pixels each way. Values are then averages over the new
            pixels of the coarsest level that is at least as fine, each old pixel counting by the area they share: sums
            over area are kept. Where it is left out, the finest pixels come as they are, and the window moves to their
            nearest edges.
        epoch : str, optional
            Needed where there are several.

        Returns
        -------
        Piece
            In a periodic volume that the view covers from side to side, a window beyond the edge goes on at the
            opposite one, as often as need be. Elsewhere pixels not wholly within the view are NaN.

        Raises
        ------
        InputError
            Where sheet, epoch or slabs do not exist, the window lies outside the view or is no window, or the piece
            would have more than 16384 x 16384 pixels.
        DamagedError
            Where a tile that is needed is damaged.
        """
        described = self.sheet(sheet, epoch)
        epoch = self.epoch(epoch)["name"]
        chosen = self._slabs(slabs)
        window = self._window(centre, width, height, pixels)
        (rows, rows_inside), (columns, columns_inside) = self._overlaps(window)
        values = self._values(described, epoch, window.level, chosen, rows, columns)
        values[~rows_inside, :] = np.nan
        values[:, ~columns_inside] = np.nan
        return self._piece(values, described, epoch, chosen, window)

    def inside(
        self,
        sheet: str,
        outline: ArrayLike,
        slabs: int | slice | None = None,
        epoch: str | None = None,
    ) -> Inside:
        """Area, mean, spread and total of a sheet inside an outline.

        Parameters
        ----------
        sheet, slabs, epoch
            As for `read`.
        outline : (points, 2)
            Corners (u, v) in the unit of the view; the last is joined to the first. Pixels that it cuts count in part.

        Raises
        ------
        InputError
            As `read` does, or where the outline is none or lies outside the view.
        DamagedError
            Where a tile that is needed is damaged.
        """
        return inside(self, sheet, outline, slabs, epoch)

    def _slabs(self, slabs: int | slice | None) -> tuple[int, ...]:
        count = self.slab_count
        if slabs is None:
            return tuple(range(count))
        if isinstance(slabs, slice):
            chosen = tuple(range(count))[slabs]
            if not chosen:
                raise InputError(f"slabs {slabs.start}:{slabs.stop} of {self.path} are none: there are {count}, from 0")
            return chosen
        if isinstance(slabs, bool) or not isinstance(slabs, int | np.integer):
            raise InputError(f"slabs is {slabs!r}: a number or a slice was expected")
        if not -count <= slabs < count:
            raise InputError(f"{self.path} has no slab {slabs}: they go from 0 to {count - 1}")
        return (int(slabs) % count,)

    def _window(
        self,
        centre: tuple[Length, Length] | None,
        width: Length | None,
        height: Length | None,
        pixels: int | None,
    ) -> _Window:
        view = self.info["view"]
        (u_low, u_high), (v_low, v_high) = view["u"], view["v"]
        finest = (u_high - u_low) / self.info["pixels"][0]
        wide = self._length(u_high - u_low if width is None else width)
        tall = self._length(height) if height is not None else (v_high - v_low if width is None else wide)
        try:
            mid_u, mid_v = ((u_low + u_high) / 2, (v_low + v_high) / 2) if centre is None else centre
        except (TypeError, ValueError):
            raise InputError(f"centre is {centre!r}: two lengths (u, v) were expected") from None
        mid_u, mid_v = self._length(mid_u), self._length(mid_v)
        if not (wide > 0 and tall > 0):
            raise InputError(f"a window of {wide:g} by {tall:g} {view['unit']}: both must be above zero")
        if pixels is not None and (isinstance(pixels, bool) or not isinstance(pixels, int | np.integer) or pixels < 1):
            raise InputError(f"pixels is {pixels!r}: a whole number from 1 up was expected")
        size = finest if pixels is None else wide / pixels
        columns, rows = max(1, round(wide / size)), max(1, round(tall / size))
        if columns * rows > MOST_PIXELS:
            most = math.isqrt(MOST_PIXELS)
            raise InputError(
                f"a piece of {columns} x {rows} pixels is too large: ask for at most {most} x {most}, "
                f"by a smaller window or by pixels=, such as pixels={min(4096, columns)}"
            )
        self._meet(mid_u, wide, (u_low, u_high), "u", 0)
        self._meet(mid_v, tall, (v_low, v_high), "v", 1)
        # The coarsest level whose pixels are not larger than those asked for, but for rounding.
        level = min(self.info["levels"] - 1, max(0, math.floor(math.log2(size / finest * (1 + 1e-9)))))
        of_level = finest * 2**level
        left = (mid_u - u_low - columns * size / 2) / of_level
        top = (v_high - mid_v - rows * size / 2) / of_level
        if pixels is None:
            left, top = float(round(left)), float(round(top))
        return _Window(level, left, top, size / of_level, rows, columns)

    def _length(self, value: Length) -> float:
        unit = self.unit
        kind = "length" if unit.is_equivalent(u.Mpc) else "angle"
        if isinstance(value, u.Quantity):
            try:
                value = float(value.to_value(unit))
            except (u.UnitConversionError, TypeError) as error:
                raise InputError(f"{value!r} is not a {kind}: {error}") from error
        elif isinstance(value, np.number):
            value = float(value)
        return number_in(value, unit, kind)

    def _meet(self, middle: float, size: float, side: tuple[float, float], name: str, axis: int) -> None:
        """The window and the view must share something along the axis."""
        if not self._wraps(axis) and not (middle - size / 2 < side[1] and middle + size / 2 > side[0]):
            raise InputError(
                f"the window is {name} {span(middle - size / 2, middle + size / 2)}, outside the view, which is "
                f"{name} {span(*side)} {self.info['view']['unit']}"
            )

    def _wraps(self, axis: int) -> bool:
        """Whether the view covers the whole periodic box along an image axis (0: u, 1: v)."""
        view = self.info["view"]
        if not view.get("periodic") or view.get("box") is None or view["axes"][axis] not in ("x", "y", "z"):
            return False
        box = view["box"]["xyz".index(view["axes"][axis])]
        low, high = view["uv"[axis]]
        return abs(high - low - box) <= 1e-6 * box

    def _overlaps(self, window: _Window) -> tuple[Any, Any]:
        columns, rows = (n >> window.level for n in self.info["pixels"])
        return (
            overlaps(window.top, window.step, window.rows, rows, self._wraps(1)),
            overlaps(window.left, window.step, window.columns, columns, self._wraps(0)),
        )

    def _values(
        self, sheet: dict[str, Any], epoch: str, level: int, slabs: tuple[int, ...], rows: Any, columns: Any
    ) -> NDArray[np.float32]:
        whole = len(slabs) == self.slab_count

        def coded(described: dict[str, Any]) -> Coded:
            return Coded(self.reader(epoch, described["name"], level, whole), Coding.from_attributes(described))

        weight, mean = (
            coded(self.sheet(sheet[role], epoch)) if sheet.get(role) else None for role in ("weight", "mean")
        )
        return combine(coded(sheet), weight, (0,) if whole else slabs, rows, columns, mean, sheet["kind"] == "peak")

    def _piece(
        self, values: NDArray[np.float32], sheet: dict[str, Any], epoch: str, slabs: tuple[int, ...], window: _Window
    ) -> Piece:
        view = self.info["view"]
        of_level = (view["u"][1] - view["u"][0]) / self.info["pixels"][0] * 2**window.level
        size = window.step * of_level
        width, height = window.columns * size, window.rows * size
        centre = (
            view["u"][0] + window.left * of_level + width / 2,
            view["v"][1] - window.top * of_level - height / 2,
        )
        wcs = WCS(naxis=2)
        wcs.wcs.ctype = ["u", "v"]
        wcs.wcs.cunit = [self.unit.to_string("fits")] * 2
        # Pixels are counted from 1 in FITS (Greisen & Calabretta 2002, A&A 395, 1061).
        wcs.wcs.crpix = [(window.columns + 1) / 2, (window.rows + 1) / 2]
        wcs.wcs.crval = list(centre)
        wcs.wcs.cdelt = [size, -size]
        wcs.wcs.set()
        return Piece(
            values, unit_named(sheet["unit"]), wcs, centre, width, height, sheet["name"], epoch, slabs, window.level
        )
