"""Particle files in, a page of text out for the person who holds them: what is in here, in which units, how much."""

from __future__ import annotations

import os
from collections.abc import Sequence
from pathlib import Path

import astropy.units as u
import numpy as np

from tilemap.cosmology import scale_factor
from tilemap.sources.draft import draft
from tilemap.sources.survey import Seen, SeenGroup, Survey, survey
from tilemap.sources.units import Stated, plain_unit, tidy, unit_by_name

__all__ = ["draft", "probe"]

_KIND_TEXT = {"hdf5": "HDF5", "arrays": "NumPy arrays", "table": "table"}


def probe(files: Sequence[str | Path]) -> str:
    """Describe what is in particle files.

    Parameters
    ----------
    files : sequence of str or Path
        Files of one kind; globs are allowed, and one part of a snapshot finds the others beside it.

    Returns
    -------
    str
        Lines for a person: files, box, moment, cosmology, and each dataset with shape, type, unit and range.

    Raises
    ------
    InputError
        Files that are missing or damaged.
    """
    seen = survey(files)
    lines = [_files_line(seen), *_fact_lines(seen)]
    for group in seen.groups:
        lines += ["", *_group_lines(group, seen.kind)]
    return "\n".join(lines) + "\n"


def _files_line(seen: Survey) -> str:
    size = sum(os.path.getsize(path) for path in seen.files)
    names = seen.files[0].name if len(seen.files) == 1 else f"{seen.files[0].name} to {seen.files[-1].name}"
    files = "1 file" if len(seen.files) == 1 else f"{len(seen.files)} files"
    return f"{files}, {_KIND_TEXT[seen.kind]}, {_bytes(size)}: {names}"


def _bytes(size: float) -> str:
    for unit in ("bytes", "kB", "MB", "GB"):
        if size < 1000:
            return f"{size:.0f} {unit}" if unit == "bytes" else f"{size:.3g} {unit}"
        size /= 1000
    return f"{size:.3g} TB"


def _fact_lines(seen: Survey) -> list[str]:
    header = seen.header
    lines = []
    if header.box is not None:
        first = next((each for group in seen.groups if (each := group.find("coordinate", "position"))), None)
        unit = f" {unit_text(first)}" if first is not None else ""
        lines.append(f"box: {' x '.join(f'{side:g}' for side in header.box)}{unit}")
    if header.redshift is not None:
        age = f", {header.cosmology.age_gyr(header.redshift):.3g} Gyr after the beginning" if header.cosmology else ""
        lines.append(f"moment: redshift {header.redshift:.6g}, scale factor {scale_factor(header.redshift):.6g}{age}")
    if header.cosmology is not None:
        lines.append("cosmology: " + ", ".join(f"{key} {value:g}" for key, value in header.cosmology.as_dict().items()))
    if seen.kernel is not None:
        lines.append(f"smoothing kernel: {seen.kernel}")
    if seen.kind == "hdf5" and header.redshift is None:
        lines.append("moment: these files give no redshift")
    return lines


def _group_lines(group: SeenGroup, kind: str) -> list[str]:
    what = {"hdf5": "particles", "arrays": "rows", "table": "rows"}[kind]
    title = f"{group.name}: {group.rows:,} {what}" if group.name else f"{group.rows:,} {what}"
    if group.table_mass is not None:
        title += f", each of mass {group.table_mass:g} (MassTable, as stored)"
    rows = [
        (
            seen.last if group.name else seen.name,
            _shape(seen),
            seen.dtype,
            unit_text(seen),
            _range(seen),
            seen.description,
        )
        for seen in group.datasets
    ]
    widths = [max(len(row[column]) for row in rows) for column in range(5)]
    return [
        title,
        *(
            "  " + "  ".join(cell.ljust(width) for cell, width in zip(row, [*widths, 0], strict=True)).rstrip()
            for row in rows
        ),
    ]


def _shape(seen: Seen) -> str:
    return f"{seen.rows}" if seen.width is None else f"{seen.rows} x {seen.width}"


def _range(seen: Seen) -> str:
    return "" if seen.range is None else f"{seen.range[0]:.4g} to {seen.range[1]:.4g}"


def unit_text(seen: Seen) -> str:
    """The unit in which the numbers are stored, with the powers of a and h that make them physical."""
    stated: Stated = seen.stated
    if stated.factor is None:
        return "unit not said"
    unit = stated.unit if stated.unit is not None else unit_by_name(seen.name)
    if unit is None:
        return f"{stated.factor:g} in cgs"
    if isinstance(unit, u.UnrecognizedUnit):
        return f"{unit} (unknown)"
    plain = plain_unit(unit, seen.name)
    factor = tidy(stated.factor * float(unit.to(plain)))
    number = "" if factor == 1.0 else f"{_short_number(factor)} "
    powers = [
        f"{name}^{power:g}" if power != 1 else name for name, power in (("a", stated.a), ("h", stated.h)) if power
    ]
    return " ".join(
        [f"{number}{plain.to_string() or 'pure number'}".replace(" / ", "/").replace("solMass", "Msun"), *powers]
    )


def _short_number(factor: float) -> str:
    """Few digits: parsecs and solar masses differ from code to code in the seventh."""
    power = np.log10(factor)
    return f"1e{round(power)}" if abs(power - round(power)) < 1e-6 and abs(power) >= 3 else f"{factor:.6g}"
