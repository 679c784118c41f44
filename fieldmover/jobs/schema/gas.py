"""What a job says of the fluid, of the space it moves in, and of the units of both codes."""

from __future__ import annotations

from typing import Annotated, Any, Literal

from pydantic import AfterValidator, BeforeValidator, Discriminator, Field, Tag, model_validator

from fieldmover.conventions.units import CodeUnits, code_units
from fieldmover.errors import JobError
from fieldmover.expressions import Expression
from fieldmover.jobs.names import PLACES
from fieldmover.jobs.numbers import number
from fieldmover.jobs.schema.tables import (
    Basis,
    Components,
    Data,
    Dataset,
    Number,
    Sought,
    Table,
    Text,
    Three,
    sort_of_data,
)

MASS, VELOCITY, PRESSURE = "density", "velocity", "pressure"
"""Quantities that mean something to us: what weighs those carried by mass, what moves, what presses."""
DIMENSIONS = {MASS: "density", VELOCITY: "velocity", PRESSURE: "pressure", "internal energy": "specific energy"}
"""Of quantities whose names tell."""


VelocityKind = Literal["coordinate", "eulerian", "four-velocity", "W eulerian"]
Dimension = Literal[
    "none", "length", "mass", "time", "velocity", "density", "pressure", "specific energy", "energy", "momentum",
    "angular momentum", "power",
]  # fmt: skip


def data_alone(value: Any) -> Any:
    """A table with the key `data` in place of data written alone."""
    return {"data": value} if isinstance(value, str | list) else value


def formula(text: str, names: list[str]) -> Expression:
    """A formula over names.

    Raises
    ------
    ValueError
        If it is none: with what is wrong with it, and where.
    """
    try:
        return Expression(text, names)
    except JobError as error:
        raise ValueError(str(error)) from None


def _background(value: Any) -> Any:
    """A number, or a formula of positions."""
    if isinstance(value, str):
        try:
            return number(value)
        except ValueError:
            formula(value, list(PLACES))
            return value
    return float(value) if isinstance(value, int) and not isinstance(value, bool) else value


Background = Annotated[float | str, BeforeValidator(_background)]


class SourceQuantity(Table):
    """A fluid quantity, a scalar or three components of a vector: stored, or made of others."""

    data: Data | None = None
    formula: Text | None = None
    carry: Literal["conserve", "by mass", "point"] = Field(
        description='"conserve" (a density), "by mass" (a value per unit mass) or "point" (plain interpolation)'
    )
    basis: Basis | None = None
    kind: VelocityKind | None = None
    densitised: bool = False
    dimension: Dimension | None = None

    @property
    def vector(self) -> bool:
        """Whether it has three components."""
        return isinstance(self.data, list)

    @model_validator(mode="after")
    def _one(self) -> SourceQuantity:
        if (self.data is None) == (self.formula is None):
            raise ValueError("give either data, one dataset or three for a vector, or a formula of other quantities")
        if self.densitised and self.carry != "conserve":
            raise ValueError('densitised goes with carry = "conserve": the content of a unit of coordinate volume')
        return self


class TargetQuantity(Table):
    """Where a fluid quantity goes, and its value where the source does not reach."""

    data: Data = Field(description="a dataset, or three for a vector")
    formula: Text | None = None
    basis: Basis | None = None
    kind: VelocityKind | None = None
    densitised: bool = False
    outside: Annotated[
        Annotated[Background, Tag("scalar")] | Annotated[list[Background], Three, Tag("vector")],
        Discriminator(sort_of_data),
    ] = 0.0

    @property
    def vector(self) -> bool:
        """Whether it has three components."""
        return isinstance(self.data, list)


