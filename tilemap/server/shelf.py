"""Atlas folders in, the atlases being served out: each under its name, opened once, reopened when it is published anew.

A published atlas never changes, but a new build may be published at the same place while the server runs. One `stat` a
request (about a microsecond) sees that, so that a tile of the new build is never sent under the id of the old one.
"""

from __future__ import annotations

import hashlib
import json
import os
import threading
from collections.abc import Iterable, Iterator
from pathlib import Path
from typing import TYPE_CHECKING, Any

from tilemap.errors import InputError

if TYPE_CHECKING:
    from tilemap.atlas import Atlas
    from tilemap.catalogue.query import Objects
    from tilemap.pyramid.store import ArrayReader

RESERVED = {"list.css", "atlases.json"}  # what the server itself has beside the atlases


class Opened:
    """One build of an atlas, open for reading.

    Attributes
    ----------
    info : dict
        atlas.json, parsed.
    text, etag : bytes, str
        atlas.json as stored, and an entity tag of its content.
    picture : bytes or None
        The small picture, once someone has made it.
    """

    def __init__(self, path: Path) -> None:
        from tilemap.atlas import Atlas

        self.path = path
        self.text = (path / "atlas.json").read_bytes()
        self.etag = hashlib.sha256(self.text).hexdigest()[:24]
        self.atlas: Atlas = Atlas(path)
        self.info: dict[str, Any] = json.loads(self.text)
        self.id: str = self.info["id"]
        self.picture: bytes | None = None
        self._readers: dict[tuple[str, str, int, bool], ArrayReader] = {}
        self._objects: dict[str, Objects] = {}
        self._lock = threading.Lock()
        self._sheets = {(epoch["name"], sheet["name"]) for epoch in self.info["epochs"] for sheet in epoch["sheets"]}

    def reader(self, epoch: str, sheet: str, level: int, whole: bool) -> ArrayReader | None:
        """The tiles of one level of one sheet; None if there is no such level or sheet."""
        key = (epoch, sheet, level, whole)
        found = self._readers.get(key)
        if found is None:
            if (epoch, sheet) not in self._sheets or not 0 <= level < self.info["levels"]:
                return None
            # With one slab the whole is that slab, and is stored once.
            summed = whole and len(self.info["slabs"]) > 2
            with self._lock:
                found = self._readers.get(key)
                if found is None:
                    found = self._readers[key] = self.atlas.reader(epoch, sheet, level, summed)
        return found

    def grid(self, level: int) -> tuple[int, int]:
        """Rows and columns of tiles at a level."""
        columns, rows = ((side >> level) for side in self.info["pixels"])
        tile = self.info["tile"]
        return -(-rows // tile), -(-columns // tile)

    def objects(self, epoch: str | None) -> Objects | None:
        """The objects of an epoch (the first one for None); None if it is not there or has no catalogue."""
        for known in self.info["epochs"]:
            if epoch in (None, known["name"]) and known["catalogue"]:
                with self._lock:
                    if known["name"] not in self._objects:
                        from tilemap.catalogue.query import Objects

                        path = self.path / known["catalogue"]["file"]
                        self._objects[known["name"]] = Objects(path, known["catalogue"])
                    return self._objects[known["name"]]
        return None


class Served:
    """One place that an atlas is served from."""

    def __init__(self, name: str, path: Path) -> None:
        self.name = name
        self.path = path
        self._lock = threading.Lock()
        self._file = os.fspath(path / "atlas.json")
        self._stamp = self._look()
        self._opened: Opened | None = Opened(path)

    def current(self) -> Opened | None:
        """The build that is published now; None while there is none."""
        if self._look() != self._stamp:
            with self._lock:
                stamp = self._look()
                if stamp != self._stamp:
                    try:
                        self._opened = Opened(self.path) if stamp else None
                    except (InputError, OSError, ValueError, KeyError):
                        return None  # caught in the middle of being replaced: looked at again by the next request
                    self._stamp = stamp
        return self._opened

    def _look(self) -> tuple[int, int, int] | None:
        try:
            found = os.stat(self._file)
        except OSError:
            return None
        return found.st_ino, found.st_mtime_ns, found.st_size


class Shelf:
    """All atlases of one server, by name.

    Parameters
    ----------
    paths
        Atlas folders. An atlas is named after its folder, without ``.atlas``; equal names get a number.

    Raises
    ------
    InputError
        If a path is not an atlas, or none is given.
    """

    def __init__(self, paths: Iterable[str | Path]) -> None:
        self._served: dict[str, Served] = {}
        taken = set(RESERVED)
        seen = set()
        for path in map(Path, paths):
            place = path.resolve()
            if place in seen:
                continue
            seen.add(place)
            if not (place / "atlas.json").is_file():
                raise InputError(f"{path} is not an atlas: there is no atlas.json in it")
            name = base = place.name.removesuffix(".atlas") or "atlas"
            number = 2
            while name in taken:
                name, number = f"{base}-{number}", number + 1
            taken.add(name)
            self._served[name] = Served(name, place)
        if not self._served:
            raise InputError("nothing to serve: name at least one atlas folder")

    def __iter__(self) -> Iterator[Served]:
        return iter(self._served.values())

    def get(self, name: str) -> Served | None:
        return self._served.get(name)

    def __contains__(self, name: str) -> bool:
        return name in self._served
