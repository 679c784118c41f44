"""Hands magnetised-gas snapshots from one grid to another.

The public names are loaded when first used, so that the command line can answer before NumPy and Numba are there.

Examples
--------
>>> import numpy as np, fieldmover as fm
>>> source = fm.spherical_grid(np.geomspace(1, 3, 17), np.linspace(0, np.pi, 17), np.linspace(0, 2 * np.pi, 33))
>>> pot = fm.potential_from_function(source, lambda x, y, z: (-y / 2, x / 2, 0 * z))
>>> box = fm.cartesian_grid(*[np.linspace(-1.5, -0.9, 5)] * 3)
>>> moved = fm.move_flux(fm.curl(pot), box)
>>> bool(abs(fm.divergence(moved).cells).max() < 1e-15)
True
"""

from __future__ import annotations

import importlib
from typing import TYPE_CHECKING, Any

from fieldmover._version import __version__

if TYPE_CHECKING:
    from fieldmover.diagnostics import diagnose
    from fieldmover.forms import (
        CellContent,
        EdgePotential,
        FaceFlux,
        curl,
        divergence,
        flux_from_function,
        potential_from_function,
        unfold,
    )
    from fieldmover.grids import (
        Grid,
        cartesian_grid,
        crowded_grid,
        cylindrical_grid,
        kerr_schild_grid,
        nested_grid,
        placed,
        spherical_grid,
        tabulated_grid,
        turn_about,
        warped_grid,
    )
    from fieldmover.interpolation import (
        FluidPlan,
        FluxPlan,
        cells_from_flux,
        flux_from_cells,
        move_charged,
        move_content,
        move_content_nested,
        move_flux,
        move_flux_in_slabs,
        move_flux_nested,
        move_points,
        move_with_ghosts,
    )
    from fieldmover.projection.cells import project_cells
    from fieldmover.projection.potential import potential
    from fieldmover.projection.project import project
    from fieldmover.projection.relax import relax

_HOME = {
    "grids": (
        "Grid",
        "cartesian_grid",
        "crowded_grid",
        "cylindrical_grid",
        "kerr_schild_grid",
        "nested_grid",
        "placed",
        "spherical_grid",
        "tabulated_grid",
        "turn_about",
        "warped_grid",
    ),
    "forms": (
        "CellContent",
        "EdgePotential",
        "FaceFlux",
        "curl",
        "divergence",
        "flux_from_function",
        "potential_from_function",
        "unfold",
    ),
    "interpolation": (
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
        "move_with_ghosts",
    ),
    "projection": (
        "potential",
        "project",
        "project_cells",
        "relax",
    ),
    "diagnostics": ("diagnose",),
}
_WHERE = {name: package for package, names in _HOME.items() for name in names}

__all__ = [
    "CellContent",
    "EdgePotential",
    "FaceFlux",
    "FluidPlan",
    "FluxPlan",
    "Grid",
    "__version__",
    "cartesian_grid",
    "cells_from_flux",
    "crowded_grid",
    "curl",
    "cylindrical_grid",
    "diagnose",
    "divergence",
    "flux_from_cells",
    "flux_from_function",
    "kerr_schild_grid",
    "move_charged",
    "move_content",
    "move_content_nested",
    "move_flux",
    "move_flux_in_slabs",
    "move_flux_nested",
    "move_points",
    "move_with_ghosts",
    "nested_grid",
    "placed",
    "potential",
    "potential_from_function",
    "project",
    "project_cells",
    "relax",
    "spherical_grid",
    "tabulated_grid",
    "turn_about",
    "unfold",
    "warped_grid",
]


def __getattr__(name: str) -> Any:
    if name not in _WHERE:
        raise AttributeError(f"module 'fieldmover' has no attribute {name!r}")
    value = getattr(importlib.import_module(f"fieldmover.{_WHERE[name]}"), name)
    globals()[name] = value
    return value


def __dir__() -> list[str]:
    return sorted(__all__)
