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
        cylindrical_grid,
        placed,
        spherical_grid,
        tabulated_grid,
        warped_grid,
    )
    from fieldmover.interpolation import cells_from_flux, flux_from_cells, move_content, move_flux
    from fieldmover.projection.potential import potential
    from fieldmover.projection.project import project

_HOME = {
    "grids": (
        "Grid",
        "cartesian_grid",
        "cylindrical_grid",
        "placed",
        "spherical_grid",
        "tabulated_grid",
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
    "interpolation": ("cells_from_flux", "flux_from_cells", "move_content", "move_flux"),
    "projection": ("potential", "project"),
    "diagnostics": ("diagnose",),
}
_WHERE = {name: package for package, names in _HOME.items() for name in names}

__all__ = [
    "CellContent",
    "EdgePotential",
    "FaceFlux",
    "Grid",
    "__version__",
    "cartesian_grid",
    "cells_from_flux",
    "curl",
    "cylindrical_grid",
    "diagnose",
    "divergence",
    "flux_from_cells",
    "flux_from_function",
    "move_content",
    "move_flux",
    "placed",
    "potential",
    "potential_from_function",
    "project",
    "spherical_grid",
    "tabulated_grid",
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
