"""Particles of galaxies: gas discs, star discs with logarithmic spiral arms, bulges, stellar halos, streams, black holes.

A table of galaxies goes in, particles come out. All galaxies are drawn together, particle by particle.
"""

from __future__ import annotations

import numpy as np

from tilemap.demo.field import Floats
from tilemap.demo.galaxies import Galaxies
from tilemap.demo.halos import Halos, Ints
from tilemap.demo.matter import Particles, along_orbit, random_directions
from tilemap.demo.profiles import circular_speed, disc_radius, hernquist_radius, nfw_share

DISC_CUT = 0.985  # share of the exponential disc that is drawn: out to 6.2 scale lengths
BULGE_CUT = 0.9


def share_out(weight: Floats, total: int, power: float, fewest: int) -> Ints:
    """How many of about `total` particles each galaxy gets: in proportion to weight^power, none where weight is 0."""
    wanted = np.where(weight > 0, np.maximum(weight, 1e-30) ** power, 0.0)
    counts = np.rint(wanted * (total / max(wanted.sum(), 1e-300))).astype(np.int64)
    return np.where(weight > 0, np.maximum(counts, fewest), 0)


def frames(axis: Floats) -> tuple[Floats, Floats]:
    """Two unit vectors across every unit vector of `axis` (k, 3), the three a right-handed system."""
    helper = np.where(np.abs(axis[:, 2:]) < 0.9, [[0.0, 0.0, 1.0]], [[1.0, 0.0, 0.0]])
    first = np.cross(helper, axis)
    first /= np.linalg.norm(first, axis=1, keepdims=True)
    return first, np.cross(axis, first)


def rotation_speed(galaxies: Galaxies, halos: Halos, index: Ints, radius: Floats, a: float) -> Floats:
    """Circular speed in km/s of halo and disc at `radius` comoving Mpc of galaxies `index`; the disc counts as a ball."""
    x = np.clip(radius / halos.radius[index], 1e-4, 1.0)
    inside = halos.mass[index] * nfw_share(x, halos.concentration[index])
    scaled = radius / galaxies.disc[index]
    inside = inside + galaxies.stars[index] * (1.0 - (1.0 + scaled) * np.exp(-scaled))
    return circular_speed(inside, np.maximum(radius, 1e-6), a)


