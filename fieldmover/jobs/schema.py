"""What a job file may say.

Every key has a default where one is honest. What is not listed here is a mistake, told with the nearest known
key.
"""

from __future__ import annotations

import re
from difflib import get_close_matches
from itertools import pairwise
from pathlib import PurePath
from typing import Annotated, Any, Literal

from pydantic import (
    AfterValidator,
    BaseModel,
    BeforeValidator,
    ConfigDict,
    Discriminator,
    Field,
    StringConstraints,
    Tag,
    model_validator,
)

from fieldmover.jobs.names import known
from fieldmover.jobs.numbers import number

Kind = Literal["cartesian", "cylindrical", "spherical"]
Basis = Literal["physical", "coordinate", "cartesian"]
AxisOrder = Literal["q1 q2 q3", "q1 q3 q2", "q2 q1 q3", "q2 q3 q1", "q3 q1 q2", "q3 q2 q1"]

Mistake = tuple[tuple[str, ...], str]

MASS = "density"
"""The quantity that weighs those carried by mass."""
UNFIT = re.compile(r"[:<>&\"'\s]")
"""In the name of a file with a view: readers of XDMF take these for something else."""
TAGS = {"rule", "list", "dataset", "scalar", "vector", "absolute", "relative", "[key]"}
"""Names of alternatives, which validation puts into places and messages leave out."""
UNITS = ("gaussian", "heaviside-lorentz")


def _from_text(value: Any) -> Any:
    return number(value) if isinstance(value, str) else value


def _time(value: Any) -> Any:
    """A number, or where to find it: a dataset or `path@attribute`, which begin with a slash."""
    return value if isinstance(value, str) and value.startswith("/") else _from_text(value)


def _unit(value: Any) -> Any:
    is_number = isinstance(value, int | float) and not isinstance(value, bool)
    if value in UNITS or (is_number and value > 0):
        return value
    raise ValueError(f'found {value!r}; give "gaussian", "heaviside-lorentz" or a number above 0')


def _increasing(values: list[float]) -> list[float]:
    for place, (a, b) in enumerate(pairwise(values)):
        if not a < b:
            raise ValueError(f"positions must increase: {a:g}, then {b:g} at [{place + 1}]")
    return values


def _sort_of_axis(value: Any) -> str:
    return "rule" if isinstance(value, dict | Spaced) else "list" if isinstance(value, list) else "dataset"


def _sort_of_data(value: Any) -> str:
    return "vector" if isinstance(value, list) else "scalar"


def _sort_of_limit(value: Any) -> str:
    return "relative" if isinstance(value, dict | Within) else "absolute"


def _dotted(value: Any, prefix: str = "") -> Any:
    """Nested tables of limits as one with dotted names; a table that says `within` is a limit itself."""
    if not isinstance(value, dict):
        return value
    flat: dict[str, Any] = {}
    for key, entry in value.items():
        group = isinstance(entry, dict) and not entry.keys() & {"within", "of"}
        flat.update(_dotted(entry, f"{prefix}{key}.") if group else {f"{prefix}{key}": entry})
    return flat


def _figure(name: str) -> str:
    """A name that some job may have; those of its own regions and quantities are looked at later."""
    if not name.startswith(("regions.", "fluid.")):
        _among(name, known())
    return name


def _among(name: str, names: list[str]) -> None:
    if name not in names:
        near = get_close_matches(name, names, 1, 0.0)
        raise ValueError(f"there is no such figure; the nearest is {near[0]!r}")


def _data_alone(value: Any) -> Any:
    return {"data": value} if isinstance(value, str | list) else value


Three = Field(min_length=3, max_length=3)
Number = Annotated[float, BeforeValidator(_from_text)]
Text = Annotated[str, StringConstraints(min_length=1, max_length=1000)]
Dataset = Annotated[str, StringConstraints(pattern=r"^[^\s@]+$", max_length=1000)]
Components = Annotated[list[Dataset], Three]
Unit = Annotated[str | float, BeforeValidator(_unit)]
Data = Annotated[
    Annotated[Dataset, Tag("scalar")] | Annotated[Components, Tag("vector")], Discriminator(_sort_of_data)
]
Quantity = Annotated[str, StringConstraints(pattern=r"^[A-Za-z][\w -]*$", max_length=100)]


