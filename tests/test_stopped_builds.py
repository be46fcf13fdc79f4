"""Builds that are stopped: the same command takes them up and ends with the same bytes; others leave them alone."""

from __future__ import annotations

import errno
import json
import multiprocessing
import os
import shutil
import signal
import subprocess
import threading
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
from build_maker import BOX, changed, description, particles, write_build

import tilemap
from tilemap import budget, draw, spill
from tilemap import build_atlas as building
from tilemap.build_atlas import build_atlas
from tilemap.cli import main
from tilemap.errors import InputError
from tilemap.pyramid import grid, store, writer
from tilemap.pyramid.verify import verify


def wide_build() -> dict:
    """Gas, a peak of it, and stars whose radii have to be found, in one region of 1024 pixels."""
    build = changed(description(), view__pixels=1024)
    build["snapshot"]["species"]["stars"] = {
        "position": "star_position",
        "mass": "star_mass",
        "smoothing": {"neighbours": 8, "kernel": "cubic"},
    }
    build["sheets"]["peak"] = {"species": "gas", "peak": "mass", "unit": "Msun/kpc2"}
    build["sheets"]["stars"] = {"species": "stars", "sum": "mass", "unit": "Msun/kpc2"}
    return build


def arrays() -> dict[str, np.ndarray]:
    rng = np.random.default_rng(3)
    return particles() | {"star_position": rng.random((300, 3)) * BOX, "star_mass": 10 ** rng.uniform(5, 7, 300)}


def content(atlas: Path) -> dict[str, bytes]:
    """Every file of an atlas but those that tell when it was built."""
    described = json.loads((atlas / "atlas.json").read_bytes())
    described["provenance"].pop("built"), described.pop("id")
    files = {str(path.relative_to(atlas)): path.read_bytes() for path in atlas.rglob("*") if path.is_file()}
    return files | {"atlas.json": json.dumps(described).encode(), "checksums.json": b""}


@pytest.fixture(params=["held", "spilled"])
def how(request, monkeypatch):
    """Particles wait in memory, or on scratch disk; a hundred are read at a time."""
    make = budget.make_budget
    held = request.param == "held"
    monkeypatch.setattr(building, "make_budget", lambda *given: replace(make(*given), held=held, chunk=100))
    return request.param


def stopped(build: Path, out: Path, monkeypatch, at: int) -> int:
    """Build in a process of its own that kills itself when it has written something for the `at`-th time; how often it did.

    With -1 it is killed by something else.
    """
    counted, lock = multiprocessing.RawValue("i", 0), threading.Lock()

    def counting(function):
        def count(*given, **named):
            result = function(*given, **named)
            with lock:
                counted.value += 1
                if counted.value == at:
                    os.kill(os.getpid(), signal.SIGKILL)
            return result

        return count

    def work():
        for place, name in (
            (spill.Runs, "add"),
            (spill.ImageFile, "write"),
            (spill, "write_whole"),
            (store, "write_whole"),
            (building, "write_whole"),
            (writer, "write_shard"),
        ):
            monkeypatch.setattr(place, name, counting(getattr(place, name)))
        build_atlas(build, out, workers=2)

    process = multiprocessing.get_context("fork").Process(target=work)
    process.start()
    process.join()
    assert process.exitcode == (-signal.SIGKILL if at < 0 or 0 < at <= counted.value else 0)
    return counted.value if at >= 0 else 0


def test_a_build_killed_at_twenty_places_ends_with_the_same_bytes(tmp_path, monkeypatch, how):
    build = write_build(tmp_path, wide_build(), arrays())
    times = stopped(build, tmp_path / "whole.atlas", monkeypatch, 0)
    expected = content(tmp_path / "whole.atlas")
    out = tmp_path / "stopped.atlas"
    for at in np.linspace(1, times - 1, 20).astype(int):
        stopped(build, out, monkeypatch, int(at))
        assert not out.exists()
        build_atlas(build, out, workers=2)
        assert content(out) == expected
        shutil.rmtree(out)


@pytest.fixture
def many_units(monkeypatch):
    """Four regions of 2048 pixels, shards of 2048: each region is a unit, and those of level 1 wait for all four."""
    for place in (grid, draw):
        monkeypatch.setattr(place, "SHARD", 2048)
    make = building.make_plan
    monkeypatch.setattr(building, "make_plan", lambda *given: replace(make(*given), local=2))


