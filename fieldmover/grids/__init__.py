"""Where things are: axes, maps to Cartesian positions, grids."""

from fieldmover.grids.grid import Grid, cartesian_grid, cylindrical_grid, spherical_grid, warped_grid
from fieldmover.grids.kerr import kerr_schild_grid
from fieldmover.grids.nested import nested_grid
from fieldmover.grids.placement import placed, turn_about
from fieldmover.grids.tabulated import nodes_from_centres, tabulated_grid
from fieldmover.grids.warps import crowded_grid, crowded_map, least_jacobian, load_map

__all__ = [
    "Grid",
    "cartesian_grid",
    "crowded_grid",
    "crowded_map",
    "cylindrical_grid",
    "kerr_schild_grid",
    "least_jacobian",
    "load_map",
    "nested_grid",
    "nodes_from_centres",
    "placed",
    "spherical_grid",
    "tabulated_grid",
    "turn_about",
    "warped_grid",
]
