"""Where a build works: a folder beside the target, held by one process, taken up again by the same build.

    <target>.part/lock              held while a process lives
    <target>.part/unfinished.json   which build this is
    <target>.part/atlas/            what will be published
    <target>.part/work/             what is needed until then

A build that is stopped, by a key, a signal or a full disk, leaves the folder, and the same build goes on from there. Files
get their names when they are whole, so whatever is found there is right; power cuts are not provided for.
"""

from __future__ import annotations

import contextlib
import fcntl
import json
import os
import shutil
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from tilemap.errors import InputError
from tilemap.pyramid.store import write_whole

MARK = "unfinished.json"


@dataclass(frozen=True)
class Workplace:
    """The folders of a build: `atlas` to publish, `work` for the rest, and when it was begun."""

    folder: Path
    begun: str

    @property
    def atlas(self) -> Path:
        return self.folder / "atlas"

    @property
    def work(self) -> Path:
        return self.folder / "work"


def folder_of(target: Path) -> Path:
    """Where an atlas is built before it is published."""
    return target.with_name(f"{target.name}.part")


@contextmanager
def workplace(
    target: Path, build: dict[str, Any], begun: str, check: Callable[[Path], None] = lambda folder: None
) -> Iterator[Workplace]:
    """Work on a build while the context lasts. Wrong input takes the folder away, unless a species is done already; what
    else goes wrong leaves it.

    Parameters
    ----------
    target : Path
    build : JSON
        All that decides the bytes of the atlas: the same again goes on where it stopped, another begins anew.
    begun : str
        The time now; a build that goes on keeps the time at which it was begun.
    check : callable
        Called with the folder when it is ours; what it raises leaves what was there.

    Raises
    ------
    InputError
        Where another build is at work there, or something is in the way that no build left.
    """
    folder = folder_of(target)
    if folder.is_symlink() or (folder.exists() and not _left_by_a_build(folder)):
        raise InputError(f"{folder} is in the way and not left by a build: move it, or name another atlas")
    fresh = not folder.exists()
    folder.mkdir(exist_ok=True)
    with open(folder / "lock", "w") as lock:
        try:
            fcntl.flock(lock, fcntl.LOCK_EX | fcntl.LOCK_NB)
            if os.fstat(lock.fileno()).st_ino != os.stat(folder / "lock").st_ino:
                raise BlockingIOError
        except OSError:
            raise InputError(
                f"{target} is being built by another process: wait for it, or name another atlas"
            ) from None
        try:
            check(folder)
        except InputError:
            if fresh:
                _remove(folder)
            raise
        here = Workplace(folder, _begun(folder, build, begun))
        here.atlas.mkdir(exist_ok=True)
        here.work.mkdir(exist_ok=True)
        try:
            yield here
        except InputError:
            if not any(here.work.glob("*/*/sheets.json")):
                _remove(folder)
            raise
        _remove(folder)


def _left_by_a_build(folder: Path) -> bool:
    return folder.is_dir() and (not any(folder.iterdir()) or (folder / "lock").exists())


def _begun(folder: Path, build: dict[str, Any], begun: str) -> str:
    """When the build that is here was begun; where it is another one, what it left is taken away and ours begins."""
    with contextlib.suppress(OSError, ValueError, TypeError, KeyError):
        mark = json.loads((folder / MARK).read_bytes())
        # Without the beginnings of an atlas there is nothing to go on from: it was published, or never begun.
        if mark["build"] == json.loads(json.dumps(build)) and (folder / "atlas" / "zarr.json").exists():
            return str(mark["begun"])
    for each in folder.iterdir():
        if each.name != "lock":
            shutil.rmtree(each) if each.is_dir() else each.unlink()
    write_whole(folder / MARK, json.dumps({"begun": begun, "build": build}).encode())
    return begun


def _remove(folder: Path) -> None:
    """Take the folder away, the lock last, so that nobody takes what is half gone for something else."""
    for each in folder.iterdir():
        if each.name != "lock":
            shutil.rmtree(each, ignore_errors=True) if each.is_dir() else each.unlink()
    if len(list(folder.iterdir())) == 1:
        (folder / "lock").unlink(missing_ok=True)
        with contextlib.suppress(OSError):
            os.rmdir(folder)
