"""A build file in, a published atlas out: the rooms one after another.

Everything is written in a folder beside the target and gets its name by one rename. What goes wrong leaves no atlas; a
build that was stopped is taken up again by the same call.
"""

from __future__ import annotations

import hashlib
import json
import platform
import shutil
from dataclasses import dataclass
from datetime import UTC, datetime
from importlib import metadata
from os import PathLike
from pathlib import Path
from typing import Any

import numpy as np

from tilemap import buildfile
from tilemap.budget import Budget, check_memory, check_scratch, chunk_size, make_budget
from tilemap.buildfile import BuildFile
from tilemap.channels import Report, SpeciesPlan
from tilemap.cosmology import scale_factor
from tilemap.draw import SpeciesDrawing
from tilemap.epochs import check_one_view, epoch_names
from tilemap.errors import InputError
from tilemap.layout import describe_view, make_camera
from tilemap.project.camera import Camera
from tilemap.project.scatter import Plan, make_plan
from tilemap.pyramid.grid import TILE, level_shapes
from tilemap.pyramid.publish import FORMAT, check_target, file_sha256, publish
from tilemap.pyramid.store import create_group, write_whole
from tilemap.quantities import span
from tilemap.reading import Reading
from tilemap.runners.local import LocalRunner, usable_cores
from tilemap.sheets import plan_species
from tilemap.sizes import byte_count, half_of_free
from tilemap.sources import Facts, Source, open_source
from tilemap.workplace import Workplace, workplace

FORMAT_VERSION = 1
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
        Most memory to use, in bytes or as "4GiB", half of what is free if not given: particles that do not fit wait on scratch disk, beside `out`. A build
        that needs more even so is refused before it starts.
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
    jobs, names = _plan_all(build, workers or usable_cores(), memory)
    budgets = [budget for job in jobs for budget in job.budgets]
    now = datetime.now(UTC).isoformat(timespec="microseconds")
    with workplace(target, _key(jobs), now, lambda folder: check_scratch(budgets, folder)) as place:
        with LocalRunner(workers) as runner:  # its workers end before the place is given up
            inputs = runner.begin(lambda: [file for job in jobs for file in _inputs(job.build, job.source.facts)])
            create_group(place.atlas)
            view = describe_view(build, jobs[0].camera)
            epochs = []
            for name, job in zip(names, jobs, strict=True):
                create_group(place.atlas / name)
                epoch = _epoch(name, job.source.facts)
                if job.build.catalogue is not None:
                    from tilemap.catalogue.ingest import ingest

                    folder = "catalogue" if len(jobs) == 1 else f"catalogue/{name}"
                    epoch["catalogue"] = ingest(job.build.catalogue, build.folder, view, place.atlas, folder)
                epoch["sheets"] = _sheets(job, place, name, runner, progress)
                epochs.append(epoch)
            progress("publishing", 0, 1)
            description = _describe(build, jobs[0].camera, jobs[0].plan, view, epochs, inputs.result(), place.begun)
            (place.atlas / "atlas.json").write_text(
                json.dumps(description, indent=1, allow_nan=False), encoding="utf-8"
            )
            published = publish(place.atlas, target)
            progress("publishing", 1, 1)
    return published


def foresee_build(
    build_file: str | PathLike[str], workers: int | None = None, memory: int | str | None = None
) -> list[str]:
    """What `build_atlas` would do, a line for each thing: particles, pixels, memory, scratch disk, expected time.

    Parameters, and what is raised, as for `build_atlas`; nothing is written, and no particle is read.
    """
    from tilemap.foresee import Species, expected_seconds, machine_speed, told

    workers = workers or usable_cores()
    jobs, _ = _plan_all(buildfile.load(Path(build_file)), workers, memory)
    plan = jobs[0].plan
    species = [
        Species(
            planes.species,
            sum(map(job.source.count, planes.parts)),
            len(planes.quantities),
            len(planes.sheets),
            _searches(job.build, planes),
            budget,
        )
        for job in jobs
        for planes, budget in zip(job.species, job.budgets, strict=True)
    ]
    return told(plan, species, len(jobs), workers, expected_seconds(plan, species, workers, machine_speed()))


@dataclass(frozen=True)
class _Job:
    """One epoch's inputs, and how they are seen and worked on."""

    build: BuildFile
    source: Source
    camera: Camera
    plan: Plan
    species: list[SpeciesPlan]
    budgets: list[Budget]


