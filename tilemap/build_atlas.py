"""A build file in, a published atlas out: the rooms one after another.

Everything is written in a folder beside the target and gets its name by one rename. What goes wrong leaves no atlas.
"""

from __future__ import annotations

import hashlib
import json
import platform
import shutil
from collections.abc import Iterator
from contextlib import contextmanager
from datetime import UTC, datetime
from importlib import metadata
from os import PathLike
from pathlib import Path
from typing import Any

from tilemap import buildfile
from tilemap.buildfile import BuildFile
from tilemap.channels import Report
from tilemap.cosmology import scale_factor
from tilemap.draw import SpeciesDrawing
from tilemap.errors import InputError
from tilemap.layout import describe_view, make_camera
from tilemap.project.camera import Camera
from tilemap.project.scatter import Plan, make_plan
from tilemap.pyramid.grid import TILE, level_shapes
from tilemap.pyramid.publish import FORMAT, check_target, file_sha256, publish
from tilemap.pyramid.store import create_group
from tilemap.quantities import span
from tilemap.runners.local import LocalRunner
from tilemap.sheets import plan_species
from tilemap.sizes import byte_count
from tilemap.sources import Facts, Source, open_source

FORMAT_VERSION = 1
UNFINISHED = "unfinished.part"
"""Marks the scratch folder of a build; publishing removes it with whatever else ends like this."""
_REPORTED = ("tilemap", "numpy", "numba", "scipy", "h5py", "astropy", "isal", "duckdb")


def _quiet(phase: str, done: float, total: float) -> None:
    """Progress that nobody watches."""


def build_atlas(
    build_file: str | PathLike[str],
    out: str | PathLike[str],
    workers: int | None = None,
    memory: int | str | None = None,
    progress: Report = _quiet,
) -> Path:
    """Build the atlas that a build file describes and publish it at `out`.

    Parameters
    ----------
    build_file : path
    out : path
        The atlas folder. One that is there is replaced when the new one is whole; anything else there is refused.
    workers : int, optional
        Threads; default one for each usable core.
    memory : int or str, optional
        Most memory to use, in bytes or as "4GiB"; a build that needs more is refused before it starts.
    progress : callable, optional
        Called with (phase, done, total) as the work goes on.

    Returns
    -------
    Path
        The published atlas.

    Raises
    ------
    InputError
        One line: what is wrong, where, and what would be right. No atlas is left behind.
    """
    build = buildfile.load(Path(build_file))
    target = Path(out)
    if not target.name:
        raise InputError(f"{target} is no name for an atlas: give the folder to make, such as {build.path.stem}.atlas")
    check_target(target)
    source = open_source(build)
    camera = make_camera(build, source.facts)
    level_shapes(camera.rows, camera.columns)
    plan = make_plan(camera.columns, camera.rows, camera.slabs)
    species = plan_species(build, source, camera.pixel)
    if memory is not None:
        _check_memory(source, plan, species, byte_count(memory))
    with _scratch(target) as scratch, LocalRunner(workers) as runner:
        facts = source.facts
        inputs = runner.begin(lambda: _inputs(build, facts))
        create_group(scratch)
        epoch = _epoch(facts, camera)
        create_group(scratch / epoch["name"])
        view = describe_view(build, camera)
        if build.catalogue is not None:
            from tilemap.catalogue.ingest import ingest

            epoch["catalogue"] = ingest(build.catalogue, build.folder, view, scratch)
        in_view = 0
        for planes in species:
            drawing = SpeciesDrawing(build, source, camera, plan, planes, runner, progress)
            records, sums = drawing.read()
            in_view += records
            epoch["sheets"] += drawing.write(scratch / epoch["name"], sums)
        if in_view == 0:
            raise InputError(f"{build.path}: view: no particle lies in it; {_where(build, camera, facts)}")
        order = list(build.sheets)
        epoch["sheets"].sort(key=lambda sheet: order.index(sheet["name"]))
        progress("publishing", 0, 1)
        description = _describe(build, camera, plan, view, epoch, inputs.result())
        (scratch / "atlas.json").write_text(json.dumps(description, indent=1, allow_nan=False), encoding="utf-8")
        published = publish(scratch, target)
        progress("publishing", 1, 1)
    return published


