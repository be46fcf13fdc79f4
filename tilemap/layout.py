"""A build file and the facts of its snapshot in, the camera and the view out: where lengths become pixels."""

from __future__ import annotations

from typing import Any

import numpy as np

from tilemap.buildfile import BuildFile
from tilemap.errors import InputError
from tilemap.project.camera import AXES, Camera
from tilemap.project.images import steps_seen
from tilemap.project.scatter import TILE
from tilemap.sources import Facts

_AXIS_NAMES = ("x", "y", "z")
MOST_BOXES = 2000
"""Copies of a periodic box that a turned camera may touch: every particle is looked for in each of them."""


def make_camera(build: BuildFile, facts: Facts) -> Camera:
    """The camera that a build file asks for.

    Raises
    ------
    InputError
        Where the view is not given and no box says what it is, or where it cannot be cut into pixels and slabs.
    """
    view, where = build.view, f"{build.path}: view"
    box = None if facts.box is None else np.asarray(facts.box, dtype=np.float64)
    if box is None and (view.centre is None or view.width is None):
        raise InputError(f"{where}: the files name no box, so centre and width must be given")
    centre = view.vectors @ (np.asarray(view.centre) if view.centre is not None else np.asarray(box) / 2)
    # The box in u, v and depth; a turned camera sees a cube as wide as the longest side.
    sides = box
    if sides is not None:
        sides = np.full(3, sides.max()) if view.toward is not None else sides[list(AXES[view.along or "z"])]
    width = view.width if view.width is not None else float(sides[0])  # type: ignore[index]
    height = view.height or (float(sides[1]) if sides is not None and view.width is None else width)
    pixel = width / view.pixels
    rows = round(height / pixel)
    if rows < TILE or rows % TILE or abs(rows * pixel - height) > 1e-6 * height:
        fitting = max(TILE, round(rows / TILE) * TILE) * pixel
        raise InputError(
            f"{where}.height is {height:.9g}: at {view.pixels} pixels across {width:.9g} it must be a multiple of {TILE} "
            f"pixels, {TILE * pixel:.9g} each; the nearest is {fitting:.9g}"
        )
    edges = _slab_edges(build, centre[2], None if sides is None else float(sides[2]))
    turned = view.toward is not None
    period = sides if facts.periodic and not turned else None
    if period is not None and edges[-1] - edges[0] > period[2] * (1 + 1e-9):
        raise InputError(
            f"{where}: slabs reach over {edges[-1] - edges[0]:.9g}, more than the box, which is {period[2]:.9g} deep: "
            "mass would count twice"
        )
    camera = Camera(
        along="" if turned else view.along or "z",
        u_low=float(centre[0] - width / 2),
        v_high=float(centre[1] + height / 2),
        pixel=float(pixel),
        columns=view.pixels,
        rows=rows,
        edges=edges,
        period=period,
        turned=view.vectors if turned else None,
        box=box if facts.periodic and turned else None,
    )
    if camera.box is not None:
        moves = len(steps_seen(camera.vectors, (camera.u, camera.v, camera.depth), 0.0, camera.box))
        if moves > MOST_BOXES:
            raise InputError(
                f"{where}: it touches {moves} copies of the periodic box: make width, height or depth smaller, so that they "
                f"are at most {MOST_BOXES}"
            )
    return camera


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
    """The `view` object of atlas.json.

    `vectors` are the unit vectors of u, v and depth in x, y and z: u = vectors[0] . (x, y, z), whatever the camera.
    """
    turned = camera.turned is not None
    box = camera.box
    if camera.period is not None:
        box = np.array([camera.period[camera.axes.index(k)] for k in range(3)])
    return {
        "along": camera.along or None,
        "axes": ["u", "v", "depth"] if turned else [_AXIS_NAMES[axis] for axis in camera.axes],
        "vectors": camera.vectors.tolist(),
        "u": list(camera.u),
        "v": list(camera.v),
        "depth": list(camera.depth),
        "unit": build.view.unit,
        "coordinates": "plane" if build.view.flat else "comoving",
        "periodic": box is not None,
        "box": None if box is None else [float(side) for side in box],
    }
