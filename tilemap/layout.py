"""A build file and the facts of its snapshot in, the camera and the view out: where lengths become pixels."""

from __future__ import annotations

from typing import Any

import numpy as np

from tilemap.buildfile import BuildFile
from tilemap.errors import InputError
from tilemap.project.camera import AXES, Camera
from tilemap.project.scatter import TILE
from tilemap.sources import Facts

_AXIS_NAMES = ("x", "y", "z")


def make_camera(build: BuildFile, facts: Facts) -> Camera:
    """The camera that a build file asks for.

    Raises
    ------
    InputError
        Where the view is not given and no box says what it is, or where it cannot be cut into pixels and slabs.
    """
    view, where = build.view, f"{build.path}: view"
    along = view.along or "z"
    axes = AXES[along]
    box = None if facts.box is None else np.asarray(facts.box, dtype=np.float64)[list(axes)]
    if box is None and (view.centre is None or view.width is None):
        raise InputError(f"{where}: the files name no box, so centre and width must be given")
    centre = np.asarray(view.centre)[list(axes)] if view.centre is not None else np.asarray(box) / 2
    width = view.width if view.width is not None else float(box[0])  # type: ignore[index]
    height = (
        view.height if view.height is not None else float(box[1]) if box is not None and view.width is None else width
    )
    pixel = width / view.pixels
    rows = round(height / pixel)
    if rows < TILE or rows % TILE or abs(rows * pixel - height) > 1e-6 * height:
        fitting = max(TILE, round(rows / TILE) * TILE) * pixel
        raise InputError(
            f"{where}.height is {height:.9g}: at {view.pixels} pixels across {width:.9g} it must be a multiple of {TILE} "
            f"pixels, {TILE * pixel:.9g} each; the nearest is {fitting:.9g}"
        )
    edges = _slab_edges(build, centre[2], None if box is None else float(box[2]))
    period = box if facts.periodic else None
    if period is not None and edges[-1] - edges[0] > period[2] * (1 + 1e-9):
        raise InputError(
            f"{where}: slabs reach over {edges[-1] - edges[0]:.9g}, more than the box, which is {period[2]:.9g} deep: "
            "mass would count twice"
        )
    return Camera(
        along=along,
        u_low=float(centre[0] - width / 2),
        v_high=float(centre[1] + height / 2),
        pixel=float(pixel),
        columns=view.pixels,
        rows=rows,
        edges=edges,
        period=period,
    )


def _slab_edges(build: BuildFile, centre: float, box_depth: float | None) -> np.ndarray:
    view = build.view
    if not isinstance(view.slabs, int):
        return np.array(view.slabs, dtype=np.float64)
    depth = view.depth if view.depth is not None else box_depth
    if depth is None:
        if not view.flat:
            raise InputError(f"{build.path}: view: the files name no box, so depth must be given")
        depth = 1.0  # a chart has no depth: everything lies at 0, in the middle of one slab
    return np.linspace(centre - depth / 2, centre + depth / 2, view.slabs + 1)


def describe_view(build: BuildFile, camera: Camera) -> dict[str, Any]:
    """The `view` object of atlas.json."""
    return {
        "along": camera.along,
        "axes": [_AXIS_NAMES[axis] for axis in camera.axes],
        "u": list(camera.u),
        "v": list(camera.v),
        "depth": list(camera.depth),
        "unit": build.view.unit,
        "coordinates": "plane" if build.view.flat else "comoving",
        "periodic": camera.period is not None,
        "box": None if camera.period is None else [float(camera.period[camera.axes.index(k)]) for k in range(3)],
    }
