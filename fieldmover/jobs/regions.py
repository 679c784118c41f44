"""Figures of the parts of space that a job names."""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from fieldmover.diagnostics import box_cells, shell_cells
from fieldmover.diagnostics.limits import finite
from fieldmover.errors import GridError, JobError
from fieldmover.grids.grid import Grid
from fieldmover.jobs.schema import Region

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


def region_masks(grid: Grid, regions: Mapping[str, Region]) -> dict[str, Mask]:
    """The cells of every region.

    Raises
    ------
    JobError
        If a region holds no cell of the grid.
    """
    found = {}
    for name, region in regions.items():
        try:
            if region.from_ is not None and region.to is not None:
                found[name] = box_cells(grid, region.from_, region.to)
            else:
                inner, outer = region.radii or (0.0, region.radius or 0.0)
                found[name] = shell_cells(grid, inner, outer, region.centre)
        except GridError as error:
            raise JobError(f"regions.{name}: {error}") from None
    return found


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
