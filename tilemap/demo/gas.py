"""Gas outside the discs: drawn particles in, settled and given temperatures and smoothing lengths.

Thin gas follows the temperature-density relation of photo-ionised gas, streams that cross are shocked, halos hold gas at
their virial temperature inside a wider shocked envelope, and cool streams run into them along the filaments.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.ndimage import gaussian_filter
from scipy.spatial import cKDTree

from tilemap.demo.field import Field, Floats
from tilemap.demo.galaxies import Galaxies
from tilemap.demo.halos import Halos, Ints, wrap
from tilemap.demo.matter import Drawn, Particles, along_orbit, random_directions, rank_share
from tilemap.demo.mesh import deposit, gather
from tilemap.demo.profiles import (
    IONISED_WEIGHT,
    PROTON_OVER_BOLTZMANN,
    circular_speed,
    hot_radius,
    virial_temperature,
)
from tilemap.project.smoothing import neighbour_radii
from tilemap.runners.local import LocalRunner

MEAN_DENSITY_TEMPERATURE = 1.2e4  # K, and the slope: Hui & Gnedin (1997, MNRAS 292, 27), long after reionisation
SLOPE = 0.55
COLD_STREAM_SHARE = 0.12
HEAVY = 1.5e11  # Msun of halos whose gas is hot enough for shocks and cool streams to show
ENVELOPE = 2.4  # reach of the shocked gas over the halo's radius


def crossing_speed(position: Field, velocity: Field, cells: int) -> Field:
    """One-dimensional spread of the velocities (km/s) of lattice particles in every cell of a mesh (cells^3)."""
    count = np.maximum(deposit(position, cells), 0.3)
    square = np.zeros_like(count)
    for axis in range(3):
        speed = np.ascontiguousarray(velocity[:, axis])
        square += deposit(position, cells, speed**2) / count - (deposit(position, cells, speed) / count) ** 2
    return gaussian_filter(np.sqrt(np.maximum(square, 0.0) / 3.0), 1.0, mode="wrap")


def ripple(direction: Floats, phase: Floats) -> Floats:
    """A smooth function on the sphere, about -1 to 1, for `direction` (p, 3) and one `phase` a halo (p,)."""
    total = np.zeros(len(direction))
    for k, (x, y, z) in enumerate(((2.1, 1.3, -0.7), (-1.1, 2.6, 1.9), (3.2, -2.0, 2.4), (-2.7, -3.1, 3.8))):
        total += np.sin(direction @ np.array([x, y, z]) + (k + 1.0) * phase)
    return total / 2.4


@dataclass
class Surroundings:
    """The gas around every heavy halo, before anything is settled.

    Attributes
    ----------
    halo : (j,) int, indices of heavy outer halos
    near : j lists of particles outside all halos, within reach of the halo
    inflow : (j, 3, 3) unit vectors, the three directions from which most gas comes in
    """

    halo: Ints
    near: list[NDArray[np.int64]]
    inflow: Floats


def look_around(drawn: Drawn, halos: Halos, box: float) -> Surroundings:
    """Find the gas around heavy halos and the filaments that reach them."""
    outside = np.flatnonzero(drawn.owner < 0)
    tree = cKDTree(drawn.position[outside] % box % box, boxsize=box)
    heavy = np.flatnonzero((halos.mass > HEAVY) & (halos.host < 0)).astype(np.int32)
    hits = tree.query_ball_point(
        halos.centre[heavy] % box, ENVELOPE * halos.radius[heavy], workers=-1, return_sorted=True
    )
    near = [outside[np.asarray(found, dtype=np.int64)] for found in hits]
    # The same two hundred directions for all: a spiral of evenly spaced points on the sphere.
    k = np.arange(200) + 0.5
    turn, z = np.pi * (1.0 + np.sqrt(5.0)) * k, 1.0 - 2.0 * k / len(k)
    compass = np.stack([np.cos(turn) * np.sqrt(1 - z**2), np.sin(turn) * np.sqrt(1 - z**2), z], axis=-1)
    inflow = np.zeros((len(heavy), 3, 3))
    for row, (halo, every) in enumerate(zip(heavy, near, strict=True)):
        points = every[:: 1 + len(every) // 600]  # more do not change the answer
        offset = wrap(drawn.position[points] - halos.centre[halo], box)
        direction = offset / np.maximum(np.linalg.norm(offset, axis=1), 1e-9)[:, None]
        gathered = np.exp(12.0 * (compass @ direction.T - 1.0)) @ drawn.mass[points]
        for k_th in range(3):
            best = compass[np.argmax(gathered)]
            inflow[row, k_th] = best
            gathered = gathered * (compass @ best < 0.6)
    return Surroundings(heavy, near, inflow)


def settle_gas(
    drawn: Drawn,
    halos: Halos,
    galaxies: Galaxies,
    contrast: Field,
    crossing: Field,
    box: float,
    a: float,
    rng: np.random.Generator,
) -> Particles:
    """Settle the gas of halos, give every particle its temperature, and take out what the galaxies hold.

    Parameters
    ----------
    contrast : float32, (m, m, m)
        Matter contrast of the evolved lattice.
    crossing : float32, (j, j, j)
        See :func:`crossing_speed`.
    """
    around = look_around(drawn, halos, box)
    cells = (drawn.position % box / box).astype(np.float32)
    local = np.maximum(1.0 + gather(contrast, cells * np.float32(contrast.shape[0])), 0.02)
    spread = gather(crossing, cells * np.float32(crossing.shape[0]))
    # Velocities also differ where nothing crosses; only streams in dense places are shocked.
    shocked = IONISED_WEIGHT * PROTON_OVER_BOLTZMANN * spread**2 * (local / (local + 6.0)) ** 2
    temperature = MEAN_DENSITY_TEMPERATURE * np.minimum(local, 8.0).astype(np.float64) ** SLOPE + shocked

    speed = circular_speed(halos.mass, halos.radius, a)
    virial = virial_temperature(speed)
    phase = rng.uniform(0.0, 2.0 * np.pi, len(halos))
    lot = rng.random(len(drawn.mass))
    bound = (drawn.inner >= 0) & (lot < 0.45)
    stripped = (drawn.tail >= 0) & (lot < 0.5)

    chosen = np.flatnonzero((drawn.owner >= 0) & ~bound & ~stripped)
    index = drawn.owner[chosen]
    offset = wrap(drawn.position[chosen] - halos.centre[index], box)
    distance = np.maximum(np.linalg.norm(offset, axis=1), 1e-9)
    loose = 0.25 + 1.0 / (1.0 + (halos.mass[index] / 1e11) ** 0.5)
    direction = offset / distance[:, None] + loose[:, None] * random_directions(len(index), rng)
    direction /= np.linalg.norm(direction, axis=1, keepdims=True)
    # No halo ends at a sphere.
    ragged = 1.0 + 0.22 * ripple(direction, phase[index])
    scaled = hot_radius(rank_share(index, distance)) * ragged
    drawn.position[chosen] = halos.centre[index] + direction * (scaled * halos.radius[index])[:, None]
    hot = (
        virial[index] * 1.5 / (1.0 + scaled) * np.exp(0.25 * ripple(direction * (1.0 + scaled[:, None]), phase[index]))
    )
    temperature[chosen] = np.maximum(hot, 1.2e4)
    jostle = 0.4 * speed[index][:, None] * rng.standard_normal((len(index), 3))
    drawn.velocity[chosen] = halos.velocity[index] + jostle

    chosen = np.flatnonzero(bound)
    index = drawn.inner[chosen]
    radius = 0.5 * hot_radius(rng.random(len(index))) * halos.radius[index]
    drawn.position[chosen] = halos.centre[index] + radius[:, None] * random_directions(len(index), rng)
    drawn.velocity[chosen] = halos.velocity[index]
    temperature[chosen] = np.maximum(virial[index], 1.2e4)

    chosen = np.flatnonzero(stripped)
    index = drawn.tail[chosen]
    drawn.position[chosen], drawn.velocity[chosen] = along_orbit(halos, index, a, rng, box, spread=0.5)
    temperature[chosen] = np.maximum(virial[index], 3e4)

    pour_streams(drawn, temperature, halos, galaxies, around, lot, speed, rng)
    heat_envelopes(drawn, temperature, halos, galaxies, around, virial, phase, box)

    outermost = np.where(halos.host >= 0, halos.host, np.arange(len(halos)))
    taken = np.bincount(outermost, galaxies.baryons, len(halos))
    held = np.bincount(drawn.owner[drawn.owner >= 0], drawn.mass[drawn.owner >= 0], len(halos))
    inside = np.flatnonzero(drawn.owner >= 0)
    drawn.mass[inside] *= (1.0 - taken / np.maximum(held, 1.0))[drawn.owner[inside]]
    extra = {"temperature": temperature.astype(np.float32), "star_formation": np.zeros(len(temperature), np.float32)}
    return Particles(drawn.position, drawn.velocity, drawn.mass, extra)


def pour_streams(
    drawn: Drawn,
    temperature: Floats,
    halos: Halos,
    galaxies: Galaxies,
    around: Surroundings,
    lot: Floats,
    speed: Floats,
    rng: np.random.Generator,
) -> None:
    """Lay a share of each heavy halo's gas into cool streams that wind into the disc, in place.

    Cool streams along filaments: Dekel et al. (2009, Nature 457, 451). They turn about the galaxy's spin as they fall.
    """
    row_of = np.full(len(halos), -1)
    row_of[around.halo] = np.arange(len(around.halo))
    free = (drawn.owner >= 0) & (drawn.inner < 0) & (drawn.tail < 0) & (lot > 1.0 - COLD_STREAM_SHARE)
    chosen = np.flatnonzero(free & (row_of[drawn.owner] >= 0))
    index = drawn.owner[chosen]
    which = rng.choice(3, size=len(index), p=[0.5, 0.3, 0.2])
    source = around.inflow[row_of[index], which]
    scaled = 0.06 + 1.25 * rng.random(len(index)) ** 0.9
    axis = galaxies.axis[index]
    turn = 2.2 * np.clip(1.0 - scaled / 1.2, 0.0, None) ** 2
    # Rodrigues' rotation about the spin, and a sinking towards the plane of the disc.
    along = np.einsum("ij,ij->i", source, axis)[:, None] * axis
    cos, sin = np.cos(turn)[:, None], np.sin(turn)[:, None]
    sink = np.clip((scaled - 0.06) / 0.7, 0.0, 1.0)[:, None]
    direction = (source - along) * cos + np.cross(axis, source) * sin + along * sink
    direction /= np.maximum(np.linalg.norm(direction, axis=1, keepdims=True), 1e-9)
    width = (0.012 + 0.05 * scaled) * halos.radius[index]
    drawn.position[chosen] = (
        halos.centre[index]
        + direction * (scaled * halos.radius[index])[:, None]
        + width[:, None] * rng.standard_normal((len(index), 3))
    )
    drawn.velocity[chosen] = halos.velocity[index] - speed[index][:, None] * direction
    temperature[chosen] = 1.5e4 + 2e4 * scaled


def heat_envelopes(
    drawn: Drawn,
    temperature: Floats,
    halos: Halos,
    galaxies: Galaxies,
    around: Surroundings,
    virial: Floats,
    phase: Floats,
    box: float,
) -> None:
    """Heat the gas around heavy halos, in place: the accretion shock, ragged, and two lobes along the spin of the galaxy."""
    for halo, points in zip(around.halo, around.near, strict=True):
        offset = wrap(drawn.position[points] - halos.centre[halo], box)
        scaled = np.maximum(np.linalg.norm(offset, axis=1), 1e-9) / halos.radius[halo]
        direction = offset / (scaled * halos.radius[halo])[:, None]
        tilt = np.abs(direction @ galaxies.axis[halo])
        lobe = np.exp(-((1.0 - tilt) / 0.12)) if galaxies.black_hole[halo] > 0 else 0.0
        edge = 1.45 + 0.4 * ripple(direction, np.full(len(points), phase[halo])) + 0.7 * lobe
        inside = 1.0 / (1.0 + np.exp(np.clip((scaled - edge) / 0.06, -50.0, 50.0)))
        heated = virial[halo] * (0.75 / np.maximum(scaled, 0.5)) * (1.0 + 1.5 * lobe) * inside
        temperature[points] = np.maximum(temperature[points], heated)


def smoothing_radius(position: Floats, box: float, neighbours: int = 15, wanted: int = 56) -> Floats:
    """Support radius (p,) of the gas, comoving Mpc, that holds about `wanted` neighbours in three dimensions.

    From the distance to a nearer neighbour, scaled up: a third of the time, for a scatter of 8 per cent in the radius.
    """
    with LocalRunner() as runner:
        distance = neighbour_radii(position, neighbours, np.full(3, box), runner)
    return distance * np.cbrt(wanted / (neighbours + 1))
