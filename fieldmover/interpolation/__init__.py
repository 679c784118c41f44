"""Moving fields between grids: splines, location, fluxes, contents, coverage."""

from fieldmover.interpolation.cells import cells_from_flux, flux_from_cells
from fieldmover.interpolation.fluid import move_content
from fieldmover.interpolation.flux import move_flux, move_potential

__all__ = ["cells_from_flux", "flux_from_cells", "move_content", "move_flux", "move_potential"]
