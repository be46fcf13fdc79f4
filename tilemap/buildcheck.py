"""Mistakes in a build file, each put into one sentence: where, what was found, what would be right."""

from __future__ import annotations

from collections.abc import Iterable
from types import UnionType
from typing import TYPE_CHECKING, Annotated, Any, Union, get_args, get_origin

import pydantic
import yaml

from tilemap.errors import InputError
from tilemap.quantities import suggestion, unit_named

if TYPE_CHECKING:
    from tilemap.buildfile import BuildFile, Sheet

TILE = 512


class BuildLoader(yaml.SafeLoader):
    """YAML as PyYAML reads it safely, but a key that is written twice is refused instead of the first one lost."""

    def construct_mapping(self, node: yaml.MappingNode, deep: bool = False) -> dict[Any, Any]:
        seen = set()
        for key_node, _ in node.value:
            if isinstance(key_node, yaml.ScalarNode) and key_node.tag != "tag:yaml.org,2002:merge":
                if key_node.value in seen:
                    raise yaml.MarkedYAMLError(
                        problem=f"key {key_node.value!r} is written twice", problem_mark=key_node.start_mark
                    )
                seen.add(key_node.value)
        return super().construct_mapping(node, deep)


def sentence(error: yaml.YAMLError | pydantic.ValidationError, model: type[pydantic.BaseModel] | None = None) -> str:
    """The first thing that is wrong, with its line (YAML) or its key path (schema), and how many more there are."""
    if isinstance(error, yaml.MarkedYAMLError):
        mark = error.problem_mark or error.context_mark
        where = f"line {mark.line + 1}, column {mark.column + 1}: " if mark else ""
        return f"{where}not YAML as it should be: {error.problem or error.context}"
    if isinstance(error, yaml.YAMLError):
        return f"not YAML as it should be: {' '.join(str(error).split())}"
    # An unknown key explains a missing one ("wieght" and no weight), so it is told first.
    problems = sorted(error.errors(include_url=False), key=lambda each: each["type"] != "extra_forbidden")
    more = f" (and {len(problems) - 1} more like this)" if len(problems) > 1 else ""
    return _tell(problems[0], model) + more


def _tell(problem: Any, model: type[pydantic.BaseModel] | None) -> str:
    place = problem["loc"]
    path = ".".join(str(part) for part in place if part != "[key]") or "the file"
    found = problem["input"]
    match problem["type"]:
        case "extra_forbidden":
            return f"{path}: unknown key {place[-1]!r}: {suggestion(place[-1], _known_keys(model, place[:-1]))}"
        case "missing":
            return f"{path}: this key is missing"
        case "value_error":
            return f"{path}: {problem['ctx']['error']}"
        case "literal_error":
            return f"{path}: {found!r} is not one of {problem['ctx']['expected'].replace(chr(39), '')}"
        case "string_pattern_mismatch":
            return f"{path}: {found!r} cannot be a name: use letters, digits, and . _ - after the first"
        case "model_type" | "model_attributes_type" | "dict_type":
            return (
                f"{path}: found {found!r} where keys are wanted: {', '.join(_known_keys(model, place)) or 'name: ...'}"
            )
        case "list_type" | "tuple_type":
            return f"{path}: found {found!r} where a list is wanted"
        case "too_short":
            return f"{path}: nothing is listed here: give at least {problem['ctx']['min_length']}"
        case "string_type":
            return f"{path}: found {found!r} where text is wanted: put it in quotes if it is a name"
        case "float_parsing" | "float_type" | "int_parsing" | "int_type" | "int_from_float":
            return f"{path}: found {found!r} where a {'whole ' if 'int' in problem['type'] else ''}number is wanted"
        case "bool_parsing" | "bool_type":
            return f"{path}: found {found!r} where true or false is wanted"
        case _:
            message = problem["msg"]
            return f"{path}: found {found!r}: {message[0].lower()}{message[1:]}"


def _known_keys(model: type[pydantic.BaseModel] | None, place: Iterable[Any]) -> list[str]:
    """The keys that the schema has at a place: follow the path through models, dictionaries and lists."""
    here: Any = model
    for part in place:
        if isinstance(here, type) and issubclass(here, pydantic.BaseModel):
            field = here.model_fields.get(str(part))
            here = field.annotation if field is not None else None
        else:
            # a dictionary of models or a list: the part is a name or a place in it
            here = get_args(here)[-1] if get_args(here) else None
        here = _without_none(here)
    return list(here.model_fields) if isinstance(here, type) and issubclass(here, pydantic.BaseModel) else []


def _without_none(annotation: Any) -> Any:
    """What an optional or annotated type holds."""
    while get_origin(annotation) in (Union, UnionType, Annotated):
        annotation = next(each for each in get_args(annotation) if each is not type(None))
    return annotation


def check_whole(build: BuildFile) -> None:
    """What no single key can know: sheets name species, fields and weights that exist; the picture is whole tiles.

    Raises
    ------
    InputError
        The key path, what it names, and the nearest that exists.
    """
    for name, sheet in build.sheets.items():
        _check_sheet(build, name, sheet)
    _check_view(build)
    _check_epochs(build)


