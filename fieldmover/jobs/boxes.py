"""Targets of more than one grid: finer boxes within it, or ghost layers round it."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace
from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray

from fieldmover.diagnostics import cell_energies, relative_divergence
from fieldmover.errors import GridError, JobError, PlaceError
from fieldmover.forms.fields import CellContent, FaceFlux
from fieldmover.forms.incidence import d2
from fieldmover.grids.ghosts import Ghosts
from fieldmover.grids.grid import Grid
from fieldmover.grids.nested import NestedGrid
from fieldmover.interpolation.charge import move_charged
from fieldmover.interpolation.fluid import FluidPlan
from fieldmover.interpolation.flux import move_flux
from fieldmover.interpolation.ghosts import move_charged_with_ghosts, move_with_ghosts
from fieldmover.interpolation.nested import move_charged_nested, move_flux_nested
from fieldmover.interpolation.nested_fluid import NestedFluidPlan
from fieldmover.jobs.fluid import move_fluid
from fieldmover.jobs.grids import groups_of, nested_target
from fieldmover.jobs.load import Loaded
from fieldmover.jobs.read import State, read_target, target_space
from fieldmover.jobs.record import Record
from fieldmover.jobs.schema import MASS
from fieldmover.jobs.space import Space

Array = NDArray[np.float64]


@dataclass(frozen=True, eq=False)
class Around:
    """A target with layers of cells round it.

    Attributes
    ----------
    ghosts : Ghosts
    flux : FaceFlux
        On all of it.
    state : State
        On what lies within the source's reach beyond walls: `ghosts.outer`.
    """

    ghosts: Ghosts
    flux: FaceFlux
    state: State

    def with_inside(self, outer: Array, inner: Array) -> Array:
        """Values on `ghosts.outer`, those of the target itself as given."""
        whole = outer.copy()
        whole[(..., *self.ghosts.in_outer((True, True, True)))] = inner
        return whole

    def cells(self, outer: Array, component: int | None, cartesian: bool) -> Array:
        """Values in all cells; along an axis of the grid they may change sign across its poles."""
        crossing = self.ghosts.grid.kind in ("cylindrical", "spherical") and not cartesian
        across = {"spherical": (1, 2), "cylindrical": (0, 1)}.get(self.ghosts.grid.kind, ())
        return self.ghosts.cells(outer, odd=crossing and component in across)


@dataclass(frozen=True, eq=False)
class Target:
    """All grids that a job writes to.

    Attributes
    ----------
    grid : Grid
        The one that the report speaks of.
    space : Space
    nested : NestedGrid or None
    ghosts : Ghosts or None
    """

    grid: Grid
    space: Space
    nested: NestedGrid | None
    ghosts: Ghosts | None

    @property
    def finer(self) -> tuple[Grid, ...]:
        """The boxes beside the grid itself."""
        return () if self.nested is None else self.nested.boxes[1:]


def target_of(loaded: Loaded, grid: Grid) -> Target:
    """The grids of a job.

    Raises
    ------
    JobError
        If boxes do not fit into each other, or the grid cannot have the layers.
    """
    layers = loaded.job.target.ghosts
    try:
        ghosts = Ghosts(grid, layers) if any(layers) else None
    except GridError as error:
        raise JobError(f"{loaded.path}: target.ghosts: {error}") from None
    return Target(grid, target_space(loaded, grid), nested_target(loaded, grid), ghosts)


def move_field(loaded: Loaded, flux: FaceFlux, target: Target, record: Record) -> tuple[FaceFlux, list[FaceFlux]]:
    """The field on the target's grid, and on what there is beside: finer boxes, or the grid with its layers.

    Raises
    ------
    JobError
        If a point charge cannot be where the job puts it.
    FieldError, ChargeError
        As `move_flux` and its kin.
    """
    try:
        return _moved_field(loaded, flux, target, record)
    except PlaceError as error:
        raise JobError(f"{loaded.path}: move.point = {loaded.job.move.point}: {error}") from None


def _moved_field(loaded: Loaded, flux: FaceFlux, target: Target, record: Record) -> tuple[FaceFlux, list[FaceFlux]]:
    order, outside = loaded.job.move.order, loaded.job.move.outside
    charged = loaded.job.move.net_flux == "point"
    centre: ArrayLike = loaded.job.move.point
    if target.nested is not None:
        if charged:
            many = move_charged_nested(flux, target.nested, order, outside, centre)
            record.values["charge"] = _charge(many.charge, many.cells[0], many.centre)
            return many.fluxes[0], many.fluxes[1:]
        fluxes = move_flux_nested(flux, target.nested, order, outside)
        return fluxes[0], fluxes[1:]
    if target.ghosts is not None:
        if charged:
            one = move_charged_with_ghosts(flux, target.grid, target.ghosts.layers, order, outside, centre)
            record.values["charge"] = _charge(one.charge, one.cell, one.centre, target.ghosts.layers)
            whole = one.flux
        else:
            whole = move_with_ghosts(flux, target.grid, target.ghosts.layers, order, outside)
        return FaceFlux(target.grid, _within(whole, target.ghosts.layers, target.grid.shape)), [whole]
    if charged:
        one = move_charged(flux, target.grid, order, outside, centre)
        record.values["charge"] = _charge(one.charge, one.cell, one.centre)
        return one.flux, []
    return move_flux(flux, target.grid, order=order, outside=outside), []


def without_charge(record: Record, stored: State) -> None:
    """The divergence of the report, but for the cell that holds a point charge: that is no monopole of the move's."""
    if record.values["charge"] is not None and record.values["stencil"]["stencil"] == "faces":
        record.values["figures"]["divergence"] = _divergence(record, stored)


