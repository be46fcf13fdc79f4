"""tilemap: project a simulated volume once, correctly, and travel through the result.

The two doors for Python users: :func:`open` reads an atlas, :func:`build` makes one.
"""

from __future__ import annotations

from os import PathLike
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from pathlib import Path

    from tilemap.atlas import Atlas

__version__ = "0.1.0"
__all__ = ["__version__", "build", "open"]


def open(path: str | PathLike[str]) -> Atlas:
    """Open a published atlas for reading; see :class:`tilemap.atlas.Atlas`.

    Raises
    ------
    tilemap.errors.InputError
        If `path` is not an atlas.
    """
    from tilemap.atlas import Atlas

    return Atlas(path)


def build(
    build_file: str | PathLike[str],
    out: str | PathLike[str],
    workers: int | None = None,
    memory: int | str | None = None,
) -> Path:
    """Build the atlas that `build_file` describes and publish it at `out`; see :func:`tilemap.build_atlas.build_atlas`."""
    from tilemap.build_atlas import build_atlas

    return build_atlas(build_file, out, workers=workers, memory=memory)
