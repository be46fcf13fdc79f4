"""Where matter has collapsed: positions of the evolved lattice in, a table of halos and the owner of every lattice point out.

Heavy halos are spheres around density peaks of the evolved lattice. Lighter ones, which the mesh cannot hold together,
are peaks of the linear density on their own mass scale: the peak patches of Bond & Myers (1996, ApJS 103, 1), carried
along by the evolved displacements. Either way a halo is a set of lattice points, so that mass is never made or lost.
"""

from __future__ import annotations

import itertools
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy.spatial import cKDTree

from tilemap.demo.field import Cosmos, Field, Floats, smoothed
from tilemap.demo.mesh import deposit, gather
from tilemap.demo.profiles import OVERDENSITY, concentration, halo_radius

COLLAPSE = 1.686  # linear contrast of a sphere that has collapsed: Gunn & Gott (1972, ApJ 176, 1), for Omega_m = 1
FEWEST_IN_SPHERE = 20  # lattice points of a sphere that counts as a halo
FEWEST_IN_PATCH = 7
PATCH_MASSES = (200.0, 90.0, 40.0, 18.0, 9.0)  # lattice points in a peak patch, heaviest scale first

Ints = NDArray[np.signedinteger[Any]]


@dataclass
class Halos:
    """A table of halos, heaviest first, and what they are made of.

    Attributes
    ----------
    centre : (k, 3) float64, comoving Mpc
    mass : (k,) float64, Msun, all matter
    radius : (k,) float64, comoving Mpc, holding 200 times the mean matter density
    concentration : (k,) float64
    host : (k,) int, the halo in which this one moves, or -1
    velocity : (k, 3) float64, peculiar km/s
    owner : (n, n, n) int32, for every lattice point the outermost halo that holds it, or -1
    inner : (n, n, n) int32, for every lattice point the halo inside `owner` that holds it, or -1
    tail : (n, n, n) int32, for every lattice point the halo inside `owner` that has lost it to the tides, or -1
    """

    centre: Floats
    mass: Floats
    radius: Floats
    concentration: Floats
    host: Ints
    velocity: Floats
    owner: Ints
    inner: Ints
    tail: Ints

    def __len__(self) -> int:
        return len(self.mass)


def wrap(offset: Floats, box: float) -> Floats:
    """The shortest of the periodic copies of `offset`."""
    return offset - box * np.rint(offset / box)


def local_maxima(field: Field, above: float) -> NDArray[np.int64]:
    """Flat indices of cells of a periodic cube that exceed `above` and all 26 neighbours, highest first."""
    n = field.shape[0]
    i, j, k = np.nonzero(field > above)
    steps = [step for step in itertools.product((-1, 0, 1), repeat=3) if step != (0, 0, 0)]
    # Faces first: they rule out nearly all, and the corners have little left to look at.
    for di, dj, dk in sorted(steps, key=lambda step: sum(map(abs, step))):
        best = field[i, j, k] > field[(i + di) % n, (j + dj) % n, (k + dk) % n]
        i, j, k = i[best], j[best], k[best]
    flat = (i * n + j) * n + k
    return flat[np.argsort(-field[i, j, k], kind="stable")]


def _spheres(
    position: Field, mesh: int, box: float, particle_mass: float, cosmos: Cosmos
) -> list[tuple[float, Floats, NDArray[np.int64]]]:
    """Count, centre and member points of the sphere around every density peak, heaviest first; they may overlap."""
    cells = position * np.float32(mesh / box)
    contrast = deposit(cells, mesh) * np.float32(mesh**3 / len(position)) - 1.0
    dense = np.flatnonzero(gather(contrast, cells) > 6.0)
    tree = cKDTree(np.mod(position[dense], box).astype(np.float64) % box, boxsize=box)
    peaks = np.stack(np.unravel_index(local_maxima(contrast, 25.0), contrast.shape), -1) * (box / mesh)
    spheres: list[tuple[float, Floats, NDArray[np.int64]]] = []
    cell = box / mesh
    reach = np.full(len(peaks), 2.5 * cell)
    near = tree.query_ball_point(peaks, reach, workers=-1, return_sorted=True)
    for peak, hits in zip(peaks, near, strict=True):
        centre, wide = peak, 2.5 * cell
        while True:
            offset = wrap(tree.data[hits] - centre, box)
            if wide <= 2.5 * cell * 1.01:
                for shrink in (2.0, 1.5, 1.2):
                    inside = np.einsum("ij,ij->i", offset, offset) < (shrink * cell) ** 2
                    if inside.sum() < 5:
                        break
                    step = offset[inside].mean(axis=0)
                    centre, offset = centre + step, offset - step
            distance = np.sqrt(np.einsum("ij,ij->i", offset, offset))
            order = np.argsort(distance, kind="stable")
            count = np.arange(1, len(order) + 1)
            overdense = count * particle_mass / (4.0 / 3.0 * np.pi * distance[order] ** 3) > (
                OVERDENSITY * cosmos.mean_density
            )
            last = int(np.flatnonzero(overdense)[-1]) + 1 if overdense.any() else 0
            if last == 0 or distance[order[last - 1]] < 0.85 * wide or wide > 2.5:
                break
            wide *= 1.7
            hits = tree.query_ball_point(centre % box, wide, return_sorted=True)
        if last >= FEWEST_IN_SPHERE:
            spheres.append((float(last), centre % box, dense[np.asarray(hits)[order[:last]]]))
    return sorted(spheres, key=lambda sphere: -sphere[0])


