"""What a job has measured beside the field of each step: surfaces, helicity, the gas, agreement, a stencil."""

from __future__ import annotations

from collections.abc import Mapping
from contextlib import suppress
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy.ndimage import binary_erosion

from fieldmover.diagnostics import Surface, compare_fields, differences, stencil_divergence
from fieldmover.errors import DataError, FieldError, GridError, JobError
from fieldmover.grids.grid import Grid
from fieldmover.interpolation.fluid import FluidPlan
from fieldmover.jobs.details import helicity_figures
from fieldmover.jobs.gas import extreme_figures, gas_figures, gas_sums
from fieldmover.jobs.grids import target_grid
from fieldmover.jobs.health import field_of
from fieldmover.jobs.load import Loaded, load
from fieldmover.jobs.names import STRENGTH
from fieldmover.jobs.read import State, read_target, target_space
from fieldmover.jobs.record import Record
from fieldmover.jobs.regions import surface_figures
from fieldmover.jobs.schema import plain
from fieldmover.jobs.space import Space

Array = NDArray[np.float64]

COMPARED = 1 << 18
"""Cells in which a field is compared with the source: as many as show what there is to see."""


def measure_more(record: Record, loaded: Loaded, states: Mapping[str, State], surfaces: Mapping[str, Surface]) -> None:
    """Flux through surfaces, helicity where the job asks for it, and extremes.

    Parameters
    ----------
    record : Record
        Gets the figures.
    loaded : Loaded
    states : mapping
        "source", and "stored" where there is an output.
    surfaces : mapping of str to Surface
        All inside the grid of the last state.
    """
    values, source, stored = record.values, states["source"], states.get("stored")
    after = None if stored is None else stored.flux
    values["surfaces"] = surface_figures(surfaces, source.flux, after)
    values["surfaces_meant"] = {name: str(surface) for name, surface in surfaces.items()}
    for step, state in states.items():
        values["extremes"][step], values["extremes_at"][step] = extreme_figures(state)
        if state.space.geometry is not None:
            field = field_of(state)
            square = state.space.geometry.dot(field, field)
            values["curved"][step] = {"energy": float(0.5 * (square * state.space.volumes).sum())}
        if loaded.job.report.helicity:
            found = helicity_figures(state.flux)
            values["helicity_missing" if isinstance(found, str) else "helicity"][step] = found


def cell_values(state: State, density: Array) -> dict[str, Array]:
    """What formulas of regions may use of a state: strength, from the energy density, and scalar quantities."""
    scalars = {plain(name): values for name, values in state.fluid.items() if values.ndim == 3}
    return {STRENGTH: np.sqrt(2.0 * density), **scalars}


def measure_kept(record: Record, source: State, stored: State, plan: FluidPlan) -> None:
    """Sums over the gas before and after, and the field against that of the source, where that reaches.

    Fields are compared in cells that the source covers wholly, their neighbours too.
    """
    record.values["gas"] = gas_figures(source, stored, plan)
    whole = binary_erosion(plan.coverage >= 1.0, border_value=1)
    with suppress(FieldError):  # a target that the source does not reach agrees with nothing
        record.values["agreement"] = compare_fields(source.flux, stored.flux, whole, COMPARED).as_dict()


def measure_stencil(record: Record, loaded: Loaded, grid: Grid, cells: Array | None) -> None:
    """The divergence of the numbers as stored, in the stencil of the receiving code, which limits speak of.

    Parameters
    ----------
    record : Record
        Knows the balance of the faces.
    loaded : Loaded
    grid : Grid
    cells : ndarray, shape (3, n1, n2, n3), or None
        Components as stored along the axes of the grid, where the field is stored at cells.

    Raises
    ------
    JobError
        If the grid is none for the stencil.
    """
    stencil = loaded.job.target.magnetic.stencil
    if stencil == "faces" or cells is None:
        record.stencil({"stencil": "faces", **record.values["fields"]["stored"]["divergence"]})
        return
    try:
        record.stencil(stencil_divergence(grid, cells, stencil).as_dict())
    except GridError as error:
        raise JobError(f'{loaded.path}: target.magnetic.stencil = "{stencil}": {error}') from None


def other_state(loaded: Loaded, space: Space, path: Path) -> State:
    """What to compare a target with.

    Parameters
    ----------
    loaded : Loaded
    space : Space
        Of the target.
    path : Path
        A file laid out like the target, or the job (.toml) of another hand-over, whose target is taken.

    Raises
    ------
    JobError, DataError
        If the job is none or the file cannot be read as it says.
    """
    if path.suffix != ".toml":
        return read_target(loaded, space, path)
    other = load(path)
    return read_target(other, target_space(other, target_grid(other)))


def measure_against(
    record: Record, loaded: Loaded, other: State, stored: State, surfaces: Mapping[str, Surface]
) -> None:
    """The target against another state: the fields where the grids overlap, and all figures of each.

    Raises
    ------
    DataError
        If they do not overlap.
    """
    try:
        record.against(other.flux, stored.flux)
    except FieldError as error:
        raise DataError(f"{other.path}: {error}") from None
    found = differences(*(_figures(loaded, state, surfaces) for state in (other, stored)))
    record.values["against"]["figures"].update({name: vars(difference) for name, difference in found.items()})


def _figures(loaded: Loaded, state: State, surfaces: Mapping[str, Surface]) -> dict[str, Any]:
    through = surface_figures(surfaces, state.flux, None)
    found: dict[str, Any] = {
        "surfaces": {
            name: {"flux": figures["source_flux"], "unsigned": figures["source_unsigned"]}
            for name, figures in through.items()
        },
        "gas": gas_sums(state),
        "extremes": extreme_figures(state)[0],
    }
    if loaded.job.report.helicity and not isinstance(helicity := helicity_figures(state.flux), str):
        found["helicity"] = helicity
    return found
