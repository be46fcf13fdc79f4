"""Gravity on a mesh: displacements of a lattice in, its positions and momenta at the end of a few steps out.

Positions are in cells of the mesh that is used; the cube is periodic.
"""

from __future__ import annotations

from collections.abc import Callable
from concurrent.futures import ThreadPoolExecutor

import numba
import numpy as np
import scipy.fft
from numpy.typing import NDArray

from tilemap.demo.field import Cosmos, Field, inverse_gradient

WORKERS = 2


@numba.njit(numba.void(numba.float32[:, :], numba.float32[:], numba.float32[:, :, ::1]), cache=True, nogil=True)
def _deposit(position, weight, mesh):
    n = mesh.shape[0]
    for p in range(position.shape[0]):
        w = weight[0] if weight.shape[0] == 1 else weight[p]
        x, y, z = position[p, 0], position[p, 1], position[p, 2]
        i, j, k = int(np.floor(x)), int(np.floor(y)), int(np.floor(z))
        fx, fy, fz = x - i, y - j, z - k
        i, j, k = i % n, j % n, k % n
        i1, j1, k1 = (i + 1) % n, (j + 1) % n, (k + 1) % n
        gx, gy, gz = 1 - fx, 1 - fy, w * (1 - fz)
        hz = w * fz
        mesh[i, j, k] += gx * gy * gz
        mesh[i, j, k1] += gx * gy * hz
        mesh[i, j1, k] += gx * fy * gz
        mesh[i, j1, k1] += gx * fy * hz
        mesh[i1, j, k] += fx * gy * gz
        mesh[i1, j, k1] += fx * gy * hz
        mesh[i1, j1, k] += fx * fy * gz
        mesh[i1, j1, k1] += fx * fy * hz


@numba.njit(numba.void(numba.float32[:, :, ::1], numba.float32[:, :], numba.float32[:]), cache=True, nogil=True)
def _gather(mesh, position, out):
    n = mesh.shape[0]
    for p in range(position.shape[0]):
        x, y, z = position[p, 0], position[p, 1], position[p, 2]
        i, j, k = int(np.floor(x)), int(np.floor(y)), int(np.floor(z))
        fx, fy, fz = x - i, y - j, z - k
        i, j, k = i % n, j % n, k % n
        i1, j1, k1 = (i + 1) % n, (j + 1) % n, (k + 1) % n
        gx, gy, gz = 1 - fx, 1 - fy, 1 - fz
        out[p] = gx * (
            gy * (gz * mesh[i, j, k] + fz * mesh[i, j, k1]) + fy * (gz * mesh[i, j1, k] + fz * mesh[i, j1, k1])
        ) + fx * (
            gy * (gz * mesh[i1, j, k] + fz * mesh[i1, j, k1]) + fy * (gz * mesh[i1, j1, k] + fz * mesh[i1, j1, k1])
        )


def deposit(position: Field, n: int, weight: Field | None = None) -> Field:
    """Spread `weight` (n_particles,), or 1, of particles at `position` (n_particles, 3) cells over the 8 cell centres around.

    Returns a mesh (n, n, n); cell centres lie at whole numbers. Cloud in cell: Hockney & Eastwood (1981).
    """
    weights = np.ones(1, np.float32) if weight is None else weight
    # The number of parts is fixed: sums in another order would give other last bits on another machine.
    parts = np.array_split(np.arange(len(position)), WORKERS)
    meshes = [np.zeros((n, n, n), np.float32) for _ in parts]

    def run(part: NDArray[np.int64], mesh: Field) -> None:
        cut = slice(int(part[0]), int(part[-1]) + 1) if len(part) else slice(0, 0)
        _deposit(position[cut], weights if len(weights) == 1 else weights[cut], mesh)

    with ThreadPoolExecutor(WORKERS) as pool:
        list(pool.map(run, parts, meshes))
    for mesh in meshes[1:]:
        meshes[0] += mesh
    return meshes[0]


