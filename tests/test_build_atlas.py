"""From a build file to a published atlas: what is in it, and that whatever goes wrong leaves nothing behind."""

from __future__ import annotations

import hashlib
import json
from pathlib import Path

import numpy as np
import pytest
import zarr
from build_maker import BOX, changed, description, particles, write_build

import tilemap
from tilemap import budget
from tilemap.build_atlas import build_atlas
from tilemap.cli import main
from tilemap.errors import InputError
from tilemap.pyramid.verify import verify


@pytest.fixture(scope="module")
def folder(tmp_path_factory) -> Path:
    return tmp_path_factory.mktemp("small")


@pytest.fixture(scope="module")
def atlas(folder):
    return tilemap.open(build_atlas(write_build(folder), folder / "small.atlas", workers=2))


def built(folder: Path, build: dict | None = None, arrays=None, **how):
    return tilemap.open(build_atlas(write_build(folder, build, arrays), folder / "small.atlas", **how))


def codes(atlas) -> dict[str, bytes]:
    """The bytes of every shard."""
    return {str(path.relative_to(atlas.path)): path.read_bytes() for path in atlas.path.rglob("c/*/*/*")}


def left(folder: Path) -> set[str]:
    """What a build left beside its two input files."""
    return {path.name for path in folder.iterdir()} - {"small.npz", "small.yaml"}


# What is in it.


def test_what_is_built_verifies(atlas):
    assert verify(atlas.path) == []


def test_the_totals_are_the_masses_in_the_slabs(atlas):
    given = particles()
    expected = np.histogram(given["position"][:, 2], [0, BOX / 2, BOX], weights=given["mass"])[0]
    assert atlas.sheet("gas")["totals"] == pytest.approx(expected, rel=1e-6)
    assert atlas.sheet("gas")["total"] == pytest.approx(given["mass"].sum(), rel=1e-6)


def test_zarr_alone_opens_every_level(atlas):
    root = zarr.open(atlas.path, mode="r")
    for sheet in atlas.sheets:
        for place, slabs in ((f"z1.00/{sheet}/0", 2), (f"z1.00/{sheet}/whole/0", 1)):
            array = root[place]
            assert (array.shape, array.dtype) == ((slabs, 512, 512), np.uint16)
            assert array[:].any()


def test_zarr_and_the_attributes_alone_give_the_numbers_that_the_atlas_gives(atlas):
    group = zarr.open(atlas.path / "z1.00" / "gas", mode="r")
    stored = group["whole/0"][0].astype(np.float64)
    values = np.where(stored > 0, 10 ** (group.attrs["low"] + group.attrs["step"] * (stored - 1)), 0)
    assert atlas.read("gas").values == pytest.approx(values, rel=1e-6)


def test_a_mean_stays_within_the_particles(atlas):
    given, values = particles(), atlas.read("temperature").values
    assert np.nanmin(values) >= given["temperature"].min() / 1.0024
    assert np.nanmax(values) <= given["temperature"].max() * 1.0024


def test_a_linear_mean_has_both_signs_and_stays_within_the_particles(atlas):
    given, values = particles()["velocity"], atlas.read("velocity").values
    allowed = 1e-3 * (given.max() - given.min())
    assert np.nanmin(values) < 0 < np.nanmax(values)
    assert given.min() - allowed <= np.nanmin(values) <= np.nanmax(values) <= given.max() + allowed


def test_provenance_says_what_went_in(atlas, folder):
    provenance = atlas.info["provenance"]
    snapshot = (folder / "small.npz").read_bytes()
    assert provenance["build_file"] == (folder / "small.yaml").read_text()
    assert provenance["inputs"] == [
        {"file": "small.npz", "bytes": len(snapshot), "sha256": hashlib.sha256(snapshot).hexdigest()}
    ]
    assert provenance["versions"]["numpy"] == np.__version__


def test_the_epoch_has_its_moment(atlas):
    epoch = atlas.epoch()
    assert (epoch["name"], epoch["redshift"], epoch["scale_factor"]) == ("z1.00", 1.0, 0.5)
    # 5.75 Gyr at z = 1 for H0 = 70, Om = 0.3 flat: textbook value, from memory.
    assert epoch["age_gyr"] == pytest.approx(5.75, abs=0.02)


