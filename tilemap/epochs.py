"""Several epochs in one atlas: what each is called, and that all are seen through one camera."""

from __future__ import annotations

from collections import Counter
from collections.abc import Sequence

import numpy as np

from tilemap.buildfile import BuildFile
from tilemap.errors import InputError
from tilemap.project.camera import Camera
from tilemap.quantities import span


def epoch_names(builds: Sequence[BuildFile], redshifts: Sequence[float | None]) -> list[str]:
    """The name of each epoch: the build file's own, or its redshift.

    Raises
    ------
    InputError
        Where two would be called the same.
    """
    names = [
        build.epoch_name or ("now" if redshift is None else f"z{redshift:.2f}")
        for build, redshift in zip(builds, redshifts, strict=True)
    ]
    name, times = Counter(names).most_common(1)[0]
    if times > 1:
        raise InputError(f"{builds[0].path}: epochs: {times} are called {name}: give each a name: of its own")
    return names


def check_one_view(builds: Sequence[BuildFile], names: Sequence[str], cameras: Sequence[Camera]) -> None:
    """All epochs of an atlas have the same comoving view, to one part in a million.

    Raises
    ------
    InputError
        Where a view that is not given in full is that of boxes of several sizes.
    """
    first = cameras[0]
    for name, camera in zip(names[1:], cameras[1:], strict=True):
        for axis in ("u", "v", "depth"):
            one, other = getattr(first, axis), getattr(camera, axis)
            if not np.allclose(one, other, rtol=0, atol=1e-6 * (one[1] - one[0])):
                raise InputError(
                    f"{builds[0].path}: epochs: the view of {names[0]} is {axis} {span(*one)}, and that of {name} "
                    f"{span(*other)}, for their boxes differ: give view.centre, width, height and depth"
                )