def gather(mesh: Field, position: Field) -> Field:
    """Values (n_particles,) of `mesh` (n, n, n) at `position` (n_particles, 3) in cells, trilinear between cell centres."""
    out = np.empty(len(position), np.float32)
    parts = [slice(lo, lo + (1 << 18)) for lo in range(0, len(position), 1 << 18)]
    with ThreadPoolExecutor(WORKERS) as pool:
        list(pool.map(lambda cut: _gather(mesh, position[cut], out[cut]), parts))
    return out


def lattice(n: int) -> Field:
    """Points (n^3, 3) at whole numbers, in the order of a mesh's own cells."""
    return np.stack(np.meshgrid(*[np.arange(n, dtype=np.float32)] * 3, indexing="ij"), axis=-1).reshape(-1, 3)


def evolve(
    modes: NDArray[np.complex64],
    box: float,
    cosmos: Cosmos,
    a_end: float,
    a_start: float = 0.06,
    steps: int = 8,
    mesh_factor: int = 2,
    tell: Callable[[float], None] = lambda share: None,
) -> tuple[Field, Field]:
    """Follow a lattice of n^3 particles under its own gravity from `a_start` to `a_end`.

    Kick-drift-kick whose factors make every step exact in linear theory (Feng, Chu, Seljak & McDonald 2016,
    MNRAS 463, 2273), begun with the displacements of Zel'dovich. The pull comes from a mesh `mesh_factor` times as
    fine as the lattice.

    Parameters
    ----------
    modes : complex64, shape (n, n, n // 2 + 1)
        Linear contrast today, see :func:`tilemap.demo.field.gaussian_field`.
    box : float
        Side in comoving Mpc.
    tell : callable
        Told the share done, 0 to 1.

    Returns
    -------
    displacement : float32, shape (n^3, 3)
        Comoving Mpc from each particle's lattice point to where it ends (not wrapped).
    speed : float32, shape (n^3, 3)
        dx / dD in Mpc: the comoving velocity in units of the linear growth dD/dt.
    """
    n = modes.shape[0]
    fine = n * mesh_factor
    cell = box / fine
    psi = np.stack([field.reshape(-1) for field in inverse_gradient(modes, box)], axis=-1)

    def momentum(a: float) -> float:
        """a^3 E dD/da: the momentum of a unit displacement in linear theory."""
        return float(a**2 * cosmos.expansion(a) * cosmos.growth(a) * cosmos.growth_rate(a))

    # Half way between cell centres each particle fills its cells evenly: the lattice itself leaves no trace in the pull.
    start = lattice(n) * np.float32(mesh_factor) + np.float32(0.5)
    position = start + psi * np.float32(cosmos.growth(a_start) / cell)
    p = psi * np.float32(momentum(a_start))
    stops = np.linspace(a_start, a_end, steps + 1)

    def kick(at: float, a_from: float, a_to: float) -> None:
        contrast = deposit(position, fine)
        contrast *= np.float32((fine / n) ** 3)
        factor = np.float32((momentum(a_to) - momentum(a_from)) / cosmos.growth(at))
        pull = inverse_gradient(scipy.fft.rfftn(contrast, workers=-1, overwrite_x=True), box, on_mesh=True)
        for axis in range(3):
            p[:, axis] += factor * gather(pull[axis], position)

    kick(a_start, stops[0], 0.5 * (stops[0] + stops[1]))
    for step in range(steps):
        a0, a1 = stops[step], stops[step + 1]
        middle = 0.5 * (a0 + a1)
        position += p * np.float32((cosmos.growth(a1) - cosmos.growth(a0)) / momentum(middle) / cell)
        kick(a1, middle, 0.5 * (a1 + stops[step + 2]) if step + 2 <= steps else a1)
        tell((step + 1) / steps)
    return (position - start) * np.float32(cell), p * np.float32(1.0 / momentum(a_end))
