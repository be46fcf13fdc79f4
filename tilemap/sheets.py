"""The sheets of a build file in, plans of what has to be drawn for them out; and what atlas.json says of each."""

from __future__ import annotations

from typing import Any

import astropy.units as u

from tilemap.buildfile import BuildFile, Sheet
from tilemap.channels import Plane, SheetPlan, SpeciesPlan
from tilemap.errors import InputError
from tilemap.pyramid.coding import Coding
from tilemap.sources import Source


def plan_species(build: BuildFile, source: Source, pixel: float) -> list[SpeciesPlan]:
    """One plan for each species, or several that sheets draw together, in the order of the build file.

    Parameters
    ----------
    build : BuildFile
    source : Source
    pixel : float
        Side of a pixel in the view's unit.

    Raises
    ------
    InputError
        Where a sheet's unit does not fit what it projects.
    """
    plans = []
    groups = {sheet.label: sheet.species for sheet in build.sheets.values()}
    for label, species in groups.items():
        sheets = {name: sheet for name, sheet in build.sheets.items() if sheet.label == label}
        quantities: list[Plane] = []

        def number(plane: Plane, quantities: list[Plane] = quantities) -> int:
            if plane not in quantities:
                quantities.append(plane)
            return quantities.index(plane)

        made = []
        for name, sheet in sheets.items():
            factor, total_unit = _factor(build, source, name, sheet, pixel)
            if sheet.summed is not None:
                made.append(SheetPlan(name, sheet, number(Plane(sheet.summed)), None, factor, total_unit))
                continue
            averaged, weighting = quantity(build, sheet), build.sheets[str(weight_of(build, sheet))].sum
            assert weighting is not None
            weight, mean = number(Plane(weighting)), number(Plane(weighting, averaged))
            if sheet.dispersion is None:
                made.append(SheetPlan(name, sheet, mean, weight, factor, total_unit))
            else:
                square = number(Plane(weighting, averaged, squared=True))
                made.append(SheetPlan(name, sheet, square, weight, factor, total_unit, mean))
        plans.append(SpeciesPlan(label, quantities, made, tuple(species)))
    return plans


def quantity(build: BuildFile, sheet: Sheet) -> str:
    """The field, mass or count that a sheet shows."""
    return str(sheet.summed or sheet.mean or build.sheets[str(sheet.dispersion)].mean)


def weight_of(build: BuildFile, sheet: Sheet) -> str | None:
    """The sum sheet that a sheet is weighted by; None for sums."""
    return build.sheets[sheet.dispersion].weight if sheet.dispersion is not None else sheet.weight


def _factor(build: BuildFile, source: Source, name: str, sheet: Sheet, pixel: float) -> tuple[float, str]:
    unit = u.Unit(sheet.unit)
    shown = quantity(build, sheet)
    plain = source.unit(sheet.species[0], shown)
    for other in sheet.species[1:]:
        if source.unit(other, shown) != plain:
            raise InputError(
                f"{build.path}: sheets.{name}: {shown} is in {plain or 'no unit'} for {sheet.species[0]} and in "
                f"{source.unit(other, shown) or 'no unit'} for {other}: one sheet has one unit"
            )
    per = plain
    if sheet.summed is not None:
        side = pixel * u.Unit(build.view.unit)
        if sheet.area == "proper":
            redshift = source.facts.redshift
            if redshift is None:
                raise InputError(f"sheet {name}: area is proper, and the redshift is not known: give snapshot.redshift")
            side = side / (1.0 + redshift)
        per = plain / side**2
    try:
        factor = float((1.0 * per).to_value(unit))
    except u.UnitConversionError:
        area = "kpc2" if not build.view.flat else f"{build.view.unit}2"
        named = str(plain) or "no unit of its own"
        raise InputError(
            f"{build.path}: sheets.{name}.unit is {sheet.unit}: {shown} of {sheet.label} has {named}, "
            + (f"so a sum needs one such as {plain / u.Unit(area)}" if sheet.summed else "or one like it: write that, ")
            + (
                ""
                if sheet.summed
                else f"or say in snapshot.species.{sheet.species[0]}.fields what unit the field is in"
            )
        ) from None
    return factor, str(plain) if plain != u.dimensionless_unscaled else ""


def describe_sheet(
    build: BuildFile, plan: SheetPlan, coding: Coding, totals: list[float], floor: float | None = None
) -> dict[str, Any]:
    """The entry of a sheet in atlas.json, without what only the finished pyramid knows (percentiles and range).

    A dispersion also names its mean sheet and says below which `floor` it is not to be told from zero.
    """
    sheet = plan.sheet
    more = {} if sheet.dispersion is None else {"mean": sheet.dispersion, "floor": floor or 0.0}
    return {
        "name": plan.name,
        "title": sheet.title or plan.name.replace("_", " ").replace("-", " ").capitalize(),
        "kind": sheet.kind,
        "species": sheet.label,
        "quantity": quantity(build, sheet),
        "weight": weight_of(build, sheet),
        **more,
        **coding.attributes(),
        "unit": u.Unit(sheet.unit).to_string(),
        "area": sheet.area,
        "total": sum(totals) if plan.weight is None else None,
        "total_unit": plan.total_unit if plan.weight is None else None,
        "totals": totals if plan.weight is None else None,
    }