def _plan_all(build: BuildFile, workers: int, memory: int | str | None) -> tuple[list[_Job], list[str]]:
    """Every epoch's job, and its name."""
    asked = None if memory is None else byte_count(memory)
    # What is free decides where particles wait, which changes no byte; how many are read at a time might change one.
    limit, chunk = asked or half_of_free(), chunk_size(asked)
    jobs = [_plan(each, workers, limit, chunk) for each in build.each_epoch()]
    names = epoch_names([job.build for job in jobs], [job.source.facts.redshift for job in jobs])
    check_one_view([job.build for job in jobs], names, [job.camera for job in jobs])
    check_memory([budget for job in jobs for budget in job.budgets], asked)
    return jobs, names


def _searches(build: BuildFile, planes: SpeciesPlan) -> bool:
    """Whether support radii have to be found."""
    return any(build.snapshot.species[each].smoothing.neighbours is not None for each in planes.parts)


def _plan(build: BuildFile, workers: int, limit: int | None, chunk: int) -> _Job:
    source = open_source(build)
    facts = source.facts
    camera = make_camera(build, facts)
    level_shapes(camera.rows, camera.columns)
    plan = make_plan(camera.columns, camera.rows, camera.slabs)
    species = plan_species(build, source, camera.pixel)
    budgets = [
        make_budget(
            plan,
            sum(map(source.count, planes.parts)),
            len(planes.quantities),
            len(planes.fields),
            len(planes.sheets),
            workers,
            limit,
            chunk,
            _searches(build, planes),
            camera.volume / float(np.prod(facts.box)) if facts.periodic and facts.box is not None else 1.0,
        )
        for planes in species
    ]
    return _Job(build, source, camera, plan, species, budgets)


def _key(jobs: list[_Job]) -> dict[str, Any]:
    """All that decides the bytes of an atlas, the code apart."""
    files = [path.stat() for job in jobs for path in job.source.facts.files]
    return {
        "build_file": jobs[0].build.text,
        "versions": {name: _version(name) for name in _REPORTED},
        "inputs": [[stat.st_size, stat.st_mtime_ns] for stat in files],
        "chunks": [budget.chunk for job in jobs for budget in job.budgets],
    }


def _sheets(job: _Job, place: Workplace, epoch: str, runner: LocalRunner, progress: Report) -> list[dict[str, Any]]:
    """Make every sheet of an epoch that is not made yet; their entries in atlas.json."""
    entries: list[dict[str, Any]] = []
    in_view = 0
    for planes, budget in zip(job.species, job.budgets, strict=True):
        work = place.work / epoch / planes.species
        work.mkdir(parents=True, exist_ok=True)
        done = work / "sheets.json"
        if not done.exists():
            made = _species(job, planes, budget, place.atlas / epoch, work, runner, progress)
            write_whole(done, json.dumps(made, allow_nan=False).encode())
            _clear(work, done)
        made = json.loads(done.read_bytes())
        in_view += made["records"]
        entries += made["sheets"]
    if in_view == 0:
        build = job.build
        shutil.rmtree(place.work / epoch)  # nothing to go on from
        raise InputError(f"{build.path}: view: no particle lies in it; {_where(build, job.camera, job.source.facts)}")
    order = list(job.build.sheets)
    return sorted(entries, key=lambda sheet: order.index(sheet["name"]))


def _species(
    job: _Job, planes: SpeciesPlan, budget: Budget, folder: Path, work: Path, runner: LocalRunner, progress: Report
) -> dict[str, Any]:
    """Make the sheets of one species; in a function of its own, so that nothing of it is held when the next is read."""
    reading = Reading(job.build, job.source, job.camera, job.plan, planes, budget, runner, progress, work)
    buckets, sums = reading.read()
    drawing = SpeciesDrawing(job.build, job.plan, planes, buckets, runner, progress, work)
    return {"sheets": drawing.write(folder, sums), "records": int(buckets.runs.counts.sum())}


def _clear(work: Path, done: Path) -> None:
    """Take away all that is in a folder but one file."""
    for path in work.iterdir():
        if path != done:
            shutil.rmtree(path) if path.is_dir() else path.unlink()


def _epoch(name: str, facts: Facts) -> dict[str, Any]:
    z, cosmology = facts.redshift, facts.cosmology
    timed = z is not None and cosmology is not None
    # At redshift zero an arcsecond spans nothing.
    seen = timed and z is not None and z > 0
    return {
        "name": name,
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
    epochs: list[dict[str, Any]],
    inputs: list[dict[str, Any]],
    begun: str,
) -> dict[str, Any]:
    provenance = {
        "build_file": build.text,
        "versions": {"python": platform.python_version()} | {name: _version(name) for name in _REPORTED},
        "inputs": inputs,
        "built": begun,
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
        "epochs": epochs,
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
