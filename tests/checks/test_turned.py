"""The camera turned: what is the same from every side stays the same, and what is not is what the formula says."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
import yaml
from scipy.spatial.transform import Rotation

import tilemap
from tilemap.pyramid.verify import verify

ROOT = Path(__file__).parents[2]
RUN32 = ROOT / "builds" / "run32.yaml"
WIDTH, PIXELS = 20.0, 1024
CENTRE = np.array([1.0, 2.0, 3.0])


def directions(seed: int) -> dict[str, list[float]]:
    """A random camera for a build file."""
    matrix = Rotation.random(random_state=seed).as_matrix()
    return {"toward": matrix[2].tolist(), "up": matrix[1].tolist()}


# A Plummer sphere.

COUNT, MASS, SCALE = 300_000, 1e12, 0.5
RINGS = np.geomspace(0.06, 9.5, 25)


def plummer_density(R: np.ndarray) -> np.ndarray:
    """Surface density M a^2 / (pi (a^2 + R^2)^2), Plummer (1911), MNRAS 71, 460."""
    return MASS * SCALE**2 / (np.pi * (SCALE**2 + R**2) ** 2)


@pytest.mark.parametrize("seed", [1, 2, 3])
def test_a_plummer_sphere_has_its_published_profile_from_every_side(tmp_path, seed):
    rng = np.random.default_rng(seed)
    towards = rng.normal(size=(COUNT, 3))
    towards /= np.linalg.norm(towards, axis=1)[:, None]
    radii = SCALE / np.sqrt(rng.random(COUNT) ** (-2 / 3) - 1)
    np.savez(tmp_path / "sphere.npz", position=CENTRE + towards * radii[:, None])
    stars = {"position": "position", "mass": MASS / COUNT, "smoothing": {"radius": "5 kpc", "kernel": "cubic"}}
    build = {
        "title": "Sphere",
        "snapshot": {"files": ["sphere.npz"], "species": {"stars": stars}},
        "view": {"centre": CENTRE.tolist(), "width": WIDTH, "depth": 1e5, "pixels": PIXELS, **directions(seed)},
        "sheets": {"stars": {"species": "stars", "sum": "mass", "unit": "Msun/kpc2"}},
    }
    piece = made(tmp_path, build).read("stars")
    pixel = WIDTH / PIXELS
    place = (np.arange(PIXELS) + 0.5) * pixel - WIDTH / 2
    fine = (np.arange(PIXELS * 4) + 0.5) * pixel / 4 - WIDTH / 2
    density = plummer_density(np.hypot(fine[:, None], fine)).reshape(PIXELS, 4, PIXELS, 4).mean(axis=(1, 3))
    ring = np.digitize(np.hypot(place[:, None], place).ravel(), RINGS)
    each = pixel**2 / (MASS / COUNT)
    found = np.bincount(ring, piece.values.astype(float).ravel() * 1e6, len(RINGS) + 1)[1:-1] * each
    expected = np.bincount(ring, density.ravel(), len(RINGS) + 1)[1:-1] * each
    deviation = (found - expected) / np.sqrt(expected)
    # 24 rings: the furthest of as many normal deviates lies below 4 with 99.8 %, their mean square below 2 with 99.7 %.
    assert np.abs(deviation).max() < 4
    assert (deviation**2).mean() < 2


def made(folder: Path, build: dict):
    path = folder / "build.yaml"
    path.write_text(yaml.safe_dump(build, sort_keys=False))
    return tilemap.open(tilemap.build(path, folder / "build.atlas"))


# A rotating disc: an even sheet in a plane, turning with one speed; on it, speeds scatter by SIGMA each way.

RADIUS, SPEED, SIGMA, BULK = 5.0, 220.0, 15.0, 600.0
LEAN = np.radians(60)
DISC_COUNT = 400_000


@pytest.fixture(scope="module")
def disc(tmp_path_factory):
    """The disc lies in a random plane and is seen leaning by 60 degrees, its long axis along u."""
    axes = Rotation.random(random_state=8).as_matrix()  # its long axis, its short one, its pole
    rng = np.random.default_rng(9)
    R, angle = RADIUS * np.sqrt(rng.random(DISC_COUNT)), rng.uniform(0, 2 * np.pi, DISC_COUNT)
    flat = np.column_stack([R * np.cos(angle), R * np.sin(angle), np.zeros(DISC_COUNT)])
    turning = SPEED * np.column_stack([-np.sin(angle), np.cos(angle), np.zeros(DISC_COUNT)])
    velocity = (turning + rng.normal(0, SIGMA, (DISC_COUNT, 3))) @ axes
    # Seen along the pole turned by 60 degrees about the long axis.
    toward = np.cos(LEAN) * axes[2] + np.sin(LEAN) * axes[1]
    up = np.cos(LEAN) * axes[1] - np.sin(LEAN) * axes[2]
    folder = tmp_path_factory.mktemp("disc")
    np.savez(folder / "disc.npz", position=CENTRE + flat @ axes, velocity=velocity + BULK * toward)
    gas = {
        "position": "position",
        "mass": 1e6,
        "smoothing": {"radius": "150 kpc", "kernel": "wendland-c2"},
        "fields": {"velocity": {"line_of_sight": {"dataset": "velocity", "unit": "km/s"}}},
    }
    build = {
        "title": "Disc",
        "snapshot": {"files": ["disc.npz"], "species": {"gas": gas}},
        "view": {
            "centre": CENTRE.tolist(),
            "width": 12,
            "depth": 12,
            "slabs": 4,
            "pixels": 512,
            "toward": toward.tolist(),
            "up": up.tolist(),
        },
        "sheets": {
            "gas": {"species": "gas", "sum": "mass", "unit": "Msun/kpc2"},
            "velocity": {"species": "gas", "mean": "velocity", "weight": "gas", "unit": "km/s", "coding": "linear"},
            "dispersion": {"species": "gas", "dispersion": "velocity", "unit": "km/s", "coding": "linear"},
        },
    }
    return made(folder, build)


def on_the_disc(piece) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Places in the plane of the disc (long axis, short axis), and where they lie well inside it and off the middle."""
    rows, columns = np.indices(piece.values.shape)
    u, v = piece.wcs.wcs_pix2world(columns, rows, 0)
    u, v = u - piece.centre[0], v - piece.centre[1]
    short = v / np.cos(LEAN)
    R = np.hypot(u, short)
    return u, short, (R > 1.5) & (R < 4.3)


