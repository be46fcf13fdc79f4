"""The build file: YAML in, a checked `BuildFile` out, its attributes named as the keys are.

Lengths come out as plain numbers in the unit of the view (Mpc unless a chart in degrees or the like is drawn).
How a mistake is put into a sentence is in `buildcheck`.
"""

from __future__ import annotations

from functools import cached_property
from pathlib import Path
from typing import Annotated, Any, Literal

import astropy.units as u
import numpy as np
import pydantic
import yaml
from numpy.typing import NDArray
from pydantic import BaseModel, ConfigDict, PrivateAttr

from tilemap.buildcheck import BuildLoader, check_whole, sentence
from tilemap.buildvalues import (
    Box,
    Centre,
    Direction,
    KernelName,
    MassNumber,
    Name,
    Pixels,
    PositiveLength,
    Slabs,
    Texts,
    UnitText,
)
from tilemap.errors import InputError
from tilemap.project.camera import AXES
from tilemap.quantities import split_quantity, unit_named

DERIVED = ("temperature_from", "density_squared_from", "line_of_sight")
"""Keys of a field that is worked out from datasets; the formulas are in `sources.derived`."""
KINDS = ("sum", "mean", "dispersion", "peak")
"""Keys of a sheet that say what it shows."""


class _Keys(BaseModel):
    model_config = ConfigDict(extra="forbid", frozen=True)


class Field(_Keys):
    """Where numbers lie: a dataset (or column, or several), with what the file does not say about its unit; or what
    they are worked out from.

    Exactly one of `dataset` and the `DERIVED` keys is set.
    """

    dataset: Texts | None = None
    unit: UnitText | None = None
    a: float | None = None
    h: float | None = None
    column: Annotated[int, pydantic.Field(ge=0)] | None = None
    temperature_from: Field | None = None
    gas: Literal["ionised", "neutral"] | None = None
    electrons: Field | None = None
    density_squared_from: Field | None = None
    line_of_sight: Field | None = None

    @pydantic.model_validator(mode="before")
    @classmethod
    def _short_form(cls, value: Any) -> Any:
        return {"dataset": value} if isinstance(value, str | list) else value

    @pydantic.model_validator(mode="after")
    def _one_kind(self) -> Field:
        self._check_kind()
        return self

    def _check_kind(self) -> None:
        if sum(getattr(self, key) is not None for key in ("dataset", *DERIVED)) != 1:
            raise ValueError(f"name a dataset, or one of {', '.join(DERIVED)}, and no more than one")
        if self.dataset is not None and not 1 <= len(self.dataset) <= 3:
            raise ValueError(f"{len(self.dataset)} datasets are named: give one, or two or three for a position")
        for key in ("gas", "electrons"):
            if getattr(self, key) is not None and self.temperature_from is None:
                raise ValueError(f"{key} goes with temperature_from only")
        if self.gas is not None and self.electrons is not None:
            raise ValueError("electrons already say how far the gas is ionised: leave gas out")


class Mass(Field):
    """The mass of a species: a field, one constant in Msun for every particle, or an entry of the header's MassTable."""

    constant: MassNumber | None = None
    table: Annotated[int, pydantic.Field(ge=0)] | None = None

    @pydantic.model_validator(mode="before")
    @classmethod
    def _constant_form(cls, value: Any) -> Any:
        if isinstance(value, int | float) or (isinstance(value, str) and split_quantity(value) is not None):
            return {"constant": value}
        return value

    def _check_kind(self) -> None:
        given = [key for key in ("dataset", "constant", "table", *DERIVED) if getattr(self, key) is not None]
        if len(given) != 1 or given[0] in DERIVED:
            raise ValueError("a mass is one dataset, or one constant such as 1.5e6 Msun, or {table: 1}")
        if self.dataset is not None and len(self.dataset) != 1:
            raise ValueError("a mass comes from one dataset")


class Smoothing(_Keys):
    """How wide a particle is: exactly one of `field`, `neighbours` and `radius` is set."""

    field: Field | None = None
    means: Literal["support", "half", "fwhm"] | None = None
    neighbours: Annotated[int, pydantic.Field(ge=1)] | None = None
    radius: PositiveLength | None = None
    kernel: KernelName = "cubic"

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
    """The particle files and what they hold; `files` is None where the build file lists epochs, until `each_epoch`."""

    files: Annotated[Texts, pydantic.Field(min_length=1)] | None = None
    kind: Literal["hdf5", "arrays", "table"] | None = None
    box: Box | None = None
    periodic: bool | None = None
    redshift: Annotated[float, pydantic.Field(gt=-1)] | None = None
    cosmology: CosmologyKeys | None = None
    species: Annotated[dict[Name, Species], pydantic.Field(min_length=1)]


