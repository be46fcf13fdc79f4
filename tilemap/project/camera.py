"""Where a particle falls: positions in comoving lengths in, places on the image in pixels out.

The camera is orthographic and looks along a box axis. u runs to the right, v up; row 0 is the top edge.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

AXES = {"z": (0, 1, 2), "x": (1, 2, 0), "y": (2, 0, 1)}
"""For each line of sight, which coordinates are u, v and depth: right-handed, so u x v points along the line."""


@dataclass(frozen=True)
class Camera:
    """A rectangle in the image plane, a stack of slabs behind it, and the pixels that cover it.

    Attributes
    ----------
    along : str
        Line of sight: x, y or z.
    u_low, v_high : float
        Left and top edge of the image, in the length unit of the positions.
    pixel : float
        Side of a pixel, same unit.
    columns, rows : int
        Size of the image at level 0.
    edges : float64 (slabs + 1,)
        Depths at which the slabs are cut, increasing.
    period : float64 (3,) or None
        Sides of the periodic box along u, v and depth; None where nothing repeats.
    """

    along: str
    u_low: float
    v_high: float
    pixel: float
    columns: int
    rows: int
    edges: NDArray[np.float64]
    period: NDArray[np.float64] | None

    @property
    def axes(self) -> tuple[int, int, int]:
        """Which coordinate of a position is u, which v, which depth."""
        return AXES[self.along]

    @property
    def slabs(self) -> int:
        return len(self.edges) - 1

    @property
    def u(self) -> tuple[float, float]:
        return self.u_low, self.u_low + self.columns * self.pixel

    @property
    def v(self) -> tuple[float, float]:
        return self.v_high - self.rows * self.pixel, self.v_high

    @property
    def depth(self) -> tuple[float, float]:
        return float(self.edges[0]), float(self.edges[-1])
