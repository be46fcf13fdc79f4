"""The build file: YAML in, a checked `BuildFile` out, its attributes named as the keys are.

Lengths come out as plain numbers in the unit of the view (Mpc unless a chart in degrees or the like is drawn).
How a mistake is put into a sentence is in `buildcheck`.
"""

from __future__ import annotations

import itertools
from pathlib import Path
from typing import Annotated, Any, Literal

import astropy.units as u
import pydantic
import yaml
from pydantic import BaseModel, BeforeValidator, ConfigDict, PrivateAttr, ValidationInfo

from tilemap.buildcheck import BuildLoader, check_whole, sentence
from tilemap.errors import InputError
from tilemap.quantities import nearest, number_in, split_quantity, unit_named

KERNEL_NAMES = ("cubic", "quartic", "quintic", "wendland-c2", "wendland-c4", "wendland-c6")
TILE = 512


def _length(value: Any, info: ValidationInfo) -> float:
    unit: u.UnitBase = (info.context or {}).get("unit", u.Mpc)
    return _sayable(number_in, value, unit, "length" if unit.is_equivalent(u.Mpc) else "angle")


def _positive_length(value: Any, info: ValidationInfo) -> float:
    number = _length(value, info)
    if number <= 0:
        raise ValueError(f"{value!r}: it must be above zero")
    return number


def _mass(value: Any) -> float:
    number = _sayable(number_in, value, u.Msun, "mass")
    if number < 0:
        raise ValueError(f"{value!r}: a mass may not be negative")
    return number


def _unit_text(value: Any) -> Any:
    if isinstance(value, str):
        _sayable(unit_named, value)
    return value


def _sayable(function: Any, *arguments: Any) -> Any:
    """Call, with InputError turned into the ValueError that pydantic collects together with the key path."""
    try:
        return function(*arguments)
    except InputError as error:
        raise ValueError(str(error)) from error


def _kernel(value: Any) -> Any:
    if value not in KERNEL_NAMES:
        close = nearest(str(value), KERNEL_NAMES)
        hint = f"the nearest is {close!r}; " if close else ""
        raise ValueError(f"unknown kernel {value!r}: {hint}the kernels are {', '.join(KERNEL_NAMES)}")
    return value


def _one_or_more(value: Any) -> Any:
    return [value] if isinstance(value, str | int | float) else value


def _box(value: Any, info: ValidationInfo) -> Any:
    sides = value if isinstance(value, list | tuple) else [value] * 3
    if len(sides) != 3:
        raise ValueError(f"{len(sides)} sides are given: a box has one length or three")
    return tuple(_positive_length(side, info) for side in sides)


def _centre(value: Any, info: ValidationInfo) -> Any:
    if not isinstance(value, list | tuple) or len(value) not in (2, 3):
        raise ValueError(f"{value!r}: write three lengths, [x, y, z], or two for a flat chart")
    return tuple(_length(number, info) for number in [*value, 0.0][:3])


def _slabs(value: Any, info: ValidationInfo) -> Any:
    if isinstance(value, list | tuple):
        edges = tuple(_length(edge, info) for edge in value)
        if len(edges) < 2:
            raise ValueError("a list of slab edges needs at least two of them")
        for lower, upper in itertools.pairwise(edges):
            if upper <= lower:
                raise ValueError(f"slab edges must increase, but {upper:g} follows {lower:g}")
        return edges
    if isinstance(value, bool) or not isinstance(value, int) or value < 1:
        raise ValueError(f"{value!r}: write a count of slabs (1 or more) or a list of increasing depth edges")
    return value


def _pixels(value: Any) -> Any:
    if isinstance(value, bool) or not isinstance(value, int):
        raise ValueError(f"{value!r}: write a whole number of pixels, a multiple of {TILE}")
    if value < TILE or value % TILE:
        raise ValueError(f"{value} is not a multiple of {TILE}: the nearest is {max(1, round(value / TILE)) * TILE}")
    return value


Length = Annotated[float, BeforeValidator(_length)]
PositiveLength = Annotated[float, BeforeValidator(_positive_length)]
UnitText = Annotated[str, BeforeValidator(_unit_text)]
Name = Annotated[str, pydantic.Field(pattern=r"^[A-Za-z0-9][A-Za-z0-9._-]*$")]


class _Keys(BaseModel):
    model_config = ConfigDict(extra="forbid", frozen=True)


