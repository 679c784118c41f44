"""Fluxes and circulations of functions, by Gauss quadrature on every face and edge."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
from numpy.typing import NDArray

from fieldmover.errors import FieldError
from fieldmover.forms.fields import EdgePotential, FaceFlux, Three, close_edges, close_faces
from fieldmover.grids.grid import Grid, quadrature

Array = NDArray[np.float64]
Function = Callable[[Array, Array, Array], tuple[Array, Array, Array]]

_POINTS = list(zip(*np.polynomial.legendre.leggauss(4), strict=True))


def flux_from_function(grid: Grid, b: Function) -> FaceFlux:
    """Flux of a field given in closed form.

    Parameters
    ----------
    grid : Grid
    b : callable
        ``b(x, y, z) -> (bx, by, bz)``: Cartesian positions to Cartesian components, NumPy arrays.

    Returns
    -------
    FaceFlux
        Integrals of B.dS by 4 x 4 Gauss points a face (error of order 8). Where the closed form of a potential is
        known, `potential_from_function` and `curl` give fluxes whose divergence is zero to round-off instead.

    Raises
    ------
    FieldError
        If `b` does not return three components, or one is not finite.

    Examples
    --------
    >>> import numpy as np, fieldmover as fm
    >>> grid = fm.spherical_grid([1, 2], np.linspace(0, np.pi / 2, 5), np.linspace(0, 2 * np.pi, 9))
    >>> flux = fm.flux_from_function(grid, lambda x, y, z: (0 * x, 0 * y, 1 + 0 * z))
    >>> round(float(flux.f1[0].sum() / np.pi), 9)
    1.0
    """
    faces = []
    for axis in range(3):
        out = np.zeros(grid.face_shape(axis))
        a, c = [(1, 2), (2, 0), (0, 1)][axis]
        along = sorted((a, c))
        for rows, q, weight in quadrature(grid, along, [(g, h) for g in _POINTS for h in _POINTS]):
            coordinates = (q[0][:, None, None], q[1][None, :, None], q[2][None, None, :])
            j = grid.map.jacobian(*coordinates)
            normal = np.cross(j[:, a], j[:, c], axis=0)
            out[rows] += _dot(b, grid.map.to_cartesian(*coordinates), normal) * weight
        faces.append(_finite(out, axis, "flux"))
    result = (faces[0], faces[1], faces[2])
    close_faces(grid, result)
    return FaceFlux(grid, result)


def potential_from_function(grid: Grid, a: Function) -> EdgePotential:
    """Circulation of a vector potential given in closed form.

    Parameters
    ----------
    grid : Grid
    a : callable
        ``a(x, y, z) -> (ax, ay, az)``: Cartesian positions to Cartesian components, NumPy arrays.

    Returns
    -------
    EdgePotential
        Integrals of A.dl by 4 Gauss points an edge (error of order 8).

    Raises
    ------
    FieldError
        If `a` does not return three components, or one is not finite.

    Examples
    --------
    >>> import numpy as np, fieldmover as fm
    >>> grid = fm.cartesian_grid([0, 1, 2], [0, 1], [0, 1])
    >>> pot = fm.potential_from_function(grid, lambda x, y, z: (2 * x, 0 * y, 0 * z))
    >>> pot.a1[:, 0, 0].round(12)
    array([1., 3.])
    """
    edges = []
    for axis in range(3):
        out = np.zeros(grid.edge_shape(axis))
        for rows, q, weight in quadrature(grid, [axis], [(g,) for g in _POINTS]):
            coordinates = (q[0][:, None, None], q[1][None, :, None], q[2][None, None, :])
            tangent = grid.map.jacobian(*coordinates)[:, axis]
            out[rows] += _dot(a, grid.map.to_cartesian(*coordinates), tangent) * weight
        edges.append(_finite(out, axis, "potential"))
    result: Three = (edges[0], edges[1], edges[2])
    close_edges(grid, result)
    return EdgePotential(grid, result)


def _dot(function: Function, position: tuple[Array, Array, Array], direction: Array) -> Array:
    values = function(*position)
    if len(values) != 3:
        raise FieldError(f"the field function returned {len(values)} arrays, expected 3 Cartesian components")
    return np.asarray(sum(np.asarray(v) * d for v, d in zip(values, direction, strict=True)))


def _finite(array: Array, axis: int, what: str) -> Array:
    bad = ~np.isfinite(array)
    if bad.any():
        place = [int(i) for i in np.argwhere(bad)[0]]
        raise FieldError(
            f"{what} of axis {axis + 1}: {int(bad.sum())} values are not finite, the first at index {place}; the "
            "field function must be finite on the whole grid"
        )
    return array
