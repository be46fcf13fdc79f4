"""Fitting the stamps: projected kernels in, the polynomials of their products out. Run offline, not when drawing.

`python -m tilemap.project.fit` writes `stamp_numbers.py` again (a minute for all kernels). What is looked for is the least L1
difference between a kernel and its sum of products, none of which may be negative anywhere in sum: a penalty on what is
negative grows from round to round, until 1e-7 of the mass is left, which drawing clips.

Eigenfunctions of the kernel, taken as a matrix, are the start: they are the best in the least-squares sense (Eckart & Young
1936, Psychometrika 1, 211), but dip below zero in the corners outside the disc.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from functools import cache
from pathlib import Path

import numpy as np
from numpy.polynomial import legendre, polynomial
from numpy.typing import NDArray
from scipy.interpolate import BSpline
from scipy.optimize import minimize

from tilemap.project.kernels import KERNELS, Kernel
from tilemap.project.stamp_numbers import Numbers
from tilemap.project.stamps import COARSE_PX, RANK, SMALL_PX, SMALL_TERMS, TERMS

Array = NDArray[np.float64]

# Half width of stamps in units of the support radius, the square pixels by which coarse ones are narrower, and the half
# width of small ones. Found by trying: a little less than the support wastes no pixels and no polynomial on the rim, where
# less than 6e-5 of the mass lies (1e-4 for small ones).
CHOSEN = {
    "cubic": (0.90, 5.75, 0.87),
    "quartic": (0.90, 7.25, 0.85),
    "quintic": (0.88, 9.0, 0.81),
    "wendland-c2": (0.90, 6.5, 0.85),
    "wendland-c4": (0.85, 9.0, 0.79),
    "wendland-c6": (0.82, 10.5, 0.75),
}
SMALL_SHARES = (1.0, 0.7, 0.5)
"""Small stamps are fitted at half widths of so many times SMALL_PX."""
ORDERS = 3
"""Polynomials of coarse stamps are quadratic in 1 / width^2."""
RADII = tuple(COARSE_PX * factor for factor in (1.0, 1.1, 1.27, 1.53, 2.0, 3.5))
# Rounds of minimising: weight of what is negative, and the rounding of |difference| in units of the kernel's peak.
ROUNDS = ((5.0, 1e-2), (20.0, 1e-3), (60.0, 1e-4), (200.0, 2e-5), (600.0, 5e-6), (4000.0, 2e-6))
_QUARTIC = BSpline.basis_element(np.arange(6) - 2.5, extrapolate=False)


def _basis(x: Array, terms: int) -> Array:
    """The parts that a_k is made of, at x from -1 to 1 (n,): even, zero at 1, along a new axis of terms - 1."""
    return (1.0 - x**2)[:, None] * legendre.legvander(2.0 * x**2 - 1.0, terms - 2)


@cache
def _integrals(terms: int) -> Array:
    """Coefficients in v = 2 x^2 - 1 of the parts' integrals from zero, divided by x: (terms - 1, terms)."""
    rows = np.zeros((terms - 1, terms))
    for n in range(terms - 1):
        in_v = polynomial.polymul([0.5, -0.5], legendre.leg2poly(np.eye(terms - 1)[n]))
        in_square = np.zeros(terms)
        for k, factor in enumerate(in_v):
            in_square[: k + 1] += factor * polynomial.polypow([-1.0, 2.0], k)
        for k, factor in enumerate(in_square / (2 * np.arange(terms) + 1)):
            rows[n, : k + 1] += factor * polynomial.polypow([0.5, 0.5], k)
    return rows


def _shares(edges: Array, terms: int) -> Array:
    """What lies between edges (n + 1,), in units of the half width, for each part: (n, terms - 1)."""
    x = np.clip(edges, -1.0, 1.0)
    return np.diff(x[:, None] * polynomial.polyvander(2.0 * x**2 - 1.0, terms - 1) @ _integrals(terms).T, axis=0)


def _sums(parts: Array) -> Array:
    """All that products made of these parts (terms - 1, RANK) hold, for each product."""
    return 2.0 * _integrals(len(parts) + 1).sum(axis=1) @ parts


@dataclass
class Target:
    """A kernel that stamps are to match at one width.

    `wanted` holds pairs (i, j, values, weights): there, products of maps[i] (down) and maps[j] (across) are wanted to be
    `values`. `cover` are places where no weight may be negative, `cover_weights` their areas.
    """

    maps: list[Array]
    wanted: list[tuple[int, int, Array, Array]]
    cover: Array
    cover_weights: Array
    peak: float

    def loss(self, parts: Array, signs: Array, steep: float, soft: float) -> tuple[float, Array]:
        """Rounded L1 difference, with what is negative `steep` times; and its derivative by parts (terms - 1, RANK)."""
        soft *= self.peak
        total, slope = 0.0, np.zeros_like(parts)
        values = [at @ parts for at in self.maps]
        for i, j, wanted, weights in self.wanted:
            off = (values[i] * signs) @ values[j].T - wanted
            size = np.sqrt(off**2 + soft**2)
            total += float((weights * (size - soft)).sum())
            push = weights * off / size
            slope += self.maps[i].T @ (push @ (values[j] * signs)) + self.maps[j].T @ (push.T @ (values[i] * signs))
        cover = self.cover @ parts
        below = np.minimum((cover * signs) @ cover.T, 0.0)
        size = np.sqrt(below**2 + soft**2)
        total += steep * float((self.cover_weights * (size - soft)).sum())
        slope += 2.0 * steep * self.cover.T @ ((self.cover_weights * below / size) @ (cover * signs))
        ends, sums = 2.0 * _integrals(len(parts) + 1).sum(axis=1), _sums(parts)
        excess = float((signs * sums**2).sum()) - 1.0
        return total + 1e3 * excess**2, slope + 4e3 * excess * np.outer(ends, signs * sums)