def test_a_rotating_disc_moves_along_the_line_of_sight_as_its_velocity_field_says(disc):
    piece = disc.read("velocity")
    long, short, there = on_the_disc(piece)
    # Of SPEED along the direction of turning, the share sin(lean) cos(angle) points along the line of sight.
    expected = BULK + SPEED * np.sin(LEAN) * long / np.hypot(long, short)
    apart = (piece.values - expected)[there]
    # Some 300 particles under each kernel: the scatter of a mean of them is about 1.5 km/s.
    assert np.sqrt((apart**2).mean()) < 2.0
    assert abs(apart.mean()) < 0.1


def test_a_rotating_disc_has_the_dispersion_that_it_was_given(disc):
    piece = disc.read("dispersion")
    long, short, there = on_the_disc(piece)
    # Within a kernel the field itself changes: by its gradient times the spread of the kernel. That of a Wendland C2
    # kernel of radius H is H / sqrt 15 along each axis (the ratio of the integrals of q^4 (1-q)^4 (1+4q) / 3 and
    # q^2 (1-q)^4 (1+4q) from 0 to 1).
    kernel = 0.15**2 / 15
    R = np.hypot(long, short)
    steep = SPEED * np.sin(LEAN)
    along_u, along_v = steep * short**2 / R**3, -steep * long * short / R**3 / np.cos(LEAN)
    expected = np.sqrt(SIGMA**2 + kernel * (along_u**2 + along_v**2))
    ratio = (piece.values / expected)[there]
    assert np.median(ratio) == pytest.approx(1, abs=0.01)
    assert ratio.std() < 0.1


def test_the_disc_verifies(disc):
    assert verify(disc.path) == []


# The real snapshot.


def snapshot(**view: object) -> dict:
    """Its gas alone, as a build file."""
    build = yaml.safe_load(RUN32.read_text())
    build["snapshot"]["files"] = [str(ROOT / "tests" / "data" / "run32" / "run.*.hdf5")]
    build["sheets"] = {name: build["sheets"][name] for name in ("gas", "temperature")}
    build["catalogue"]["file"] = str(ROOT / "tests" / "data" / "run32" / "groups.csv")
    build["view"] = {"pixels": 512, "slabs": 2, **view}
    return build


@pytest.mark.parametrize("seed", [4, 5, 6])
def test_a_snapshot_turned_any_way_keeps_its_mass(tmp_path, seed):
    build = snapshot(width=20, depth=20, **directions(seed))
    build["snapshot"]["periodic"] = False
    atlas = made(tmp_path, build)
    build["view"] = {"pixels": 512, "width": 20, "depth": 20}
    (tmp_path / "straight").mkdir()
    straight = made(tmp_path / "straight", build)
    assert atlas.sheet("gas")["total"] == pytest.approx(straight.sheet("gas")["total"], rel=1e-6)
    assert atlas.epoch()["catalogue"]["count"] == 63


@pytest.mark.parametrize(
    ("along", "toward", "up"), [("x", [1, 0, 0], [0, 0, 1]), ("y", [0, 1, 0], [1, 0, 0]), ("z", [0, 0, 1], [0, 1, 0])]
)
def test_a_snapshot_turned_onto_an_axis_is_what_is_seen_along_it(tmp_path, along, toward, up):
    atlases = []
    for name, view in (("straight", {"along": along}), ("turned", {"toward": toward, "up": up})):
        (tmp_path / name).mkdir()
        atlases.append(made(tmp_path / name, snapshot(**view)))
    straight, turned = atlases
    for sheet in ("gas", "temperature"):
        for slab in (0, 1, None):
            one, other = (atlas.read(sheet, slabs=slab).values for atlas in atlases)
            # One code: 0.46 %.
            assert other == pytest.approx(one, rel=4.7e-3)
            assert (one == other).mean() > 0.99
        assert turned.sheet("gas")["totals"] == pytest.approx(straight.sheet("gas")["totals"], rel=1e-6)
    places = [sorted(objects(atlas)) for atlas in atlases]
    assert np.array(places[1]) == pytest.approx(np.array(places[0]), abs=1e-9)


def objects(atlas) -> list[tuple[float, ...]]:
    import duckdb

    path = str(atlas.path / atlas.epoch()["catalogue"]["file"])
    return duckdb.execute('SELECT "group", tilemap_u, tilemap_v, tilemap_depth FROM read_parquet(?)', [path]).fetchall()
