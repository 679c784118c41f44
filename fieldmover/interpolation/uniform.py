"""The uniform part of a field in a periodic box, which has no periodic potential, moved apart from the rest."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from fieldmover.forms.fields import FaceFlux, Three
from fieldmover.forms.sample import potential_from_function
from fieldmover.grids.grid import Grid, area_factors, outer
from fieldmover.projection.potential import mean_flux

Array = NDArray[np.float64]


def split_uniform(flux: FaceFlux) -> tuple[Array, FaceFlux]:
    """Mean field of a periodic Cartesian box and what is left of its flux.

    Parameters
    ----------
    flux : FaceFlux

    Returns
    -------
    mean : ndarray, shape (3,)
        Cartesian components, unit B; 0 on every other grid.
    rest : FaceFlux
        It has a potential, as far as periodic planes are concerned.
    """
    grid = flux.grid
    if grid.kind != "cartesian" or sum(grid.periodic) < 2:
        return np.zeros(3), flux
    uniform, rest = mean_flux(flux)
    along_axes = [f.sum() / area.sum() for f, area in zip(uniform.faces, grid.face_areas(), strict=True)]
    return np.asarray(_axes(grid) @ along_axes), rest


def uniform_faces(target: Grid, field: Array) -> Three | None:
    """Fluxes of a uniform field through the faces of a box, all alike along an axis; None on other grids."""
    factors = area_factors(target)
    if target.kind != "cartesian" or factors is None:
        return None
    one, two, three = (outer(f) * b for f, b in zip(factors, _axes(target).T @ field, strict=True))
    return one, two, three


def uniform_edges(target: Grid, field: Array) -> Three:
    """Circulations of A = B x r / 2 along the target's edges."""
    bx, by, bz = 0.5 * field
    return potential_from_function(target, lambda x, y, z: (by * z - bz * y, bz * x - bx * z, bx * y - by * x)).edges


def _axes(grid: Grid) -> Array:
    """Unit vectors along the axes of a box, in columns."""
    origin = np.zeros(1)
    return np.asarray(grid.map.jacobian(origin, origin, origin)[:, :, 0])