class Table(BaseModel):
    """A table of the job: unknown keys, other types and numbers that are not finite are refused."""

    model_config = ConfigDict(extra="forbid", strict=True, frozen=True, allow_inf_nan=False)


class Spaced(Table):
    """Nodes by a rule: `{ from = 0, to = "pi", cells = 64, spacing = "sinh", ratio = 4 }`."""

    from_: Number = Field(alias="from", description="the first node")
    to: Number = Field(description="the last node")
    cells: int = Field(ge=1, le=100_000, description="how many")
    spacing: Literal["uniform", "log", "sinh", "tanh"] = "uniform"
    ratio: Number | None = Field(default=None, gt=1)

    @model_validator(mode="after")
    def _fits(self) -> Spaced:
        if not self.from_ < self.to:
            raise ValueError(f"from {self.from_:g} to {self.to:g}: the end must lie above the start")
        if self.spacing == "log" and self.from_ <= 0:
            raise ValueError(f"log spacing from {self.from_:g}; expected a start above 0")
        if (self.spacing in ("sinh", "tanh")) != (self.ratio is not None):
            raise ValueError(
                'give ratio (widest over narrowest cell) with spacing "sinh" or "tanh", and only then'
            )
        return self


Rule = Annotated[Spaced, Tag("rule")]
Positions = Annotated[
    list[Number], Field(min_length=2, max_length=100_001), AfterValidator(_increasing), Tag("list")
]
Stored = Annotated[Dataset, Tag("dataset")]
Centres = Annotated[Positions | Stored, Discriminator(_sort_of_axis)]
Nodes = Annotated[Rule | Positions | Stored, Discriminator(_sort_of_axis)]
OwnNodes = Annotated[Rule | Positions, Discriminator(_sort_of_axis)]


class AnyGrid(Table):
    """What both grids say: the kind, and which axes of a Cartesian box have ends that meet."""

    kind: Kind = Field(description='"cartesian", "cylindrical" or "spherical"')
    periodic: Annotated[list[bool], Three] = [False, False, False]

    @model_validator(mode="after")
    def _seams(self) -> Any:
        if self.kind != "cartesian" and any(self.periodic):
            raise ValueError(
                f"periodic is for cartesian grids; a {self.kind} one has its seam where nodes span 2 pi"
            )
        return self


class SourceGrid(AnyGrid):
    """Nodes or cell centres, from the snapshot or from the job."""

    nodes: Annotated[list[Nodes], Three] | None = None
    centres: Annotated[list[Centres], Three] | None = None

    @model_validator(mode="after")
    def _one(self) -> SourceGrid:
        if (self.nodes is None) == (self.centres is None):
            raise ValueError(
                "give either nodes or centres: three datasets, lists or rules, one for each axis"
            )
        return self


class TargetGrid(AnyGrid):
    """Nodes, from the job."""

    nodes: Annotated[list[OwnNodes], Three] = Field(description="three lists or rules, one for each axis")


class Magnetic(Table):
    """Where three components of a magnetic field lie and what their numbers mean."""

    data: Components = Field(description="three datasets")
    basis: Basis | None = None
    densitised: bool = False
    unit: Unit = Field(description='"gaussian", "heaviside-lorentz" or a number')


class SourceMagnetic(Magnetic):
    """The magnetic field of the snapshot, or its vector potential."""

    at: Literal["faces", "cells", "edges"] = Field(
        description='"faces", "cells" or "edges" (a vector potential)'
    )


class TargetMagnetic(Magnetic):
    """The magnetic field to write."""

    at: Literal["faces", "cells"] = "faces"


class SourceQuantity(Table):
    """A fluid quantity: a scalar, or three components of a vector."""

    data: Data = Field(description="a dataset, or three for a vector")
    carry: Literal["conserve", "by mass"] = Field(
        description='"conserve" (a density) or "by mass" (a value per unit mass)'
    )
    basis: Basis | None = None


