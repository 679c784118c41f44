"""Moving fields between grids: splines, location, fluxes, contents, coverage."""

from fieldmover.interpolation.cells import cells_from_flux, flux_from_cells
from fieldmover.interpolation.charge import move_charged
from fieldmover.interpolation.fluid import FluidPlan, move_content
from fieldmover.interpolation.flux import move_flux, move_potential
from fieldmover.interpolation.ghosts import move_with_ghosts
from fieldmover.interpolation.nested import move_flux_nested
from fieldmover.interpolation.nested_fluid import move_content_nested
from fieldmover.interpolation.plan import FluxPlan
from fieldmover.interpolation.points import move_points
from fieldmover.interpolation.slabs import move_flux_in_slabs

__all__ = [
    "FluidPlan",
    "FluxPlan",
    "cells_from_flux",
    "flux_from_cells",
    "move_charged",
    "move_content",
    "move_content_nested",
    "move_flux",
    "move_flux_in_slabs",
    "move_flux_nested",
    "move_points",
    "move_potential",
    "move_with_ghosts",
]