def plain_target(kernel: Kernel, reach: float, terms: int = TERMS, points: int = 40) -> Target:
    """The kernel itself, without pixels, in units of the half width."""
    gauss_x, gauss_w = legendre.leggauss(points)
    x = 0.5 * (gauss_x + 1.0)
    weights = np.multiply.outer(gauss_w, gauss_w)
    values = kernel.projected(reach * np.hypot(x[:, None], x)) * reach**2
    at = _basis(x, terms)
    return Target([at], [(0, 0, values, weights)], at, weights, float(values.max()))


def spline_target(
    kernel: Kernel, reach: float, squeeze: float, radius: float, offsets: int = 3, cuts: int = 2
) -> Target:
    """The kernel of a radius in pixels as a spline, for places of the particle across half a pixel each way."""
    width = half_width(reach, squeeze, radius)
    margin = int(np.ceil(radius + 4))
    cells = np.arange(-margin, margin + 1)
    fine = (np.arange(-margin * cuts, margin * cuts) + 0.5) / cuts
    carry = np.nan_to_num(_QUARTIC(fine[:, None] - cells))
    edges = np.append(cells, margin + 1) - 0.5
    places = np.linspace(0.0, 0.5, offsets)
    maps = [carry @ _shares((edges - place) / width, TERMS) for place in places]
    pairs = [(i, j) for i in range(offsets) for j in range(i, offsets)]
    wanted = []
    for i, j in pairs:
        values = kernel.projected(np.hypot(fine[:, None] - places[i], fine - places[j]) / radius) / radius**2
        wanted.append((i, j, values, np.full(values.shape, 1.0 / (len(pairs) * cuts**2))))
    per_pixel = 8
    x = (np.arange(math.ceil((width + 0.5) * per_pixel)) + 0.25) / per_pixel
    cover = np.concatenate([_shares(np.array([at - 0.5, at + 0.5]) / width, TERMS) for at in x])
    return Target(
        maps, wanted, cover, np.full((len(x), len(x)), 4.0 / per_pixel**2), float(kernel.projected(0.0)) / radius**2
    )


def small_target(kernel: Kernel, reach: float, width: float, offsets: int = 4, cuts: int = 24) -> Target:
    """The kernel averaged over pixels, of the radius whose stamp has this half width, for places as in `spline_target`."""
    radius = width / reach
    margin = math.ceil(radius + 1)
    cells = np.arange(-margin, margin + 1)
    fine = (np.arange(len(cells) * cuts) + 0.5) / cuts - margin - 0.5
    places = np.linspace(0.0, 0.5, offsets)
    maps = [_shares((np.append(cells, margin + 1) - 0.5 - place) / width, SMALL_TERMS) for place in places]
    pairs = [(i, j) for i in range(offsets) for j in range(i, offsets)]
    wanted = []
    for i, j in pairs:
        values = kernel.projected(np.hypot(fine[:, None] - places[i], fine - places[j]) / radius)
        values = values.reshape(len(cells), cuts, len(cells), cuts).sum(axis=(1, 3))
        wanted.append((i, j, values / values.sum(), np.full(values.shape, 1.0 / len(pairs))))
    x = (np.arange(64) + 0.5) / 64
    peak = float(kernel.projected(0.0)) / radius**2
    return Target(maps, wanted, _basis(x, SMALL_TERMS), np.full((64, 64), 1.0 / 64**2), peak)


def half_width(reach: float, squeeze: float, radius: float) -> float:
    """Of a coarse stamp, in pixels."""
    return reach * float(np.sqrt(radius**2 - squeeze))


def _minimise(loss, start: Array, most: int) -> Array:
    """`loss(x, steep, soft)` gives a value and a slope; the rounds one after the other."""
    x = start
    for steep, soft in ROUNDS:
        x = minimize(
            lambda flat: (lambda value, slope: (value, slope.ravel()))(*loss(flat.reshape(start.shape), steep, soft)),  # noqa: B023
            x.ravel(),
            jac=True,
            method="L-BFGS-B",
            options={"maxiter": most, "maxcor": 40, "ftol": 1e-12, "gtol": 1e-10},
        ).x.reshape(start.shape)
    return x


