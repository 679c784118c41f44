"""From the files of a job to fields on grids."""

from __future__ import annotations

from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

import fieldmover as fm
from fieldmover.conventions import components
from fieldmover.conventions.units import size_of
from fieldmover.errors import DataError
from fieldmover.forms.fields import FaceFlux, Three
from fieldmover.forms.symmetry import unfold_values
from fieldmover.grids.grid import Grid
from fieldmover.grids.placement import placement, turned, unplaced
from fieldmover.jobs.grids import at_place, source_grid
from fieldmover.jobs.load import Loaded
from fieldmover.jobs.schema import Magnetic, Source, Symmetry
from fieldmover.snapshots.gate import Snapshot
from fieldmover.snapshots.layout import Layout, Place

Array = NDArray[np.float64]


@dataclass(frozen=True)
class State:
    """What a file holds, on its grid.

    Attributes
    ----------
    path : Path
    flux : FaceFlux
        Heaviside-Lorentz.
    fluid : dict
        Name to array: (n1, n2, n3) for a scalar, (3, n1, n2, n3) Cartesian components for a vector.
    time : float or None
    """

    path: Path
    flux: FaceFlux
    fluid: dict[str, Array] = field(default_factory=dict)
    time: float | None = None

    @property
    def grid(self) -> Grid:
        return self.flux.grid


def read_source(loaded: Loaded) -> State:
    """The snapshot of a job.

    Raises
    ------
    DataError
        If anything in it is missing, misshapen, not finite or refused.
    JobError
        If positions given in the job do not make a grid.
    """
    source = loaded.job.source
    layout = _layout(source)
    with Snapshot(loaded.source) as snapshot:
        part = source_grid(loaded, snapshot, layout)
        whole = Completed(part, source.grid.symmetry)
        flux = _read_flux(snapshot, whole, source.magnetic, source.magnetic.at, layout)
        grid = at_place(flux.grid, source.grid.place)
        fluid = {
            name: _in_common_frame(grid, _read_quantity(snapshot, whole, quantity.data, quantity.basis, layout))
            for name, quantity in source.fluid.items()
        }
        for name, quantity in source.fluid.items():
            if quantity.carry == "conserve":
                _not_negative(snapshot, str(quantity.data), fluid[name])
        time = snapshot.number(source.time) if isinstance(source.time, str) else source.time
    return State(loaded.source, FaceFlux(grid, flux.faces), fluid, time)


def source_datasets(loaded: Loaded) -> tuple[Grid, dict[str, int]]:
    """The grid of the snapshot, and the bytes of every dataset that the job reads; fields are not read.

    Raises
    ------
    DataError, JobError
        As in `read_source`.
    """
    source = loaded.job.source
    names = [*source.grid.datasets, *source.magnetic.data]
    for quantity in source.fluid.values():
        names += [quantity.data] if isinstance(quantity.data, str) else quantity.data
    with Snapshot(loaded.source) as snapshot:
        part = source_grid(loaded, snapshot, _layout(source))
        grid = at_place(Completed(part, source.grid.symmetry).grid, source.grid.place)
        return grid, {name: snapshot.size(name) for name in names}


def read_target(loaded: Loaded, grid: Grid, path: Path | None = None) -> State:
    """The file that a job wrote, or another laid out like it, as stored, on its grid.

    Raises
    ------
    DataError
        If anything in it is missing, misshapen, not finite or refused.
    """
    target = loaded.job.target
    layout, whole = Layout(target.axes), Completed(unplaced(grid), None)
    path = path or loaded.target
    with Snapshot(path) as snapshot:
        flux = _read_flux(snapshot, whole, target.magnetic, target.magnetic.at, layout)
        fluid = {
            name: _in_common_frame(grid, _read_quantity(snapshot, whole, quantity.data, quantity.basis, layout))
            for name, quantity in target.fluid.items()
        }
    return State(path, FaceFlux(grid, flux.faces), fluid)