class TargetQuantity(Table):
    """Where a fluid quantity goes, and its value where the source does not reach."""

    data: Data = Field(description="a dataset, or three for a vector")
    basis: Basis | None = None
    outside: Number = 0.0


class Source(Table):
    """The snapshot to read."""

    file: Text = Field(description="the snapshot, an HDF5 file")
    axes: AxisOrder = "q1 q2 q3"
    ghosts: Annotated[list[Annotated[int, Field(ge=0, le=100)]], Three] = [0, 0, 0]
    time: Annotated[float | str, BeforeValidator(_time)] | None = None
    grid: SourceGrid
    magnetic: SourceMagnetic
    fluid: dict[Quantity, SourceQuantity] = {}


class Target(Table):
    """The file to write."""

    file: Text = Field(description="the file to write")
    axes: AxisOrder = "q1 q2 q3"
    precision: Literal["double", "single"] = "double"
    view: bool = False
    grid: TargetGrid | None = None
    magnetic: TargetMagnetic
    fluid: dict[Quantity, Annotated[TargetQuantity, BeforeValidator(_data_alone)]] = {}


class Move(Table):
    """How the field is moved."""

    order: Literal[1, 3, 5, "limited"] = 3
    clean: Literal["when needed", "always", "never"] = "when needed"
    outside: Literal["least energy", "zero", "refuse"] = "least energy"


class Within(Table):
    """A limit on the relative change of a figure against a report made before."""

    within: Number = Field(ge=0, description="the largest relative change")
    of: Text = Field(description="the report.json to compare with")


Limit = Annotated[
    Annotated[Number, Field(ge=0), Tag("absolute")] | Annotated[Within, Tag("relative")],
    Discriminator(_sort_of_limit),
]
Limits = Annotated[dict[Annotated[str, AfterValidator(_figure)], Limit], BeforeValidator(_dotted)]
"""Figures of the report that must not be exceeded, by name."""


def _plane(value: Any) -> Any:
    """Axis and position of a plane written "y = 0"."""
    match = re.fullmatch(r"\s*([xyz])\s*=\s*(.+)", value) if isinstance(value, str) else None
    if match is None:
        raise ValueError(f'found {value!r}; give a plane like "y = 0"')
    return "xyz".index(match[1]), number(match[2].strip())


class Report(Table):
    """What the report shows."""

    planes: (
        Annotated[list[Annotated[Any, BeforeValidator(_plane)]], Field(min_length=1, max_length=4)] | None
    ) = None


class Region(Table):
    """A part of space: a box, a ball or a shell, in Cartesian coordinates."""

    from_: Annotated[list[Number], Three] | None = Field(default=None, alias="from")
    to: Annotated[list[Number], Three] | None = None
    centre: Annotated[list[Number], Three] = [0.0, 0.0, 0.0]
    radius: Annotated[Number, Field(gt=0)] | None = None
    radii: Annotated[list[Number], Field(min_length=2, max_length=2), AfterValidator(_increasing)] | None = (
        None
    )

    @model_validator(mode="after")
    def _one_shape(self) -> Region:
        shapes = [self.from_ is not None and self.to is not None, self.radius is not None]
        shapes.append(self.radii is not None)
        if sum(shapes) != 1 or (self.from_ is None) != (self.to is None):
            raise ValueError(
                "give from and to (a box), centre and radius (a ball) or centre and radii (a shell)"
            )
        return self


