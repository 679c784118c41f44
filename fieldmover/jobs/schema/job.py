"""A whole job, and what its tables say that is right alone but not together."""

from __future__ import annotations

import re
from pathlib import PurePath
from typing import Annotated, Any, Literal

from pydantic import BeforeValidator, Field

from fieldmover.jobs.names import known
from fieldmover.jobs.schema.clean import Clean
from fieldmover.jobs.schema.fields import (
    MASS,
    SourceMagnetic,
    SourceQuantity,
    TargetMagnetic,
    TargetPotential,
    TargetQuantity,
    data_alone,
)
from fieldmover.jobs.schema.grids import SourceGrid, TargetGrid
from fieldmover.jobs.schema.measures import Limits, Region, Report, among
from fieldmover.jobs.schema.tables import (
    AxisOrder,
    Basis,
    Mistake,
    Quantity,
    Sought,
    Table,
    Text,
    Three,
    sort_of_data,
)

UNFIT = re.compile(r"[:<>&\"'\s]")
"""In the name of a file with a view: readers of XDMF take these for something else."""


class Source(Table):
    """The snapshot to read."""

    file: Text = Field(description="the snapshot, an HDF5 file")
    axes: AxisOrder = "q1 q2 q3"
    ghosts: Annotated[list[Annotated[int, Field(ge=0, le=100)]], Three] = [0, 0, 0]
    time: Sought | None = None
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
    potential: TargetPotential | None = None
    fluid: dict[Quantity, Annotated[TargetQuantity, BeforeValidator(data_alone)]] = {}


class Move(Table):
    """How the field is moved."""

    order: Literal[1, 3, 5, "limited"] = 3
    clean: Literal["when needed", "always", "never"] = "when needed"
    outside: Literal["least energy", "zero", "refuse"] = "least energy"


class Job(Table):
    """A whole hand-over."""

    title: str = ""
    source: Source
    target: Target
    move: Move = Move()
    clean: Clean = Clean()
    report: Report = Report()
    regions: dict[Quantity, Region] = {}
    limits: Limits = {}

    def mistakes(self) -> list[Mistake]:
        """What tables say that is right alone but not together: place and message of each."""
        return [
            *self._basis_mistakes(),
            *self._fluid_mistakes(),
            *self._name_mistakes(),
            *self._region_mistakes(),
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
                found.append(((*place, "basis"), f'"cartesian" goes with at = "cells"; {magnetic.at} follow the grid'))
            if magnetic.densitised and (magnetic.basis != "coordinate" or magnetic.at == "edges"):
                found.append(((*place, "densitised"), 'goes with basis = "coordinate" of a field at faces or cells'))
            vectors: list[tuple[tuple[str, ...], Basis | None]] = [(place, magnetic.basis)]
            if (pot := getattr(table, "potential", None)) is not None:
                vectors.append(((side, "potential"), pot.basis))
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
                found.append((place, f"not among the quantities of source.fluid: {', '.join(source) or 'none'}"))
            elif sort_of_data(wanted.data) != sort_of_data(source[name].data):
                found.append((place, f"the source has a {sort_of_data(source[name].data)}, this names another number"))
        if mass is None or mass.carry != "conserve" or isinstance(mass.data, list):
            for name, quantity in source.items():
                if quantity.carry == "by mass":
                    needs = f'"by mass" needs a scalar source.fluid.{MASS} with carry = "conserve"'
                    found.append((("source", "fluid", name, "carry"), needs))
        if "mass_change" in self.limits and MASS not in self.conserved:
            found.append((("limits", "mass_change"), f'needs target.fluid.{MASS}, carried by "conserve"'))
        return found

    def _region_mistakes(self) -> list[Mistake]:
        """Regions that the cleaning speaks of but the job does not have."""
        known_here = ", ".join(self.regions) or "none"
        return [
            (("clean", key), f"no region {name!r}; the job has {known_here}")
            for key in ("frozen", "excised")
            if (name := getattr(self.clean, key)) is not None and name not in self.regions
        ]

    def _limit_mistakes(self) -> list[Mistake]:
        """Limits on regions and quantities that the job does not have."""
        names = known(self.conserved, self.regions)
        found: list[Mistake] = []
        for name in self.limits:
            try:
                among(name, names)
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
        if self.target.potential is not None:
            names += [(("target", "potential", "data"), name) for name in self.target.potential.data]
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