def corner_build() -> dict:
    """Gas and its peak at 4096 pixels: two slabs, of which one is empty, and the other but for a corner."""
    build = changed(description(), view__pixels=4096)
    del build["sheets"]["temperature"], build["sheets"]["velocity"]
    build["sheets"]["peak"] = {"species": "gas", "peak": "mass", "unit": "Msun/kpc2"}
    return build


def in_a_corner() -> dict[str, np.ndarray]:
    made = particles()
    made["position"] = 0.3 + 0.2 * made["position"]
    made["radius"] = 0.2 * made["radius"]
    return made


@pytest.mark.parametrize("waits", [(True, True), (True, False), (False, True)])
def test_a_build_of_many_units_goes_on_wherever_particles_waited_before_and_after(
    tmp_path, monkeypatch, many_units, waits
):
    make = budget.make_budget

    def waiting(held: bool) -> None:
        monkeypatch.setattr(building, "make_budget", lambda *given: replace(make(*given), held=held, chunk=100))

    build = write_build(tmp_path, corner_build(), in_a_corner())
    waiting(True)
    times = stopped(build, tmp_path / "whole.atlas", monkeypatch, 0)
    expected = content(tmp_path / "whole.atlas")
    out = tmp_path / "stopped.atlas"
    for at in np.linspace(times // 3, times - 2, 5).astype(int):
        waiting(waits[0])
        stopped(build, out, monkeypatch, int(at))
        waiting(waits[1])
        build_atlas(build, out, workers=2)
        assert content(out) == expected
        shutil.rmtree(out)


@pytest.mark.parametrize("at", ["before", "after"])
def test_a_build_killed_while_it_is_published_over_another_leaves_one_that_is_whole(tmp_path, monkeypatch, at):
    build, out = write_build(tmp_path), tmp_path / "small.atlas"
    expected = content(build_atlas(build, out))
    rename = Path.rename

    def kill(path: Path, to: Path) -> Path:
        if path.parent.name == "small.atlas.part" and at == "before":
            os.kill(os.getpid(), signal.SIGKILL)
        result = rename(path, to)
        if path.parent.name == "small.atlas.part":
            os.kill(os.getpid(), signal.SIGKILL)
        return result

    monkeypatch.setattr(Path, "rename", kill)
    assert stopped(build, out, monkeypatch, -1) == 0
    monkeypatch.setattr(Path, "rename", rename)
    assert at == "before" or content(out) == expected
    assert verify(build_atlas(build, out)) == []
    assert content(out) == expected


def test_a_build_killed_again_and_again_goes_on_where_it_was(tmp_path, monkeypatch, how):
    build = write_build(tmp_path, wide_build(), arrays())
    out = tmp_path / "small.atlas"
    times = stopped(build, tmp_path / "whole.atlas", monkeypatch, 0)
    step = times // 3 if how == "spilled" else times - 5
    for _ in range(20):
        if stopped(build, out, monkeypatch, step) < step:
            break
    assert content(out) == content(tmp_path / "whole.atlas")


def test_where_particles_wait_changes_no_byte(tmp_path, monkeypatch):
    build, make = write_build(tmp_path, wide_build(), arrays()), budget.make_budget
    for held in (True, False):
        monkeypatch.setattr(
            building, "make_budget", lambda *given, held=held: replace(make(*given), held=held, chunk=100)
        )
        build_atlas(build, tmp_path / f"{held}.atlas")
    assert content(tmp_path / "True.atlas") == content(tmp_path / "False.atlas")


def test_what_a_build_leaves_behind_verifies_and_no_scratch_is_left(tmp_path, monkeypatch, how):
    build = write_build(tmp_path, wide_build(), arrays())
    stopped(build, tmp_path / "small.atlas", monkeypatch, 12)
    assert (tmp_path / "small.atlas.part").is_dir()
    assert verify(build_atlas(build, tmp_path / "small.atlas")) == []
    assert {path.name for path in tmp_path.iterdir()} == {"small.npz", "small.yaml", "small.atlas"}


def test_an_interrupted_build_goes_on_and_publishes_nothing_before(tmp_path):
    def interrupt(phase: str, done: float, total: float) -> None:
        if phase == "drawing gas" and done:
            raise KeyboardInterrupt

    build = write_build(tmp_path)
    with pytest.raises(KeyboardInterrupt):
        build_atlas(build, tmp_path / "small.atlas", progress=interrupt)
    assert not (tmp_path / "small.atlas").exists()
    assert verify(build_atlas(build, tmp_path / "small.atlas")) == []


def test_another_build_into_the_same_place_begins_anew(tmp_path, monkeypatch):
    stopped(write_build(tmp_path), tmp_path / "small.atlas", monkeypatch, 5)
    build = write_build(tmp_path, changed(description(), title="Another"))
    atlas = tilemap.open(build_atlas(build, tmp_path / "small.atlas"))
    assert atlas.info["title"] == "Another"
    assert verify(atlas.path) == []


def test_a_second_build_into_one_target_is_refused_and_harms_nothing(tmp_path):
    build = write_build(tmp_path)
    told = []

    def build_again(phase: str, done: float, total: float) -> None:
        if phase == "drawing gas" and not told:
            with pytest.raises(InputError) as refused:
                build_atlas(build, tmp_path / "small.atlas")
            told.append(str(refused.value))

    atlas = build_atlas(build, tmp_path / "small.atlas", progress=build_again)
    assert "is being built by another process" in told[0] and "\n" not in told[0]
    assert verify(atlas) == []


def test_a_folder_that_no_build_left_is_not_taken_for_scratch(tmp_path):
    folder = tmp_path / "small.atlas.part"
    folder.mkdir()
    (folder / "thesis.txt").write_text("years of work")
    with pytest.raises(InputError, match="in the way"):
        build_atlas(write_build(tmp_path), tmp_path / "small.atlas")
    assert (folder / "thesis.txt").read_text() == "years of work"


def test_a_disk_too_small_for_scratch_is_refused_before_the_start(tmp_path, monkeypatch, capsys):
    build = write_build(tmp_path, changed(description(), view__pixels=4096))
    usage = type("Usage", (), {"free": 100 << 20})
    monkeypatch.setattr(budget.shutil, "disk_usage", lambda folder: usage)
    assert main(["build", str(build), "--out", str(tmp_path / "small.atlas")]) == 2
    line = capsys.readouterr().err
    assert "GiB of scratch disk" in line and line.count("\n") == 1
    assert {path.name for path in tmp_path.iterdir()} == {"small.npz", "small.yaml"}


@pytest.fixture
def small_disk(tmp_path, monkeypatch):
    """A folder on a disk of 4 MiB; where no disk can be mounted, writing fails as if it were full. And how to make room."""
    disk = tmp_path / "disk"
    disk.mkdir()
    mounted = subprocess.run(["mount", "-t", "tmpfs", "-o", "size=4m", "tmpfs", str(disk)], capture_output=True)
    if mounted.returncode == 0:
        yield disk, lambda: subprocess.run(["mount", "-o", "remount,size=200m", str(disk)], check=True)
        subprocess.run(["umount", str(disk)], check=True)
        return
    write = Path.write_bytes

    def full(path: Path, data: bytes) -> int:
        if len(data) > 20_000:
            raise OSError(errno.ENOSPC, os.strerror(errno.ENOSPC), str(path))
        return write(path, data)

    monkeypatch.setattr(Path, "write_bytes", full)
    yield disk, monkeypatch.undo


def test_a_disk_that_fills_up_is_one_line_and_the_build_goes_on_when_there_is_room(
    tmp_path, small_disk, capsys, monkeypatch
):
    disk, make_room = small_disk
    monkeypatch.setattr(building, "check_scratch", lambda *given: None)
    build = write_build(tmp_path)
    arguments = ["build", str(build), "--out", str(disk / "small.atlas")]
    assert main(arguments) == 2
    lines = [line for line in capsys.readouterr().err.splitlines() if line.startswith("tilemap:")]
    assert len(lines) == 1
    assert "the disk is full" in lines[0]
    assert not (disk / "small.atlas").exists()
    make_room()
    assert main(arguments) == 0
    assert verify(disk / "small.atlas") == []
