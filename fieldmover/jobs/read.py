"""From the files of a job to fields on grids."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

import fieldmover as fm
from fieldmover.conventions import components
from fieldmover.conventions.units import size_of
from fieldmover.conventions.vector_potential import potential_from_edges
from fieldmover.errors import DataError, FieldError
from fieldmover.expressions import Expression
from fieldmover.forms.fields import FaceFlux, Three
from fieldmover.forms.symmetry import unfold_values
from fieldmover.grids.grid import Grid
from fieldmover.jobs.formulas import Values, evaluated
from fieldmover.jobs.grids import at_place, moving, source_grid
from fieldmover.jobs.load import Loaded
from fieldmover.jobs.schema import VELOCITY, Magnetic, Source, Symmetry
from fieldmover.jobs.schema.gas import MetricArrays, SourceQuantity, TargetQuantity
from fieldmover.jobs.space import Side, Space, coordinate_volumes, space_of
from fieldmover.jobs.units import ratio, size_of_quantity
from fieldmover.snapshots.gate import Snapshot
from fieldmover.snapshots.layout import Layout, Place

Array = NDArray[np.float64]


@dataclass(frozen=True)
class State:
    """What a file holds, on its grid, in the units of the receiving code.

    Attributes
    ----------
    path : Path
    flux : FaceFlux
        Heaviside-Lorentz.
    space : Space
        Of the grid.
    fluid : dict
        Name to array: (n1, n2, n3) for a scalar, (3, n1, n2, n3) Cartesian components in the common frame for a
        vector; the velocity as `space` has it, densities in the frame of the gas.
    time : float or None
    """

    path: Path
    flux: FaceFlux
    space: Space
    fluid: dict[str, Array] = field(default_factory=dict)
    time: float | None = None

    @property
    def grid(self) -> Grid:
        return self.flux.grid

    @property
    def elements(self) -> Array:
        """What a density is multiplied by to give the content of a cell."""
        return self.space.elements(self.fluid.get(VELOCITY))


def read_source(loaded: Loaded) -> State:
    """The snapshot of a job.

    Raises
    ------
    DataError
        If anything in it is missing, misshapen, not finite or refused.
    JobError
        If positions given in the job do not make a grid, or a metric does not fit it.
    """
    job, source = loaded.job, loaded.job.source
    layout = _layout(source)
    with Snapshot(loaded.source) as snapshot:
        part = source_grid(loaded, snapshot, layout)
        whole = Completed(part, source.grid.symmetry)
        grid = at_place(whole.grid, source.grid.place)
        arrays = _metric_arrays(snapshot, source.metric, layout, part)
        space = space_of(job, "source", grid, arrays, moving(loaded, "source", whole.grid))
        flux = _read_flux(snapshot, whole, source.magnetic, source.magnetic.at, layout, space)
        size = ratio(job, "field")  # lengths of the grid are the target's already
        flux = FaceFlux(grid, flux.faces) if size == 1.0 else FaceFlux(grid, _scaled(flux.faces, size))
        fluid = _read_fluid(snapshot, source.fluid, whole, layout, space, "source", lambda n: size_of_quantity(job, n))
        _add_formulas(fluid, source.fluid, flux)
        for name, quantity in source.fluid.items():
            if quantity.carry == "conserve":
                _not_negative(snapshot, str(quantity.data or f"formula of {name}"), fluid[name])
        time = snapshot.number(source.time) if isinstance(source.time, str) else source.time
    return State(loaded.source, flux, space, fluid, None if time is None else time * ratio(job, "time"))


def source_datasets(loaded: Loaded) -> tuple[Grid, dict[str, int]]:
    """The grid of the snapshot, and the bytes of every dataset that the job reads; of fields only shapes are looked at.

    Raises
    ------
    DataError, JobError
        As in `read_source`.
    """
    source = loaded.job.source
    in_cells: list[str] = []
    for quantity in source.fluid.values():
        in_cells += [quantity.data] if isinstance(quantity.data, str) else quantity.data or []
    if source.metric is not None:
        in_cells += [*([source.metric.lapse] if source.metric.lapse else []), *(source.metric.shift or [])]
        in_cells += source.metric.gamma or []
    names, layout = [*source.grid.datasets, *source.magnetic.data, *in_cells], _layout(source)
    with Snapshot(loaded.source) as snapshot:
        part = source_grid(loaded, snapshot, layout)
        grid = at_place(Completed(part, source.grid.symmetry).grid, source.grid.place)
        for component, name in enumerate(source.magnetic.data):
            layout.check_shape(snapshot, name, part.shape, source.magnetic.at, component)
        for name in in_cells:
            layout.check_shape(snapshot, name, part.shape, "cells")
        return grid, {name: snapshot.size(name) for name in names}


def target_space(loaded: Loaded, grid: Grid) -> Space:
    """The space of the target, on its grid at its place.

    Raises
    ------
    DataError, JobError
        If a metric cannot be read, is none or does not fit the grid.
    """
    target = loaded.job.target
    own = Space(grid).own
    arrays = None
    if target.metric is not None and target.grid is not None and target.grid.file is not None:
        with Snapshot(loaded.path.parent / target.grid.file) as snapshot:
            arrays = _metric_arrays(snapshot, target.metric, Layout(target.axes), own)
    return space_of(loaded.job, "target", grid, arrays, moving(loaded, "target", own))


def read_target(loaded: Loaded, space: Space, path: Path | None = None) -> State:
    """The file that a job wrote, or another laid out like it, as stored, on its grid.

    Raises
    ------
    DataError
        If anything in it is missing, misshapen, not finite or refused.
    """
    target = loaded.job.target
    g1, g2, g3 = target.ghosts
    layout, whole = Layout(target.axes, (g1, g2, g3)), Completed(space.own, None)
    path = path or loaded.target
    with Snapshot(path) as snapshot:
        flux = _read_flux(snapshot, whole, target.magnetic, target.magnetic.at, layout, space)
        fluid = _read_fluid(snapshot, target.fluid, whole, layout, space, "target", lambda _: 1.0)
    return State(path, FaceFlux(space.grid, flux.faces), space, fluid)


def read_cells(loaded: Loaded, grid: Grid) -> Array | None:
    """The components of the field as stored, Heaviside-Lorentz, shape (3, n1, n2, n3); None where not at cells."""
    magnetic, (g1, g2, g3) = loaded.job.target.magnetic, loaded.job.target.ghosts
    layout = Layout(loaded.job.target.axes, (g1, g2, g3))
    if magnetic.at != "cells":
        return None
    with Snapshot(loaded.target) as snapshot:
        parts = [layout.read(snapshot, name, grid.shape, "cells", axis) for axis, name in enumerate(magnetic.data)]
    return size_of(magnetic.unit) * np.stack(parts)


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
    space: Space, arrays: Three, magnetic: Magnetic, at: Place, basis: components.Basis | None = None,
    grid: Grid | None = None,
) -> FaceFlux:  # fmt: skip
    """Fluxes from numbers as a file stores them, already turned to [i1, i2, i3].

    Parameters
    ----------
    space : Space
    arrays : three arrays
    magnetic : Magnetic
    at : str
    basis : str, optional
        In place of the job's.
    grid : Grid, optional
        That of the arrays, where it is not that of the space.
    """
    grid = grid or space.own
    unit, basis = size_of(magnetic.unit), basis or magnetic.basis or "physical"
    b1, b2, b3 = (unit * array for array in arrays)
    if at == "faces":
        return components.flux_from_faces(grid, (b1, b2, b3), basis, magnetic.densitised, space.metric)
    if at == "edges":
        return fm.curl(potential_from_edges(grid, (b1, b2, b3), basis))
    factor = 1.0 / components.cell_density(grid) if magnetic.densitised else space.density_factor
    return fm.flux_from_cells(grid, (b1 * factor, b2 * factor, b3 * factor), basis=basis)


def quantity_from_stored(
    space: Space, values: Array, quantity: SourceQuantity | TargetQuantity, name: str, basis: components.Basis
) -> Array:
    """A fluid quantity of a file as ours; a densitised one stays as it is."""
    if not quantity.vector:
        return values
    kind = (quantity.kind or "coordinate") if name == VELOCITY else None
    return space.from_stored(values, kind, basis)


def basis_of(quantity: SourceQuantity | TargetQuantity, grid: Grid) -> components.Basis:
    """The basis of a vector; on a Cartesian grid it need not be said."""
    return quantity.basis or ("cartesian" if grid.kind == "cartesian" else "physical")


def _layout(source: Source) -> Layout:
    g1, g2, g3 = source.ghosts
    return Layout(source.axes, (g1, g2, g3))


def _scaled(faces: Three, size: float) -> Three:
    a, b, c = (size * f for f in faces)
    return a, b, c


def _metric_arrays(snapshot: Snapshot, wanted: MetricArrays | None, layout: Layout, grid: Grid) -> dict[str, Array]:
    """Arguments of a metric from arrays."""
    if wanted is None:
        return {}

    def read(names: list[str]) -> Array:
        return np.stack([layout.read(snapshot, name, grid.shape, "cells") for name in names])

    found = {}
    if wanted.lapse is not None:
        found["lapse"] = read([wanted.lapse])[0]
    if wanted.shift is not None:
        found["shift"] = read(wanted.shift)
    if wanted.gamma is not None:
        found["gamma"] = read(wanted.gamma)
    return found


def _read_flux(
    snapshot: Snapshot, whole: Completed, magnetic: Magnetic, at: Place, layout: Layout, space: Space
) -> FaceFlux:
    a, b, c = (
        layout.read(snapshot, name, whole.part.shape, at, component) for component, name in enumerate(magnetic.data)
    )
    try:
        if at != "cells" or whole.grid is whole.part:
            return whole.flux(flux_from_stored(space, (a, b, c), magnetic, at, grid=whole.part))
        field, basis = whole.vector(np.stack([a, b, c]), magnetic.basis or "physical", axial=True)
        return flux_from_stored(space, (field[0], field[1], field[2]), magnetic, at, basis, whole.grid)
    except FieldError as error:
        raise DataError(f"{snapshot.path}: {', '.join(magnetic.data)}: {error}") from None


def _read_fluid(
    snapshot: Snapshot,
    quantities: dict[str, Any],
    whole: Completed,
    layout: Layout,
    space: Space,
    side: Side,
    size_of_one: Callable[[str], float],
) -> dict[str, Array]:
    """All stored quantities; the velocity first, for what is densitised holds its Lorentz factor."""
    fluid: dict[str, Array] = {}
    stored = [name for name, quantity in quantities.items() if quantity.data is not None]
    for name in sorted(stored, key=lambda name: name != VELOCITY):
        quantity, data = quantities[name], quantities[name].data
        if isinstance(data, str):
            values = whole.scalar(layout.read(snapshot, data, whole.part.shape, "cells")) * size_of_one(name)
            if quantity.densitised:
                values = values * (coordinate_volumes(whole.grid) / space.elements(fluid.get(VELOCITY)))
        else:
            parts = np.stack([layout.read(snapshot, one, whole.part.shape, "cells") for one in data])
            vector, basis = whole.vector(parts * size_of_one(name), basis_of(quantity, whole.grid), axial=False)
            try:
                values = quantity_from_stored(space, vector, quantity, name, basis)
            except FieldError as error:
                raise DataError(f"{snapshot.path}: {side}.fluid.{name}: {error}") from None
        fluid[name] = values
    return fluid


def _add_formulas(fluid: dict[str, Array], quantities: dict[str, SourceQuantity], flux: FaceFlux) -> None:
    values = Values(fluid, flux)
    made: dict[str, Array] = {}
    for name, quantity in quantities.items():
        if quantity.formula is not None:
            made[name] = evaluated(Expression(quantity.formula, values.names), values, f"source.fluid.{name}")
    fluid.update(made)


def _not_negative(snapshot: Snapshot, name: str, density: Array) -> None:
    """A density of something conserved may vanish but not be negative."""
    bad = density < 0
    if bad.any():
        first = [int(i) for i in np.argwhere(bad)[0]]
        raise DataError(
            f"{snapshot.path}: dataset {name!r} has {np.count_nonzero(bad)} negative values, the first "
            f"({density[tuple(first)]:.6g}) at [i1, i2, i3] = {first} without ghosts; expected a density"
        )
