"""Least changes of a field: removing its divergence, and finding its potential."""

from fieldmover.projection.cells import project_cells
from fieldmover.projection.potential import mean_flux, potential
from fieldmover.projection.project import project
from fieldmover.projection.relax import relax, side_by_side

__all__ = ["mean_flux", "potential", "project", "project_cells", "relax", "side_by_side"]
