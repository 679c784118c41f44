"""Where things are: axes, maps to Cartesian positions, grids."""

from fieldmover.grids.grid import Grid, cartesian_grid, cylindrical_grid, spherical_grid, warped_grid

__all__ = ["Grid", "cartesian_grid", "cylindrical_grid", "spherical_grid", "warped_grid"]
