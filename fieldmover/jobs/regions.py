"""Figures of the parts of space and of the surfaces that a job names."""

from __future__ import annotations

import math
from collections.abc import Mapping
from contextlib import suppress
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from fieldmover.diagnostics import box_cells, expression_cells, shell_cells
from fieldmover.diagnostics.limits import finite
from fieldmover.diagnostics.surfaces import Surface, cap, check_inside, disc, hemisphere, sphere, surface_fluxes
from fieldmover.errors import FieldError, GridError, JobError
from fieldmover.forms.fields import FaceFlux
from fieldmover.grids.grid import Grid
from fieldmover.jobs.names import PLACES
from fieldmover.jobs.schema import Job, Region
from fieldmover.jobs.schema.measures import Through, formula_of

Array = NDArray[np.float64]
Mask = NDArray[np.bool_]


@dataclass(frozen=True)
class Cells:
    """Figures of every cell of the target, each (n1, n2, n3).

    Attributes
    ----------
    divergence : ndarray
        Relative, of the field as stored.
    energy : ndarray
        Of the field as stored.
    before : ndarray
        That of the source, as it arrived in the cell.
    whole : bool ndarray
        Where the source covers the cell wholly.
    volume : ndarray
    """

    divergence: Array
    energy: Array
    before: Array
    whole: Mask
    volume: Array


def region_masks(
    grid: Grid, regions: Mapping[str, Region], values: Mapping[str, Array] | None = None
) -> dict[str, Mask]:
    """The cells of every region.

    Parameters
    ----------
    grid : Grid
    regions : mapping of str to Region
    values : mapping of str to ndarray, shape (n1, n2, n3), optional
        The strength "B" and scalar quantities, for formulas that use more than places.

    Raises
    ------
    JobError
        If a region holds no cell of the grid, or its formula uses what is not known here.
    """
    found = {}
    for name, region in regions.items():
        try:
            if region.where is not None:
                found[name] = expression_cells(grid, region.where, values)
            elif region.from_ is not None and region.to is not None:
                found[name] = box_cells(grid, region.from_, region.to)
            else:
                inner, outer = region.radii or (0.0, region.radius or 0.0)
                found[name] = shell_cells(grid, inner, outer, region.centre)
        except (GridError, JobError) as error:
            raise JobError(f"regions.{name}: {error}") from None
    return found


def by_place(job: Job) -> dict[str, Region]:
    """The regions of a job that speak of places alone, so that their cells are known before any field is."""
    return {
        name: region
        for name, region in job.regions.items()
        if region.where is None or formula_of(region.where, job.scalars).names <= set(PLACES)
    }


def surfaces_of(given: Mapping[str, Through], grid: Grid) -> dict[str, Surface]:
    """The surfaces of a job, all inside a grid.

    Raises
    ------
    JobError
        If one leaves the grid.
    """
    found = {}
    for name, table in given.items():
        normal, centre = table.normal or "z", table.centre
        try:
            if table.sphere is not None:
                found[name] = sphere(table.sphere, centre)
            elif table.hemisphere is not None:
                found[name] = hemisphere(table.hemisphere, normal, centre)
            elif table.cap is not None:
                found[name] = cap(table.cap, table.angle or 0.0, normal, centre)
            else:
                found[name] = disc(table.disc or 0.0, normal, centre, table.inner or 0.0)
            check_inside(grid, found[name])
        except FieldError as error:
            raise JobError(f"surfaces.{name}: {error}") from None
    return found


def surface_figures(
    surfaces: Mapping[str, Surface], before: FaceFlux, after: FaceFlux | None
) -> dict[str, dict[str, float | None]]:
    """Flux through each surface before and after, as `jobs.names` lists it; None before where that grid ends.

    Parameters
    ----------
    surfaces : mapping of str to Surface
        All inside the grid of the field after, or before if there is none after.
    before, after : FaceFlux
    """
    reached = {}
    for name, surface in surfaces.items():
        with suppress(FieldError):
            check_inside(before.grid, surface)
            reached[name] = surface
    old = surface_fluxes(before, reached)
    new = {} if after is None else surface_fluxes(after, surfaces)
    found = {}
    for name in surfaces:
        one, other = old.get(name), new.get(name)
        change = None if one is None or other is None else other.net - one.net
        found[name] = {
            "flux": None if other is None else finite(other.net),
            "unsigned": None if other is None else finite(other.unsigned),
            "source_flux": None if one is None else finite(one.net),
            "source_unsigned": None if one is None else finite(one.unsigned),
            "change": None if change is None or one is None else _share(change, one.unsigned),
        }
    return found


def _share(change: float, whole: float) -> float | None:
    if whole == 0:
        return 0.0 if change == 0 else None
    return finite(change / whole)


def region_figures(cells: Cells, inside: Mask) -> dict[str, float | None]:
    """Divergence, energy, its change and the largest strength of a region, as `jobs.names` lists them."""
    both = inside & cells.whole
    before, after = float(cells.before[both].sum()), float(cells.energy[both].sum())
    unchanged = 0.0 if both.any() and after == 0 else None
    change = finite(after / before - 1.0) if before > 0 else unchanged
    return {
        "divergence": finite(float(cells.divergence[inside].max())),
        "energy": finite(float(cells.energy[inside].sum())),
        "energy_change": change,
        "strength": finite(math.sqrt(2 * float((cells.energy / cells.volume)[inside].max()))),
    }
