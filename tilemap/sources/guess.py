"""Which kernel and which meaning of the smoothing length a snapshot was run with, found from its own densities.

A code that writes densities computed them as rho_i = sum_j m_j W(r_ij, H_i). Only the right kernel and the right
support radius H give back all of them with one constant; a wrong one scatters by a percent and more.
"""

from __future__ import annotations

import numpy as np
from scipy.spatial import cKDTree

from tilemap.project.kernels import KERNELS

SAMPLE = 48
SCATTER_FOUND = 1e-4
MOST_PARTICLES = 4_000_000


def guess_smoothing(
    position: np.ndarray, mass: np.ndarray, smoothing: np.ndarray, density: np.ndarray, box: np.ndarray | None
) -> tuple[str, str] | None:
    """Find (means, kernel) that explain the densities.

    Parameters
    ----------
    position : (n, 3) float
        In the unit of `smoothing` and `box`.
    mass, smoothing, density : (n,) float
        In any unit: only the scatter of the ratio of densities is looked at.
    box : (3,) float or None
        Sides of the periodic box, if it is one.

    Returns
    -------
    tuple of str or None
        As in the build file's `means` and `kernel`; None where no pair explains them.
    """
    if not 0 < len(position) <= MOST_PARTICLES:
        return None
    tree = cKDTree(position if box is None else position % box, boxsize=box)
    chosen = np.random.default_rng(1).choice(len(position), min(SAMPLE, len(position)), replace=False)
    widest = max(2.0, *(kernel.support_over_fwhm for kernel in KERNELS.values()))
    pairs = []
    for i, near in zip(chosen, tree.query_ball_point(tree.data[chosen], widest * smoothing[chosen]), strict=True):
        offset = tree.data[near] - tree.data[i]
        if box is not None:
            offset -= box * np.round(offset / box)
        pairs.append((np.sqrt((offset**2).sum(axis=1)) / smoothing[i], mass[near]))
    best: tuple[float, tuple[str, str]] = (np.inf, ("", ""))
    for name, kernel in KERNELS.items():
        for means, support in (("support", 1.0), ("half", 2.0), ("fwhm", kernel.support_over_fwhm)):
            sums = np.array([(weights * kernel.value(q / support)).sum() for q, weights in pairs])
            ratio = density[chosen] * (support * smoothing[chosen]) ** 3 / sums
            best = min(best, (float(ratio.std() / ratio.mean()), (means, name)))
    return best[1] if best[0] < SCATTER_FOUND else None
