"""Components of a vector potential as codes store them: along edges, or at cell centres."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from fieldmover.conventions.components import Basis, check_seams
from fieldmover.conventions.metrics import centre_jacobian
from fieldmover.forms.fields import EdgePotential, Three, close_edges
from fieldmover.grids.grid import Grid, at, quadrature

Array = NDArray[np.float64]

_POINTS = list(zip(*np.polynomial.legendre.leggauss(4), strict=True))


def potential_from_edges(grid: Grid, arrays: Three, basis: Basis) -> EdgePotential:
    """Circulations from components of a vector potential stored on edges, the inverse of `edges_from_potential`.

    Parameters
    ----------
    grid : Grid
    arrays : three arrays
        The component along each edge, shapes (n1, n2 + 1, n3 + 1), (n1 + 1, n2, n3 + 1), (n1 + 1, n2 + 1, n3), unit B L
        ("physical") or B L times the length of one unit of the coordinate ("coordinate": covariant A_i).
    basis : "physical" or "coordinate"

    Raises
    ------
    DataError
        If the two copies of a seam differ.

    Examples
    --------
    >>> import fieldmover as fm
    >>> grid = fm.cartesian_grid([0, 2], [0, 3], [0, 1])
    >>> ones = [np.ones(grid.edge_shape(axis)) for axis in range(3)]
    >>> [float(a[0, 0, 0]) for a in potential_from_edges(grid, (ones[0], ones[1], ones[2]), "physical").edges]
    [2.0, 3.0, 1.0]
    """
    measures = _steps(grid) if basis == "coordinate" else _lengths(grid)
    edges = [values * measure for values, measure in zip(arrays, measures, strict=True)]
    check_seams(grid, edges, "edges")
    three = (edges[0], edges[1], edges[2])
    close_edges(grid, three)
    return EdgePotential(grid, three)


def edges_from_potential(pot: EdgePotential, basis: Basis) -> Three:
    """The component of a potential along every edge; 0 on edges that a pole collapses.

    Parameters
    ----------
    pot : EdgePotential
    basis : "physical" or "coordinate"
        The mean of the component along the edge, unit B L; or the mean of the covariant A_i. On a Cartesian grid both
        are the same, and so is "cartesian".

    Returns
    -------
    three arrays
        Shapes (n1, n2 + 1, n3 + 1), (n1 + 1, n2, n3 + 1), (n1 + 1, n2 + 1, n3).

    Examples
    --------
    >>> import fieldmover as fm
    >>> grid = fm.cylindrical_grid([1, 2], np.linspace(0, np.pi, 3), [0, 1])
    >>> pot = fm.potential_from_function(grid, lambda x, y, z: (-y, x, 0 * z))
    >>> edges_from_potential(pot, "physical")[1][:, 0, 0].round(12), edges_from_potential(pot, "coordinate")[1][:, 0, 0]
    (array([1., 2.]), array([1., 4.]))
    """
    measures = _steps(pot.grid) if basis == "coordinate" else _lengths(pot.grid)
    found = []
    for values, measure in zip(pot.edges, measures, strict=True):
        found.append(np.divide(values, measure, out=np.zeros_like(values), where=measure > 0))
    return found[0], found[1], found[2]


def cells_from_potential(pot: EdgePotential, basis: Basis) -> Array:
    """Components of a potential at cell centres, of second order.

    Parameters
    ----------
    pot : EdgePotential
    basis : "physical", "coordinate" or "cartesian"
        Along unit vectors of the axes, covariant A_i, or along x, y, z.

    Returns
    -------
    ndarray, shape (3, n1, n2, n3)
        The mean of the covariant components of the four edges around each cell along each axis, in that basis at the
        centre.

    Examples
    --------
    >>> import fieldmover as fm
    >>> grid = fm.cylindrical_grid(np.linspace(1, 2, 65), np.linspace(0, np.pi, 65), [0, 1])
    >>> pot = fm.potential_from_function(grid, lambda x, y, z: (-y, x, 0 * z + 3))
    >>> cells_from_potential(pot, "physical")[:, 0, 0, 0].round(3) + 0.0
    array([0.   , 1.008, 3.   ])
    """
    covariant = np.stack(
        [
            _around(values / step, axis)
            for axis, (values, step) in enumerate(zip(pot.edges, _steps(pot.grid), strict=True))
        ]
    )
    if basis == "coordinate":
        return covariant
    tangents = centre_jacobian(pot.grid)  # [Cartesian component, axis]
    if basis == "physical":
        return np.asarray(covariant / np.sqrt((tangents**2).sum(axis=0)))
    matrix = np.moveaxis(tangents, (0, 1), (-1, -2))  # A_i = dx^k/dq^i A_k
    return np.asarray(np.moveaxis(np.linalg.solve(matrix, np.moveaxis(covariant, 0, -1)[..., None])[..., 0], -1, 0))


def _around(values: Array, axis: int) -> Array:
    """Mean over the four edges of each cell along an axis."""
    for d in range(3):
        if d != axis:
            values = 0.5 * (values[at(d, slice(None, -1))] + values[at(d, slice(1, None))])
    return values


def _steps(grid: Grid) -> list[Array]:
    """Steps of the coordinate along the edges, to broadcast."""
    return [np.diff(q).reshape([-1 if d == axis else 1 for d in range(3)]) for axis, q in enumerate(grid.nodes)]


def _lengths(grid: Grid) -> list[Array]:
    """Lengths of all edges; 0 at poles."""
    found = []
    for axis in range(3):
        out = np.zeros(grid.edge_shape(axis))
        for rows, (q1, q2, q3), weight in quadrature(grid, [axis], [(point,) for point in _POINTS]):
            tangent = grid.map.jacobian(q1[:, None, None], q2[None, :, None], q3[None, None, :])[:, axis]
            out[rows] += np.sqrt((tangent**2).sum(axis=0)) * weight
        for pole, ring in enumerate(grid.ring_axis):
            if ring == axis:
                for end in grid.pole_ends(pole):
                    out[at(pole, end)] = 0.0
        found.append(out)
    return found