def test_sheets_stand_in_the_order_of_the_build_file(tmp_path):
    build = description()
    order = ["velocity", "gas", "temperature"]
    build["sheets"] = {name: build["sheets"][name] for name in order}
    assert list(built(tmp_path, build).sheets) == order


def test_ranges_and_percentiles_are_those_of_the_finest_level_of_a_small_atlas(atlas):
    described, values = atlas.sheet("gas"), atlas.read("gas").values
    seen = values[values > 0]
    assert described["range"] == pytest.approx([seen.min(), seen.max()], rel=0.0024)
    assert described["percentiles"]["50"] == pytest.approx(np.percentile(seen, 50), rel=0.0024)


def test_proper_area_is_smaller_by_the_scale_factor_squared(tmp_path, atlas):
    proper = built(tmp_path, changed(description(), sheets__gas__area="proper"))
    ratio = proper.read("gas").values.sum(dtype=float) / atlas.read("gas").values.sum(dtype=float)
    assert ratio == pytest.approx(4, rel=1e-4)
    assert proper.sheet("gas")["total"] == atlas.sheet("gas")["total"]


def test_a_species_nobody_sees_is_a_sheet_of_nothing(tmp_path):
    build = changed(description(), view__centre=[4, 4, 2], view__depth=4)
    build["snapshot"]["species"]["stars"] = {"position": "stars", "smoothing": {"radius": "10 kpc"}}
    build["sheets"]["stars"] = {"species": "stars", "sum": "count", "unit": "1/kpc2"}
    atlas = built(tmp_path, build, particles() | {"stars": np.full((5, 3), 7.0)})
    assert not atlas.read("stars").values.any()
    assert atlas.sheet("stars")["range"] is None
    assert verify(atlas.path) == []


@pytest.mark.parametrize("pixels", [1536, 2560])
def test_an_image_whose_side_is_no_power_of_two_times_a_tile_has_sound_levels(tmp_path, pixels):
    atlas = built(tmp_path, changed(description(), view__pixels=pixels, view__slabs=1))
    assert verify(atlas.path) == []
    root = zarr.open(atlas.path / "z1.00" / "gas", mode="r")
    sides = [root[str(level)].shape[1] for level in range(atlas.info["levels"])]
    assert sides == [pixels >> level for level in range(len(sides))]
    assert 256 < sides[-1] <= 512


def test_huge_and_tiny_numbers_survive(tmp_path):
    # X-ray luminosities in erg/s are beyond what single precision holds.
    arrays = particles()
    luminosity = 10 ** np.random.default_rng(3).uniform(38, 45, len(arrays["mass"]))
    build = changed(
        description(),
        snapshot__species__gas__fields__luminosity={"dataset": "luminosity", "unit": "erg/s"},
        sheets__luminosity={"species": "gas", "sum": "luminosity", "unit": "erg / (s kpc2)"},
    )
    atlas = built(tmp_path, build, arrays | {"luminosity": luminosity})
    assert atlas.sheet("luminosity")["total"] == pytest.approx(luminosity.sum(), rel=1e-6)
    assert verify(atlas.path) == []


# Nothing depends on how it was run.


def test_built_twice_the_tiles_are_the_same_bit_for_bit(atlas, tmp_path):
    assert codes(built(tmp_path, workers=2)) == codes(atlas)


@pytest.mark.parametrize("workers", [1, 5])
def test_any_number_of_workers_makes_the_same_tiles_bit_for_bit(atlas, tmp_path, workers):
    assert codes(built(tmp_path, workers=workers)) == codes(atlas)


def most_apart(one, other) -> int:
    return max(
        int(np.abs(zarr.open(a.parents[3], mode="r")[:].astype(int) - zarr.open(b.parents[3], mode="r")[:]).max())
        for a, b in zip(sorted(one.path.rglob("c/*/*/*")), sorted(other.path.rglob("c/*/*/*")), strict=True)
    )


@pytest.mark.parametrize("chunk", [13, 200])
def test_chunks_of_another_size_change_no_code_by_more_than_one(atlas, tmp_path, monkeypatch, chunk):
    monkeypatch.setattr(budget, "LARGEST_CHUNK", chunk)
    assert most_apart(atlas, built(tmp_path)) <= 1


