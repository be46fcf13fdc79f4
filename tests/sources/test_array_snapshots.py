"""NumPy arrays as snapshots: files and folders, in chunks, with and without compression."""

from __future__ import annotations

import numpy as np
import pytest

from tilemap.errors import InputError
from tilemap.sources import open_source

SPECIES = "position: xyz\n      mass: m\n      fields: {t: {dataset: t, unit: K}}"
POSITION = np.random.default_rng(1).random((100, 3))
ARRAYS = {"xyz": POSITION, "m": np.arange(100.0), "t": np.arange(100, dtype="i4")}


def read(build, size=17, fields=("t",)):
    chunks = list(open_source(build).chunks("gas", fields, size=size))
    assert max(map(len, chunks)) <= size
    position = np.concatenate([chunk.position for chunk in chunks])
    return (
        position,
        np.concatenate([chunk.mass for chunk in chunks]),
        np.concatenate([c.values.get("t", c.mass) for c in chunks]),
    )


def write_folder(folder, arrays=ARRAYS):
    folder.mkdir()
    for name, array in arrays.items():
        np.save(folder / f"{name}.npy", array)


def write_npz(path):
    np.savez(path / "a.npz", **ARRAYS)
    return "a.npz"


def write_compressed(path):
    np.savez_compressed(path / "a.npz", **ARRAYS)
    return "a.npz"


def write_columns_first(path):
    np.savez(path / "a.npz", **(ARRAYS | {"xyz": np.asfortranarray(POSITION)}))
    return "a.npz"


def write_big_endian(path):
    write_folder(path / "a", {name: array.astype(array.dtype.newbyteorder(">")) for name, array in ARRAYS.items()})
    return "a"


def write_npy_folder(path):
    write_folder(path / "a")
    return "a"


def write_npy_list(path):
    write_folder(path / "a")
    return "a/*.npy"


@pytest.mark.parametrize(
    "write", [write_npz, write_compressed, write_columns_first, write_big_endian, write_npy_folder, write_npy_list]
)
def test_arrays_come_out_as_they_were_written(tmp_path, describe, write):
    position, mass, temperature = read(describe(write(tmp_path), SPECIES))
    assert np.array_equal(position, POSITION)
    assert np.array_equal(mass, ARRAYS["m"])
    assert np.array_equal(temperature, ARRAYS["t"])


def test_several_npz_files_follow_each_other(tmp_path, describe):
    for part in range(2):
        np.savez(tmp_path / f"a.{part}.npz", xyz=POSITION, m=np.full(100, part), t=np.zeros(100))
    assert read(describe("a.*.npz", SPECIES))[1].tolist() == [0.0] * 100 + [1.0] * 100


def test_chunks_can_be_written_to_without_touching_the_file(tmp_path, describe):
    write_folder(tmp_path / "a")
    next(open_source(describe("a", SPECIES)).chunks("gas")).position[:] = 7
    assert np.array_equal(np.load(tmp_path / "a" / "xyz.npy"), POSITION)


def test_lengths_without_a_unit_are_mpc_and_given_units_are_taken(tmp_path, describe):
    np.savez(tmp_path / "a.npz", **ARRAYS)
    species = "position: {dataset: xyz, unit: kpc}\n      mass: {dataset: m, unit: 1e10 Msun}"
    position, mass, _ = read(describe("a.npz", species), fields=())
    assert position == pytest.approx(POSITION / 1000)
    assert mass == pytest.approx(ARRAYS["m"] * 1e10)


def test_the_box_and_redshift_of_arrays_come_from_the_build_file(tmp_path, describe):
    np.savez(tmp_path / "a.npz", **ARRAYS)
    facts = open_source(describe("a.npz", SPECIES, "  box: 1000 kpc\n  redshift: 2")).facts
    assert (facts.box.tolist(), facts.redshift, facts.periodic) == ([1, 1, 1], 2, True)


def test_every_file_of_a_folder_is_among_the_inputs(tmp_path, describe):
    write_folder(tmp_path / "a")
    assert [path.name for path in open_source(describe("a", SPECIES)).facts.files] == ["m.npy", "t.npy", "xyz.npy"]


def test_two_columns_lie_in_a_plane_at_depth_zero(tmp_path, describe):
    np.savez(tmp_path / "a.npz", xyz=POSITION[:, :2], m=ARRAYS["m"], t=ARRAYS["t"])
    position, _, _ = read(describe("a.npz", SPECIES))
    assert np.array_equal(position, np.column_stack([POSITION[:, :2], np.zeros(100)]))


@pytest.mark.parametrize(
    ("arrays", "expected"),
    [
        ({"xyz": POSITION, "mm": np.ones(100)}, "array m is not in a.npz: the nearest known is 'mm'"),
        (ARRAYS | {"m": np.ones(99)}, "a.npz: m has 99 rows and xyz 100"),
        (ARRAYS | {"m": np.array(["a"] * 100)}, "m does not hold numbers"),
        (ARRAYS | {"m": np.ones((100, 2, 2))}, "array m has 3 dimensions"),
        (ARRAYS | {"xyz": POSITION[:, :1]}, "xyz has 1 columns, where a position has three"),
    ],
)
def test_arrays_that_do_not_fit_say_why(tmp_path, describe, arrays, expected):
    np.savez(tmp_path / "a.npz", **arrays)
    with pytest.raises(InputError) as caught:
        open_source(describe("a.npz", SPECIES))
    assert expected in str(caught.value)


@pytest.mark.parametrize("name", ["a.npz", "a/xyz.npy"])
def test_a_truncated_file_is_refused(tmp_path, describe, name):
    np.savez(tmp_path / "a.npz", **ARRAYS)
    write_folder(tmp_path / "a")
    path = tmp_path / name
    path.write_bytes(path.read_bytes()[:-300])
    with pytest.raises(InputError, match=r"not a whole .np[yz] file"):
        read(describe(name.split("/")[0], SPECIES))


def test_a_flipped_byte_in_an_npz_is_found(tmp_path, describe):
    np.savez(tmp_path / "a.npz", xyz=np.ones((20000, 3)), m=np.ones(20000))
    data = bytearray((tmp_path / "a.npz").read_bytes())
    data[300_000] ^= 1
    (tmp_path / "a.npz").write_bytes(data)
    with pytest.raises(InputError, match=r"xyz.npy is damaged"):
        read(describe("a.npz", "position: xyz\n      mass: m"), size=20000, fields=())


def test_pickled_objects_are_never_loaded(tmp_path, describe):
    write_folder(tmp_path / "a", {"xyz": np.array([{}], dtype=object)})
    with pytest.raises(InputError, match=r"not a whole .npy file of numbers"):
        open_source(describe("a", SPECIES))


def test_an_empty_folder_is_refused(tmp_path, describe):
    (tmp_path / "a").mkdir()
    with pytest.raises(InputError, match=r"no .npy file is in this folder"):
        open_source(describe("a", SPECIES))
