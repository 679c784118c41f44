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
from fieldmover.errors import DataError, GridError, JobError
from fieldmover.forms.fields import FaceFlux, Three
from fieldmover.grids.grid import Grid
from fieldmover.jobs.load import Loaded
from fieldmover.jobs.schema import AnyGrid, Magnetic, Source, Spaced
from fieldmover.snapshots.axes import MEANING, from_centres, spaced
from fieldmover.snapshots.gate import Snapshot
from fieldmover.snapshots.layout import Layout, Place, read_axis

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
        grid = _source_grid(snapshot, source, layout)
        flux = _read_flux(snapshot, grid, source.magnetic, source.magnetic.at, layout)
        fluid = {
            name: _read_quantity(snapshot, grid, quantity.data, quantity.basis, layout)
            for name, quantity in source.fluid.items()
        }
        for name, quantity in source.fluid.items():
            if quantity.carry == "conserve":
                _not_negative(snapshot, str(quantity.data), fluid[name])
        time = snapshot.number(source.time) if isinstance(source.time, str) else source.time
    return State(loaded.source, flux, fluid, time)


def source_datasets(loaded: Loaded) -> tuple[Grid, dict[str, int]]:
    """The grid of the snapshot, and the bytes of every dataset that the job reads; fields are not read.

    Raises
    ------
    DataError, JobError
        As in `read_source`.
    """
    source = loaded.job.source
    names = [name for name in source.grid.nodes or source.grid.centres or [] if isinstance(name, str)]
    names += source.magnetic.data
    for quantity in source.fluid.values():
        names += [quantity.data] if isinstance(quantity.data, str) else quantity.data
    with Snapshot(loaded.source) as snapshot:
        return _source_grid(snapshot, source, _layout(source)), {name: snapshot.size(name) for name in names}


def read_target(loaded: Loaded, grid: Grid, path: Path | None = None) -> State:
    """The file that a job wrote, or another laid out like it, as stored, on its grid.

    Raises
    ------
    DataError
        If anything in it is missing, misshapen, not finite or refused.
    """
    target = loaded.job.target
    layout = Layout(target.axes)
    path = path or loaded.target
    with Snapshot(path) as snapshot:
        flux = _read_flux(snapshot, grid, target.magnetic, target.magnetic.at, layout)
        fluid = {
            name: _read_quantity(snapshot, grid, quantity.data, quantity.basis, layout)
            for name, quantity in target.fluid.items()
        }
    return State(path, flux, fluid)


def target_grid(loaded: Loaded) -> Grid:
    """The grid that a job writes to.

    Raises
    ------
    JobError
        If there is none, or its positions do not make a grid.
    """
    wanted = loaded.job.target.grid
    if wanted is None:
        raise JobError(
            f"{loaded.path}: target.grid: missing; give this table (only clean keeps the grid of the source)"
        )
    nodes = [_own_nodes(axis) for axis in wanted.nodes]
    return _made_in_job("target", wanted, nodes)


def flux_from_stored(grid: Grid, arrays: Three, magnetic: Magnetic, at: Place) -> FaceFlux:
    """Fluxes from numbers as a file stores them, already turned to [i1, i2, i3]."""
    unit, basis = size_of(magnetic.unit), magnetic.basis or "physical"
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


def _read_flux(snapshot: Snapshot, grid: Grid, magnetic: Magnetic, at: Place, layout: Layout) -> FaceFlux:
    a, b, c = (
        layout.read(snapshot, name, grid.shape, at, component) for component, name in enumerate(magnetic.data)
    )
    return flux_from_stored(grid, (a, b, c), magnetic, at)


def _read_quantity(snapshot: Snapshot, grid: Grid, data: Any, basis: Any, layout: Layout) -> Array:
    if isinstance(data, str):
        return layout.read(snapshot, data, grid.shape, "cells")
    vector = np.stack([layout.read(snapshot, name, grid.shape, "cells") for name in data])
    return components.to_cartesian(grid, vector, basis or "physical")


def _not_negative(snapshot: Snapshot, name: str, density: Array) -> None:
    """A density of something conserved may vanish but not be negative."""
    bad = density < 0
    if bad.any():
        first = [int(i) for i in np.argwhere(bad)[0]]
        raise DataError(
            f"{snapshot.path}: dataset {name!r} has {np.count_nonzero(bad)} negative values, the first "
            f"({density[tuple(first)]:.6g}) at [i1, i2, i3] = {first} without ghosts; expected a density"
        )


def _source_grid(snapshot: Snapshot, source: Source, layout: Layout) -> Grid:
    wanted, magnetic = source.grid, source.magnetic
    axes = wanted.nodes or wanted.centres or []
    stored = layout.stored_cells(snapshot, magnetic.data[0], magnetic.at, 0)
    nodes = []
    for axis, given in enumerate(axes):
        if isinstance(given, str):
            nodes.append(
                read_axis(
                    snapshot, given, axis, layout, stored[axis], wanted.kind, wanted.centres is not None
                )
            )
        elif wanted.centres is not None and isinstance(given, list):
            nodes.append(from_centres(np.array(given), 0, MEANING[wanted.kind][axis]))
        else:
            nodes.append(_own_nodes(given))
    if any(isinstance(given, str) for given in axes):
        try:
            return _made(source.grid.kind, nodes, source.grid.periodic)
        except GridError as error:
            raise DataError(f"{snapshot.path}: {error}") from None
    return _made_in_job("source", wanted, nodes)


def _own_nodes(axis: Any) -> Array:
    if isinstance(axis, Spaced):
        return spaced(axis.from_, axis.to, axis.cells, axis.spacing, axis.ratio or 1.0)
    return np.array(axis, dtype=np.float64)


def _made_in_job(side: str, grid: AnyGrid, nodes: list[Array]) -> Grid:
    try:
        return _made(grid.kind, nodes, grid.periodic)
    except GridError as error:
        raise JobError(f"{side}.grid: {error}") from None


def _made(kind: str, nodes: list[Array], periodic: list[bool]) -> Grid:
    if kind == "cartesian":
        x, y, z = nodes
        return fm.cartesian_grid(x, y, z, periodic=(periodic[0], periodic[1], periodic[2]))
    if kind == "cylindrical":
        return fm.cylindrical_grid(*nodes)
    return fm.spherical_grid(*nodes)