def test_particles_in_another_order_change_no_code_by_more_than_one(atlas, tmp_path):
    turned = np.random.default_rng(5).permutation(600)
    arrays = {name: array[turned] for name, array in particles().items()}
    assert most_apart(atlas, built(tmp_path, None, arrays)) <= 1


# Replacing.


def test_a_rebuild_replaces_the_atlas(tmp_path):
    first = built(tmp_path).info["id"]
    second = built(tmp_path, changed(description(), title="Another")).info
    assert (second["title"], second["id"] != first) == ("Another", True)
    assert left(tmp_path) == {"small.atlas"}


def test_a_rebuild_that_fails_leaves_the_old_atlas_as_it_was(tmp_path):
    before = codes(built(tmp_path))
    arrays = particles()
    arrays["position"][7, 1] = np.nan
    with pytest.raises(InputError):
        built(tmp_path, None, arrays)
    assert codes(tilemap.open(tmp_path / "small.atlas")) == before
    assert left(tmp_path) == {"small.atlas"}


@pytest.mark.parametrize("there", ["file", "folder"])
def test_what_is_no_atlas_is_not_replaced(tmp_path, there):
    target = tmp_path / "small.atlas"
    if there == "file":
        target.write_text("thesis")
    else:
        target.mkdir()
        (target / "thesis.tex").write_text("thesis")
    with pytest.raises(InputError, match=r"small\.atlas exists and is not an atlas"):
        built(tmp_path)
    assert target.exists()


def test_an_atlas_may_be_built_in_the_folder_one_stands_in(tmp_path, monkeypatch):
    build = write_build(tmp_path)
    monkeypatch.chdir(tmp_path)
    assert build_atlas(build, "here.atlas") == Path("here.atlas")


# What goes wrong.

NOT_FINITE = r"small\.npz: position: 2 of 600 gas particles have a position that is not a finite number .*3, 500"


def with_bad(name: str, rows: list[int], value: float) -> dict[str, np.ndarray]:
    arrays = particles()
    arrays[name][rows] = value
    return arrays


WRONG = {
    "a position that is not a number": (None, with_bad("position", [3, 500], np.nan), NOT_FINITE),
    "an infinite position": (None, with_bad("position", [3, 500], np.inf), NOT_FINITE),
    "a negative radius": (None, with_bad("radius", [9], -1.0), r"radius: 1 of 600 .*not above zero.*particle 9"),
    "a radius of zero": (None, with_bad("radius", [9], 0.0), r"radius: 1 of 600 .*not above zero.*particle 9"),
    "a negative mass": (None, with_bad("mass", [0], -5.0), r"mass: 1 of 600 .*negative"),
    "a temperature that is not a number": (None, with_bad("temperature", [1], np.nan), r"temperature: 1 of 600"),
    "a field that is not there": (
        changed(description(), snapshot__species__gas__mass="Mass"), None, r"species\.gas\.mass.*'?Mass'?.*mass",
    ),
    "a species that is not there": (
        changed(description(), sheets__gas__species="gaz"), None, r"sheets\.gas\.species.*'gaz'.*'gas'",
    ),
    "a file that is not there": (changed(description(), snapshot__files=["smal.npz"]), None, r"smal\.npz"),
    "an unknown key": (changed(description(), view__pixel=512), None, r"pixel.*pixels"),
    "an unknown unit": (changed(description(), sheets__gas__unit="Msun/kpz2"), None, r"kpz"),
    "a unit of another kind": (changed(description(), sheets__gas__unit="K"), None, r"sheets\.gas\.unit is K.*solMass / kpc2"),
    "an unknown kernel": (
        changed(description(), snapshot__species__gas__smoothing__kernel="cubik"), None, r"'cubik'.*'cubic'",
    ),
    "an empty view": (
        changed(description(), snapshot__periodic=False, view__centre=[400, 4, 4]),
        None,
        r"view: no particle lies in it; it covers 396 to 404, 0 to 8 and 0 to 8 Mpc deep, the box is 8 x 8 x 8 Mpc",
    ),
    "more neighbours than particles": (
        changed(description(), snapshot__species__gas__smoothing={"neighbours": 600}),
        None,
        r"species\.gas: smoothing\.neighbours is 600, but there are only 600 particles",
    ),
    "slabs deeper than the box": (
        changed(description(), view__slabs=[0.0, 4.0, 9.0]), None, r"slabs reach over 9.*box.*8 deep",
    ),
    "velocities of both signs in log coding": (
        changed(description(), sheets__velocity__coding="log"), None, r"velocity goes down to -.*coding: linear",
    ),
    "a sum of both signs in log coding": (
        changed(description(), sheets__velocity={"species": "gas", "sum": "velocity", "unit": "km/(s kpc2)"}),
        None,
        r"velocity goes down to -.*coding: linear",
    ),
}  # fmt: skip