class MetricTable(Table):
    """The space that both codes work in."""

    name: Literal["flat", "schwarzschild", "kerr"] = Field(description='"flat", "schwarzschild" or "kerr"')
    mass: Annotated[Number, Field(gt=0)] = 1.0
    spin: Number = 0.0
    light: Annotated[Number, Field(gt=0)] | None = None

    @model_validator(mode="after")
    def _fits(self) -> MetricTable:
        if self.spin and self.name != "kerr":
            raise ValueError(f'spin goes with name = "kerr", not with "{self.name}"')
        if abs(self.spin) > self.mass:
            raise ValueError(f"spin {self.spin:g}; expected a length of at most the mass, {self.mass:g}")
        return self


class MetricArrays(Table):
    """Lapse, shift and metric of one side, from arrays in its coordinates."""

    lapse: Dataset | None = None
    shift: Components | None = None
    gamma: Annotated[list[Dataset], Field(min_length=6, max_length=6)] | None = None

    @model_validator(mode="after")
    def _any(self) -> MetricArrays:
        if self.lapse is None and self.shift is None and self.gamma is None:
            raise ValueError("give lapse, shift (three datasets) or gamma (six: 11, 12, 13, 22, 23, 33)")
        return self


def _sizes(values: dict[str, float | str]) -> dict[str, float | str]:
    for name, size in values.items():
        if (name == "mass_in") != isinstance(size, str):
            raise ValueError(f"{name} = {size!r}; expected {'a name of a unit' if name == 'mass_in' else 'a number'}")
    return values


def _size(value: Any) -> Any:
    try:
        return number(value) if isinstance(value, str) else value
    except ValueError:  # a name, of a unit or of nothing
        return value


SideUnits = Annotated[
    dict[str, Annotated[float | str, BeforeValidator(_size)]], Field(min_length=1), AfterValidator(_sizes)
]
"""Sizes of units by name; `geometrised`, a mass, sets G = c = 1, `mass_in` is its unit."""


class Units(Table):
    """Units of both codes, each by sizes of its units, or by the mass that sets G = c = 1."""

    system: Literal["cgs", "si"] = "cgs"
    source: SideUnits = Field(description="sizes of units of the snapshot's code, like { length = 1e13, ... }")
    target: SideUnits = Field(description="sizes of units of the receiving code, like { geometrised = 10 }")

    def of(self, side: Literal["source", "target"]) -> CodeUnits:
        """The units of one code.

        Raises
        ------
        JobError
            If the sizes do not settle length, mass and time, or contradict each other.
        """
        given = dict(getattr(self, side))
        geometrised, mass_in = given.pop("geometrised", None), str(given.pop("mass_in", "M_sun"))
        scales = {name: float(size) for name, size in given.items()}
        return code_units(scales, self.system, None if geometrised is None else float(geometrised), mass_in)

    @model_validator(mode="after")
    def _settled(self) -> Units:
        for side in ("source", "target"):
            try:
                self.of(side)  # type: ignore[arg-type]
            except JobError as error:
                raise ValueError(f"{side}: {str(error).removeprefix('units: ')}") from None
        return self


class Health(Table):
    """What the receiving code can evolve."""

    density_floor: Annotated[Number, Field(ge=0)] = 0.0
    pressure_floor: Annotated[Number, Field(ge=0)] = 0.0
    magnetisation_ceiling: Annotated[Number, Field(gt=0)] | None = None
    lorentz_ceiling: Annotated[Number, Field(gt=1)] | None = None
    gamma: Annotated[Number, Field(gt=1)] = 5.0 / 3.0
    cure: Literal["refuse", "apply", "report"] = "refuse"


class Axis(Table):
    """An axis to turn about."""

    centre: Annotated[list[Number], Three] = [0.0, 0.0, 0.0]
    direction: Annotated[list[Number], Three] = [0.0, 0.0, 1.0]

    @model_validator(mode="after")
    def _fits(self) -> Axis:
        if not any(self.direction):
            raise ValueError("direction: three zeros, expected an axis to turn about")
        return self


Rates = dict[str, Sought]
"""How fast parameters of a map change."""