def _check_sheet(build: BuildFile, name: str, sheet: Sheet) -> None:
    here, kind = f"sheets.{name}", sheet.kind
    _check_species(build, here, sheet)
    same = {other: each for other, each in build.sheets.items() if each.label == sheet.label}
    if kind == "dispersion":
        means = [other for other, each in same.items() if each.mean is not None]
        if sheet.dispersion not in means:
            what = (
                "is no sheet" if sheet.dispersion not in build.sheets else f"is not a mean of species {sheet.label!r}"
            )
            near = suggestion(str(sheet.dispersion), means) if means else "add one, such as mean: velocity"
            raise InputError(f"{here}.dispersion: {sheet.dispersion!r} {what}: {near}")
        unit = build.sheets[sheet.dispersion].unit
        if unit_named(sheet.unit) != unit_named(unit):
            raise InputError(f"{here}.unit is {sheet.unit}: a dispersion has the unit of its mean sheet, {unit}")
        return
    quantity = str(getattr(sheet, kind))
    for each in sheet.species:
        _check_quantity(build, f"{here}.{kind}", each, quantity)
    if kind != "mean":
        return
    if quantity == "count":
        raise InputError(f"{here}.mean: the mean of a count is always one: use sum: count")
    fitting = [other for other, each in same.items() if each.sum is not None]
    if sheet.weight not in fitting:
        what = "is no sheet" if sheet.weight not in build.sheets else f"is not a sum sheet of species {sheet.label!r}"
        near = suggestion(str(sheet.weight), fitting) if fitting else f"add one, such as sum: mass of {sheet.label}"
        raise InputError(f"{here}.weight: {sheet.weight!r} {what}: {near}")


def _check_species(build: BuildFile, here: str, sheet: Sheet) -> None:
    known = build.snapshot.species
    if not sheet.species:
        raise InputError(f"{here}.species: nothing is listed here: give one of {', '.join(known)}, or several")
    for each in sheet.species:
        if each not in known:
            raise InputError(f"{here}.species: no species {each!r} in snapshot.species: {suggestion(each, known)}")
    if len(set(sheet.species)) < len(sheet.species):
        raise InputError(f"{here}.species: {sheet.label} names one species twice: name each once")
    kernels = {known[each].smoothing.kernel for each in sheet.species}
    if len(kernels) > 1:
        first, *others = sheet.species
        other = next(each for each in others if known[each].smoothing.kernel != known[first].smoothing.kernel)
        raise InputError(
            f"{here}.species: one sheet is drawn with one kernel, and {first} has {known[first].smoothing.kernel}, {other} "
            f"{known[other].smoothing.kernel}: write the same, such as snapshot.species.{other}.smoothing.kernel: "
            f"{known[first].smoothing.kernel}"
        )


def _check_quantity(build: BuildFile, here: str, name: str, quantity: str) -> None:
    species = build.snapshot.species[name]
    known = [*species.fields, "mass", "count"]
    if quantity not in known:
        raise InputError(f"{here}: species {name!r} has no field {quantity!r}: {suggestion(quantity, known)}")
    if quantity == "mass" and species.mass is None:
        raise InputError(f"{here}: species {name!r} has no mass: give snapshot.species.{name}.mass")


def _check_epochs(build: BuildFile) -> None:
    if build.epochs is None:
        if build.snapshot.files is None:
            raise InputError(
                "snapshot.files: this key is missing: name the particle files, or list epochs, each with its own"
            )
        return
    if build.snapshot.files is not None:
        raise InputError("snapshot.files: the epochs name their files: leave it out here")
    if build.catalogue is None:
        for number, epoch in enumerate(build.epochs):
            if epoch.catalogue is not None:
                raise InputError(
                    f"epochs.{number}.catalogue: no section catalogue says what its columns are: add one beside epochs"
                )


def _check_view(build: BuildFile) -> None:
    view = build.view
    if view.flat:
        if view.toward is not None:
            raise InputError(f"view.toward: a chart in {view.unit} cannot be turned: leave it out")
        for key in ("centre", "width"):
            if getattr(view, key) is None:
                raise InputError(f"view.{key}: a chart in {view.unit} has no box to take it from: give {key}")
        if build.snapshot.cosmology is not None or build.snapshot.redshift is not None:
            raise InputError(f"snapshot: a chart in {view.unit} has no redshift and no cosmology: leave them out")
    if isinstance(view.slabs, tuple) and view.depth is not None:
        raise InputError("view.depth: the slab edges already say the depth: leave one of the two out")
    if view.width is not None and view.height is not None:
        rows = view.pixels * view.height / view.width
        whole = max(1, round(rows / TILE)) * TILE
        if abs(rows - whole) > 1e-6 * whole:
            right = view.width * whole / view.pixels
            raise InputError(
                f"view.height: {view.height:g} makes {rows:g} rows, not a multiple of {TILE}: the nearest is {right:.9g}"
            )
