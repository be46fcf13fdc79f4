"""Dark matter and gas between and inside the halos: the evolved lattice in, particles out.

Particles are drawn anywhere in the lattice, more densely where structure has formed, and carried by the evolved
displacements in between its points. Those whose lattice point belongs to a halo are then settled into its profile:
they keep their direction and their order in radius, so that halos stay joined to the filaments that feed them.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.ndimage import gaussian_filter

from tilemap.demo.field import Field, Floats
from tilemap.demo.halos import Halos, Ints, wrap
from tilemap.demo.mesh import gather
from tilemap.demo.profiles import circular_speed, nfw_radius

FINEST = 8  # the draw is this many times denser in the densest parts than in the emptiest
SHAKE = 0.2  # in lattice steps
_LATE = np.array([0, 4, 2, 6, 1, 5, 3, 7])  # bit-reversed: any first few of them are spread evenly
_PLASTIC = 1.2207440846057596  # real root of x^4 = x + 1


@dataclass
class Particles:
    """Particles as they are drawn.

    Attributes
    ----------
    position : (p, 3) float64, comoving Mpc, not wrapped
    velocity : (p, 3) float32, peculiar km/s
    mass : (p,) float64, Msun
    extra : further columns (p,), float32
    """

    position: Floats
    velocity: Field
    mass: Floats
    extra: dict[str, Field]

    def __len__(self) -> int:
        return len(self.mass)

    @staticmethod
    def joined(*parts: Particles) -> Particles:
        """All particles of `parts`, which have the same columns, in one."""
        return Particles(
            np.concatenate([part.position for part in parts]),
            np.concatenate([part.velocity for part in parts]),
            np.concatenate([part.mass for part in parts]),
            {name: np.concatenate([part.extra[name] for part in parts]) for name in parts[0].extra},
        )


@dataclass
class Drawn:
    """Points drawn in the lattice before anything is settled."""

    at: Field  # (p, 3) in lattice steps
    owner: Ints
    inner: Ints
    tail: Ints
    position: Floats
    velocity: Field
    mass: Floats  # (p,) Msun


def draw(
    fineness: NDArray[np.uint8],
    per_point: float,
    shift: float,
    halos: Halos,
    displacement: list[Field],
    velocity: list[Field],
    box: float,
    total_mass: float,
    rng: np.random.Generator,
) -> Drawn:
    """Draw particles in the lattice.

    Parameters
    ----------
    fineness : uint8, (n, n, n)
        1 to 8 for every lattice point: how densely its surroundings are drawn.
    per_point : float
        Particles a lattice point at fineness 8.
    shift : float
        Start of the sequence, so that two draws do not fall on each other.
    displacement, velocity : three float32 fields (n, n, n), comoving Mpc and km/s
    total_mass : float
        Msun of all that is drawn; a halo's share of it is its share of the lattice.
    """
    n = fineness.shape[0]
    count = int(per_point * n**3 / FINEST)
    steps = _PLASTIC ** -np.arange(1.0, 4.0)
    kept = []
    for phase, late in enumerate(_LATE):
        # A Kronecker sequence on the golden ratio's sibling in three dimensions: even, periodic, and along no axis.
        i = np.arange(phase, FINEST * count, FINEST, dtype=np.float64)
        at = np.stack([((i * step + shift) % 1.0) * n for step in steps], axis=-1).astype(np.float32)
        # Shaken a little, so that where a slab cuts a thin sheet of matter its rows do not show as stripes.
        at += np.float32(SHAKE) * rng.standard_normal(at.shape, dtype=np.float32)
        nearest = np.rint(at).astype(np.int32) % n
        flat = (nearest[:, 0] * n + nearest[:, 1]) * n + nearest[:, 2]
        wanted = fineness.reshape(-1)[flat] > late
        kept.append((at[wanted], flat[wanted]))
    at = np.concatenate([pair[0] for pair in kept])
    flat = np.concatenate([pair[1] for pair in kept])
    # Along the lattice, so that neighbours in space stay neighbours in memory.
    order = np.argsort(flat, kind="stable")
    at, flat = at[order], flat[order]
    owner = halos.owner.reshape(-1)[flat]

    # Every halo, and every fineness outside halos, gets the share of the mass that its lattice points have.
    group = np.where(owner >= 0, owner + FINEST + 1, fineness.reshape(-1)[flat])
    lattice_group = np.where(halos.owner >= 0, halos.owner + FINEST + 1, fineness).reshape(-1)
    size = len(halos) + FINEST + 1
    share = np.bincount(lattice_group, minlength=size) / np.maximum(np.bincount(group, minlength=size), 1)
    mass = share[group]
    return Drawn(
        at=at,
        owner=owner,
        inner=halos.inner.reshape(-1)[flat],
        tail=halos.tail.reshape(-1)[flat],
        position=np.stack(
            [at[:, i] * (box / n) + gather(displacement[i], at) for i in range(3)], axis=-1, dtype=np.float64
        ),
        velocity=np.stack([gather(velocity[i], at) for i in range(3)], axis=-1),
        mass=mass * (total_mass / mass.sum()),
    )


def softened(fields: list[Field], cells: float) -> list[Field]:
    """Fields smoothed over `cells` lattice steps, as pressure smooths the gas (Gnedin & Hui 1998, MNRAS 296, 44)."""
    return [gaussian_filter(field, cells, mode="wrap", truncate=3.0) for field in fields]


def rank_share(group: Ints, key: Floats) -> Floats:
    """For every particle the share of its group, in order of `key`, that lies below it: (rank + 1/2) / size."""
    order = np.lexsort((key, group))
    sizes = np.bincount(group)
    starts = np.concatenate([[0], np.cumsum(sizes)[:-1]])
    share = np.empty(len(group))
    share[order] = (np.arange(len(group)) - starts[group[order]] + 0.5) / sizes[group[order]]
    return share


def random_directions(count: int, rng: np.random.Generator) -> Floats:
    """Unit vectors (count, 3), every direction equally likely."""
    vectors = rng.standard_normal((count, 3))
    return vectors / np.linalg.norm(vectors, axis=1, keepdims=True)


def settle_dark(drawn: Drawn, halos: Halos, box: float, a: float, rng: np.random.Generator) -> None:
    """Settle the particles of `drawn` that belong to halos into their profiles, in place."""
    # Half of what the tides took lies along the orbit still, half has spread through the host.
    on_orbit = (drawn.tail >= 0) & (rng.random(len(drawn.tail)) < 0.5)
    inside = drawn.inner >= 0
    for chosen, group in (
        (np.flatnonzero((drawn.owner >= 0) & ~inside & ~on_orbit), drawn.owner),
        (np.flatnonzero(inside), drawn.inner),
    ):
        index = group[chosen]
        offset = wrap(drawn.position[chosen] - halos.centre[index], box)
        distance = np.linalg.norm(offset, axis=1)
        # The mesh leaves light halos flat: turn their particles more freely.
        loose = 0.25 + 1.0 / (1.0 + (halos.mass[index] / 1e11) ** 0.5)
        direction = offset / np.maximum(distance, 1e-9)[:, None] + loose[:, None] * random_directions(len(index), rng)
        direction /= np.linalg.norm(direction, axis=1, keepdims=True)
        radius = nfw_radius(rank_share(index, distance), halos.concentration[index]) * halos.radius[index]
        drawn.position[chosen] = halos.centre[index] + direction * radius[:, None]
        speed = circular_speed(halos.mass[index], halos.radius[index], a) / np.sqrt(2.0)
        drawn.velocity[chosen] = halos.velocity[index] + speed[:, None] * rng.standard_normal((len(index), 3))
    chosen = np.flatnonzero(on_orbit)
    drawn.position[chosen], drawn.velocity[chosen] = along_orbit(halos, drawn.tail[chosen], a, rng, box)


def along_orbit(
    halos: Halos, index: Ints, a: float, rng: np.random.Generator, box: float, spread: float = 0.9
) -> tuple[Floats, Floats]:
    """Positions and velocities of particles strewn along the orbits of the halos `index` (p,) around their hosts.

    Each orbit is a rosette: an oval whose radius swings 0.7 times a turn, as between a point mass and a core.
    `spread` is the mean angle in radians by which a particle leads or trails.
    """
    host = halos.host[index]
    orbit_rng = np.random.default_rng(rng.integers(1 << 62))
    tilt, oval, phase = orbit_rng.random((3, len(halos)))
    offset = wrap(halos.centre[index] - halos.centre[host], box)
    r0 = np.maximum(np.linalg.norm(offset, axis=1), 1e-6)
    outward = offset / r0[:, None]
    helper = np.where(np.abs(outward[:, :1]) < 0.8, [[1.0, 0.0, 0.0]], [[0.0, 1.0, 0.0]])
    first = np.cross(outward, helper)
    first /= np.linalg.norm(first, axis=1, keepdims=True)
    second = np.cross(outward, first)
    turn = 2.0 * np.pi * tilt[index][:, None]
    forward = np.cos(turn) * first + np.sin(turn) * second

    angle = spread * rng.exponential(size=len(index)) * rng.choice([-1.0, 1.0], len(index))
    angle = np.clip(angle, -2.6, 2.6)
    swing, start = 0.35 + 0.35 * oval[index], 2.0 * np.pi * phase[index]
    radius = r0 * (1.0 + swing * np.cos(0.7 * angle + start)) / (1.0 + swing * np.cos(start))
    radius *= 1.0 - 0.06 * np.sign(angle)  # what leads has fallen inward, what trails has been flung out
    width = 0.05 * halos.radius[index] * (1.0 + np.abs(angle))
    around = outward * np.cos(angle)[:, None] + forward * np.sin(angle)[:, None]
    position = halos.centre[host] + around * radius[:, None] + width[:, None] * rng.standard_normal((len(index), 3))
    ahead = forward * np.cos(angle)[:, None] - outward * np.sin(angle)[:, None]
    speed = circular_speed(halos.mass[host], halos.radius[host], a)
    return position, halos.velocity[host] + ahead * speed[:, None]
