"""Where a particle falls: positions in comoving lengths in, places on the image in pixels out.

The camera is orthographic. It looks along a box axis, or it is turned: then positions are turned into its own u, v and
depth before they are routed. u runs to the right, v up; row 0 is the top edge.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from tilemap.project.images import images_seen

AXES = {"z": (0, 1, 2), "x": (1, 2, 0), "y": (2, 0, 1)}
"""For each line of sight, which coordinates are u, v and depth: right-handed, so u x v points along the line."""


@dataclass(frozen=True)
class Camera:
    """A rectangle in the image plane, a stack of slabs behind it, and the pixels that cover it.

    Attributes
    ----------
    along : str
        Line of sight: x, y or z; empty where the camera is turned.
    u_low, v_high : float
        Left and top edge of the image, in the length unit of the positions.
    pixel : float
        Side of a pixel, same unit.
    columns, rows : int
        Size of the image at level 0.
    edges : float64 (slabs + 1,)
        Depths at which the slabs are cut, increasing.
    period : float64 (3,) or None
        Sides of the periodic box along u, v and depth; None where nothing repeats, or the camera is turned.
    turned : float64 (3, 3) or None
        Unit vectors of u, v and depth in x, y and z, where they are not box axes.
    box : float64 (3,) or None
        Sides of the periodic box in x, y and z, for a turned camera.
    """

    along: str
    u_low: float
    v_high: float
    pixel: float
    columns: int
    rows: int
    edges: NDArray[np.float64]
    period: NDArray[np.float64] | None
    turned: NDArray[np.float64] | None = None
    box: NDArray[np.float64] | None = None

    @property
    def axes(self) -> tuple[int, int, int]:
        """Which coordinate of a position, as `see` gives it, is u, which v, which depth."""
        return AXES[self.along] if self.turned is None else (0, 1, 2)

    @property
    def vectors(self) -> NDArray[np.float64]:
        """Unit vectors of u, v and depth in x, y and z: (3, 3), one in each row."""
        return np.eye(3)[list(AXES[self.along])] if self.turned is None else self.turned

    def see(
        self, position: NDArray[np.float64], radius: NDArray[np.float64], values: NDArray[np.float32]
    ) -> tuple[NDArray[np.float64], NDArray[np.float64], NDArray[np.float32]]:
        """What is to be routed: the same along a box axis, and every image in its own u, v and depth where turned.

        Parameters
        ----------
        position : float64 (n, 3), in x, y and z
        radius : float64 (n,), support radii
        values : float32 (n, channels)
        """
        if self.turned is None:
            return position, radius, values
        places, which = images_seen(position, radius, self.turned, (self.u, self.v, self.depth), self.pixel, self.box)
        return places, radius[which], values[which]

    @property
    def volume(self) -> float:
        """What is seen, in the cube of the length unit."""
        return self.columns * self.rows * self.pixel**2 * (self.depth[1] - self.depth[0])

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