class Completed:
    """A grid as a file has it, and the whole that symmetry makes of it.

    Parameters
    ----------
    part : Grid
        In the frame of its own code.
    symmetry : Symmetry or None
    """

    def __init__(self, part: Grid, symmetry: Symmetry | None) -> None:
        self.part = part
        self._how: dict[str, Any] = {}
        if symmetry is not None:
            mirror = symmetry.equator is not None
            self._how = {"mirror": mirror, "wedge": symmetry.wedge, "around": symmetry.around}
        self._across = 1 if part.kind == "spherical" else 2
        self.grid = fm.unfold(fm.CellContent(part, np.zeros(part.shape)), **self._how).grid if self._how else part

    def flux(self, flux: FaceFlux) -> FaceFlux:
        """A flux on the part as one on the whole."""
        return fm.unfold(flux, **self._how) if self._how else flux

    def scalar(self, values: Array) -> Array:
        """Values in the cells of the part, in those of the whole."""
        return unfold_values(self.part, values, **self._how) if self._how else values

    def vector(self, values: Array, basis: components.Basis, axial: bool) -> tuple[Array, components.Basis]:
        """Components of a vector, polar or axial, and their basis: along the axes of the grid if it is unfolded."""
        if not self._how:
            return values, basis
        if basis == "cartesian":
            basis = "physical"
            values = components.from_cartesian(self.part, values, basis)
        parts = [
            unfold_values(self.part, part, odd=(axis == self._across) != axial, **self._how)
            for axis, part in enumerate(values)
        ]
        return np.stack(parts), basis


def flux_from_stored(
    grid: Grid, arrays: Three, magnetic: Magnetic, at: Place, basis: components.Basis | None = None
) -> FaceFlux:
    """Fluxes from numbers as a file stores them, already turned to [i1, i2, i3]; `basis` in place of the job's."""
    unit, basis = size_of(magnetic.unit), basis or magnetic.basis or "physical"
    b1, b2, b3 = (unit * array for array in arrays)
    if at == "faces":
        return components.flux_from_faces(grid, (b1, b2, b3), basis, magnetic.densitised)
    if at == "edges":
        return fm.curl(components.potential_from_edges(grid, (b1, b2, b3), basis))
    if magnetic.densitised:
        density = components.cell_density(grid)
        b1, b2, b3 = b1 / density, b2 / density, b3 / density
    return fm.flux_from_cells(grid, (b1, b2, b3), basis=basis)


def _layout(source: Source) -> Layout:
    g1, g2, g3 = source.ghosts
    return Layout(source.axes, (g1, g2, g3))


def _read_flux(snapshot: Snapshot, whole: Completed, magnetic: Magnetic, at: Place, layout: Layout) -> FaceFlux:
    a, b, c = (
        layout.read(snapshot, name, whole.part.shape, at, component) for component, name in enumerate(magnetic.data)
    )
    if at != "cells" or whole.grid is whole.part:
        return whole.flux(flux_from_stored(whole.part, (a, b, c), magnetic, at))
    field, basis = whole.vector(np.stack([a, b, c]), magnetic.basis or "physical", axial=True)
    return flux_from_stored(whole.grid, (field[0], field[1], field[2]), magnetic, at, basis)


def _read_quantity(snapshot: Snapshot, whole: Completed, data: Any, basis: Any, layout: Layout) -> Array:
    """A scalar, or the Cartesian components of a vector in the frame of the file's code."""
    if isinstance(data, str):
        return whole.scalar(layout.read(snapshot, data, whole.part.shape, "cells"))
    vector = np.stack([layout.read(snapshot, name, whole.part.shape, "cells") for name in data])
    vector, basis = whole.vector(vector, basis or "physical", axial=False)
    return components.to_cartesian(whole.grid, vector, basis)


def _in_common_frame(grid: Grid, values: Array) -> Array:
    """A quantity on a grid that may be placed; vectors turn with it."""
    where = placement(grid)
    return values if where is None or values.ndim == 3 else turned(where[1], values)


def _not_negative(snapshot: Snapshot, name: str, density: Array) -> None:
    """A density of something conserved may vanish but not be negative."""
    bad = density < 0
    if bad.any():
        first = [int(i) for i in np.argwhere(bad)[0]]
        raise DataError(
            f"{snapshot.path}: dataset {name!r} has {np.count_nonzero(bad)} negative values, the first "
            f"({density[tuple(first)]:.6g}) at [i1, i2, i3] = {first} without ghosts; expected a density"
        )
