"""A finished scratch folder in, a published atlas out: checksums written, bytes on the disk, one rename."""

from __future__ import annotations

import hashlib
import json
import os
import shutil
from concurrent.futures import ThreadPoolExecutor
from pathlib import Path

from tilemap.errors import InputError
from tilemap.pyramid.store import PART, write_whole

FORMAT = "tilemap-atlas"
CHECKSUMS = "checksums.json"


def checksum_tree(folder: str | os.PathLike[str], workers: int | None = None) -> dict[str, str]:
    """SHA-256 of every file below `folder` but `checksums.json` itself, by path relative to it ("/" between), sorted."""
    root = Path(folder)
    names = sorted(
        path.relative_to(root).as_posix()
        for path in root.rglob("*")
        if path.is_file() and path.relative_to(root).as_posix() != CHECKSUMS
    )
    with ThreadPoolExecutor(workers or os.cpu_count()) as pool:
        return dict(zip(names, pool.map(lambda name: file_sha256(root / name), names), strict=True))


def file_sha256(path: str | os.PathLike[str]) -> str:
    """SHA-256 of a file, in hexadecimal."""
    with open(path, "rb") as file:
        return hashlib.file_digest(file, "sha256").hexdigest()


def write_checksums(folder: str | os.PathLike[str]) -> None:
    """Write `checksums.json` for all that is in `folder` now."""
    content = json.dumps(checksum_tree(folder), indent=0).encode()
    write_whole(Path(folder) / CHECKSUMS, content)


def is_atlas(folder: str | os.PathLike[str]) -> bool:
    """Whether `folder` holds an atlas of ours, of whatever version."""
    try:
        described = json.loads((Path(folder) / "atlas.json").read_bytes())
    except (OSError, ValueError):
        return False
    return isinstance(described, dict) and described.get("format") == FORMAT


def check_target(target: str | os.PathLike[str]) -> None:
    """See to it, before hours of work, that an atlas may be published at `target`.

    Raises
    ------
    InputError
        Where something else than an atlas is there, or the folder above is missing.
    """
    path = Path(target)
    if not path.absolute().parent.is_dir():
        raise InputError(f"{path}: there is no folder {path.absolute().parent} to put the atlas in")
    if path.is_symlink() or (path.exists() and not is_atlas(path) and not _is_empty_folder(path)):
        raise InputError(f"{path} exists and is not an atlas: name another place, or take it away first")


def publish(scratch: str | os.PathLike[str], target: str | os.PathLike[str]) -> Path:
    """Give a finished atlas its name: it is at `target` either whole or not at all.

    Leftovers of files that were never finished are removed, `checksums.json` is written, everything is brought to the
    disk, and `scratch` is renamed. An atlas that is there already is replaced, and removed afterwards.

    Parameters
    ----------
    scratch : path
        On the same file system as `target`.
    target : path

    Returns
    -------
    Path
        The target.

    Raises
    ------
    InputError
        As `check_target` does; the scratch folder is left as it is.
    """
    source, path = Path(scratch), Path(target)
    check_target(path)
    if not is_atlas(source):
        raise InputError(f"{source} is not an atlas: it has no atlas.json that says so")
    for leftover in source.rglob(f"*{PART}"):
        leftover.unlink()
    write_checksums(source)
    _bring_to_disk(source)
    aside = path.with_name(f".{path.name}.{os.getpid()}.old")
    if path.exists():
        path.rename(aside)
    try:
        source.rename(path)
    except OSError:
        if aside.exists():
            aside.rename(path)
        raise
    _sync(path.absolute().parent)
    if aside.exists():
        shutil.rmtree(aside)
    return path


def _is_empty_folder(path: Path) -> bool:
    return path.is_dir() and not any(path.iterdir())


def _bring_to_disk(folder: Path) -> None:
    with ThreadPoolExecutor(os.cpu_count()) as pool:
        list(pool.map(_sync, [folder, *folder.rglob("*")]))


def _sync(path: Path) -> None:
    handle = os.open(path, os.O_RDONLY)
    try:
        os.fsync(handle)
    finally:
        os.close(handle)
