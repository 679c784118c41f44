"""What a job says of the magnetic field and its potential, on both sides."""

from __future__ import annotations

from typing import Literal

from pydantic import Field, model_validator

from fieldmover.jobs.schema.tables import Basis, Components, Table, Unit


class Magnetic(Table):
    """Where three components of a magnetic field lie and what their numbers mean."""

    data: Components = Field(description="three datasets")
    basis: Basis | None = None
    densitised: bool = False
    unit: Unit = Field(description='"gaussian", "heaviside-lorentz" or a number')


class SourceMagnetic(Magnetic):
    """The magnetic field of the snapshot, or its vector potential."""

    at: Literal["faces", "cells", "edges"] = Field(description='"faces", "cells" or "edges" (a vector potential)')


class TargetMagnetic(Magnetic):
    """The magnetic field to write."""

    at: Literal["faces", "cells"] = "faces"
    stencil: Literal["faces", "central", "corners"] = "faces"

    @model_validator(mode="after")
    def _fits(self) -> TargetMagnetic:
        if self.stencil != "faces" and self.at != "cells":
            raise ValueError(f'stencil = "{self.stencil}" takes the divergence of values at = "cells"')
        return self


class TargetPotential(Table):
    """A vector potential to write beside the magnetic field."""

    data: Components = Field(description="three datasets")
    at: Literal["edges", "cells"] = "edges"
    basis: Basis | None = None
    unit: Unit = Field(description='"gaussian", "heaviside-lorentz" or a number')
    gauge: Literal["smooth", "axial", "none"] = "smooth"

    @model_validator(mode="after")
    def _fits(self) -> TargetPotential:
        if self.at == "edges" and self.basis == "cartesian":
            raise ValueError('basis = "cartesian" goes with at = "cells"; edges follow the grid')
        return self