def _divergence(record: Record, state: State) -> float:
    """The largest of a state, where no point charge sits."""
    found, charge = relative_divergence(state.flux), record.values["charge"]
    if charge is not None:
        found[np.abs(d2(state.flux.faces)) > 0.5 * abs(charge["net_flux"])] = 0.0
    return float(found.max())


def boxes_beside(
    loaded: Loaded, source: State, target: Target, fluxes: list[FaceFlux]
) -> tuple[list[FluidPlan], list[State]]:
    """Plans and states of the grid and of all finer boxes; the first state is left to the caller.

    Returns
    -------
    plans : list
        The first is that of the grid itself.
    states : list of State
        Of the finer boxes.
    """
    if target.nested is None:
        return [FluidPlan(source.grid, target.grid)], []
    shared = NestedFluidPlan(source.grid, target.nested)
    plans: list[Any] = [_BoxPlan(shared, n) for n in range(len(target.nested.boxes))]
    states = []
    for plan, flux in zip(plans[1:], fluxes, strict=True):
        space = target_space(loaded, flux.grid)
        fluid, _ = move_fluid(loaded.job, source, space, plan, flux)
        states.append(State(loaded.target, flux, space, fluid, source.time))
    return plans, states


def around(loaded: Loaded, source: State, target: Target, whole: FaceFlux) -> Around:
    """The state with the layers round it."""
    ghosts = target.ghosts
    assert ghosts is not None
    space = target_space(loaded, ghosts.outer)
    begin = [n - part.start for n, part in zip(ghosts.layers, ghosts.in_outer((True,) * 3), strict=True)]
    flux = FaceFlux(ghosts.outer, _within(whole, begin, ghosts.outer.shape))
    plan = FluidPlan(source.grid, ghosts.outer)
    fluid, _ = move_fluid(loaded.job, source, space, plan, flux)
    return Around(ghosts, whole, State(loaded.target, flux, space, fluid, source.time))


def measure_boxes(loaded: Loaded, record: Record, first: State, finer: Sequence[State]) -> None:
    """Figures of every box as stored; the divergence of the report is the worst of all."""
    if not finer:
        return
    found = []
    for group, state in zip(["/", *groups_of(loaded)], [first, *finer], strict=True):
        mass = (state.fluid[MASS] * state.elements).sum() if MASS in state.fluid else None
        found.append(
            {
                "group": group,
                "grid": repr(state.grid),
                "divergence": _divergence(record, state),
                "energy": float(cell_energies(state.flux).sum()),
                "mass": None if mass is None else float(mass),
            }
        )
    record.values["boxes"] = found
    record.values["figures"]["divergence"] = max(
        record.values["figures"]["divergence"], *(box["divergence"] for box in found)
    )


def read_finer(loaded: Loaded, target: Target) -> list[State]:
    """The finer boxes of a file that a job wrote, as stored.

    Raises
    ------
    DataError
        If anything in it is missing, misshapen or not finite.
    """
    return [
        read_target(in_group(loaded, group), target_space(loaded, grid))
        for group, grid in zip(groups_of(loaded), target.finer, strict=True)
    ]


class _BoxPlan:
    """One box of a nested plan, as `FluidPlan` has it. Every box is moved for each: they depend on one another."""

    def __init__(self, shared: NestedFluidPlan, n: int) -> None:
        self._shared, self._n = shared, n
        own = shared.plans[n]
        self.source, self.target, self.coverage = own.source, own.target, own.coverage

    def move(self, content: CellContent) -> CellContent:
        return self._shared.move(content)[self._n]

    def move_by_mass(self, mass: CellContent, values: ArrayLike) -> tuple[CellContent, Array]:
        moved, carried = self._shared.move_by_mass(mass, values)
        return moved[self._n], carried[self._n]


def _within(whole: FaceFlux, begin: Sequence[int], shape: tuple[int, int, int]) -> tuple[Array, Array, Array]:
    """Fluxes of the part of a grid that begins at a cell and has a shape."""
    a, b, c = (
        np.ascontiguousarray(
            f[tuple(slice(lo, lo + n + (d == axis)) for d, (lo, n) in enumerate(zip(begin, shape, strict=True)))]
        )
        for axis, f in enumerate(whole.faces)
    )
    return a, b, c


def _charge(charge: float, cell: Any, centre: Array, layers: Sequence[int] = (0, 0, 0)) -> dict[str, Any]:
    """What the report says of a point charge; its cell is counted without layers."""
    where = None if cell is None else [int(i) - n for i, n in zip(cell, layers, strict=True)]
    return {"net_flux": charge, "cell": where, "centre": centre.tolist()}


def in_group(loaded: Loaded, group: str) -> Loaded:
    """A job whose target's datasets lie in a group."""
    target = loaded.job.target

    def inside(data: Any) -> Any:
        return f"{group}/{data.lstrip('/')}" if isinstance(data, str) else [inside(name) for name in data]

    fluid = {name: q.model_copy(update={"data": inside(q.data)}) for name, q in target.fluid.items()}
    magnetic = target.magnetic.model_copy(update={"data": inside(target.magnetic.data)})
    changed = target.model_copy(update={"fluid": fluid, "magnetic": magnetic})
    return replace(loaded, job=loaded.job.model_copy(update={"target": changed}))
