"""A whole job."""

from __future__ import annotations

from typing import Annotated, Literal

from pydantic import BeforeValidator, Field

from fieldmover.jobs.schema.clean import Clean
from fieldmover.jobs.schema.fields import SourceMagnetic, TargetMagnetic, TargetPotential
from fieldmover.jobs.schema.gas import (
    Axis,
    Health,
    MetricArrays,
    MetricTable,
    SourceQuantity,
    TargetQuantity,
    Units,
    data_alone,
)
from fieldmover.jobs.schema.grids import SourceGrid, TargetGrid
from fieldmover.jobs.schema.measures import Limits, Region, Report, Through
from fieldmover.jobs.schema.tables import AxisOrder, Number, Quantity, Sought, Table, Text, Three, plain


class Source(Table):
    """The snapshot to read."""

    file: Text = Field(description="the snapshot, an HDF5 file")
    axes: AxisOrder = "q1 q2 q3"
    ghosts: Annotated[list[Annotated[int, Field(ge=0, le=100)]], Three] = [0, 0, 0]
    time: Sought | None = None
    grid: SourceGrid
    metric: MetricArrays | None = None
    magnetic: SourceMagnetic
    fluid: dict[Quantity, SourceQuantity] = {}


class Target(Table):
    """The file to write."""

    file: Text = Field(description="the file to write")
    axes: AxisOrder = "q1 q2 q3"
    ghosts: Annotated[list[Annotated[int, Field(ge=0, le=100)]], Three] = [0, 0, 0]
    precision: Literal["double", "single"] = "double"
    view: bool = False
    grid: TargetGrid | None = None
    metric: MetricArrays | None = None
    magnetic: TargetMagnetic
    potential: TargetPotential | None = None
    fluid: dict[Quantity, Annotated[TargetQuantity, BeforeValidator(data_alone)]] = {}


class Perturb(Table):
    """Random changes of the potential, which leave no divergence."""

    size: Annotated[Number, Field(gt=0, lt=1)] = Field(description="the largest relative change of a circulation")
    seed: Annotated[int, Field(ge=0)] = 0


class Move(Table):
    """How field and fluid are moved."""

    order: Literal[1, 3, 5, "limited"] = 3
    clean: Literal["when needed", "always", "never"] = "when needed"
    outside: Literal["least energy", "zero", "refuse"] = "least energy"
    net_flux: Literal["refuse", "point"] = "refuse"
    point: Annotated[list[Number], Three] = [0.0, 0.0, 0.0]
    perturb: Perturb | None = None
    blend: Annotated[Number, Field(ge=0)] = 0.0
    keep: Literal["angular momentum"] | None = None
    axis: Axis = Axis()


class Job(Table):
    """A whole hand-over."""

    title: str = ""
    source: Source
    target: Target
    move: Move = Move()
    clean: Clean = Clean()
    metric: MetricTable | None = None
    units: Units | None = None
    health: Health | None = None
    report: Report = Report()
    regions: dict[Quantity, Region] = {}
    surfaces: dict[Quantity, Through] = {}
    limits: Limits = {}

    @property
    def conserved(self) -> list[str]:
        """The quantities of the target whose totals are kept."""
        source = self.source.fluid
        return [
            name
            for name, wanted in self.target.fluid.items()
            if wanted.formula is None and name in source and source[name].carry == "conserve"
        ]

    @property
    def scalars(self) -> list[str]:
        """The scalar quantities of the target, as formulas of regions call them."""
        return [plain(name) for name, quantity in self.target.fluid.items() if not quantity.vector]
