"""Particle files in, chunks of particles in plain units out.

Lengths come in comoving Mpc, masses in Msun, velocities in km/s, temperatures in K, energies per mass in km2/s2, rates of
mass in Msun/yr, all without h; what has another dimension in cgs. On a flat chart positions and radii are in its unit.
"""

from __future__ import annotations

from collections.abc import Iterator

from tilemap.buildfile import DERIVED, BuildFile, Field
from tilemap.errors import InputError
from tilemap.sources.reader import Reader, find_files, kind_of
from tilemap.sources.source import Chunk, Facts, Source

__all__ = ["Chunk", "Facts", "Source", "open_source"]


def open_source(build: BuildFile) -> Source:
    """Open the snapshot of a build file and check all that can be checked without reading the particles.

    Raises
    ------
    InputError
        One line: files that are missing or damaged, datasets that are not there, units that are missing or wrong.
    """
    snapshot = build.snapshot
    if snapshot.files is None:
        raise InputError(f"{build.path}: it has several epochs: open one of BuildFile.each_epoch()")
    files = find_files(snapshot.files, build.folder)
    kinds = {snapshot.kind or kind_of(path) for path in files}
    if len(kinds) > 1:
        raise InputError(
            f"{build.path}: snapshot.files are of different kinds ({', '.join(sorted(kinds))}): name one kind"
        )
    reader = _reader_class(kinds.pop())(files, _datasets(build))
    try:
        return Source(build, reader)
    except InputError as error:
        raise InputError(f"{build.path}: {error}") from error


def _reader_class(kind: str) -> type[Reader]:
    if kind == "hdf5":
        from tilemap.sources.hdf5 import Hdf5Reader

        return Hdf5Reader
    if kind == "arrays":
        from tilemap.sources.arrays import ArrayReader

        return ArrayReader
    from tilemap.sources.tables import TableReader

    return TableReader


def _datasets(build: BuildFile) -> list[str]:
    """Every dataset that the build file names, once."""
    names: dict[str, None] = {}
    for species in build.snapshot.species.values():
        smoothing = species.smoothing.field
        fields = [species.position, species.mass, smoothing, *species.fields.values()]
        for field in fields:
            names.update(dict.fromkeys(_named(field)))
    return list(names)


def _named(field: Field | None) -> Iterator[str]:
    """The datasets of a field, and of those that it is worked out from."""
    if field is not None:
        yield from field.dataset or ()
        for key in (*DERIVED, "electrons"):
            yield from _named(getattr(field, key))