def fit_plain(target: Target) -> tuple[Array, Array]:
    """Parts (terms - 1, RANK) and signs of the products that are the kernel."""
    orthonormal, upper, root = _orthonormal(target)
    matrix = orthonormal.T @ (target.wanted[0][2] * np.multiply.outer(root, root)) @ orthonormal
    values, vectors = np.linalg.eigh(matrix)
    chosen = np.argsort(-np.abs(values))[:RANK]
    signs = np.sign(values[chosen])
    return _refine([target], upper, vectors[:, chosen] * np.sqrt(np.abs(values[chosen])), signs), signs


def _orthonormal(target: Target) -> tuple[Array, Array, Array]:
    """Of a plain target: its parts made orthonormal, the matrix that takes parts there, and the roots of weights."""
    root = np.sqrt(np.diag(target.wanted[0][3]))
    return *np.linalg.qr(target.maps[0] * root[:, None]), root


def _refine(targets: list[Target], upper: Array, start: Array, signs: Array) -> Array:
    """Parts closest to all targets, holding one in sum. In orthonormal parts the minimum is found in a hundred steps."""
    change = np.linalg.inv(upper)

    def loss(parts: Array, steep: float, soft: float) -> tuple[float, Array]:
        found = [target.loss(change @ parts, signs, steep, soft) for target in targets]
        return sum(value for value, _ in found), change.T @ sum(slope for _, slope in found)

    parts = change @ _minimise(loss, start, 1500)
    return parts / np.sqrt((signs * _sums(parts) ** 2).sum())


def fit_kernel(kernel: Kernel, reach: float, squeeze: float, small_reach: float) -> Numbers:
    """The numbers of a kernel: its products as they are, what makes splines of them at the widths of coarse images, and small ones."""
    plain, signs = fit_plain(plain_target(kernel, reach))
    targets = [spline_target(kernel, reach, squeeze, radius) for radius in RADII]
    unit = half_width(reach, squeeze, COARSE_PX) ** 2
    powers = [(unit / half_width(reach, squeeze, radius) ** 2) ** np.arange(1, ORDERS) for radius in RADII]

    def loss(changes: Array, steep: float, soft: float) -> tuple[float, Array]:
        total, slope = 0.0, np.zeros_like(changes)
        for target, power in zip(targets, powers, strict=True):
            value, by_parts = target.loss(plain + np.tensordot(power, changes, axes=1), signs, steep, soft)
            total += value
            slope += np.multiply.outer(power, by_parts)
        return total, slope

    changes = _minimise(loss, np.zeros((ORDERS - 1, *plain.shape)), 400)
    orders = [plain, *(change * unit ** (k + 1) for k, change in enumerate(changes))]
    small, small_signs = fit_small(kernel, small_reach)
    return Numbers(
        reach,
        squeeze,
        _whole(signs),
        _rounded(np.concatenate([(parts.T @ _integrals(TERMS)).ravel() for parts in orders])),
        small_reach,
        _whole(small_signs),
        _rounded((small.T @ _integrals(SMALL_TERMS)).ravel()),
    )


def fit_small(kernel: Kernel, reach: float) -> tuple[Array, Array]:
    """Parts and signs of small stamps."""
    start = plain_target(kernel, reach, SMALL_TERMS)
    parts, signs = fit_plain(start)
    upper = _orthonormal(start)[1]
    targets = [small_target(kernel, reach, share * SMALL_PX) for share in SMALL_SHARES]
    return _refine(targets, upper, upper @ parts, signs), signs


def _whole(signs: Array) -> tuple[int, ...]:
    return tuple(int(sign) for sign in signs)


def _rounded(numbers: Array) -> tuple[float, ...]:
    return tuple(float(f"{x:.8g}") for x in numbers)


HEAD = '''"""The polynomials of stamps, written by `python -m tilemap.project.fit`; what they mean is said in `stamps`."""

from __future__ import annotations

from typing import NamedTuple


class Numbers(NamedTuple):
    """Of one kernel: half width, narrowing, signs, and coefficients in one row (order of 1 / width^2, product, power of v);
    half width, signs and coefficients (product, power of v) of small stamps."""

    reach: float
    squeeze: float
    signs: tuple[int, ...]
    orders: tuple[float, ...]
    small_reach: float
    small_signs: tuple[int, ...]
    small: tuple[float, ...]


# fmt: off
NUMBERS: dict[str, Numbers] = {
'''


def _lines(numbers: tuple[float, ...], terms: int) -> str:
    rows = (numbers[start : start + terms] for start in range(0, len(numbers), terms))
    return "".join(f"        {', '.join(f'{x:.8g}' for x in row)},\n" for row in rows)


def write(path: Path) -> None:
    """Fit every kernel and write the module of their numbers."""
    text = HEAD
    for name, chosen in CHOSEN.items():
        numbers = fit_kernel(KERNELS[name], *chosen)
        text += f'    "{name}": Numbers({numbers.reach}, {numbers.squeeze}, {numbers.signs}, (\n'
        text += _lines(numbers.orders, TERMS) + f"    ), {numbers.small_reach}, {numbers.small_signs}, (\n"
        text += _lines(numbers.small, SMALL_TERMS) + "    )),\n"
    path.write_text(text + "}\n", encoding="utf-8")


if __name__ == "__main__":
    write(Path(__file__).with_name("stamp_numbers.py"))