class Job(Table):
    """A whole hand-over."""

    title: str = ""
    source: Source
    target: Target
    move: Move = Move()
    report: Report = Report()
    regions: dict[Quantity, Region] = {}
    limits: Limits = {}

    def mistakes(self) -> list[Mistake]:
        """What tables say that is right alone but not together: place and message of each."""
        return [
            *self._basis_mistakes(),
            *self._fluid_mistakes(),
            *self._name_mistakes(),
            *self._limit_mistakes(),
        ]

    @property
    def conserved(self) -> list[str]:
        """The quantities of the target whose totals are kept."""
        source = self.source.fluid
        return [name for name in self.target.fluid if name in source and source[name].carry == "conserve"]

    def _basis_mistakes(self) -> list[Mistake]:
        """A vector on a curved grid needs a basis; on a Cartesian one all of them are the same."""
        found: list[Mistake] = []
        sides: list[tuple[str, Any]] = [("source", self.source), ("target", self.target)]
        for side, table in sides:
            kind = (table.grid or self.source.grid).kind
            magnetic, place = table.magnetic, (side, "magnetic")
            if magnetic.basis == "cartesian" and magnetic.at != "cells" and kind != "cartesian":
                found.append(
                    ((*place, "basis"), f'"cartesian" goes with at = "cells"; {magnetic.at} follow the grid')
                )
            if magnetic.densitised and (magnetic.basis != "coordinate" or magnetic.at == "edges"):
                found.append(
                    ((*place, "densitised"), 'goes with basis = "coordinate" of a field at faces or cells')
                )
            vectors: list[tuple[tuple[str, ...], Basis | None]] = [(place, magnetic.basis)]
            for name, quantity in table.fluid.items():
                if isinstance(quantity.data, list):
                    vectors.append(((side, "fluid", name), quantity.basis))
            for where, basis in vectors:
                if basis is None and kind != "cartesian":
                    found.append(((*where, "basis"), 'missing; give "physical", "coordinate" or "cartesian"'))
        return found

    def _fluid_mistakes(self) -> list[Mistake]:
        found: list[Mistake] = []
        source, mass = self.source.fluid, self.source.fluid.get(MASS)
        for name, quantity in source.items():
            if quantity.carry == "conserve" and isinstance(quantity.data, list):
                found.append((("source", "fluid", name, "carry"), 'a vector is carried "by mass"'))
        for name, wanted in self.target.fluid.items():
            if name in source and source[name].carry == "conserve" and wanted.outside < 0:
                found.append((("target", "fluid", name, "outside"), "a density is not negative"))
            place = ("target", "fluid", name)
            if name not in source:
                found.append(
                    (place, f"not among the quantities of source.fluid: {', '.join(source) or 'none'}")
                )
            elif _sort_of_data(wanted.data) != _sort_of_data(source[name].data):
                found.append(
                    (place, f"the source has a {_sort_of_data(source[name].data)}, this names another number")
                )
        if mass is None or mass.carry != "conserve" or isinstance(mass.data, list):
            for name, quantity in source.items():
                if quantity.carry == "by mass":
                    needs = f'"by mass" needs a scalar source.fluid.{MASS} with carry = "conserve"'
                    found.append((("source", "fluid", name, "carry"), needs))
        if "mass_change" in self.limits and MASS not in self.conserved:
            found.append((("limits", "mass_change"), f'needs target.fluid.{MASS}, carried by "conserve"'))
        return found

    def _limit_mistakes(self) -> list[Mistake]:
        """Limits on regions and quantities that the job does not have."""
        names = known(self.conserved, self.regions)
        found: list[Mistake] = []
        for name in self.limits:
            try:
                _among(name, names)
            except ValueError as error:
                found.append((("limits", name), str(error)))
        return found

    def _name_mistakes(self) -> list[Mistake]:
        """Two outputs must not share a dataset, nor use our own group."""
        file = PurePath(self.target.file).name
        if self.target.view and (UNFIT.search(file) or file.endswith(".xdmf")):
            unfit = f'file {file!r}: a view needs a name without : < > & quotes and spaces that does not end in ".xdmf"'
            return [(("target", "view"), unfit)]
        names = [(("target", "magnetic", "data"), name) for name in self.target.magnetic.data]
        for quantity, where in self.target.fluid.items():
            data = where.data if isinstance(where.data, list) else [where.data]
            names += [(("target", "fluid", quantity), name) for name in data]
        found: list[Mistake] = []
        seen: set[str] = set()
        for place, name in names:
            path = "/".join(part for part in name.split("/") if part)
            if path in seen:
                found.append((place, f"dataset {name!r} is named twice"))
            if path.split("/")[0] == "fieldmover":
                found.append((place, f"{name!r}: the group /fieldmover is kept for the report"))
            seen.add(path)
        return found