@contextmanager
def _scratch(target: Path) -> Iterator[Path]:
    """A folder beside the target, gone again unless it was published; one that a stopped build left is taken over."""
    folder = target.with_name(f"{target.name}.part")
    mark = folder / UNFINISHED
    if folder.exists():
        if not mark.exists():
            raise InputError(f"{folder} is in the way and not left by a build: move it, or name another atlas")
        shutil.rmtree(folder)
    folder.mkdir()
    mark.touch()
    try:
        yield folder
    finally:
        shutil.rmtree(folder, ignore_errors=True)


def _epoch(facts: Facts, camera: Camera) -> dict[str, Any]:
    z, cosmology = facts.redshift, facts.cosmology
    timed = z is not None and cosmology is not None
    # At redshift zero an arcsecond spans nothing.
    seen = timed and z is not None and z > 0
    return {
        "name": "now" if z is None else f"z{z:.2f}",
        "redshift": z,
        "scale_factor": None if z is None else scale_factor(z),
        "age_gyr": cosmology.age_gyr(z) if timed else None,  # type: ignore[union-attr, arg-type]
        "kpc_per_arcsec_comoving": cosmology.kpc_per_arcsec_comoving(z) if seen else None,  # type: ignore[union-attr, arg-type]
        "kpc_per_arcsec_proper": cosmology.kpc_per_arcsec_proper(z) if seen else None,  # type: ignore[union-attr, arg-type]
        "cosmology": None if cosmology is None else cosmology.as_dict(),
        "sheets": [],
        "catalogue": None,
    }


def _describe(
    build: BuildFile,
    camera: Camera,
    plan: Plan,
    view: dict[str, Any],
    epoch: dict[str, Any],
    inputs: list[dict[str, Any]],
) -> dict[str, Any]:
    provenance = {
        "build_file": build.text,
        "versions": {"python": platform.python_version()} | {name: _version(name) for name in _REPORTED},
        "inputs": inputs,
        "built": datetime.now(UTC).isoformat(timespec="microseconds"),
    }
    return {
        "format": FORMAT,
        "version": FORMAT_VERSION,
        "id": hashlib.sha256(json.dumps(provenance).encode()).hexdigest()[:16],
        "title": build.title,
        "about": build.about,
        "tile": TILE,
        "levels": plan.levels,
        "pixels": [camera.columns, camera.rows],
        "view": view,
        "slabs": [float(edge) for edge in camera.edges],
        "epochs": [epoch],
        "provenance": provenance,
    }


def _inputs(build: BuildFile, facts: Facts) -> list[dict[str, Any]]:
    """Name, length and checksum of every file that goes in."""
    files = [*facts.files, *([build.folder / build.catalogue.file] if build.catalogue else [])]
    return [{"file": path.name, "bytes": path.stat().st_size, "sha256": file_sha256(path)} for path in files]


def _version(name: str) -> str | None:
    try:
        return metadata.version(name)
    except metadata.PackageNotFoundError:
        return None


def _where(build: BuildFile, camera: Camera, facts: Facts) -> str:
    unit = build.view.unit
    text = f"it covers {span(*camera.u)}, {span(*camera.v)} and {span(*camera.depth)} {unit} deep"
    if facts.box is not None:
        text += f", the box is {' x '.join(f'{side:.6g}' for side in facts.box)} {unit}"
    return text


def _check_memory(source: Source, plan: Plan, species: list[Any], limit: int) -> None:
    """Refuse a build that would pass the limit: particles in buckets, coarse images twice, a region for each worker."""
    worst = 0.0
    for planes in species:
        channels = len(planes.quantities)
        particles = source.count(planes.species) * 4 * (3 + channels) * 1.3
        stacks = 2 * (plan.slabs + 1) * channels * 4 * plan.size(plan.local)[0] * plan.size(plan.local)[1]
        regions = 4 * 3 * channels * 4 * plan.region_px**2
        worst = max(worst, particles + stacks + regions)
    needed = int(worst * 1.2) + (400 << 20)
    if needed > limit:
        raise InputError(
            f"--memory is {limit / 2**30:.3g} GiB, and this build needs about {needed / 2**30:.3g} GiB: allow that much, "
            "or ask for fewer pixels or slabs"
        )
