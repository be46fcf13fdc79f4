"""Values of the finest level in, a pyramid that keeps the highest out: of four pixels, and of all slabs.

Code 0 is nothing, and from there codes grow with the value in either coding, so the highest code is the highest value:
coarser levels are made of codes, and are exact.
"""

from __future__ import annotations

import threading
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from tilemap.pyramid.coding import Coding
from tilemap.pyramid.grid import TILE
from tilemap.pyramid.writer import WHOLE, SheetWriter
from tilemap.spill import ImageFile

Codes = NDArray[np.uint16]


def highest(codes: Codes) -> Codes:
    """The highest of every 2 by 2 codes: uint16 (..., 2 n, 2 m) in, (..., n, m) out."""
    across = np.maximum(codes[..., ::2], codes[..., 1::2])
    return np.maximum(across[..., ::2, :], across[..., 1::2, :])


class PeakWriter(SheetWriter):
    """The arrays of a sheet of peaks: it takes the finest level and makes all the others itself.

    Pieces of other levels are for sheets that are averaged and are passed over; so are the values of the whole, whose piece
    has to come after those of its slabs.

    Parameters
    ----------
    folder, shape, slabs, coding : as for `SheetWriter`
    coarse : ImageFile
        For the codes at level `local`, uint16: (slabs, 1, rows, columns).
    local : int
        Pieces of the finest level are 2^local tiles wide, or what is left of them at the right and lower edge.
    """

    def __init__(
        self, folder: Path, shape: tuple[int, int], slabs: int, coding: Coding, coarse: ImageFile, local: int
    ) -> None:
        super().__init__(folder, shape, slabs, coding)
        self._local = local
        self._coarse = coarse
        self._wholes: dict[tuple[int, int], Codes] = {}
        self._holding = threading.Lock()

    def put(self, level: int, slab: int, corner: tuple[int, int], values: NDArray[np.float32]) -> None:
        if level == 0:
            self._take(slab, corner, self.coding.encode(values) if slab != WHOLE else None, values.shape)

    def put_nothing(self, level: int, slab: int, corner: tuple[int, int], shape: tuple[int, int]) -> None:
        if level == 0:
            self._take(slab, corner, None, shape)

    def _take(self, slab: int, corner: tuple[int, int], codes: Codes | None, shape: tuple[int, ...]) -> None:
        with self._holding:
            if slab == WHOLE:
                codes = self._wholes.pop(corner, None)
            elif self.slabs > 1 and self._local and codes is not None:
                held = self._wholes.get(corner)
                self._wholes[corner] = codes.copy() if held is None else np.maximum(held, codes, out=held)
        for level in range(self._local):
            at = corner[0] >> level, corner[1] >> level
            if codes is None:
                super().put_nothing(level, slab, at, (shape[0] >> level, shape[1] >> level))
            else:
                self._put_codes(level, slab, at, codes)
                codes = highest(codes)
        if codes is not None and slab != WHOLE:
            row, column = (side * TILE >> self._local for side in corner)
            self._coarse.write(slab, (row, column), codes[None])

    def finish(self, side: int) -> Codes:
        """Write the levels from `local` on; the whole at the finest of them that has no side longer than `side`."""
        for slab in [*range(self.slabs), WHOLE] if self.slabs > 1 else [0]:
            shown, codes = None, self._at_local(slab)
            for level in range(self._local, len(self.shapes)):
                self._put_codes(level, slab, (0, 0), codes)
                last = level + 1 == len(self.shapes)
                if shown is None and (max(codes.shape) <= side or last):
                    shown = codes
                if not last:
                    codes = highest(codes)
        assert shown is not None
        return shown

    def _at_local(self, slab: int) -> Codes:
        if slab != WHOLE:
            return self._coarse.read(slab, (0, 0), self.shapes[self._local])[0]
        codes = self._at_local(0)
        for each in range(1, self.slabs):
            np.maximum(codes, self._at_local(each), out=codes)
        return codes
