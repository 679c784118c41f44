"""What a job says of a grid."""

from __future__ import annotations

from typing import Annotated, Any, Literal

from pydantic import AfterValidator, Discriminator, Field, Tag, model_validator

from fieldmover.jobs.schema.tables import Dataset, Number, Table, Three, increasing

Kind = Literal["cartesian", "cylindrical", "spherical"]


def _sort_of_axis(value: Any) -> str:
    return "rule" if isinstance(value, dict | Spaced) else "list" if isinstance(value, list) else "dataset"


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
            raise ValueError('give ratio (widest over narrowest cell) with spacing "sinh" or "tanh", and only then')
        return self


Rule = Annotated[Spaced, Tag("rule")]
Positions = Annotated[list[Number], Field(min_length=2, max_length=100_001), AfterValidator(increasing), Tag("list")]
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
            raise ValueError(f"periodic is for cartesian grids; a {self.kind} one has its seam where nodes span 2 pi")
        return self


class SourceGrid(AnyGrid):
    """Nodes or cell centres, from the snapshot or from the job."""

    nodes: Annotated[list[Nodes], Three] | None = None
    centres: Annotated[list[Centres], Three] | None = None

    @model_validator(mode="after")
    def _one(self) -> SourceGrid:
        if (self.nodes is None) == (self.centres is None):
            raise ValueError("give either nodes or centres: three datasets, lists or rules, one for each axis")
        return self


class TargetGrid(AnyGrid):
    """Nodes, from the job."""

    nodes: Annotated[list[OwnNodes], Three] = Field(description="three lists or rules, one for each axis")
