"""What a job says of a grid."""

from __future__ import annotations

from typing import Annotated, Any, Literal

from pydantic import AfterValidator, Discriminator, Field, StringConstraints, Tag, model_validator

from fieldmover.jobs.schema.tables import Dataset, Number, Sought, Table, Text, Three, increasing

Kind = Literal["cartesian", "cylindrical", "spherical", "kerr-schild", "warped", "tabulated"]
Pole = Literal["none", "low", "high", "both"]


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


class Crowded(Table):
    """Spherical coordinates drawn towards two bodies in the plane theta = pi/2."""

    separation: Sought = Field(description="the distance between the bodies")
    phase: Sought = 0.0
    strength: Sought = 0.5
    width: Sought = 0.4
    share: Sought = 0.5


class Map(Table):
    """Where grid coordinates lie in space: a function of a Python file, or a ready map."""

    python: Annotated[str, StringConstraints(pattern=r"^.+\.py:[A-Za-z_]\w*$", max_length=1000)] | None = None
    parameters: dict[str, Sought] = {}
    rates: dict[str, Sought] = {}
    crowded: Crowded | None = None

    @model_validator(mode="after")
    def _one(self) -> Map:
        if (self.python is None) == (self.crowded is None):
            raise ValueError('give either python = "file.py:function" or crowded = { separation = ... }')
        if self.crowded is not None and self.parameters:
            raise ValueError("parameters go with python; those of crowded stand in its own table")
        own = Crowded.model_fields if self.crowded is not None else self.parameters
        for name in self.rates:
            if name not in own:
                raise ValueError(f"rates: {name!r} is no parameter of the map; it has {', '.join(own) or 'none'}")
        return self


class Turn(Table):
    """A rotation, right-handed."""

    about: Annotated[list[Number], Three] = Field(description="the axis to turn about, three numbers")
    angle: Number = Field(description='the angle, in radians or like "30 deg"')

    @model_validator(mode="after")
    def _fits(self) -> Turn:
        if not any(self.about):
            raise ValueError("about: three zeros, expected an axis to turn about")
        return self


class Placement(Table):
    """Where a grid's own frame lies in the common Cartesian one: turned, then moved."""

    origin: Annotated[list[Number], Three] = [0.0, 0.0, 0.0]
    turn: Turn | None = None


class Symmetry(Table):
    """What completes a part of space."""

    equator: Literal["mirror"] | None = None
    wedge: int = Field(default=1, ge=1, le=10_000)
    around: Annotated[int, Field(ge=2, le=100_000)] | None = None

    @model_validator(mode="after")
    def _any(self) -> Symmetry:
        if self.equator is None and self.wedge == 1 and self.around is None:
            raise ValueError(
                'give equator = "mirror", wedge = n (azimuth spans 2 pi / n) or around = n (one cell in azimuth)'
            )
        if self.around is not None and self.wedge != 1:
            raise ValueError("wedge repeats cells in azimuth, around makes them of one; give one of the two")
        return self


_KEYS = {
    "cartesian": ("nodes", "centres", "periodic"),
    "cylindrical": ("nodes", "centres"),
    "spherical": ("nodes", "centres"),
    "kerr-schild": ("nodes", "centres"),
    "warped": ("nodes", "centres", "map", "periodic", "poles"),
    "tabulated": ("positions", "at", "periodic", "poles"),
}


class AnyGrid(Table):
    """What both grids say."""

    kind: Kind = Field(description='"cartesian", "cylindrical", "spherical", "kerr-schild", "warped" or "tabulated"')
    nodes: Annotated[list[Nodes], Three] | None = None
    periodic: Annotated[list[bool], Three] | None = None
    poles: Annotated[list[Pole], Three] | None = None
    map: Map | None = None
    positions: Annotated[list[Dataset], Three] | None = None
    at: Literal["nodes", "cells"] | None = None
    place: Placement | None = None

    @property
    def datasets(self) -> list[str]:
        """The datasets that the positions come from."""
        axes = self.nodes or getattr(self, "centres", None) or []
        return [axis for axis in axes if isinstance(axis, str)] + (self.positions or [])

    @model_validator(mode="after")
    def _fits_kind(self) -> Any:
        for key in ("nodes", "centres", "periodic", "poles", "map", "positions", "at"):
            if getattr(self, key, None) is not None and key not in _KEYS[self.kind]:
                raise ValueError(f"{key} is not for {self.kind} grids{_instead(self.kind, key)}")
        if self.kind == "warped" and self.map is None:
            raise ValueError('a warped grid needs map = { python = "file.py:function" } or { crowded = { ... } }')
        crowded = self.map is not None and self.map.crowded is not None
        if crowded and (self.periodic is not None or self.poles is not None):
            raise ValueError("the nodes r, theta, phi of a crowded map tell its poles and seam; leave out both keys")
        if self.kind == "tabulated" and self.positions is None:
            raise ValueError("a tabulated grid needs positions: three datasets, x, y and z of every node")
        return self


def _instead(kind: str, key: str) -> str:
    return f"; a {kind} one has its seam where nodes span 2 pi" if key == "periodic" else ""


class SourceGrid(AnyGrid):
    """Nodes or cell centres, from the snapshot or from the job."""

    centres: Annotated[list[Centres], Three] | None = None
    symmetry: Symmetry | None = None

    @model_validator(mode="after")
    def _one(self) -> SourceGrid:
        if self.kind != "tabulated" and (self.nodes is None) == (self.centres is None):
            raise ValueError("give either nodes or centres: three datasets, lists or rules, one for each axis")
        if self.symmetry is not None and self.kind not in ("cartesian", "cylindrical", "spherical"):
            raise ValueError(f"symmetry is for cartesian, cylindrical and spherical grids, not for a {self.kind} one")
        return self


class FinerBox(Table):
    """A box of finer cells within the grid."""

    level: int = Field(default=1, ge=1, le=30)
    nodes: Annotated[list[Annotated[Rule | Positions, Discriminator(_sort_of_axis)]], Three] = Field(
        description="three lists or rules, one for each axis"
    )
    group: Dataset = Field(description="the group of the output that the arrays of this box go to")


class TargetGrid(AnyGrid):
    """Positions from the job, or from a file of the receiving code; boxes of finer cells within it."""

    file: Text | None = None
    finer: list[FinerBox] = []

    @model_validator(mode="after")
    def _one(self) -> TargetGrid:
        if self.kind != "tabulated" and self.nodes is None:
            raise ValueError("nodes: missing; give three lists or rules, one for each axis")
        if bool(self.datasets) != (self.file is not None):
            raise ValueError(
                "file is where datasets of positions lie; give both or none"
                if self.file is not None
                else f"{self.datasets[0]!r} is a dataset; give file, the HDF5 file it lies in, or numbers instead"
            )
        if self.finer and self.kind != "cartesian":
            raise ValueError(f"finer boxes lie in a cartesian grid, not in a {self.kind} one")
        if self.finer and self.periodic is not None and any(self.periodic):
            raise ValueError("finer boxes lie in a grid without seams; leave out periodic")
        groups = ["/".join(part for part in box.group.split("/") if part) for box in self.finer]
        for name in groups:
            if groups.count(name) > 1 or not name or name.split("/")[0] == "fieldmover":
                raise ValueError(f"group {name!r}: expected another one for each box, not /fieldmover")
        return self