class Field(_Keys):
    """Where numbers lie: a dataset (or column, or several), with what the file does not say about its unit.

    Exactly one of `dataset` and `temperature_from` is set.
    """

    dataset: Annotated[list[str], BeforeValidator(_one_or_more)] | None = None
    unit: UnitText | None = None
    a: float | None = None
    h: float | None = None
    column: Annotated[int, pydantic.Field(ge=0)] | None = None
    temperature_from: Field | None = None
    gas: Literal["ionised", "neutral"] | None = None

    @pydantic.model_validator(mode="before")
    @classmethod
    def _short_form(cls, value: Any) -> Any:
        return {"dataset": value} if isinstance(value, str | list) else value

    @pydantic.model_validator(mode="after")
    def _one_kind(self) -> Field:
        self._check_kind()
        return self

    def _check_kind(self) -> None:
        if (self.dataset is None) == (self.temperature_from is None):
            raise ValueError("name a dataset, or temperature_from, and not both")
        if self.dataset is not None and not 1 <= len(self.dataset) <= 3:
            raise ValueError(f"{len(self.dataset)} datasets are named: give one, or two or three for a position")
        if self.gas is not None and self.temperature_from is None:
            raise ValueError("gas: ionised or neutral goes with temperature_from only")


class Mass(Field):
    """The mass of a species: a field, one constant in Msun for every particle, or an entry of the header's MassTable."""

    constant: Annotated[float, BeforeValidator(_mass)] | None = None
    table: Annotated[int, pydantic.Field(ge=0)] | None = None

    @pydantic.model_validator(mode="before")
    @classmethod
    def _constant_form(cls, value: Any) -> Any:
        if isinstance(value, int | float) or (isinstance(value, str) and split_quantity(value) is not None):
            return {"constant": value}
        return value

    def _check_kind(self) -> None:
        given = [key for key in ("dataset", "constant", "table", "temperature_from") if getattr(self, key) is not None]
        if len(given) != 1 or given == ["temperature_from"]:
            raise ValueError("a mass is one dataset, or one constant such as 1.5e6 Msun, or {table: 1}")
        if self.dataset is not None and len(self.dataset) != 1:
            raise ValueError("a mass comes from one dataset")


class Smoothing(_Keys):
    """How wide a particle is: exactly one of `field`, `neighbours` and `radius` is set."""

    field: Field | None = None
    means: Literal["support", "half", "fwhm"] | None = None
    neighbours: Annotated[int, pydantic.Field(ge=1)] | None = None
    radius: PositiveLength | None = None
    kernel: Annotated[str, BeforeValidator(_kernel)] = "cubic"

    @pydantic.model_validator(mode="after")
    def _one_way(self) -> Smoothing:
        if sum(way is not None for way in (self.field, self.neighbours, self.radius)) != 1:
            raise ValueError("give exactly one of field (with means), neighbours and radius")
        if self.field is not None and self.means is None:
            raise ValueError("say what the field means: support (radius where the kernel ends), half of it, or fwhm")
        if self.field is None and self.means is not None:
            raise ValueError("means goes with a field; neighbours and radius always mean the support radius")
        return self


class Species(_Keys):
    """One kind of particle. Without `smoothing` it is 48 neighbours and the cubic kernel."""

    position: Field
    mass: Mass | None = None
    smoothing: Smoothing = Smoothing(neighbours=48)
    fields: dict[Name, Field] = {}

    @pydantic.field_validator("fields")
    @classmethod
    def _own_names(cls, fields: dict[str, Field]) -> dict[str, Field]:
        for name in ("mass", "count"):
            if name in fields:
                raise ValueError(f"{name!r} is there without being listed: give this field another name")
        return fields


class CosmologyKeys(_Keys):
    """The parameters that `tilemap.cosmology.Cosmology` takes."""

    H0: Annotated[float, pydantic.Field(gt=0)]
    Om0: Annotated[float, pydantic.Field(ge=0)]
    Ode0: Annotated[float, pydantic.Field(ge=0)]
    Tcmb0: Annotated[float, pydantic.Field(ge=0)] = 0.0


class Snapshot(_Keys):
    """The particle files and what they hold."""

    files: Annotated[list[str], BeforeValidator(_one_or_more), pydantic.Field(min_length=1)]
    kind: Literal["hdf5", "arrays", "table"] | None = None
    box: Annotated[tuple[float, float, float], BeforeValidator(_box)] | None = None
    periodic: bool | None = None
    redshift: Annotated[float, pydantic.Field(gt=-1)] | None = None
    cosmology: CosmologyKeys | None = None
    species: Annotated[dict[Name, Species], pydantic.Field(min_length=1)]