class _Register:
    """Halos as they are accepted, and which lattice points are taken."""

    def __init__(self, points: int, box: float, particle_mass: float, cosmos: Cosmos) -> None:
        self.box, self.particle_mass, self.cosmos = box, particle_mass, cosmos
        self.owner = np.full(points, -1, np.int32)
        self.inner = np.full(points, -1, np.int32)
        self.tail = np.full(points, -1, np.int32)
        most = points // FEWEST_IN_PATCH
        self.centre = np.zeros((most, 3))
        self.reach = np.zeros(most)
        self.host = np.full(most, -1, np.int32)
        self.members: list[NDArray[np.int64]] = []
        self._outer = np.zeros(most, np.int32)
        self._outer_count = 0

    def host_of(self, centre: Floats) -> tuple[int, float]:
        """The first accepted outer halo that reaches `centre`, or -1, and how deep inside it is, 0 at its heart."""
        outer = self._outer[: self._outer_count]
        offset = wrap(self.centre[outer] - centre, self.box)
        depth = np.sqrt(np.einsum("ij,ij->i", offset, offset)) / self.reach[outer]
        inside = np.flatnonzero(depth < 1.0)
        return (int(outer[inside[0]]), float(depth[inside[0]])) if len(inside) else (-1, np.inf)

    def accept(self, centre: Floats, points: NDArray[np.int64], host: int, kept: float = 1.0) -> None:
        """Enter a halo of `points`, innermost first, of which the tides of `host` have left the share `kept`."""
        index = len(self.members)
        bound = max(3, round(kept * len(points)))
        self.tail[points[bound:]] = index
        points = points[:bound]
        (self.owner if host < 0 else self.inner)[points] = index
        self.centre[index] = centre
        self.reach[index] = halo_radius(len(points) * self.particle_mass, self.cosmos)
        self.host[index] = host
        self.members.append(points)
        if host < 0:
            self._outer[self._outer_count] = index
            self._outer_count += 1


def find_halos(
    modes: NDArray[np.complex64],
    displacement: Field,
    velocity: Field,
    box: float,
    cosmos: Cosmos,
    redshift: float,
) -> Halos:
    """Find halos and the halos inside them.

    Parameters
    ----------
    modes : complex64, shape (n, n, n // 2 + 1)
        Linear contrast today.
    displacement, velocity : float32, shape (n^3, 3)
        Of the evolved lattice, comoving Mpc and km/s.
    """
    n = modes.shape[0]
    spacing = box / n
    particle_mass = cosmos.mean_density * spacing**3
    grid = np.stack(np.unravel_index(np.arange(n**3), (n, n, n)), axis=-1)
    position = (grid * spacing + displacement).astype(np.float32) % np.float32(box)

    register = _Register(n**3, box, particle_mass, cosmos)
    owner, inner, tail = register.owner, register.inner, register.tail

    for _, centre, points in _spheres(position, 2 * n, box, particle_mass, cosmos):
        host, depth = register.host_of(centre)
        if host < 0:
            free = points[owner[points] < 0]
        elif depth > 0.2:
            # A sphere around a halo inside another also counts its host's matter: keep what lies within the tidal reach.
            near = np.linalg.norm(wrap(position[points] - centre, box), axis=1) < 0.35 * depth * register.reach[host]
            free = points[near & (owner[points] == host) & (inner[points] < 0) & (tail[points] < 0)]
        else:
            continue
        if len(free) >= FEWEST_IN_SPHERE:
            register.accept(centre, free, host)

    threshold = COLLAPSE / float(cosmos.growth(1.0 / (1.0 + redshift)))
    for weight in PATCH_MASSES:
        contrast = smoothed(modes, box, spacing * np.cbrt(weight) / np.sqrt(2.0 * np.pi))
        patch_radius = np.cbrt(3.0 * weight / (4.0 * np.pi))
        across = np.arange(-int(patch_radius), int(patch_radius) + 1)
        ball = np.stack(np.meshgrid(across, across, across, indexing="ij"), axis=-1).reshape(-1, 3)
        ball = ball[np.argsort((ball**2).sum(axis=1), kind="stable")]
        ball = ball[(ball**2).sum(axis=1) <= patch_radius**2]
        for peak in local_maxima(contrast, threshold):
            around = (grid[peak] + ball) % n
            points = (around[:, 0] * n + around[:, 1]) * n + around[:, 2]
            host = int(owner[peak])
            centre = position[peak].astype(np.float64)
            kept = 1.0
            if host < 0:
                free = points[owner[points] < 0]
                if len(free) < max(FEWEST_IN_PATCH, 0.6 * len(points)) or register.host_of(centre)[0] >= 0:
                    continue
            else:
                depth = np.linalg.norm(wrap(centre - register.centre[host], box)) / register.reach[host]
                free = points[(owner[points] == host) & (inner[points] < 0) & (tail[points] < 0)]
                if not 0.12 < depth < 1.0 or len(free) < max(FEWEST_IN_PATCH, 0.6 * len(points)):
                    continue
                kept = 0.2 + 0.7 * depth
            register.accept(centre, free, host, kept)

    count = np.array([len(points) for points in register.members])
    order = np.argsort(-count, kind="stable")
    renumbered = np.empty(len(order) + 1, np.int32)
    renumbered[order] = np.arange(len(order))
    renumbered[-1] = -1
    mass = count[order] * particle_mass
    return Halos(
        centre=register.centre[order],
        mass=mass,
        radius=halo_radius(mass, cosmos),
        concentration=concentration(mass, redshift, cosmos),
        host=renumbered[register.host[order]],
        velocity=np.array([velocity[register.members[i]].mean(axis=0, dtype=np.float64) for i in order]),
        owner=renumbered[owner].reshape(n, n, n),
        inner=renumbered[inner].reshape(n, n, n),
        tail=renumbered[tail].reshape(n, n, n),
    )