class View(_Keys):
    """What is drawn: lengths in `unit`; None where the box decides. Without `along` and `toward` it is along z."""

    along: Literal["x", "y", "z"] | None = None
    toward: Direction | None = None
    up: Direction | None = None
    centre: Centre | None = None
    width: PositiveLength | None = None
    height: PositiveLength | None = None
    depth: PositiveLength | None = None
    pixels: Pixels = 4096
    slabs: Slabs = 1
    unit: UnitText = "Mpc"

    @pydantic.model_validator(mode="after")
    def _one_camera(self) -> View:
        if self.toward is None:
            if self.up is not None:
                raise ValueError("up goes with toward: say both")
            return self
        if self.along is not None:
            raise ValueError("along and toward both say the line of sight: leave one of the two out")
        if self.up is not None and np.linalg.norm(np.cross(self.toward, self.up)) < 1e-6:
            raise ValueError("up lies along the line of sight: give a direction across it")
        return self

    @cached_property
    def vectors(self) -> NDArray[np.float64]:
        """Unit vectors, in x, y and z, along which u, v and depth grow: (3, 3), right-handed, one in each row."""
        if self.toward is None:
            return np.eye(3)[list(AXES[self.along or "z"])]
        depth = np.array(self.toward)
        # Up is z where nothing is said, and y where that is the line of sight.
        ups = [self.up] if self.up is not None else [(0.0, 0.0, 1.0), (0.0, 1.0, 0.0)]
        up = next(each for each in ups if np.linalg.norm(np.cross(each, depth)) >= 1e-6)
        across = np.cross(up, depth)
        across /= np.linalg.norm(across)
        return np.array([across, np.cross(depth, across), depth]) + 0.0  # no negative zeros

    @property
    def flat(self) -> bool:
        """Whether positions are angles on a chart, without cosmology."""
        return self.unit != "Mpc"


class Sheet(_Keys):
    """One projected quantity: exactly one of the `KINDS` names it.

    `sum` and `mean` name a field, mass or count; `dispersion` a mean sheet, about whose values it is the spread. `peak`
    is a sum whose coarser pixels, and slabs together, hold the highest value in place of the average, or the sum.
    """

    title: str | None = None
    species: Texts
    sum: str | None = None
    mean: str | None = None
    dispersion: str | None = None
    peak: str | None = None
    weight: str | None = None
    unit: UnitText
    coding: Literal["log", "linear"] = "log"
    step: Annotated[float, pydantic.Field(gt=0)] | None = None
    area: Literal["comoving", "proper"] = "comoving"

    @property
    def kind(self) -> str:
        """Which of the `KINDS` it is."""
        return next(kind for kind in KINDS if getattr(self, kind) is not None)

    @property
    def label(self) -> str:
        """Its species in one word: gas, or gas+stars."""
        return "+".join(self.species)

    @property
    def summed(self) -> str | None:
        """The field whose sum per area it shows; None for means and dispersions."""
        return self.sum if self.sum is not None else self.peak

    @pydantic.model_validator(mode="after")
    def _one_kind(self) -> Sheet:
        if sum(getattr(self, kind) is not None for kind in KINDS) != 1:
            raise ValueError(
                "give sum:, mean: or peak: and the name of a field, mass or count, or dispersion: and that of a mean sheet, "
                "and no more than one"
            )
        if self.mean is not None and self.weight is None:
            raise ValueError("a mean needs weight: the name of a sum sheet of the same species")
        if self.mean is None and self.weight is not None:
            raise ValueError(f"weight goes with mean; a {self.kind} has none of its own")
        return self


class Catalogue(_Keys):
    """The table of objects: which columns say what."""

    file: str
    position: Annotated[list[str], pydantic.Field(min_length=2, max_length=3)]
    unit: UnitText | None = None
    id: str | None = None
    size: str | None = None
    rank: str


class Epoch(_Keys):
    """One of several moments: what is its own; all else is as the rest of the build file says."""

    files: Annotated[Texts, pydantic.Field(min_length=1)]
    name: Name | None = None
    redshift: Annotated[float, pydantic.Field(gt=-1)] | None = None
    catalogue: str | None = None


class BuildFile(_Keys):
    """The whole build file, checked; made by :func:`load`."""

    title: str
    about: str = ""
    snapshot: Snapshot
    view: View = View()
    sheets: Annotated[dict[Name, Sheet], pydantic.Field(min_length=1)]
    catalogue: Catalogue | None = None
    epochs: Annotated[list[Epoch], pydantic.Field(min_length=1)] | None = None

    _path: Path = PrivateAttr(default=Path("build.yaml"))
    _text: str = PrivateAttr(default="")
    _epoch: str | None = PrivateAttr(default=None)

    def each_epoch(self) -> list[BuildFile]:
        """A build file of one snapshot for each epoch, in the order in which they are listed."""
        return [self] if self.epochs is None else [self._at(epoch) for epoch in self.epochs]

    def _at(self, epoch: Epoch) -> BuildFile:
        redshift = self.snapshot.redshift if epoch.redshift is None else epoch.redshift
        changes: dict[str, Any] = {
            "epochs": None,
            "snapshot": self.snapshot.model_copy(update={"files": epoch.files, "redshift": redshift}),
        }
        if self.catalogue is not None and epoch.catalogue is not None:
            changes["catalogue"] = self.catalogue.model_copy(update={"file": epoch.catalogue})
        copy = self.model_copy(update=changes)
        copy._epoch = epoch.name
        return copy

    @property
    def epoch_name(self) -> str | None:
        """What the build file calls this epoch; None where it leaves the name to the redshift."""
        return self._epoch

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