class View(_Keys):
    """What is drawn: lengths in `unit`; None where the box decides."""

    along: Literal["x", "y", "z"] = "z"
    centre: Annotated[tuple[float, float, float], BeforeValidator(_centre)] | None = None
    width: PositiveLength | None = None
    height: PositiveLength | None = None
    depth: PositiveLength | None = None
    pixels: Annotated[int, BeforeValidator(_pixels)] = 4096
    slabs: Annotated[int | tuple[float, ...], BeforeValidator(_slabs)] = 1
    unit: UnitText = "Mpc"

    @property
    def flat(self) -> bool:
        """Whether positions are angles on a chart, without cosmology."""
        return self.unit != "Mpc"


class Sheet(_Keys):
    """One projected quantity: exactly one of `sum` and `mean` names it."""

    title: str | None = None
    species: str
    sum: str | None = None
    mean: str | None = None
    weight: str | None = None
    unit: UnitText
    coding: Literal["log", "linear"] = "log"
    step: Annotated[float, pydantic.Field(gt=0)] | None = None
    area: Literal["comoving", "proper"] = "comoving"

    @pydantic.model_validator(mode="after")
    def _one_kind(self) -> Sheet:
        if (self.sum is None) == (self.mean is None):
            raise ValueError("give sum: or mean: and the name of a field, mass or count, and not both")
        if self.mean is not None and self.weight is None:
            raise ValueError("a mean needs weight: the name of a sum sheet of the same species")
        if self.sum is not None and self.weight is not None:
            raise ValueError("weight goes with mean; a sum has none")
        return self


class Catalogue(_Keys):
    """The table of objects: which columns say what."""

    file: str
    position: Annotated[list[str], pydantic.Field(min_length=2, max_length=3)]
    unit: UnitText | None = None
    id: str | None = None
    size: str | None = None
    rank: str


class BuildFile(_Keys):
    """The whole build file, checked; made by :func:`load`."""

    title: str
    about: str = ""
    snapshot: Snapshot
    view: View = View()
    sheets: Annotated[dict[Name, Sheet], pydantic.Field(min_length=1)]
    catalogue: Catalogue | None = None

    _path: Path = PrivateAttr(default=Path("build.yaml"))
    _text: str = PrivateAttr(default="")

    @property
    def path(self) -> Path:
        """The build file itself."""
        return self._path

    @property
    def folder(self) -> Path:
        """The folder that holds it: file names in it are relative to this."""
        return self._path.parent

    @property
    def text(self) -> str:
        """The YAML as it was read."""
        return self._text


def load(path: str | Path) -> BuildFile:
    """Read and check a build file.

    Raises
    ------
    InputError
        One line naming the file, the key, what was found there and what would be right.
    """
    path = Path(path)
    try:
        text = path.read_text(encoding="utf-8")
    except (OSError, UnicodeDecodeError) as error:
        reason = "is not there" if not path.exists() else f"cannot be read as text ({error})"
        raise InputError(f"build file {path} {reason}: write one, or let tilemap probe draft it") from error
    return loads(text, path)


def loads(text: str, path: str | Path = "build.yaml") -> BuildFile:
    """The same from the text of a build file that stands, or would stand, at `path`."""
    path = Path(path)
    try:
        raw = yaml.load(text, BuildLoader)
    except yaml.YAMLError as error:
        raise InputError(f"{path}: {sentence(error)}") from error
    if not isinstance(raw, dict):
        raise InputError(f"{path}: a build file is a set of keys: title, snapshot, view, sheets")
    try:
        build = BuildFile.model_validate(raw, context={"unit": _view_unit(raw)})
        check_whole(build)
    except pydantic.ValidationError as error:
        raise InputError(f"{path}: {sentence(error, BuildFile)}") from error
    except InputError as error:
        raise InputError(f"{path}: {error}") from error
    build._path, build._text = path, text
    return build


def _view_unit(raw: dict[str, Any]) -> u.UnitBase:
    """The unit in which plain lengths are written; Mpc or an angle."""
    view = raw.get("view")
    text = view.get("unit", "Mpc") if isinstance(view, dict) else "Mpc"
    if text == "Mpc":
        return u.Mpc
    try:
        return unit_named(str(text), "angle")
    except InputError as error:
        raise InputError(f"view.unit: {error}; or Mpc") from error