def draw_disc(
    galaxies: Galaxies,
    halos: Halos,
    counts: Ints,
    scale: Floats,
    contrast: float,
    thickness: float,
    clumped: float,
    a: float,
    rng: np.random.Generator,
) -> tuple[Ints, Floats, Floats, Floats]:
    """Exponential discs with logarithmic spiral arms.

    Parameters
    ----------
    counts : (k,) particles of each galaxy
    scale : (k,) scale lengths, comoving Mpc
    contrast : 0 to 1, how sharply the arms stand out
    thickness : scale height over scale length, of a sech^2 profile (Spitzer 1942, ApJ 95, 329)
    clumped : share of the particles that sit in clumps along the arms

    Returns
    -------
    index : (p,) galaxy of every particle
    position : (p, 3) comoving Mpc
    velocity : (p, 3) km/s
    scaled : (p,) radius in the plane over the scale length
    """
    index = np.repeat(np.arange(len(counts)), counts)
    first_of = np.concatenate([[0], np.cumsum(counts)[:-1]])
    number = np.arange(len(index)) - first_of[index]
    # Evenly stepped shares in random order of angle: the profile is met exactly, without Poisson gaps.
    scaled = disc_radius((number + rng.random(len(index))) / counts[index] * DISC_CUT)
    angle = 2.0 * np.pi * rng.random(len(index))

    twist = rng.uniform(0.0, 2.0 * np.pi, (3, len(counts)))
    # A straight bar inside 0.8 scale lengths, arms that open a little outward, and finer arms between them.
    wound = np.log(np.maximum(scaled, 0.8) / 0.8) / np.tan(galaxies.pitch[index] * (1.0 + 0.06 * scaled))
    strength = contrast * np.clip(scaled / 0.8, 0.25, 1.0)
    for turn, arms, winding, share in (
        (twist[0], galaxies.arms, 1.0, 1.0),
        (twist[1], galaxies.arms + 1, 1.25, 0.45),
        (twist[2], 3 * galaxies.arms + 2, 0.8, 0.35),
    ):
        m = arms[index]
        phase = m * (angle + winding * wound - turn[index])
        angle = angle - share * strength / m * np.sin(phase)

    leaders = np.maximum(3, counts // 45)
    member = (rng.random(len(index)) < clumped) & (number >= leaders[index]) & (counts[index] > 200)
    leader = first_of[index] + (rng.random(len(index)) ** 1.7 * leaders[index]).astype(np.int64)
    # The first particles of a galaxy are its innermost: spread the leaders over the disc instead.
    leader = first_of[index] + (leader - first_of[index]) * (counts[index] // leaders[index])
    planar = np.stack([scaled * np.cos(angle), scaled * np.sin(angle)], axis=-1)
    # Clumps of all sizes: each leader's own random number decides.
    blur = (0.04 + 0.16 * rng.random(len(index))[leader] ** 2 + 0.015 * scaled[leader])[:, None]
    planar[member] = (planar[leader] + blur * rng.standard_normal((len(index), 2)))[member]
    scaled = np.hypot(planar[:, 0], planar[:, 1])
    angle = np.arctan2(planar[:, 1], planar[:, 0])

    height = thickness * (1.0 + 0.12 * scaled**1.5) * np.arctanh(rng.uniform(-0.995, 0.995, len(index)))
    # Beyond three scale lengths discs bend: a warp of up to a quarter of the radius.
    bend = rng.uniform(0.0, 0.25, len(counts))[index]
    height += bend * np.clip(scaled - 3.0, 0.0, None) * np.sin(angle - twist[1][index])

    across, along = frames(galaxies.axis)
    size = scale[index][:, None]
    position = halos.centre[index] + size * (
        planar[:, :1] * across[index] + planar[:, 1:] * along[index] + height[:, None] * galaxies.axis[index]
    )
    speed = rotation_speed(galaxies, halos, index, np.maximum(scaled, 0.05) * scale[index], a)
    tangent = -np.sin(angle)[:, None] * across[index] + np.cos(angle)[:, None] * along[index]
    velocity = halos.velocity[index] + speed[:, None] * (tangent + 0.08 * rng.standard_normal((len(index), 3)))
    return index, position, velocity, scaled


def draw_ball(
    galaxies: Galaxies, halos: Halos, counts: Ints, scale: Floats, squash: float, a: float, rng: np.random.Generator
) -> tuple[Ints, Floats, Floats]:
    """Hernquist balls flattened to `squash` along the spin: galaxy, position and velocity of every particle."""
    index = np.repeat(np.arange(len(counts)), counts)
    first_of = np.concatenate([[0], np.cumsum(counts)[:-1]])
    number = np.arange(len(index)) - first_of[index]
    radius = hernquist_radius((number + rng.random(len(index))) / counts[index] * BULGE_CUT) * scale[index]
    offset = radius[:, None] * random_directions(len(index), rng)
    axis = galaxies.axis[index]
    offset -= (1.0 - squash) * np.einsum("ij,ij->i", offset, axis)[:, None] * axis
    speed = rotation_speed(galaxies, halos, index, np.maximum(radius, 1e-4), a) / np.sqrt(2.0)
    velocity = halos.velocity[index] + speed[:, None] * rng.standard_normal((len(index), 3))
    return index, halos.centre[index] + offset, velocity


def cold_gas(galaxies: Galaxies, halos: Halos, total: int, a: float, rng: np.random.Generator) -> Particles:
    """The gas discs, about `total` particles at 10^4 K, with their star formation."""
    counts = share_out(galaxies.cold_gas, total, 0.65, 12)
    index, position, velocity, scaled = draw_disc(
        galaxies, halos, counts, galaxies.gas_disc, contrast=0.75, thickness=0.035, clumped=0.15, a=a, rng=rng
    )
    # Kennicutt (1998, ApJ 498, 541): the rate per area goes as surface density^1.4, so the rate per mass as its 0.4th power.
    weight = np.exp(-0.4 * scaled)
    rate = weight * (galaxies.star_formation / np.maximum(np.bincount(index, weight, len(counts)), 1e-30))[index]
    return Particles(
        position=position,
        velocity=velocity.astype(np.float32),
        mass=(galaxies.cold_gas / np.maximum(counts, 1))[index],
        extra={
            "temperature": (1e4 * np.exp(0.15 * rng.standard_normal(len(index)))).astype(np.float32),
            "star_formation": rate.astype(np.float32),
        },
    )


def stars(galaxies: Galaxies, halos: Halos, total: int, a: float, box: float, rng: np.random.Generator) -> Particles:
    """Discs, bulges, stellar halos and the streams that satellites have left, about `total` particles in all."""
    satellite = halos.host >= 0
    # Light outside the disc and bulge: a few per cent, more in the heaviest galaxies, as accreted stars are.
    outer = galaxies.stars * np.clip(0.03 + 0.05 * np.log10(np.maximum(galaxies.stars, 1.0) / 1e10), 0.02, 0.15)
    outer = np.where(satellite | (galaxies.stars < 1e9), 0.0, outer)
    stream = np.where(satellite & (galaxies.stars > 3e7), 0.1 * galaxies.stars, 0.0)
    bulge = np.clip(galaxies.bulge - np.where(galaxies.bulge > 0.5 * galaxies.stars, outer + stream, 0.0), 0.0, None)
    disc = np.clip(galaxies.stars - bulge - outer - stream, 0.0, None)
    disc[disc < 1e-9 * galaxies.stars] = 0.0

    parts: list[tuple[Ints, Floats, Floats, Floats]] = []
    for mass, part_total, kind, fewest in (
        (disc, 0.55, "disc", 40),
        (bulge, 0.27, "bulge", 40),
        (outer, 0.1, "halo", 40),
        (stream, 0.08, "stream", 40),
    ):
        counts = share_out(mass, int(part_total * total), 0.6, fewest)
        if kind == "disc":
            index, position, velocity, _ = draw_disc(
                galaxies, halos, counts, galaxies.disc, contrast=0.68, thickness=0.06, clumped=0.06, a=a, rng=rng
            )
        elif kind == "bulge":
            index, position, velocity = draw_ball(galaxies, halos, counts, galaxies.bulge_scale, 0.75, a, rng)
        elif kind == "halo":
            index, position, velocity = draw_ball(galaxies, halos, counts, 0.035 * halos.radius, 0.8, a, rng)
        else:
            index = np.repeat(np.arange(len(counts)), counts)
            position, velocity = along_orbit(halos, index, a, rng, box, spread=0.55)
        parts.append((index, position, velocity, (mass / np.maximum(counts, 1))[index]))
    return Particles(
        position=np.concatenate([part[1] for part in parts]),
        velocity=np.concatenate([part[2] for part in parts]).astype(np.float32),
        mass=np.concatenate([part[3] for part in parts]),
        extra={},
    )


def black_holes(galaxies: Galaxies, halos: Halos) -> Particles:
    """One black hole at the heart of every galaxy that has one."""
    chosen = np.flatnonzero(galaxies.black_hole > 0)
    return Particles(halos.centre[chosen], halos.velocity[chosen].astype(np.float32), galaxies.black_hole[chosen], {})