@pytest.mark.parametrize("what", WRONG)
def test_what_is_wrong_is_said_and_leaves_neither_atlas_nor_scratch(tmp_path, what):
    build, arrays, said = WRONG[what]
    with pytest.raises(InputError, match=said) as told:
        built(tmp_path, build, arrays)
    assert "\n" not in str(told.value)
    assert left(tmp_path) == set()


@pytest.mark.parametrize("what", ["a position that is not a number", "an empty view", "an unknown key"])
def test_the_command_says_it_in_one_line_with_exit_code_2(tmp_path, capsys, what):
    build, arrays, _ = WRONG[what]
    path = write_build(tmp_path, build, arrays)
    assert main(["build", str(path), "--out", str(tmp_path / "small.atlas")]) == 2
    lines = [line for line in capsys.readouterr().err.splitlines() if line.startswith("tilemap:")]
    assert len(lines) == 1
    assert left(tmp_path) == set()


@pytest.mark.parametrize("out", [".", "nowhere/small.atlas"])
def test_a_place_where_no_atlas_can_be_put_is_refused_in_one_line(tmp_path, monkeypatch, capsys, out):
    build = write_build(tmp_path)
    (tmp_path / "empty").mkdir()
    monkeypatch.chdir(tmp_path / "empty")
    assert main(["build", str(build), "--out", out]) == 2
    assert capsys.readouterr().err.count("\n") == 1
    assert left(tmp_path) == {"empty"}


def test_a_build_that_needs_more_memory_than_allowed_is_refused_before_it_starts(tmp_path, capsys):
    build = write_build(tmp_path, changed(description(), view__pixels=16384, view__slabs=16))
    with pytest.raises(InputError, match=r"--memory is 0\.5 GiB, and this build needs about [\d.]+ GiB"):
        build_atlas(build, tmp_path / "small.atlas", memory="512MiB")
    assert left(tmp_path) == set()


def test_enough_memory_is_enough(tmp_path):
    assert built(tmp_path, memory="4GiB").info["title"] == "Small box"


def test_progress_tells_every_phase_to_its_end(tmp_path):
    told: dict[str, tuple[float, float]] = {}
    built(tmp_path, progress=lambda phase, done, total: told.update({phase: (done, total)}))
    assert list(told) == ["reading gas", "drawing gas", "publishing"]
    assert all(done == total for done, total in told.values())


def test_the_description_is_plain_json(atlas):
    text = (atlas.path / "atlas.json").read_text()
    assert "NaN" not in text and "Infinity" not in text
    assert json.loads(text)["format"] == "tilemap-atlas"


def test_a_dry_run_says_what_a_build_would_take_and_does_nothing(tmp_path, capsys):
    build = write_build(tmp_path)
    assert main(["build", str(build), "--dry-run", "--memory", "4GiB"]) == 0
    said = dict(line.split(maxsplit=1) for line in capsys.readouterr().out.splitlines())
    assert said["particles"] == "600 of gas"
    assert said["pixels"] == "512 x 512, 2 slabs, 1 level"
    assert said["sheets"] == "3"
    assert float(said["memory"].split()[0]) < 4
    assert set(said) == {"particles", "pixels", "sheets", "memory", "scratch", "atlas", "time"}
    assert left(tmp_path) == set()


def test_a_build_without_a_place_for_the_atlas_is_refused_in_one_line(tmp_path, capsys):
    assert main(["build", str(write_build(tmp_path))]) == 2
    assert "--out ATLAS" in capsys.readouterr().err
